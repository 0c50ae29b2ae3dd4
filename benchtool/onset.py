"""Gain against drive in; where compression sets in out: 1 dB point, safe drive, uncompressed gain, with intervals.

What the sweeps allow comes from :mod:`benchtool.onset_belief`. Where two drives straddle the 1 dB point widely the
interval holds every knee they allow; where they bracket it closely the law hardly matters; where nothing compressed
the 1 dB point is a bound.
"""

from __future__ import annotations

from collections.abc import Collection
from functools import cache
from statistics import NormalDist
from typing import Final

import numpy as np

from benchtool.drive_results import Basis, DrivePoint, Estimate, Onset, ReferenceProof
from benchtool.drive_table import DriveTable
from benchtool.limiting import LAWS
from benchtool.model import FloatArray
from benchtool.onset_belief import (
    ABOVE_DB,
    BELOW_DB,
    NOTHING_KNOWN,
    Allowances,
    Belief,
    believe,
    common_errors,
    design_drive,
    drop_at,
)
from benchtool.propagation import coverage_interval
from benchtool.units import wrap_degrees

__all__ = [
    "SAFE_DROP_DB",
    "DrivePoint",
    "Estimate",
    "Onset",
    "ReferenceProof",
    "estimate_onset",
]

SAFE_DROP_DB: Final = 0.1
"""A drive is safe for measuring figures while gain has dropped by no more than this."""
_CLOSE_DB: Final = 6.0
"""Drives either side of the 1 dB point that are no further apart bracket it closely."""
_CURVE_POINTS: Final = 61
_CURVE_DRAWS: Final = 250
_EDGE_DB: Final = 2.0
"""An interval that comes this near the end of the grid has no end of its own."""
_SAME_DRIVE_DB: Final = 0.01


def estimate_onset(
    table: DriveTable,
    reference: str,
    confidence: float = 0.95,
    allow: Allowances = NOTHING_KNOWN,
    *,
    seed: int = 0,
) -> Onset:
    """Return where compression sets in at the design frequency.

    Parameters
    ----------
    table : the sweeps, lowest drive first
    reference : file of the sweep that figures are taken from
    allow : what is known of causes other than the device
    seed : of the draws
    """
    rng = np.random.default_rng(seed)
    every, all_drives = table, design_drive(table)
    table = table.only([k for k, file in enumerate(table.files) if file not in allow.spoiled] or [0])
    belief = believe(table, allow, confidence, rng)
    shift, lift = common_errors(table, allow.doubted_pads, rng)
    drive = design_drive(table)
    basis = _basis(table, belief, drive)
    true_p1db, true_gain = belief.p1db + shift, belief.gain + lift
    lift_db = float(np.median(true_gain)) - 1.0
    curve_drive, curve_gain = _curve(belief, drive, confidence)
    drops = drop_at(belief, all_drives)
    return Onset(
        at_hz=table.at_hz,
        confidence=confidence,
        drives=len(np.unique(np.round(drive, 1))),
        basis=basis,
        input_p1db_dbm=_p1db(table, belief, basis, true_p1db, confidence),
        output_p1db_dbm=_p1db(table, belief, basis, true_p1db + true_gain - 1.0, confidence, lift_db),
        safe_drive_dbm=_safe(table, belief, basis, shift, confidence),
        small_signal_gain_db=_interval(true_gain, confidence),
        reference=_proof(reference, drops[every.files.index(reference)], drive, confidence),
        points=_points(every, drops, all_drives, allow.spoiled, confidence),
        curve_drive_dbm=curve_drive,
        curve_gain_db=curve_gain,
    )


def _basis(table: DriveTable, belief: Belief, drive: FloatArray) -> Basis:
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
    table: DriveTable, belief: Belief, basis: Basis, level_dbm: FloatArray, confidence: float, lift_db: float = 0.0
) -> Estimate:
    """Return the 1 dB point as a value, or as a bound where it lies out of reach of the sweeps.

    `level_dbm` are draws of it at the input or, `lift_db` higher, at the output.
    """
    if not table.levels_known or basis == "none":
        return Estimate(None)
    drive = design_drive(table)
    low, high = coverage_interval(belief.p1db, confidence)
    spread = float(np.std(level_dbm - belief.p1db))
    if basis == "bound":
        least = belief.bound_dbm + lift_db - NormalDist().inv_cdf(confidence) * spread
        return Estimate(least, least, None, "at least")
    if high > drive[-1] + ABOVE_DB - _EDGE_DB:
        least = float(np.quantile(level_dbm, 1.0 - confidence))
        return Estimate(least, least, None, "at least")
    if low < drive[0] - BELOW_DB + _EDGE_DB:
        most = float(np.quantile(level_dbm, confidence))
        return Estimate(most, None, most, "at most")
    return _interval(level_dbm, confidence)


def _safe(table: DriveTable, belief: Belief, basis: Basis, shift: FloatArray, confidence: float) -> Estimate:
    """Return the drive at which gain has dropped by 0.1 dB, and as `low` the highest that is safe."""
    if not table.levels_known or basis == "none":
        return Estimate(None)
    excess = _safe_excess()
    if basis == "bound":
        least = belief.bound_dbm + float(np.min(excess)) - NormalDist().inv_cdf(confidence) * float(np.std(shift))
        return Estimate(least, least, None, "at least")
    drives = belief.p1db + excess[belief.law] + shift
    return Estimate(float(np.median(drives)), float(np.quantile(drives, 1.0 - confidence)), None)


@cache
def _safe_excess() -> FloatArray:
    """Return the level over the 1 dB point at which each law has dropped by what is still safe, dB."""
    return np.array([float(law.excess_over_p1db(SAFE_DROP_DB)) for law in LAWS])


def _proof(reference: str, drop: FloatArray, drive: FloatArray, confidence: float) -> ReferenceProof:
    if np.ptp(drive) < _SAME_DRIVE_DB:
        return ReferenceProof(reference, False, Estimate(None))
    low, middle, high = (float(each) for each in np.quantile(drop, [1.0 - confidence, 0.5, confidence]))
    return ReferenceProof(reference, high <= SAFE_DROP_DB, Estimate(middle, low, high))


def _points(
    table: DriveTable, drops: FloatArray, drive: FloatArray, spoiled: Collection[str], confidence: float
) -> tuple[DrivePoint, ...]:
    reach = NormalDist().inv_cdf(0.5 + confidence / 2.0)
    of_pads = np.array([pad.u_db * pad.reads for pad in table.pads]).reshape(-1, table.sweeps)
    own = table.design_covariance_db2 + np.diag(table.design_noise_db**2)
    gain_u = np.sqrt(np.diag(own) + np.sum(of_pads**2, axis=0))
    from_first = np.sqrt(np.diag(own) + own[0, 0] - 2.0 * own[0])
    points = []
    for k, file in enumerate(table.files):
        gain = float(table.design_gain_db[k])
        drop = _interval(drops[k], confidence)
        turned = float(wrap_degrees(float(table.design_phase_deg[k] - table.design_phase_deg[0])))
        # A reading's doubt is the same share in magnitude and in phase.
        doubt = reach * float(np.degrees(np.log(10.0) / 20.0 * from_first[k]))
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


def _curve(belief: Belief, drive: FloatArray, confidence: float) -> tuple[FloatArray, FloatArray]:
    """Return drives from below the lowest to above the highest, (m,), and the gain that the fit allows, (3, m)."""
    along = np.linspace(drive[0] - 3.0, drive[-1] + 5.0, _CURVE_POINTS)
    gain = belief.gain[:: max(1, belief.gain.size // _CURVE_DRAWS)]
    tail = (1.0 - confidence) / 2.0
    allowed = np.quantile(gain - drop_at(belief, along, _CURVE_DRAWS), [tail, 0.5, 1.0 - tail], axis=-1)
    return along, np.asarray(allowed)
