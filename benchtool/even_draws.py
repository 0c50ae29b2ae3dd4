"""A number of trials in; draws that fill the space of all doubts evenly, out: randomly shifted lattices.

Trial k has in dimension j the fractional part of φ(k) z_j + s_j, with φ the radical inverse in base two, z a generating
vector and s a random shift. Each draw alone is uniform; together they lie evenly in many dimensions at once, so that
what is read from them wanders far less than with independent draws. Segments have shifts of their own and so are
independent of each other, which shows how far a result still wanders. Sources: R. Cools, F. Y. Kuo, D. Nuyens,
"Constructing embedded lattice rules for multivariate integration", SIAM J. Sci. Comput. 28(6), 2006, 2162-2188; the
vector is of F. Y. Kuo's for up to 2^20 points, from memory. Dimensions beyond it are Latin hypercubes
(M. D. McKay, R. J. Beckman, W. J. Conover, Technometrics 21(2), 1979, 239-245).
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache
from typing import Final

import numpy as np

from benchtool.model import ComplexArray, FloatArray, readonly

__all__ = ["VECTOR", "EvenDraws"]

VECTOR: Final = (
    *(1, 182667, 469891, 498753, 110745, 446247, 250185, 118627, 245333),
    *(408519, 391023, 126539, 399185, 461527, 69681, 436179, 106383, 238523),
    *(300129, 113029, 123925, 410745, 186077, 255369, 66189),
)
"""Components that differ by more than a sign and half a turn at 256 points already: others would make one dimension
the image of another."""
_BITS: Final = 20
"""A lattice has at most so many points, as a power of two."""


class EvenDraws:
    """Draws of one quantity after another, each in a dimension of its own.

    Parameters
    ----------
    rng : gives the shifts
    counts : trials of each segment
    """

    def __init__(self, rng: np.random.Generator, counts: Sequence[int]) -> None:
        self._rng, self._counts = rng, tuple(counts)
        self._dimension = 0

    def uniform(self) -> FloatArray:
        """Return draws that are uniform from 0 to 1, (trials,)."""
        places = np.concatenate([self._places(count) for count in self._counts])
        self._dimension += 1
        places += np.repeat(self._rng.uniform(size=len(self._counts)), self._counts)
        return np.asarray(places - (places >= 1.0))

    def phasors(self, lengths: Sequence[float]) -> ComplexArray:
        """Return vectors of unknown phase, (trials,), of a length for each segment."""
        if self._dimension < len(VECTOR):
            # From tables: a sine and a cosine of each would cost several times as much.
            vectors = _phasors(self._counts, self._dimension)
        else:
            vectors = np.exp(2j * np.pi * np.concatenate([self._places(count) for count in self._counts]))
        self._dimension += 1
        turn = np.asarray(lengths) * np.exp(2j * np.pi * self._rng.uniform(size=len(self._counts)))
        return np.asarray(vectors * np.repeat(turn, self._counts))

    def normal(self, lengths: Sequence[float]) -> ComplexArray:
        """Return circular normal draws, (trials,), real and imaginary part each of unit variance times the length.

        G. E. P. Box, M. E. Muller, Ann. Math. Statist. 29(2), 1958, 610-611.
        """
        return np.asarray(np.sqrt(-2.0 * np.log1p(-self.uniform())) * self.phasors(lengths))

    def _places(self, count: int) -> FloatArray:
        if self._dimension < len(VECTOR):
            return _places(count, self._dimension)
        return self._rng.permutation(count) / count


@lru_cache(maxsize=256)
def _places(count: int, dimension: int) -> FloatArray:
    """Return the points of a lattice along one dimension, (count,), before any shift."""
    index, inverse = np.arange(count, dtype=np.int64), np.zeros(count, np.int64)
    for bit in range(_BITS):
        inverse |= ((index >> bit) & 1) << (_BITS - 1 - bit)
    places: FloatArray = readonly((inverse * VECTOR[dimension]) % 2**_BITS / 2.0**_BITS, np.float64)
    return places


@lru_cache(maxsize=64)
def _phasors(counts: tuple[int, ...], dimension: int) -> ComplexArray:
    """Return the same of several segments, as vectors round the circle."""
    places = np.concatenate([_places(count, dimension) for count in counts])
    phasors: ComplexArray = readonly(np.exp(2j * np.pi * places), np.complex128)
    return phasors
