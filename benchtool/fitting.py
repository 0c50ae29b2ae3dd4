"""Samples of one trace in, a smooth curve between the samples out, as a linear operator for any number of copies.

A stretch of a trace is fitted by a polynomial in frequency, after a delay is taken out: either S itself or 1/S.
Away from transmission zeros the response of coupled resonators is one over a polynomial (a single-tuned circuit:
1/S = (1 + jx)/g, a straight line), so 1/S needs few coefficients, and its fit is unbiased by circular noise. Form,
delay and degree are chosen on the data as measured, by the corrected Akaike criterion [1]_, one degree more than it
asks being taken to keep the bias below the noise. Where no degree leaves residuals as small as the noise seen in
the trace, the stretch is split in two. The choice is then fixed: applied to perturbed copies the fit is a matrix
product.

.. [1] C. M. Hurvich, C.-L. Tsai, "Regression and time series model selection in small samples", Biometrika 76(2),
   1989, 297-307.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Final

import numpy as np

from benchtool.curves import Curve, Fit, legendre_basis, times
from benchtool.model import ComplexArray, FloatArray
from benchtool.noise import NOISE_FREE, NoiseModel, line_delay, moving_average, rotation, trend_delay

__all__ = ["fit_curve"]

MAX_DEGREE: Final = 10
_MIN_POINTS: Final = 5
_ACCEPTED_EXCESS: Final = 1.6
"""Residual variance over noise variance up to which a fit is taken to describe the trace."""
_WORTH_SPLITTING: Final = 14
_ROUNDING: Final = 1e-11
_DEPENDENT: Final = 1e-10
"""A direction that is new to this share of the largest only is none."""
_GOOD_ENOUGH: Final = 2e-5
"""Misfit, as a share of the largest sample, below which no fit is split: 0.0002 dB."""
_TINY: Final = 1e-150
"""Stands in for zero where a trace is zero throughout."""
_INVERSE_NEEDS_SNR: Final = 5.0
"""1/S is fitted only where the trace stands this far above the noise throughout (a ratio of amplitudes)."""


@dataclass(frozen=True)
class _Context:
    """What every fit of one trace needs to know."""

    noise: NoiseModel | None
    points: int
    line_delay_s: float


def _widen(frequency_hz: FloatArray, low_hz: float, high_hz: float, points: int) -> tuple[int, int]:
    """Return the slice of samples in [low, high], widened evenly to at least `points` samples."""
    start = int(np.searchsorted(frequency_hz, low_hz, side="left"))
    stop = int(np.searchsorted(frequency_hz, high_hz, side="right"))
    count = frequency_hz.size
    while stop - start < min(points, count):
        left = low_hz - frequency_hz[start - 1] if start > 0 else np.inf
        right = frequency_hz[stop] - high_hz if stop < count else np.inf
        if left <= right:
            start -= 1
        else:
            stop += 1
    return start, stop


def _scores(residual: FloatArray, samples: int, floor: float) -> FloatArray:
    """Return the corrected Akaike criterion of complex fits of degree 0, 1, …, (..., degrees).

    Both parts of a sample count.
    """
    observed, free = 2 * samples, 2 * (np.arange(residual.shape[-1]) + 1) + 1
    return np.asarray(observed * np.log(residual + floor) + 2 * free + 2 * free * (free + 1) / (observed - free - 1))


def _solver(basis: FloatArray, weight: FloatArray) -> FloatArray:
    """Return the matrix that takes samples to the coefficients of their weighted least-squares polynomial."""
    scaled = weight / np.max(weight)
    weighted = basis * scaled[:, None]
    axes, triangle = np.linalg.qr(weighted)
    size = np.abs(np.diagonal(triangle))
    if np.min(size) > _DEPENDENT * np.max(size):
        return np.asarray(np.linalg.solve(triangle, axes.T) * scaled)
    # Samples without weight may leave too few to tell the coefficients apart.
    return np.asarray(np.linalg.pinv(weighted, rcond=1e-14) * scaled)


@dataclass(frozen=True)
class _Form:
    """A way to fit a stretch, and its score; the smallest score wins. `smooth` is the magnitude of S that it leaves."""

    score: float
    inverse: bool
    delay_s: float
    degree: int
    smooth: FloatArray


def _best_form(
    f: FloatArray,
    trace: ComplexArray,
    full: FloatArray,
    sigma: FloatArray,
    inverse_allowed: bool,
    line_delay_s: float,
) -> _Form:
    """Return the form and delay with the smallest criterion, and one degree more than it asks for.

    `full` is the basis of the highest degree.
    """
    magnitude = np.abs(trace)
    floor = max((_ROUNDING * float(np.max(magnitude / sigma))) ** 2, 1e-300)
    best: _Form | None = None
    # A resonance must keep its own delay (1/S is a straight line only then), a cable must lose it: try each.
    delays = list(dict.fromkeys((0.0, line_delay_s, trend_delay(f, trace))))
    turned = np.array([trace * rotation(f, delay) for delay in delays])
    for inverse in (True, False) if inverse_allowed else (False,):
        weight = magnitude**2 / sigma if inverse else 1.0 / sigma
        # One orthogonal basis serves every degree: the residual falls by the power of each new direction.
        axes, _ = np.linalg.qr(full * (weight / np.max(weight))[:, None])
        target = weight / turned if inverse else weight * turned
        along = times(target, axes)
        left = np.sum(np.abs(target - times(along, axes.T)) ** 2, axis=1, keepdims=True)
        beyond = np.cumsum(np.abs(along[:, :0:-1]) ** 2, axis=1)[:, ::-1]
        scores = _scores(np.append(left + beyond, left, axis=1) / f.size, f.size, floor)
        place, degree = divmod(int(np.argmin(scores)), scores.shape[1])
        score = float(scores[place, degree])
        if best is None or score < best.score:
            degree = min(degree + 1, full.shape[1] - 1)
            fitted = np.abs(times(along[place, : degree + 1], axes[:, : degree + 1].T)) / weight
            with np.errstate(divide="ignore"):
                smooth = 1.0 / fitted if inverse else fitted
            best = _Form(score, inverse, delays[place], degree, smooth)
    assert best is not None
    return best


def _fit(frequency_hz: FloatArray, s: ComplexArray, low_hz: float, high_hz: float, context: _Context) -> Fit:
    start, stop = _widen(frequency_hz, low_hz, high_hz, context.points)
    f, trace = frequency_hz[start:stop], s[start:stop]
    centre = 0.5 * float(f[0] + f[-1])
    scale = max(0.5 * float(f[-1] - f[0]), 1e-12 * max(centre, 1.0))
    magnitude = np.abs(trace)
    noise = context.noise if context.noise is not None else NOISE_FREE
    noisy = noise.additive > 0.0 or noise.proportional > 0.0
    sigma = noise.sigma(magnitude) if noisy else np.ones_like(magnitude)
    smallest = _INVERSE_NEEDS_SNR * float(np.max(sigma)) if noisy else 1e-9 * float(np.max(magnitude))
    # A sample that is exactly zero has no inverse, whatever its neighbours.
    level = float(np.min(moving_average(magnitude, 5))) if noisy and np.all(magnitude) else float(np.min(magnitude))
    full = legendre_basis((f - centre) / scale, max(min(MAX_DEGREE, f.size - 3), 0))
    form = _best_form(f, trace, full, sigma, level > max(smallest, _TINY), context.line_delay_s)
    turn = rotation(f, form.delay_s)
    target = 1.0 / (trace * turn) if form.inverse else trace * turn
    basis = np.asarray(full[:, : form.degree + 1])
    # The weights come from the smooth curve, not from the noisy samples, or they would pull it: once is enough.
    smooth = np.maximum(form.smooth, 1e-6 * np.max(magnitude))
    spread = noise.sigma(smooth) if noisy else np.ones_like(smooth)
    solve = _solver(basis, smooth**2 / spread if form.inverse else 1.0 / spread)
    fitted = times(times(target, solve.T), basis.T)
    fitted = 1.0 / fitted if form.inverse else fitted
    smooth = np.maximum(np.abs(fitted), 1e-6 * np.max(magnitude))
    allowed = np.maximum(np.hypot(noise.sigma(smooth), _GOOD_ENOUGH * np.max(magnitude)), _TINY)
    error = np.abs(fitted - trace * turn) ** 2
    freedom = max(f.size - form.degree - 1, 1)
    # A trace of zeros allows no error and has none.
    relative = np.divide(error, allowed**2, out=np.zeros_like(error), where=allowed > 0.0)
    excess = float(np.sum(relative)) / freedom
    beyond = max(float(np.sum(error)) / freedom - float(np.mean(noise.sigma(smooth) ** 2)), 0.0)
    # Residuals scatter round the noise by their own uncertainty; only what stands clear of that is misfit.
    misfit = float(np.sqrt(beyond)) if excess > _ACCEPTED_EXCESS else 0.0
    return Fit(start, stop, low_hz, high_hz, centre, scale, form.inverse, form.delay_s, turn, solve, excess, misfit)


def _pieces(frequency_hz: FloatArray, s: ComplexArray, low_hz: float, high_hz: float, context: _Context) -> list[Fit]:
    # A fit is poorest at its ends, so the samples it rests on reach a little beyond the stretch it speaks for.
    margin = 0.1 * (high_hz - low_hz)
    fit = _fit(frequency_hz, s, low_hz - margin, high_hz + margin, context)
    enough = fit.stop - fit.start >= _WORTH_SPLITTING
    if fit.excess > _ACCEPTED_EXCESS and enough:
        middle = 0.5 * (low_hz + high_hz)
        return [
            *_pieces(frequency_hz, s, low_hz, middle, context),
            *_pieces(frequency_hz, s, middle, high_hz, context),
        ]
    return [replace(fit, low_hz=low_hz, high_hz=high_hz)]


def fit_curve(
    frequency_hz: FloatArray,
    s: ComplexArray,
    low_hz: float,
    high_hz: float,
    noise: NoiseModel | None,
    *,
    points: int = _MIN_POINTS,
    grid: int = 241,
) -> Curve:
    """Return the smooth curve of one trace between two frequencies.

    Parameters
    ----------
    frequency_hz, s : (n,) rising frequencies, and the trace as measured
    low_hz, high_hz : the stretch wanted; samples a little beyond it are used where there are any
    noise : what :func:`benchtool.noise.estimate_noise` found in the trace; None where that is not known
    points : samples that each fit must rest on at least, as far as the sweep has them
    grid : nodes of the dense grid
    """
    context = _Context(noise, points, line_delay(frequency_hz, s))
    low_hz, high_hz = max(low_hz, float(frequency_hz[0])), min(high_hz, float(frequency_hz[-1]))
    if high_hz <= low_hz:
        return Curve((_fit(frequency_hz, s, low_hz, low_hz, context),), np.array([low_hz]))
    fits = _pieces(frequency_hz, s, low_hz, high_hz, context)
    each = max(33, grid // len(fits)) if len(fits) > 1 else grid
    borders = [low_hz, *(fit.low_hz for fit in fits[1:]), high_hz]
    nodes = [np.linspace(a, b, each)[: (None if b == high_hz else -1)] for a, b in pairwise(borders)]
    return Curve(tuple(fits), np.concatenate(nodes))
