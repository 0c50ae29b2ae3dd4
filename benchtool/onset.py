"""Gain against drive in; where compression sets in out: 1 dB point, safe drive, uncompressed gain, with intervals.

At one frequency gain is y = g - D(x - P) + doubts, with drive x, small-signal gain g, input 1 dB point P and one of
the laws D of :mod:`benchtool.limiting`. Over a grid of P and laws the likelihood is that of generalised least squares
(doubts that sweeps share are covariances); g has no prior, P is as likely at one decibel as at the next, and laws
weigh as their shares. So where two drives straddle the 1 dB point widely the interval holds every knee the sweeps
allow, and where they bracket it closely the law hardly matters. Method: Bayesian inference on a grid, JCGM 101:2008
clause 6 for the doubts; the bound where nothing compressed is a likelihood ratio (one-sided, at the confidence).
"""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from statistics import NormalDist
from typing import Final, Literal, TypeAlias

import numpy as np

from benchtool.drive_table import DriveTable, PadDoubt
from benchtool.limiting import LAWS
from benchtool.model import Bound, FloatArray
from benchtool.propagation import coverage_interval
from benchtool.units import wrap_degrees

__all__ = ["SAFE_DROP_DB", "DrivePoint", "Estimate", "Onset", "ReferenceProof", "estimate_onset", "log_likelihood"]

SAFE_DROP_DB: Final = 0.1
"""A drive is safe for measuring figures while gain has dropped by no more than this."""
_BELOW_DB: Final = 15.0
_ABOVE_DB: Final = 25.0
"""How far below the lowest and above the highest drive the 1 dB point is looked for."""
_GRID: Final = 161
_DRAWS: Final = 8000
_SEEN: Final = 4.5
"""Logarithm of the likelihood ratio, compressed against not, from which compression counts as seen (3 sigma)."""
_CLOSE_DB: Final = 6.0
"""Drives either side of the 1 dB point that are no further apart bracket it closely."""
_LAW_DOUBT: Final = 0.02
"""Share of a drop by which real devices stray from every law (the laws themselves differ by more)."""
_CURVE_POINTS: Final = 61
_CURVE_DRAWS: Final = 500
_EDGE_DB: Final = 2.0
"""An interval that comes this near the end of the grid has no end of its own."""
_SAME_DRIVE_DB: Final = 0.01

Basis: TypeAlias = Literal["interpolated", "fitted", "extrapolated", "bound", "none"]


@dataclass(frozen=True)
class Estimate:
    """A value with its interval; `bound` says that the value is only a limit. None: cannot be known."""

    value: float | None
    low: float | None = None
    high: float | None = None
    bound: Bound | None = None


@dataclass(frozen=True)
class DrivePoint:
    """One sweep on the drive panel, at the design frequency."""

    file: str
    drive_dbm: float
    gain_db: Estimate
    compression_db: Estimate
    """Below the small-signal gain that all sweeps together point to."""
    uncompressed_gain_db: float
    """What this sweep would have shown without compression."""
    phase_change_deg: Estimate
    """Against the lowest drive."""
    phase_deg_per_db: float | None
    """Phase change for each dB of drive since the drive below; None for the lowest."""
    spoiled: bool
    """Whether the receiver or a change of the set-up may have spoiled it, so that the fit leaves it out."""


@dataclass(frozen=True)
class ReferenceProof:
    """Whether the reference is small-signal, and by how much its gain may read low."""

    file: str
    proven: bool
    reads_low_db: Estimate


@dataclass(frozen=True, eq=False)
class Onset:
    """Where compression sets in at the design frequency, and what it rests on."""

    at_hz: float
    confidence: float
    drives: int
    basis: Basis
    input_p1db_dbm: Estimate
    output_p1db_dbm: Estimate
    safe_drive_dbm: Estimate
    """`value` is where the drop is 0.1 dB; `low` is the highest drive that is safe at the stated confidence."""
    small_signal_gain_db: Estimate
    reference: ReferenceProof
    points: tuple[DrivePoint, ...]
    curve_drive_dbm: FloatArray
    curve_gain_db: FloatArray
    """(3, m): low, middle and high of the gain that the fit allows."""


def _split_common(pads: Sequence[PadDoubt]) -> tuple[FloatArray, FloatArray]:
    """Return each pad's `reads` and `drives` less what is the same for all sweeps, (pads, k) each."""
    reads = np.array([pad.reads - pad.reads[0] for pad in pads])
    drives = np.array([pad.drives - pad.drives[0] for pad in pads])
    return reads, drives


def log_likelihood(
    table: DriveTable,
    gain_db: FloatArray,
    drop_db: FloatArray,
    slope: FloatArray,
    extra_db: Mapping[str, float],
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the log likelihood of drops, (..., G), and the small-signal gain they imply with its variance.

    Parameters
    ----------
    gain_db : (..., k) as read, any number of copies
    drop_db, slope : (G, k) drop of gain of each sweep and its derivative by drive, dB/dB
    extra_db : standard uncertainty that replaces the tolerance of a pad whose value is in doubt
    """
    own = table.reading_u_db**2 + table.design_noise_db**2 + 1e-12
    variance = own + (_LAW_DOUBT * drop_db) ** 2
    k = table.sweeps
    covariance = variance[..., None] * np.eye(k)
    if table.pads:
        reads, drives = _split_common(table.pads)
        bears = reads[:, None, :] - slope * drives[:, None, :]
        u = np.array([extra_db.get(pad.name, pad.u_db) for pad in table.pads])
        covariance = covariance + np.einsum("p,pgi,pgj->gij", u**2, bears, bears)
    inverse = np.linalg.inv(covariance)
    weight = inverse.sum(axis=-1)
    total = weight.sum(axis=-1)
    raised = gain_db[..., None, :] + drop_db
    small_signal = np.einsum("gk,...gk->...g", weight, raised) / total
    left = raised - small_signal[..., None]
    chi2 = np.einsum("...gi,gij,...gj->...g", left, inverse, left)
    _, log_det = np.linalg.slogdet(covariance)
    return -0.5 * (chi2 + log_det + np.log(total)), small_signal, 1.0 / total


def _drops(table: DriveTable, p1db: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return drop and slope of each sweep for every 1 dB point and law, (points * laws, k), laws running fastest."""
    step = 0.01
    excess = _design_drive(table) - p1db[:, None]
    drop = np.stack([law.drop_past_p1db(excess) for law in LAWS], axis=1)
    more = np.stack([law.drop_past_p1db(excess + step) for law in LAWS], axis=1)
    flat = (-1, table.sweeps)
    return drop.reshape(flat), ((more - drop) / step).reshape(flat)


def _design_drive(table: DriveTable) -> FloatArray:
    """Return the nominal drive at the design frequency, (k,)."""
    return np.array([np.interp(table.at_hz, table.frequency_hz, row) for row in table.drive_dbm])


@dataclass(frozen=True, eq=False)
class _Posterior:
    """Equally likely draws of what the sweeps allow: 1 dB point in nominal drive, law, gain."""

    p1db: FloatArray
    law: FloatArray
    gain: FloatArray
    seen: bool
    bound_dbm: float


def _posterior(
    table: DriveTable, extra: Mapping[str, float], confidence: float, rng: np.random.Generator
) -> _Posterior:
    drive = _design_drive(table)
    low, high = float(drive[0]) - _BELOW_DB, float(drive[-1]) + _ABOVE_DB
    shares = np.log([law.share for law in LAWS])
    nothing = np.zeros((1, table.sweeps))
    clean = float(log_likelihood(table, table.design_gain_db, nothing, nothing, extra)[0][0])
    scan: list[tuple[FloatArray, FloatArray]] = []
    best = clean
    for _ in range(2):
        grid = np.linspace(low, high, _GRID)
        drop, slope = _drops(table, grid)
        found, small_signal, variance = log_likelihood(table, table.design_gain_db, drop, slope, extra)
        best = max(best, float(np.max(found)))
        belief = found.reshape(_GRID, len(LAWS)) + shares
        along = np.logaddexp.reduce(belief, axis=1)
        scan.append((grid, along))
        # The second pass looks closer at the part of the grid that can matter.
        matters = np.flatnonzero(along > np.max(along) - 12.0)
        low, high = grid[max(matters[0] - 1, 0)], grid[min(matters[-1] + 1, _GRID - 1)]
    weight = np.exp(belief - np.max(belief)).ravel()
    cumulative = np.cumsum(weight)
    even = (np.arange(_DRAWS) + rng.uniform(size=_DRAWS)) / _DRAWS
    index = np.minimum(np.searchsorted(cumulative, even * cumulative[-1]), weight.size - 1)
    step = grid[1] - grid[0]
    place = grid[index // len(LAWS)] + step * rng.uniform(-0.5, 0.5, _DRAWS)
    gain = small_signal[index] + np.sqrt(variance[index]) * rng.standard_normal(_DRAWS)
    reach = NormalDist().inv_cdf(confidence)
    whole, along = scan[0]
    refused = np.flatnonzero(along < clean - 0.5 * reach**2)
    bound = float(whole[refused[-1]]) if refused.size else float("-inf")
    return _Posterior(place, index % len(LAWS), gain, best - clean > _SEEN, bound)


def estimate_onset(
    table: DriveTable,
    reference: str,
    confidence: float = 0.95,
    *,
    doubted_pads: Mapping[str, float] | None = None,
    spoiled: Collection[str] = (),
    seed: int = 0,
) -> Onset:
    """Return where compression sets in at the design frequency.

    Parameters
    ----------
    table : the sweeps, lowest drive first
    reference : file of the sweep that figures are taken from
    doubted_pads : pads whose value is itself in question, with the standard uncertainty to give them, dB
    spoiled : files of sweeps that must not bear on the onset; they are still shown as points
    """
    rng = np.random.default_rng(seed)
    extra = doubted_pads or {}
    every, all_drives = table, _design_drive(table)
    table = table.only([k for k, file in enumerate(table.files) if file not in spoiled] or [0])
    belief = _posterior(table, extra, confidence, rng)
    shift, lift = _common_errors(table, extra, rng)
    drive = _design_drive(table)
    basis = _basis(table, belief, drive)
    true_p1db, true_gain = belief.p1db + shift, belief.gain + lift
    lift_db = float(np.median(true_gain)) - 1.0
    curve_drive, curve_gain = _curve(belief, drive, confidence)
    return Onset(
        at_hz=table.at_hz,
        confidence=confidence,
        drives=len(np.unique(np.round(drive, 1))),
        basis=basis,
        input_p1db_dbm=_p1db(table, belief, basis, true_p1db, confidence),
        output_p1db_dbm=_p1db(table, belief, basis, true_p1db + true_gain - 1.0, confidence, lift_db),
        safe_drive_dbm=_safe(table, belief, basis, shift, confidence),
        small_signal_gain_db=_interval(true_gain, confidence),
        reference=_proof(belief, reference, float(all_drives[every.files.index(reference)]), drive, confidence),
        points=_points(every, belief, all_drives, spoiled, confidence),
        curve_drive_dbm=curve_drive,
        curve_gain_db=curve_gain,
    )


def _common_errors(
    table: DriveTable, extra: Mapping[str, float], rng: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Return draws of what shifts every drive alike, and every gain alike, (draws,) each."""
    half = table.source_half_width_db
    shift = rng.uniform(-half, half, _DRAWS)
    lift = np.zeros(_DRAWS)
    for pad in table.pads:
        error = rng.uniform(-1.0, 1.0, _DRAWS) * np.sqrt(3.0) * extra.get(pad.name, pad.u_db)
        shift = shift + pad.drives[0] * error
        lift = lift - pad.reads[0] * error
    return shift, lift


def _basis(table: DriveTable, belief: _Posterior, drive: FloatArray) -> Basis:
    if not belief.seen:
        return "bound" if np.isfinite(belief.bound_dbm) else "none"
    middle = float(np.median(belief.p1db))
    above = int(np.searchsorted(drive, middle))
    if above in (0, table.sweeps):
        return "extrapolated"
    return "interpolated" if drive[above] - drive[above - 1] <= _CLOSE_DB else "fitted"


def _interval(values: FloatArray, confidence: float) -> Estimate:
    low, high = coverage_interval(values, confidence)
    return Estimate(float(np.median(values)), low, high)


def _p1db(
    table: DriveTable, belief: _Posterior, basis: Basis, level_dbm: FloatArray, confidence: float, lift_db: float = 0.0
) -> Estimate:
    """Return the 1 dB point as a value, or as a bound where it lies out of reach of the sweeps.

    `level_dbm` are draws of it at the input or, `lift_db` higher, at the output.
    """
    if not table.levels_known or basis == "none":
        return Estimate(None)
    drive = _design_drive(table)
    low, high = coverage_interval(belief.p1db, confidence)
    spread = float(np.std(level_dbm - belief.p1db))
    if basis == "bound":
        least = belief.bound_dbm + lift_db - NormalDist().inv_cdf(confidence) * spread
        return Estimate(least, least, None, "at least")
    if high > drive[-1] + _ABOVE_DB - _EDGE_DB:
        least = float(np.quantile(level_dbm, 1.0 - confidence))
        return Estimate(least, least, None, "at least")
    if low < drive[0] - _BELOW_DB + _EDGE_DB:
        most = float(np.quantile(level_dbm, confidence))
        return Estimate(most, None, most, "at most")
    return _interval(level_dbm, confidence)


def _safe(table: DriveTable, belief: _Posterior, basis: Basis, shift: FloatArray, confidence: float) -> Estimate:
    """Return the drive at which gain has dropped by 0.1 dB, and as `low` the highest that is safe."""
    if not table.levels_known or basis == "none":
        return Estimate(None)
    excess = np.array([float(law.excess_over_p1db(SAFE_DROP_DB)) for law in LAWS])
    if basis == "bound":
        least = belief.bound_dbm + float(np.min(excess)) - NormalDist().inv_cdf(confidence) * float(np.std(shift))
        return Estimate(least, least, None, "at least")
    drives = belief.p1db + excess[belief.law] + shift
    return Estimate(float(np.median(drives)), float(np.quantile(drives, 1.0 - confidence)), None)


def _drop_at(belief: _Posterior, drive_dbm: float, draws: int | None = None) -> FloatArray:
    """Return draws of the drop of gain at a nominal drive, (draws,)."""
    every = slice(None) if draws is None else slice(None, None, max(1, belief.p1db.size // draws))
    place, index = belief.p1db[every], belief.law[every]
    drop = np.empty(place.size)
    for i, law in enumerate(LAWS):
        mine = index == i
        if np.any(mine):
            drop[mine] = law.drop_past_p1db(drive_dbm - place[mine])
    return drop


def _proof(belief: _Posterior, reference: str, at_dbm: float, drive: FloatArray, confidence: float) -> ReferenceProof:
    if np.ptp(drive) < _SAME_DRIVE_DB:
        return ReferenceProof(reference, False, Estimate(None))
    drop = _drop_at(belief, at_dbm)
    high = float(np.quantile(drop, confidence))
    low = float(np.quantile(drop, 1.0 - confidence))
    return ReferenceProof(reference, high <= SAFE_DROP_DB, Estimate(float(np.median(drop)), low, high))


def _points(
    table: DriveTable, belief: _Posterior, drive: FloatArray, spoiled: Collection[str], confidence: float
) -> tuple[DrivePoint, ...]:
    reach = NormalDist().inv_cdf(0.5 + confidence / 2.0)
    of_pads = np.array([pad.u_db * pad.reads for pad in table.pads]).reshape(-1, table.sweeps)
    own = np.hypot(table.reading_u_db, table.design_noise_db)
    gain_u = np.sqrt(own**2 + np.sum(of_pads**2, axis=0))
    points = []
    for k, file in enumerate(table.files):
        gain = float(table.design_gain_db[k])
        drop = _interval(_drop_at(belief, float(drive[k])), confidence)
        turned = float(wrap_degrees(float(table.design_phase_deg[k] - table.design_phase_deg[0])))
        # A reading's doubt is the same share in magnitude and in phase.
        doubt = 0.0 if k == 0 else reach * float(np.degrees(np.log(10.0) / 20.0 * np.hypot(own[k], own[0])))
        step = float(drive[k] - drive[k - 1]) if k else 0.0
        turn = float(wrap_degrees(float(table.design_phase_deg[k] - table.design_phase_deg[k - 1])))
        points.append(
            DrivePoint(
                file,
                float(drive[k]),
                Estimate(gain, gain - reach * float(gain_u[k]), gain + reach * float(gain_u[k])),
                drop,
                gain + (drop.value or 0.0),
                Estimate(turned, turned - doubt, turned + doubt),
                turn / step if step > _SAME_DRIVE_DB else None,
                file in spoiled,
            )
        )
    return tuple(points)


def _curve(belief: _Posterior, drive: FloatArray, confidence: float) -> tuple[FloatArray, FloatArray]:
    """Return drives from below the lowest to above the highest, (m,), and the gain that the fit allows, (3, m)."""
    along = np.linspace(drive[0] - 3.0, drive[-1] + 5.0, _CURVE_POINTS)
    gain = belief.gain[:: max(1, belief.gain.size // _CURVE_DRAWS)]
    tail = (1.0 - confidence) / 2.0
    allowed = [np.quantile(gain - _drop_at(belief, float(x), _CURVE_DRAWS), [tail, 0.5, 1.0 - tail]) for x in along]
    return along, np.array(allowed).T
