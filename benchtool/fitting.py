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
from functools import cache, cached_property
from itertools import pairwise
from typing import Final, Protocol, TypeAlias

import numpy as np
from numpy.polynomial import legendre

from benchtool.model import ComplexArray, FloatArray
from benchtool.noise import NOISE_FREE, NoiseModel, line_delay, moving_average, rotation, trend_delay

__all__ = ["Copies", "Curve", "Fit", "Trace", "fit_curve"]

MAX_DEGREE: Final = 10
_MIN_POINTS: Final = 5
_WORTH_SPLITTING: Final = 14
_ACCEPTED_EXCESS: Final = 1.6
"""Residual variance over noise variance up to which a fit is taken to describe the trace."""
_ROUNDING: Final = 1e-11
_GOOD_ENOUGH: Final = 2e-5
"""Misfit, as a share of the largest sample, below which no fit is split: 0.0002 dB."""
_ROWS_AT_A_TIME: Final = 128
"""Copies worked on together: arrays larger than a processor's cache cost several times as much to fill."""
_TINY: Final = 1e-150
"""Stands in for zero where a trace is zero throughout."""
_INVERSE_NEEDS_SNR: Final = 5.0
"""1/S is fitted only where the trace stands this far above the noise throughout (a ratio of amplitudes)."""


def _times(data: ComplexArray, matrix: FloatArray) -> ComplexArray:
    """Return complex data (..., m) times a real matrix (m, k): two real products cost half of one complex product."""
    product = np.empty((*data.shape[:-1], matrix.shape[1]), np.complex128)
    product.real = data.real @ matrix
    product.imag = data.imag @ matrix
    return product


class Copies(Protocol):
    """Copies of a trace that give the coefficients of a fit without being written out sample by sample."""

    def coefficients(self, fit: Fit) -> ComplexArray:
        """Return the Legendre coefficients of a fit to the copies, (copies, degree + 1)."""
        ...


Trace: TypeAlias = ComplexArray | Copies
"""A trace, (n,), or copies of it, (..., n) or in a form of their own."""


@dataclass(frozen=True, eq=False)
class Fit:
    """One polynomial over ``samples[start:stop]``, valid between `low_hz` and `high_hz`."""

    start: int
    stop: int
    low_hz: float
    high_hz: float
    centre_hz: float
    scale_hz: float
    inverse: bool
    delay_s: float
    turn: ComplexArray
    solve: FloatArray
    """(degree + 1, stop - start)."""
    excess: float
    """Residual variance over the variance that noise explains."""
    misfit: float
    """What the residuals leave over beyond the noise: an rms complex error, in units of S."""

    @property
    def degree(self) -> int:
        """Degree of the polynomial."""
        return int(self.solve.shape[0]) - 1

    def coefficients(self, s: Trace) -> ComplexArray:
        """Return the Legendre coefficients, (..., degree + 1), of a trace or of copies of it."""
        if isinstance(s, np.ndarray):
            return self.coefficients_of_samples(s[..., self.start : self.stop])
        return s.coefficients(self)

    def coefficients_of_samples(self, samples: ComplexArray) -> ComplexArray:
        """Return the Legendre coefficients, (..., degree + 1), of the samples the fit rests on, (..., stop - start)."""
        turned = samples * self.turn
        return self.project(1.0 / turned if self.inverse else turned)

    def project(self, values: ComplexArray) -> ComplexArray:
        """Return the coefficients, (..., degree + 1), of values in the form that is fitted, (..., stop - start)."""
        return _times(values, self.solve.T)

    def basis(self, frequency_hz: FloatArray) -> FloatArray:
        """Return the basis functions at frequencies (...,), (..., degree + 1)."""
        return np.asarray(legendre.legvander((frequency_hz - self.centre_hz) / self.scale_hz, self.degree))

    def slope_basis(self, frequency_hz: FloatArray) -> FloatArray:
        """Return the derivative of the basis with frequency, (..., degree + 1), per Hz."""
        return np.asarray(self.basis(frequency_hz) @ _legendre_slopes(self.degree) / self.scale_hz)


@cache
def _legendre_slopes(degree: int) -> FloatArray:
    """Return the derivatives of the Legendre polynomials up to `degree`, each as a column of Legendre coefficients."""
    slopes = np.zeros((degree + 1, degree + 1))
    for column in range(1, degree + 1):
        slopes[:column, column] = legendre.legder(np.eye(degree + 1)[column])[:column]
    return slopes


@dataclass(frozen=True, eq=False)
class _Nodes:
    """Frequencies at which one fit is evaluated, with what does not depend on the samples: made once, used often."""

    fit: Fit
    basis: FloatArray
    """(degree + 1, g)."""
    slope_basis: FloatArray
    turn: ComplexArray

    @classmethod
    def of(cls, fit: Fit, frequency_hz: FloatArray) -> _Nodes:
        turn = np.conj(rotation(frequency_hz, fit.delay_s))
        return cls(fit, fit.basis(frequency_hz).T, fit.slope_basis(frequency_hz).T, turn)

    def evaluate(self, s: Trace) -> tuple[ComplexArray, FloatArray]:
        """Return S (its mean delay put back) and the group delay in s, both (..., g)."""
        coefficients = self.fit.coefficients(s)
        polynomial = _times(coefficients, self.basis)
        slope = _times(coefficients, self.slope_basis)
        with np.errstate(divide="ignore", invalid="ignore"):
            angle_slope = np.imag(slope / polynomial) / (2 * np.pi)
            value = 1.0 / polynomial if self.fit.inverse else polynomial
        delay = self.fit.delay_s + (angle_slope if self.fit.inverse else -angle_slope)
        return value * self.turn, delay

    def level_db(self, s: Trace) -> FloatArray:
        """Return 20 log10 of the magnitude of S, (..., g): what the real and the imaginary part give, no more."""
        coefficients = self.fit.coefficients(s)
        rows = coefficients.reshape(-1, coefficients.shape[-1])
        level = np.empty((len(rows), self.basis.shape[1]))
        for first in range(0, len(rows), _ROWS_AT_A_TIME):
            some = slice(first, first + _ROWS_AT_A_TIME)
            self._decibels(self._power(rows[some], level[some]))
        return level.reshape(*coefficients.shape[:-1], -1)

    def highest_db(self, s: Trace) -> FloatArray:
        """Return the highest of these levels, (...,)."""
        coefficients = self.fit.coefficients(s)
        rows = coefficients.reshape(-1, coefficients.shape[-1])
        power = np.empty(len(rows))
        for first in range(0, len(rows), _ROWS_AT_A_TIME):
            some = slice(first, first + _ROWS_AT_A_TIME)
            every = self._power(rows[some], np.empty((len(rows[some]), self.basis.shape[1])))
            power[some] = np.min(every, axis=-1) if self.fit.inverse else np.max(every, axis=-1)
        return self._decibels(power).reshape(coefficients.shape[:-1])

    def _power(self, coefficients: ComplexArray, power: FloatArray) -> FloatArray:
        """Write the power of the polynomial, of S or 1/S, of rows of coefficients into `power`, (rows, g)."""
        np.square(np.matmul(coefficients.real, self.basis, out=power), out=power)
        imaginary = coefficients.imag @ self.basis
        power += np.square(imaginary, out=imaginary)
        return power

    def _decibels(self, power: FloatArray) -> FloatArray:
        """Turn powers into levels of S in place."""
        # The natural logarithm, which processors have at half the cost of the common one.
        with np.errstate(divide="ignore"):
            np.log(power, out=power)
        power *= (-10.0 if self.fit.inverse else 10.0) / np.log(10.0)
        return power


@dataclass(frozen=True, eq=False)
class Curve:
    """A stretch of a trace as one fit or several side by side."""

    fits: tuple[Fit, ...]
    grid_hz: FloatArray
    """(g,) rising, dense enough that a parabola through three neighbours is exact for every purpose here."""

    @property
    def span_hz(self) -> float:
        """Width in Hz of the samples that the narrowest fit rests on."""
        return min(2.0 * fit.scale_hz for fit in self.fits)

    @property
    def accepted(self) -> bool:
        """Whether every fit describes the trace down to its noise."""
        return all(fit.excess <= _ACCEPTED_EXCESS for fit in self.fits)

    def on_grid(self, s: Trace) -> tuple[ComplexArray, FloatArray]:
        """Return S and group delay in s on `grid_hz`, both (..., g), of a trace or copies of it."""
        return _side_by_side([nodes.evaluate(s) for nodes in self._grid_nodes])

    def level_on_grid(self, s: Trace) -> FloatArray:
        """Return the level of S in dB on `grid_hz`, (..., g), at a fraction of the cost of :meth:`on_grid`."""
        levels = [nodes.level_db(s) for nodes in self._grid_nodes]
        return levels[0] if len(levels) == 1 else np.concatenate(levels, axis=-1)

    def highest_level(self, s: Trace) -> FloatArray:
        """Return the highest level of S in dB over the curve, (...,), of a trace or copies of it."""
        return np.asarray(np.max([nodes.highest_db(s) for nodes in self._grid_nodes], axis=0))

    def at(self, s: Trace, frequency_hz: float) -> tuple[ComplexArray, FloatArray]:
        """Return S and group delay in s at one frequency, both (...,)."""
        if frequency_hz not in self._point_nodes:
            self._point_nodes[frequency_hz] = self._nodes(np.array([frequency_hz]))
        value, delay = _side_by_side([nodes.evaluate(s) for nodes in self._point_nodes[frequency_hz]])
        return value[..., 0], delay[..., 0]

    @cached_property
    def _grid_nodes(self) -> tuple[_Nodes, ...]:
        return self._nodes(self.grid_hz)

    @cached_property
    def _point_nodes(self) -> dict[float, tuple[_Nodes, ...]]:
        return {}

    def _nodes(self, frequency_hz: FloatArray) -> tuple[_Nodes, ...]:
        """Return rising frequencies shared out to the fits that speak for them."""
        borders = [fit.low_hz for fit in self.fits[1:]]
        owner = np.searchsorted(borders, frequency_hz, side="right")
        shared = ((fit, frequency_hz[owner == index]) for index, fit in enumerate(self.fits))
        return tuple(_Nodes.of(fit, mine) for fit, mine in shared if mine.size)


def _side_by_side(parts: list[tuple[ComplexArray, FloatArray]]) -> tuple[ComplexArray, FloatArray]:
    """Return values and delays of neighbouring stretches as one of each."""
    if len(parts) == 1:
        return parts[0]
    return np.concatenate([value for value, _ in parts], axis=-1), np.concatenate([d for _, d in parts], axis=-1)


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
    """Return the corrected Akaike criterion of complex fits of degree 0, 1, …; both parts of a sample count."""
    observed, free = 2 * samples, 2 * (np.arange(residual.size) + 1) + 1
    return np.asarray(observed * np.log(residual + floor) + 2 * free + 2 * free * (free + 1) / (observed - free - 1))


def _solver(basis: FloatArray, weight: FloatArray) -> FloatArray:
    """Return the matrix that takes samples to the coefficients of their weighted least-squares polynomial."""
    scaled = weight / np.max(weight)
    return np.asarray(np.linalg.pinv(basis * scaled[:, None], rcond=1e-14) * scaled)


@dataclass(frozen=True)
class _Form:
    """A way to fit a stretch, and its score; the smallest score wins."""

    score: float
    inverse: bool
    delay_s: float
    degree: int


def _best_form(
    f: FloatArray,
    trace: ComplexArray,
    full: FloatArray,
    sigma: FloatArray,
    inverse_allowed: bool,
    line_delay_s: float,
) -> _Form:
    """Return the form, delay and degree with the smallest criterion; `full` is the basis of the highest degree."""
    magnitude = np.abs(trace)
    floor = max((_ROUNDING * float(np.max(magnitude / sigma))) ** 2, 1e-300)
    best: _Form | None = None
    turns = [(delay, trace * rotation(f, delay)) for delay in dict.fromkeys((0.0, line_delay_s, trend_delay(f, trace)))]
    for inverse in (True, False) if inverse_allowed else (False,):
        weight = magnitude**2 / sigma if inverse else 1.0 / sigma
        # One orthogonal basis serves every degree: the residual falls by the power of each new direction.
        axes, _ = np.linalg.qr(full * (weight / np.max(weight))[:, None])
        # A resonance must keep its own delay (1/S is a straight line only then), a cable must lose it: try each.
        for delay, turned in turns:
            target = weight / turned if inverse else weight * turned
            along = axes.T @ target
            left = target - axes @ along
            tail = np.abs(along) ** 2
            rest = float(np.sum(np.abs(left) ** 2)) + np.append(np.cumsum(tail[::-1])[-2::-1], 0.0)
            scores = _scores(rest / f.size, f.size, floor)
            degree = int(np.argmin(scores))
            if best is None or scores[degree] < best.score:
                best = _Form(float(scores[degree]), inverse, delay, degree)
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
    level = float(np.min(moving_average(magnitude, 5))) if noisy else float(np.min(magnitude))
    full = np.asarray(legendre.legvander((f - centre) / scale, max(min(MAX_DEGREE, f.size - 3), 0)), np.float64)
    form = _best_form(f, trace, full, sigma, level > max(smallest, _TINY), context.line_delay_s)
    turn = rotation(f, form.delay_s)
    target = 1.0 / (trace * turn) if form.inverse else trace * turn
    degree = min(form.degree + 1, full.shape[1] - 1)
    basis = np.asarray(full[:, : degree + 1])
    # The weights come from the smooth curve, not from the noisy samples, or they would pull it: once is enough.
    smooth = magnitude
    for _ in range(2):
        spread = noise.sigma(smooth) if noisy else np.ones_like(smooth)
        solve = _solver(basis, smooth**2 / spread if form.inverse else 1.0 / spread)
        fitted = target @ solve.T @ basis.T
        fitted = 1.0 / fitted if form.inverse else fitted
        smooth = np.maximum(np.abs(fitted), 1e-6 * np.max(magnitude))
    allowed = np.maximum(np.hypot(noise.sigma(smooth), _GOOD_ENOUGH * np.max(magnitude)), _TINY)
    error = np.abs(fitted - trace * turn) ** 2
    freedom = max(f.size - degree - 1, 1)
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
