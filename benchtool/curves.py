"""Polynomial fits of one trace in; its smooth curve, between the samples, of the trace or any number of copies, out.

A fit speaks for a stretch of the trace, as S or as 1/S with a delay taken out, by Legendre polynomials in frequency. It
is a linear operator: on copies of the trace it is a matrix product. Which fits a trace gets is decided in
:mod:`benchtool.fitting`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, cached_property
from typing import Final, Protocol, TypeAlias

import numpy as np
from numpy.polynomial import legendre

from benchtool.model import ComplexArray, FloatArray
from benchtool.noise import rotation

__all__ = ["Copies", "Curve", "Fit", "Trace", "legendre_basis", "legendre_powers", "times"]

_ROWS_AT_A_TIME: Final = 128
"""Copies worked on together: arrays larger than a processor's cache cost several times as much to fill."""


def times(data: ComplexArray, matrix: FloatArray) -> ComplexArray:
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
        return times(values, self.solve.T)

    def basis(self, frequency_hz: FloatArray) -> FloatArray:
        """Return the basis functions at frequencies (...,), (..., degree + 1)."""
        return legendre_basis((frequency_hz - self.centre_hz) / self.scale_hz, self.degree)


@cache
def legendre_powers(degree: int) -> FloatArray:
    """Return the Legendre polynomials up to `degree` in powers of their argument, each a column, (degree + 1)²."""
    found = np.zeros((degree + 1, degree + 1))
    for column in range(degree + 1):
        found[: column + 1, column] = legendre.leg2poly(np.eye(degree + 1)[column])[: column + 1]
    return found


def legendre_basis(x: FloatArray, degree: int) -> FloatArray:
    """Return the Legendre polynomials up to `degree` at places between -1 and 1, (n,), as (n, degree + 1).

    By powers, which up to a degree of ten costs three digits, and spares the library's recurrence most of its time.
    """
    return np.asarray(np.vander(x, degree + 1, increasing=True) @ legendre_powers(degree))


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
    frequency_hz: FloatArray

    @classmethod
    def of(cls, fit: Fit, frequency_hz: FloatArray) -> _Nodes:
        return cls(fit, fit.basis(frequency_hz).T, frequency_hz)

    @cached_property
    def slope_basis(self) -> FloatArray:
        """The derivative of the basis with frequency, (degree + 1, g), per Hz."""
        return np.asarray(_legendre_slopes(self.fit.degree).T @ self.basis / self.fit.scale_hz)

    @cached_property
    def turn(self) -> ComplexArray:
        """What puts the mean delay back, (g,)."""
        return np.conj(rotation(self.frequency_hz, self.fit.delay_s))

    def evaluate(self, s: Trace) -> tuple[ComplexArray, FloatArray]:
        """Return S (its mean delay put back) and the group delay in s, both (..., g)."""
        coefficients = self.fit.coefficients(s)
        polynomial = times(coefficients, self.basis)
        slope = times(coefficients, self.slope_basis)
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
    """(g,) rising, dense enough that a parabola through three neighbours serves what is not sought on the fits."""

    @property
    def span_hz(self) -> float:
        """Width in Hz of the samples that the narrowest fit rests on."""
        return min(2.0 * fit.scale_hz for fit in self.fits)

    def on_grid(self, s: Trace) -> tuple[ComplexArray, FloatArray]:
        """Return S and group delay in s on `grid_hz`, both (..., g), of a trace or copies of it."""
        return _side_by_side([nodes.evaluate(s) for nodes in self._grid_nodes])

    def level_on_grid(self, s: Trace) -> FloatArray:
        """Return the level of S in dB on `grid_hz`, (..., g), at a fraction of the cost of :meth:`on_grid`."""
        return self._levels(self._grid_nodes, s)

    def level_at(self, s: Trace, frequency_hz: FloatArray) -> FloatArray:
        """Return the level of S in dB at rising frequencies (g,), (..., g), of a trace or copies of it."""
        return self._levels(self._nodes(frequency_hz), s)

    def values_at(self, s: Trace, frequency_hz: FloatArray) -> ComplexArray:
        """Return S at rising frequencies (g,), (..., g), of a trace or copies of it."""
        return _side_by_side([nodes.evaluate(s) for nodes in self._nodes(frequency_hz)])[0]

    @staticmethod
    def _levels(stretches: Sequence[_Nodes], s: Trace) -> FloatArray:
        levels = [nodes.level_db(s) for nodes in stretches]
        return levels[0] if len(levels) == 1 else np.concatenate(levels, axis=-1)

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
