"""A smooth curve and copies of its trace in; where each copy is highest, and where it falls below a level, out.

Levels are looked at on some of the curve's nodes. Between these the curve is a known polynomial, so the place itself is
found by Newton's method on the logarithm of its power, which is close to a parabola near a resonance and to a straight
line on a skirt: from there a step or two, kept between the neighbouring nodes, find it to a millionth of the band or
better.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cached_property
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchtool.curves import Curve, Fit, Trace, legendre_powers
from benchtool.model import ComplexArray, FloatArray

__all__ = ["LevelSearch", "Levels"]

_EVERY: Final = 6
"""Of one fit with one hump every so many nodes are looked at; of several fits, or humps that vie, all."""
_FEW_NODES: Final = 12
"""So few nodes between the limits are looked at one by one."""
_VYING: Final = 10.0**-0.3
"""Share of the highest power from which another hump may be the highest of a copy: half of it."""
_STEPS: Final = 2
"""Of Newton's method to an edge: a steep skirt needs both."""
_DB: Final = 10.0 / float(np.log(10.0))
"""Decibels for each unit of the natural logarithm of power."""


class LevelSearch:
    """Where the levels of one curve are looked at: planned once, used on the trace and on any number of copies.

    Parameters
    ----------
    curve : the smooth curve of the trace
    s : (n,) the trace as measured
    low_hz, high_hz : the highest level is sought between these, where the curve has nodes there
    """

    def __init__(self, curve: Curve, s: ComplexArray, low_hz: float = -np.inf, high_hz: float = np.inf) -> None:
        grid = curve.grid_hz
        first = min(int(np.searchsorted(grid, low_hz, side="left")), grid.size - 1)
        last = max(int(np.searchsorted(grid, high_hz, side="right")) - 1, first)
        self.low_hz, self.high_hz = float(grid[first]), float(grid[last])
        self.fits = curve.fits
        self.borders = np.array([fit.low_hz for fit in curve.fits[1:]])
        self._look_at(grid, first, last, _EVERY)
        seen = self._levels(s)
        if len(curve.fits) > 1 or last - first < _FEW_NODES or seen.vying():
            self._look_at(grid, first, last, 1)
            seen = self._levels(s)
        self._trace, self._seen = s, seen

    def _look_at(self, grid: FloatArray, first: int, last: int, every: int) -> None:
        used = np.unique([*range(0, grid.size, every), grid.size - 1, first, last])
        self.nodes_hz = grid[used]
        self.first, self.last = int(np.searchsorted(used, first)), int(np.searchsorted(used, last))
        owner = np.searchsorted(self.borders, self.nodes_hz, side="right")
        self._bases = [fit.basis(self.nodes_hz[owner == place]).T for place, fit in enumerate(self.fits)]

    def levels(self, s: Trace) -> Levels:
        """Return the levels of a trace, (n,), or of copies of it, (..., n)."""
        return self._seen if s is self._trace else self._levels(s)

    def _levels(self, s: Trace) -> Levels:
        coefficients = [fit.coefficients(s) for fit in self.fits]
        rows = [each.reshape(-1, each.shape[-1]) for each in coefficients]
        powers = [_power(fit, own, basis) for fit, own, basis in zip(self.fits, rows, self._bases, strict=True)]
        power = powers[0] if len(powers) == 1 else np.concatenate(powers, axis=1)
        pieces = [_Polynomials(fit, own) for fit, own in zip(self.fits, rows, strict=True)]
        return Levels(self, power, pieces, coefficients[0].shape[:-1])


class Levels:
    """The levels of copies of one trace: on the nodes of a search, and between them."""

    def __init__(
        self, search: LevelSearch, power: FloatArray, pieces: Sequence[_Polynomials], shape: tuple[int, ...]
    ) -> None:
        self._search, self._power, self._pieces, self._shape = search, power, pieces, shape
        self._rows = np.arange(len(power))

    def highest(self) -> tuple[FloatArray, FloatArray]:
        """Return the frequency of the highest level between the limits of the search and the level in dB, (...,) each.

        At a limit, the level there.
        """
        return self._highest

    @cached_property
    def _highest(self) -> tuple[FloatArray, FloatArray]:
        search, nodes, node = self._search, self._search.nodes_hz, self._top
        middle = np.minimum(np.maximum(node, search.first + 1), search.last - 1)
        if search.last - search.first < 2:
            with np.errstate(divide="ignore"):
                level = _DB * np.log(self._power[self._rows, node])
            return nodes[node].reshape(self._shape), level.reshape(self._shape)
        low, at, high = nodes[middle - 1], nodes[middle], nodes[middle + 1]
        with np.errstate(divide="ignore", invalid="ignore"):
            left, top, right = (np.log(self._power[self._rows, middle + step]) for step in (-1, 0, 1))
            # The vertex of the parabola through three nodes, and from there a step of Newton's.
            fall, rise = (top - left) / (at - low), (right - top) / (high - at)
            at = 0.5 * (low + at) + 0.5 * fall * (high - low) / (fall - rise)
            found = (fall > rise) & (at > low) & (at < high)
            at = np.where(found, at, nodes[node])
            _, slope, bend = self._logarithm(at, 2)
            at = np.where(bend < 0.0, np.minimum(np.maximum(at - slope / bend, low), high), at)
            (level,) = self._logarithm(at, 0)
        # Where no top is found between the nodes, it is at one.
        best = np.maximum(np.maximum(left, top), right)
        found &= level >= best
        at, level = np.where(found, at, nodes[node]), np.where(found, level, best)
        return at.reshape(self._shape), (_DB * level).reshape(self._shape)

    def vying(self) -> bool:
        """Whether humps between the limits of the search vie for the highest level of a single trace."""
        power = self._power[0, self._search.first : self._search.last + 1]
        humps = (power[1:-1] >= power[:-2]) & (power[1:-1] > power[2:]) & (power[1:-1] > _VYING * np.max(power))
        return bool(np.count_nonzero(humps) > 1)

    def edges(self, target_db: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return where the level first falls below `target_db` (...,), going down and going up from the highest node.

        NaN where it stays above to the end of the curve.
        """
        below, above = (self._first_below(target_db, self._top, direction) for direction in (-1, 1))
        inner, outer = (np.stack(pair) for pair in zip(below, above, strict=True))
        lower, upper = self._crossing(target_db, inner, outer)
        return lower.reshape(self._shape), upper.reshape(self._shape)

    def falls(self, target_db: FloatArray, direction: int) -> FloatArray:
        """Return where the level first falls below `target_db` (...,), from one end of the curve to the other.

        NaN where it nowhere does.
        """
        end = 0 if direction > 0 else self._power.shape[1] - 1
        inner, outer = self._first_below(target_db, np.full(len(self._power), end), direction)
        return self._crossing(target_db, inner, outer).reshape(self._shape)

    @cached_property
    def _top(self) -> NDArray[np.intp]:
        search = self._search
        return np.asarray(search.first + np.argmax(self._power[:, search.first : search.last + 1], axis=1), np.intp)

    def _first_below(
        self, target_db: FloatArray, start: NDArray[np.intp], direction: int
    ) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        """Return the last node above a level and the first below, (n,) each; twice the same where there is none."""
        nodes, target = self._search.nodes_hz, np.exp(np.reshape(target_db, -1) / _DB)
        # Only the side that some copy looks at is gone through.
        first, last = (int(np.min(start)), nodes.size) if direction > 0 else (0, int(np.max(start)) + 1)
        places = np.arange(first, last)
        beyond = places > start[:, None] if direction > 0 else places < start[:, None]
        below = beyond & (self._power[:, first:last] < target[:, None])
        outer = first + np.argmax(below, axis=1) if direction > 0 else last - 1 - np.argmax(below[:, ::-1], axis=1)
        found = below[self._rows, outer - first]
        return np.where(found, outer - direction, start), np.where(found, outer, start)

    def _crossing(self, target_db: FloatArray, inner: NDArray[np.intp], outer: NDArray[np.intp]) -> FloatArray:
        """Return where the level passes a target between two nodes, (..., n); NaN where they are one."""
        nodes, target = self._search.nodes_hz, np.reshape(target_db, -1) / _DB
        from_hz, to_hz = nodes[inner], nodes[outer]
        low, high = np.minimum(from_hz, to_hz), np.maximum(from_hz, to_hz)
        with np.errstate(divide="ignore", invalid="ignore"):
            above, under = (np.log(self._power[self._rows, place]) - target for place in (inner, outer))
            at = from_hz + (to_hz - from_hz) * above / (above - under)
            for _ in range(_STEPS):
                level, slope = self._logarithm(at, 1)
                at = np.minimum(np.maximum(at - (level - target) / slope, low), high)
        return np.asarray(np.where(inner == outer, np.nan, at))

    def _logarithm(self, at_hz: FloatArray, order: int) -> list[FloatArray]:
        """Return the logarithm of each copy's power at a frequency of its own, and its derivatives up to `order`.

        All of the shape of `at_hz`, (n,) or (m, n).
        """
        if len(self._pieces) == 1:
            return self._pieces[0].logarithm(at_hz, slice(None), order)
        at, rows = at_hz.ravel(), np.broadcast_to(self._rows, at_hz.shape).ravel()
        owner = np.searchsorted(self._search.borders, at, side="right")
        found = np.empty((order + 1, at.size))
        for place, piece in enumerate(self._pieces):
            mine = np.flatnonzero(owner == place)
            if mine.size:
                found[:, mine] = piece.logarithm(at[mine], rows[mine], order)
        return list(found.reshape(order + 1, *at_hz.shape))


class _Polynomials:
    """What one fit makes of each copy: S or 1/S in powers of the frequency, scaled to lie between -1 and 1."""

    def __init__(self, fit: Fit, coefficients: ComplexArray) -> None:
        self._fit = fit
        # Powers before copies, so that Horner's scheme runs along rows, and in real numbers, as the frequencies are.
        self._powers = np.empty((fit.degree + 1, 2, len(coefficients)))
        np.matmul(legendre_powers(fit.degree), coefficients.real.T, out=self._powers[:, 0])
        np.matmul(legendre_powers(fit.degree), coefficients.imag.T, out=self._powers[:, 1])

    def logarithm(self, at_hz: FloatArray, rows: NDArray[np.intp] | slice, order: int) -> list[FloatArray]:
        """Return the logarithm of the power of S of some copies at a frequency each, and derivatives up to `order`.

        Frequencies are (n,) or, several for each copy, (m, n).
        """
        fit, powers = self._fit, self._powers[:, :, rows]
        if at_hz.ndim > 1:
            powers = powers[:, :, None]
        way = (at_hz - fit.centre_hz) / fit.scale_hz
        terms = [np.zeros((2, *at_hz.shape)) for _ in range(order + 1)]
        terms[0] += powers[-1]
        for power in powers[-2::-1]:
            for higher, lower in zip(terms[:0:-1], terms[-2::-1], strict=True):
                higher *= way
                higher += lower
            terms[0] *= way
            terms[0] += power
        (real, imaginary), sign = terms[0], -1.0 if fit.inverse else 1.0
        square = real**2 + imaginary**2
        found = [sign * np.log(square)]
        if order > 0:
            # The logarithm's derivative is the real part of twice q'/q = q' q*/|q|².
            along = (terms[1][0] * real + terms[1][1] * imaginary) / square
            found.append(2.0 * sign / fit.scale_hz * along)
        if order > 1:
            across = (terms[1][1] * real - terms[1][0] * imaginary) / square
            bend = 2.0 * (terms[2][0] * real + terms[2][1] * imaginary) / square
            found.append(2.0 * sign / fit.scale_hz**2 * (bend - along**2 + across**2))
        return found


def _power(fit: Fit, coefficients: ComplexArray, basis: FloatArray) -> FloatArray:
    """Return the power of S of each copy at the nodes of a basis, (copies, g)."""
    power = np.asarray(coefficients.real @ basis)
    imaginary = coefficients.imag @ basis
    np.square(power, out=power)
    power += np.square(imaginary, out=imaginary)
    if fit.inverse:
        with np.errstate(divide="ignore"):
            np.reciprocal(power, out=power)
    return power
