"""Level at a device in, drop of its gain out: the laws of soft limiting, and their inverses.

Three memoryless laws for the fundamental, each written as drop of gain in dB against level in dB over the law's own
reference level:

* Rapp, |y| = g|x| / (1 + (g|x|/Vs)^2p)^(1/2p), level over Vs/g; p about 0.7 is a soft bipolar stage, 5 a hard clipper.
  C. Rapp, "Effects of HPA-nonlinearity on a 4-DPSK/OFDM-signal ...", 2nd European Conf. on Satellite Communications,
  1991, 179-184 (formula from memory);
* tanh(v/2VT), the differential pair, fundamental of a sine of peak V, level over VT;
* cubic, 1 - (x/x3)^2, level over the input third-order intercept x3; past the level of its largest output, where a
  polynomial means nothing, the output is held.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Final, Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from benchtool.model import FloatArray, readonly

__all__ = [
    "HARDEST_P",
    "LAWS",
    "SOFTEST_P",
    "Law",
    "cubic_drop_db",
    "cubic_level_db",
    "drops_and_slopes",
    "drops_by_law",
    "rapp_drop_and_slope",
    "rapp_drop_db",
    "rapp_level_db",
    "tanh_drop_db",
    "tanh_level_db",
]

SOFTEST_P: Final = 0.7
HARDEST_P: Final = 5.0
"""Bounds of Rapp's p where the sweeps do not fix it: a soft bipolar stage and a hard clipper."""

_ANGLES: Final = 64
"""Angles in a quarter of the period; enough for tanh driven 30 dB past its 1 dB point (drop known to 1e-3 dB)."""
_CUBIC_TOP_DB: Final = 10.0 * float(np.log10(1.0 / 3.0))
_CUBIC_TOP_DROP_DB: Final = -20.0 * float(np.log10(2.0 / 3.0))
_HALVINGS: Final = 60
_TABLE_REACH_DB: Final = 60.0
_TABLE_STEPS: Final = 50
"""Reach either way, and entries for each dB, of the table of the tanh law: a cubic between entries is right to 1e-9 dB.
Below the reach the drop is less than 1e-6 dB, above it the device is saturated."""

LawName: TypeAlias = Literal["rapp", "tanh", "cubic"]


def rapp_drop_db(level_db: FloatArray, p: float) -> FloatArray:
    """Return the drop of gain in dB by Rapp's law at levels in dB over Vs/g, any shape."""
    scale = p * np.log(10.0) / 10.0
    return np.asarray(np.logaddexp(0.0, scale * np.asarray(level_db)) / scale)


def rapp_drop_and_slope(excess_db: FloatArray, p: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return drop in dB and its derivative by level, by Rapp's law, at levels in dB over the 1 dB compression point.

    `p` must broadcast against the levels.
    """
    drop, level, fallen = _rapp_past_p1db(excess_db, p)
    rest = 1.0 / (1.0 + fallen)
    return drop, np.where(level > 0.0, rest, 1.0 - rest)


def _rapp_past_p1db(excess_db: FloatArray, p: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the drop in dB, the logarithm of (g|x|/Vs)^2p, and the exponential of that logarithm's negative size."""
    scale = p * (np.log(10.0) / 10.0)
    level = scale * excess_db + np.log(np.expm1(scale))
    fallen = np.exp(-np.abs(level))
    return (np.maximum(level, 0.0) + np.log1p(fallen)) / scale, level, fallen


def rapp_level_db(drop_db: FloatArray | float, p: float) -> FloatArray:
    """Return the level in dB over Vs/g at which Rapp's law has dropped by `drop_db`; minus infinity for no drop."""
    scale = p * np.log(10.0) / 10.0
    with np.errstate(divide="ignore"):
        return np.asarray(np.log(np.expm1(scale * np.asarray(drop_db))) / scale)


def tanh_drop_db(level_db: FloatArray) -> FloatArray:
    """Return the drop of the fundamental of tanh(v/2VT) in dB at peak levels in dB over VT, any shape."""
    peak = 0.5 * 10.0 ** (np.asarray(level_db, np.float64) / 20.0)
    cosine = np.cos((np.arange(_ANGLES) + 0.5) * np.pi / (2 * _ANGLES))
    # Mean of cos²θ over the same angles is exactly one half, so the ratio is one for a vanishing level.
    fundamental = 2.0 * np.mean(np.tanh(peak[..., None] * cosine) * cosine, axis=-1)
    return np.asarray(-20.0 * np.log10(fundamental / peak))


@cache
def _tanh_table() -> FloatArray:
    """Return the cubic between neighbouring entries, (4, n): coefficients of powers of the way."""
    steps = round(2 * _TABLE_REACH_DB * _TABLE_STEPS)
    drop = tanh_drop_db(np.linspace(-_TABLE_REACH_DB, _TABLE_REACH_DB, steps + 1))
    rise, slope = np.diff(drop), np.gradient(drop)
    cubic = [drop[:-1], slope[:-1], 3.0 * rise - 2.0 * slope[:-1] - slope[1:], slope[:-1] + slope[1:] - 2.0 * rise]
    table: FloatArray = readonly(np.array(cubic), np.float64)
    return table


def _tanh_from_table(level_db: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return drop in dB and its derivative by the tanh law; beyond the table the drop rises as the level does."""
    table = _tanh_table()
    inside = np.clip(level_db, -_TABLE_REACH_DB, _TABLE_REACH_DB)
    place = (inside + _TABLE_REACH_DB) * _TABLE_STEPS
    index = np.minimum(place.astype(np.intp), table.shape[1] - 1)
    way = place - index
    a, b, c, d = table[:, index]
    drop = a + way * (b + way * (c + way * d)) + np.maximum(level_db - _TABLE_REACH_DB, 0.0)
    return np.asarray(drop), np.asarray((b + way * (2.0 * c + 3.0 * way * d)) * _TABLE_STEPS)


def tanh_level_db(drop_db: FloatArray | float) -> FloatArray:
    """Return the peak level in dB over VT at which the fundamental of tanh(v/2VT) has dropped by `drop_db`."""
    drop = np.asarray(drop_db, np.float64)
    low, high = np.full(drop.shape, -80.0), 20.0 + drop
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        short = tanh_drop_db(middle) < drop
        low, high = np.where(short, middle, low), np.where(short, high, middle)
    return np.asarray(0.5 * (low + high))


def cubic_drop_db(level_db: FloatArray) -> FloatArray:
    """Return the drop of gain in dB by the cubic law at levels in dB over the input third-order intercept."""
    level = np.asarray(level_db, np.float64)
    below = np.minimum(level, _CUBIC_TOP_DB)
    return np.asarray(-20.0 * np.log10(1.0 - 10.0 ** (below / 10.0)) + (level - below))


def cubic_level_db(drop_db: FloatArray | float) -> FloatArray:
    """Return the level in dB over the input third-order intercept at which the cubic law has dropped by `drop_db`."""
    drop = np.asarray(drop_db, np.float64)
    below = np.minimum(drop, _CUBIC_TOP_DROP_DB)
    with np.errstate(divide="ignore"):
        return np.asarray(10.0 * np.log10(-np.expm1(-below * np.log(10.0) / 20.0)) + (drop - below))


@dataclass(frozen=True)
class Law:
    """One law of limiting, with its share of belief before any sweep was seen."""

    name: LawName
    p: float | None = None
    share: float = 1.0

    def drop_db(self, level_db: FloatArray) -> FloatArray:
        """Return the drop of gain in dB at levels in dB over the law's own reference level."""
        if self.name == "rapp":
            assert self.p is not None
            return rapp_drop_db(level_db, self.p)
        return tanh_drop_db(level_db) if self.name == "tanh" else cubic_drop_db(level_db)

    def level_db(self, drop_db: FloatArray | float) -> FloatArray:
        """Return the level in dB over the law's own reference level at which gain has dropped by `drop_db`."""
        if self.name == "rapp":
            assert self.p is not None
            return rapp_level_db(drop_db, self.p)
        return tanh_level_db(drop_db) if self.name == "tanh" else cubic_level_db(drop_db)

    def drop_past_p1db(self, excess_db: FloatArray) -> FloatArray:
        """Return the drop of gain in dB at levels in dB over the law's 1 dB compression point."""
        level = np.asarray(excess_db) + _at_one_db(self)
        return _tanh_from_table(level)[0] if self.name == "tanh" else self.drop_db(level)

    def drop_and_slope_past_p1db(self, excess_db: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return that drop and its derivative by level, dB/dB."""
        excess = np.asarray(excess_db)
        if self.name == "rapp":
            assert self.p is not None
            return rapp_drop_and_slope(excess, np.asarray(self.p))
        level = excess + _at_one_db(self)
        if self.name == "tanh":
            return _tanh_from_table(level)
        share = 10.0 ** (np.minimum(level, _CUBIC_TOP_DB) / 10.0)
        return cubic_drop_db(level), 2.0 * share / (1.0 - share)

    def excess_over_p1db(self, drop_db: FloatArray | float) -> FloatArray:
        """Return the level in dB over the 1 dB compression point at which gain has dropped by `drop_db`."""
        return self.level_db(drop_db) - _at_one_db(self)


@cache
def _at_one_db(law: Law) -> float:
    return float(law.level_db(1.0))


def _laws() -> tuple[Law, ...]:
    """Return Rapp's law with p spread evenly in its logarithm, and the other two."""
    ps = np.geomspace(SOFTEST_P, HARDEST_P, 13)
    # End points stand for half a cell each, so that the sum is an integral over log p.
    cells = np.where((ps == ps[0]) | (ps == ps[-1]), 0.5, 1.0)
    rapp = [Law("rapp", float(p), float(0.8 * cell / cells.sum())) for p, cell in zip(ps, cells, strict=True)]
    return (*rapp, Law("tanh", share=0.1), Law("cubic", share=0.1))


LAWS: Final = _laws()
"""The laws a device may follow where nothing is known of it; their shares sum to one."""

_RAPP_P: Final = np.array([law.p for law in LAWS if law.p is not None])


def drops_and_slopes(excess_db: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return drop of gain in dB and its derivative by level by each of :data:`LAWS`, (..., laws), all at once.

    `excess_db` are levels in dB over the 1 dB compression point, (...,).
    """
    drop = np.empty((*excess_db.shape, len(LAWS)))
    slope = np.empty_like(drop)
    rapp = _RAPP_P.size
    drop[..., :rapp], slope[..., :rapp] = rapp_drop_and_slope(excess_db[..., None], _RAPP_P)
    for index, law in enumerate(LAWS[rapp:], start=rapp):
        drop[..., index], slope[..., index] = law.drop_and_slope_past_p1db(excess_db)
    return drop, slope


def drops_by_law(excess_db: FloatArray, index: NDArray[np.integer]) -> FloatArray:
    """Return the drop of gain in dB at levels over the 1 dB point, (..., n), by laws of :data:`LAWS`, `index` (n,)."""
    drop = np.empty(excess_db.shape)
    mine = np.flatnonzero(index < _RAPP_P.size)
    drop[..., mine] = _rapp_past_p1db(excess_db[..., mine], _RAPP_P[index[mine]])[0]
    for number, law in enumerate(LAWS[_RAPP_P.size :], start=_RAPP_P.size):
        mine = np.flatnonzero(index == number)
        if mine.size:
            drop[..., mine] = law.drop_past_p1db(excess_db[..., mine])
    return drop
