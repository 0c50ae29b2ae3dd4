"""One trace, the fits that figures rest on, and what may disturb the trace in; copies of it, as coefficients, out.

A copy is S·m·Π(1 + Σ u ρ) + Σ v ψ + noise, with m, u and v drawn anew for each and ρ, ψ fixed functions of frequency.
A fit takes samples to coefficients linearly, as S or as 1/S, so that its coefficients on any copy are drawn numbers
times coefficients that are worked out once: of S, Sρ, Sρρ', ψ, and of the noise, which is normal in the coefficients
as it is in the samples, with a covariance that follows from the fit. That is exact for S but for products of three u;
for 1/S it is right to second order in u and to first in noise over signal, in units of which the copies differ by less
than a hundredth of their spread. Where v ψ comes into a fit of 1/S nothing is small, and samples are drawn one by one.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from functools import cached_property
from itertools import combinations_with_replacement

import numpy as np
from numpy.typing import NDArray

from benchtool.curves import Fit
from benchtool.model import ComplexArray, FloatArray

__all__ = ["TraceCopies", "TraceModel"]


class TraceModel:
    """What may disturb one trace, worked out once for the fits that will be asked for.

    Parameters
    ----------
    trace : (n,) as measured
    fits : every fit that figures take from it
    joints : for each factor of the product its functions ρ, (n,) each
    terms : the functions ψ, (n,) each
    noises : rms of the circular complex noise of each sample, (n,), by the source it is from
    """

    def __init__(
        self,
        trace: ComplexArray,
        fits: Iterable[Fit],
        joints: Sequence[Sequence[ComplexArray]],
        terms: Sequence[ComplexArray],
        noises: Mapping[str, FloatArray],
    ) -> None:
        self.trace = trace
        self.fits = tuple(dict.fromkeys(fits))
        self.functions = [function for joint in joints for function in joint]
        self.terms = list(terms)
        self.noises = {source: sigma for source, sigma in noises.items() if np.any(sigma)}
        self.by_samples = bool(terms) and any(fit.inverse for fit in self.fits)
        self.used = np.unique(np.concatenate([np.arange(fit.start, fit.stop) for fit in self.fits]))
        owner = [number for number, joint in enumerate(joints) for _ in joint]
        pairs = list(combinations_with_replacement(range(len(owner)), 2))
        # (1 + a)(1 + b) = 1 + a + b + ab; 1/(1 + a)(1 + b) = 1 - a - b + aa + ab + bb - …, a and b themselves sums.
        self.products = {
            False: [(i, j, 1.0) for i, j in pairs if owner[i] != owner[j]],
            True: [(i, j, 2.0 if i != j and owner[i] == owner[j] else 1.0) for i, j in pairs],
        }
        self._bases: dict[Fit, ComplexArray] = {}
        self._noise_bases: dict[str, dict[Fit, ComplexArray]] = {}

    def basis(self, fit: Fit) -> ComplexArray:
        """Return the coefficients of S or 1/S, of it times each function and each product, and of the terms."""
        if fit not in self._bases:
            within = slice(fit.start, fit.stop)
            turned = fit.turn * self.trace[within]
            shape = 1.0 / turned if fit.inverse else turned
            functions = np.array([function[within] for function in self.functions]).reshape(-1, shape.size)
            rows = [shape, *(shape * functions)]
            rows += [shape * functions[i] * functions[j] for i, j, _ in self.products[fit.inverse]]
            rows += [fit.turn * term[within] for term in self.terms]
            self._bases[fit] = fit.project(np.array(rows))
        return self._bases[fit]

    def noise_bases(self, source: str) -> dict[Fit, ComplexArray]:
        """Return what takes a few circular draws, common to all fits, to the noise of the coefficients of each.

        The fits share samples, so their noise is drawn together: a factor of its whole covariance.
        """
        if source not in self._noise_bases:
            sigma, parts = self.noises[source], []
            for fit in self.fits:
                within = slice(fit.start, fit.stop)
                gain = fit.turn * sigma[within]
                if fit.inverse:
                    gain = -gain / (fit.turn * self.trace[within]) ** 2
                part = np.zeros((self.used.size, fit.degree + 1), np.complex128)
                first = int(np.searchsorted(self.used, fit.start))
                part[first : first + gain.size] = gain[:, None] * fit.solve.T
                parts.append(part)
            _, sizes, rows = np.linalg.svd(np.concatenate(parts, axis=1), full_matrices=False)
            ends = np.cumsum([fit.degree + 1 for fit in self.fits])[:-1]
            split = np.split(sizes[:, None] * rows, ends, axis=1)
            self._noise_bases[source] = dict(zip(self.fits, split, strict=True))
        return self._noise_bases[source]


class TraceCopies:
    """Copies of one trace, of which any of its fits can have the coefficients.

    Parameters
    ----------
    scale : m, (copies,)
    sizes : u for each function of the model, in its order, (copies,) each
    added : v for each term of the model, (copies,) each
    moves : for each source of noise that is drawn, one for the copies in which it is and zero for the others
    """

    def __init__(
        self,
        model: TraceModel,
        rng: np.random.Generator,
        scale: ComplexArray,
        sizes: Sequence[ComplexArray],
        added: Sequence[ComplexArray],
        moves: Mapping[str, FloatArray],
    ) -> None:
        self._model, self._scale, self._sizes, self._added = model, scale, sizes, added
        self._found: dict[Fit, ComplexArray] = {}
        self._noise: dict[str, tuple[NDArray[np.intp], NDArray[np.complex64]]] = {}
        for source, moving in moves.items():
            if source in model.noises:
                every, rows = model.used.size, np.flatnonzero(moving)
                count = every if model.by_samples else min(every, sum(fit.degree + 1 for fit in model.fits))
                # Seven digits are plenty for noise, and are drawn in half the time.
                pairs = rng.standard_normal((rows.size, count, 2), np.float32)
                self._noise[source] = rows, np.asarray(pairs.view(np.complex64)[..., 0] * np.float32(np.sqrt(0.5)))

    def coefficients(self, fit: Fit) -> ComplexArray:
        """Return the Legendre coefficients of a fit to the copies, (copies, degree + 1)."""
        if fit not in self._found:
            self._found[fit] = self._coefficients(fit)
        return self._found[fit]

    def _coefficients(self, fit: Fit) -> ComplexArray:
        if self._model.by_samples:
            first = int(np.searchsorted(self._model.used, fit.start))
            return fit.coefficients_of_samples(self._samples[:, first : first + fit.stop - fit.start])
        found: ComplexArray = self._weights(fit.inverse) @ self._model.basis(fit)
        for source, (rows, draws) in self._noise.items():
            noise = draws @ self._model.noise_bases(source)[fit]
            found[rows] += noise * self._scale[rows, None] ** -2 if fit.inverse else noise
        return found

    def _weights(self, inverse: bool) -> ComplexArray:
        """Return what each row of the basis counts in each copy, (copies, rows)."""
        sign, scale = (-1.0, 1.0 / self._scale) if inverse else (1.0, self._scale)
        sizes = self._sizes
        rows = [np.ones_like(self._scale), *(sign * size for size in sizes)]
        rows += [weight * sizes[i] * sizes[j] for i, j, weight in self._model.products[inverse]]
        return np.stack([*(row * scale for row in rows), *self._added], axis=1)

    @cached_property
    def _samples(self) -> ComplexArray:
        """The copies sample by sample, (copies, m), exact; without joints, which no such trace has."""
        model = self._model
        samples: ComplexArray = self._scale[:, None] * model.trace[model.used]
        for size, term in zip(self._added, model.terms, strict=True):
            samples += size[:, None] * term[model.used]
        for source, (rows, draws) in self._noise.items():
            samples[rows] += draws * model.noises[source][model.used]
        return samples
