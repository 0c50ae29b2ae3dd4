"""Gain against drive at one frequency in; what the sweeps allow of the 1 dB point, the law and the gain out, as draws.

The model is y = g - D(x - P) + doubts, with drive x, small-signal gain g, input 1 dB point P and one of the laws D of
:mod:`benchtool.limiting`. Over a grid of P and laws the likelihood is that of generalised least squares: doubts that
sweeps share are covariances, and a pad's error moves both what a sweep reads and how hard it drove. g has no prior, P
is as likely at one decibel as at the next, laws weigh as their shares. Bayesian inference on a grid; doubts as in JCGM
101:2008, clause 6.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from statistics import NormalDist
from types import MappingProxyType
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchtool.drive_table import DriveTable, PadDoubt
from benchtool.limiting import LAWS, drops_and_slopes, drops_by_law
from benchtool.model import FloatArray

__all__ = [
    "ABOVE_DB",
    "BELOW_DB",
    "NOTHING_KNOWN",
    "Allowances",
    "Belief",
    "believe",
    "common_errors",
    "design_drive",
    "drop_at",
    "log_likelihood",
]

BELOW_DB: Final = 15.0
ABOVE_DB: Final = 25.0
"""How far below the lowest and above the highest drive the 1 dB point is looked for."""
_GRIDS: Final = (81, 81)
"""Places of the 1 dB point that the first look takes in, and the second at what can matter of it."""
_BOUND_STEPS: Final = 4
_DRAWS: Final = 4000
"""Drawn evenly along the grid, so that quantiles wander far less than those of as many independent draws."""
_SEEN: Final = 4.5
"""Logarithm of the likelihood ratio, compressed against not, from which compression counts as seen (3 sigma)."""
_LAW_DOUBT: Final = 0.02
"""Share of a drop by which real devices stray from every law (the laws themselves differ by more)."""
_MEMORYLESS_DB: Final = 0.1
"""How far off the level at the output, taken alone, may be as what decides the drop at every frequency."""


@dataclass(frozen=True)
class Allowances:
    """What is known of the bench beyond its table, and must be allowed for.

    `doubted_pads` are pads whose value is itself in question, with the standard uncertainty to give them, dB;
    `spoiled` are files of sweeps that must not bear on the onset, though they are still shown as points; `unsteady_db`
    is how far each sweep may have moved by itself, a standard uncertainty. `at_output`, for a device that limits at its
    output, is the level (small-signal gain plus drive, dBm) of its 1 dB point that the whole sweep points to, with its
    standard uncertainty: skirts show it at lower levels than the peak.
    """

    doubted_pads: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    spoiled: frozenset[str] = frozenset()
    unsteady_db: float = 0.0
    at_output: tuple[float, float] | None = None


NOTHING_KNOWN: Final = Allowances()


def _split_common(pads: Sequence[PadDoubt]) -> tuple[FloatArray, FloatArray]:
    """Return each pad's `reads` and `drives` less what is the same for all sweeps, (pads, k) each.

    Gain is told from the lowest drive, the 1 dB point from the highest: what bears on those shifts gain, or drive, as a
    whole, and is added to the draws in the end.
    """
    reads = np.array([pad.reads - pad.reads[0] for pad in pads])
    drives = np.array([pad.drives - pad.drives[-1] for pad in pads])
    return reads, drives


def log_likelihood(
    table: DriveTable,
    gain_db: FloatArray,
    drop_db: FloatArray,
    slope: FloatArray,
    allow: Allowances = NOTHING_KNOWN,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the log likelihood of drops, (..., G), and the small-signal gain they imply with its variance.

    Parameters
    ----------
    gain_db : (..., k) as read, any number of copies
    drop_db, slope : (G, k) drop of gain of each sweep and its derivative by drive, dB/dB
    allow : what is known of causes other than the device
    """
    own = table.design_noise_db**2 + allow.unsteady_db**2 + 1e-12
    variance = own + (_LAW_DOUBT * drop_db) ** 2
    k = table.sweeps
    covariance = variance[..., None] * np.eye(k) + table.design_covariance_db2
    if table.pads:
        reads, drives = _split_common(table.pads)
        u = np.array([allow.doubted_pads.get(pad.name, pad.u_db) for pad in table.pads])
        bears = u[:, None] * (reads - slope[:, None] * drives)
        covariance = covariance + np.swapaxes(bears, 1, 2) @ bears
    factor = np.asarray(np.linalg.cholesky(covariance), np.float64)
    each = _forward(factor, np.ones(k))
    total = np.sum(each**2, axis=-1)
    raised = _forward(factor, gain_db[..., None, :] + drop_db)
    small_signal = np.sum(each * raised, axis=-1) / total
    chi2 = np.sum((raised - each * small_signal[..., None]) ** 2, axis=-1)
    log_det = 2.0 * np.sum(np.log(np.diagonal(factor, axis1=1, axis2=2)), axis=-1)
    return -0.5 * (chi2 + log_det + np.log(total)), small_signal, 1.0 / total


def _forward(factor: FloatArray, right: FloatArray) -> FloatArray:
    """Return x of L x = b, (..., G, k), for lower triangular L (G, k, k) and b (..., G, k) or (k,)."""
    solved = np.empty(np.broadcast_shapes(right.shape, factor.shape[:-1]))
    for row in range(factor.shape[-1]):
        rest = right[..., row] - np.sum(factor[:, row, :row] * solved[..., :row], axis=-1)
        solved[..., row] = rest / factor[:, row, row]
    return solved


def _drops(table: DriveTable, p1db: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return drop and slope of each sweep for every 1 dB point and law, (points * laws, k), laws running fastest."""
    excess = design_drive(table) - p1db[:, None]
    drop, slope = (np.moveaxis(each, -1, 1).reshape(-1, table.sweeps) for each in drops_and_slopes(excess))
    return drop, slope


def design_drive(table: DriveTable) -> FloatArray:
    """Return the nominal drive at the design frequency, (k,)."""
    return np.array([np.interp(table.at_hz, table.frequency_hz, row) for row in table.drive_dbm])


@dataclass(frozen=True, eq=False)
class Belief:
    """Equally likely draws of what the sweeps allow, (draws,) each, in nominal drive and gain as read.

    `law` is the index in :data:`LAWS`; `seen` whether compression shows at all; above `bound_dbm` every 1 dB point is
    within the likelihood ratio of no compression (one-sided, at the confidence).
    """

    p1db: FloatArray
    law: NDArray[np.intp]
    gain: FloatArray
    seen: bool
    bound_dbm: float


def believe(table: DriveTable, allow: Allowances, confidence: float, rng: np.random.Generator) -> Belief:
    """Return what the sweeps allow at the design frequency."""
    drive = design_drive(table)
    low, high = float(drive[0]) - BELOW_DB, float(drive[-1]) + ABOVE_DB
    shares = np.log([law.share for law in LAWS])
    nothing = np.zeros((1, table.sweeps))
    clean = float(log_likelihood(table, table.design_gain_db, nothing, nothing, allow)[0][0])
    scan: list[tuple[FloatArray, FloatArray]] = []
    best = clean
    for places in _GRIDS:
        grid = np.linspace(low, high, places)
        drop, slope = _drops(table, grid)
        found, small_signal, variance = log_likelihood(table, table.design_gain_db, drop, slope, allow)
        best = max(best, float(np.max(found)))
        if not scan:
            scan.append((grid, np.logaddexp.reduce(found.reshape(places, len(LAWS)) + shares, axis=1)))
        if allow.at_output is not None:
            level = np.repeat(grid, len(LAWS)) + small_signal
            place_dbm, u = allow.at_output
            found = found - 0.5 * ((level - place_dbm) / np.hypot(u, _MEMORYLESS_DB)) ** 2
        belief = found.reshape(places, len(LAWS)) + shares
        along = np.logaddexp.reduce(belief, axis=1)
        # The second pass looks closer at the part of the grid that can matter.
        matters = np.flatnonzero(along > np.max(along) - 12.0)
        low, high = grid[max(matters[0] - 1, 0)], grid[min(matters[-1] + 1, places - 1)]
    weight = np.exp(belief - np.max(belief)).ravel()
    cumulative = np.cumsum(weight)
    even = (np.arange(_DRAWS) + rng.uniform(size=_DRAWS)) / _DRAWS
    index = np.minimum(np.searchsorted(cumulative, even * cumulative[-1]), weight.size - 1)
    step = grid[1] - grid[0]
    place = grid[index // len(LAWS)] + step * rng.uniform(-0.5, 0.5, _DRAWS)
    gain = small_signal[index] + np.sqrt(variance[index]) * rng.standard_normal(_DRAWS)
    reach = NormalDist().inv_cdf(confidence)
    bound = _last_below(*scan[0], clean - 0.5 * reach**2)
    return Belief(place, index % len(LAWS), gain, allow.at_output is not None or best - clean > _SEEN, bound)


def _last_below(grid: FloatArray, values: FloatArray, limit: float) -> float:
    """Return where values on a grid last rise through a limit; minus infinity where none lies below it."""
    below = np.flatnonzero(values < limit)
    if below.size == 0:
        return float("-inf")
    last = int(below[-1])
    if last == grid.size - 1:
        return float(grid[-1])
    step = float(values[last + 1] - values[last])
    # The parabola through the next node too: the likelihood bends there, and a chord would cross the limit late.
    bend = float(values[last + 2] - values[last + 1]) - step if last + 2 < grid.size else 0.0
    way = (limit - float(values[last])) / step
    for _ in range(_BOUND_STEPS):
        off = float(values[last]) + way * step + 0.5 * way * (way - 1.0) * bend - limit
        way = min(max(way - off / (step + (way - 0.5) * bend), 0.0), 1.0)
    return float(grid[last] + way * (grid[last + 1] - grid[last]))


def common_errors(
    table: DriveTable, extra: Mapping[str, float], rng: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Return draws of what shifts every drive alike, and every gain alike, (draws,) each."""
    half = table.source_half_width_db
    shift = rng.uniform(-half, half, _DRAWS)
    lift = np.zeros(_DRAWS)
    for pad in table.pads:
        error = rng.uniform(-1.0, 1.0, _DRAWS) * np.sqrt(3.0) * extra.get(pad.name, pad.u_db)
        shift = shift + pad.drives[-1] * error
        lift = lift - pad.reads[0] * error
    return shift, lift


def drop_at(belief: Belief, drive_dbm: float | FloatArray, draws: int | None = None) -> FloatArray:
    """Return draws of the drop of gain at one nominal drive or at several, (..., draws)."""
    every = slice(None) if draws is None else slice(None, None, max(1, belief.p1db.size // draws))
    place, index = belief.p1db[every], belief.law[every]
    return drops_by_law(np.asarray(drive_dbm)[..., None] - place, index)
