"""A device in; a mark for each of its sweeps on the diagram of gain against drive out, and the curve that they keep."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from benchtool.drive_results import Estimate, Onset
from benchtool.model import DeviceResult
from benchtool.page_traces import Trace

__all__ = ["DriveMark", "apart", "drive_marks", "known", "levelled", "lifted"]

_LEAST_SPAN_DB: Final = 0.1
"""Drives no further apart than this are one drive."""
_UNKNOWN: Final = Estimate(None)


@dataclass(frozen=True)
class DriveMark:
    """One sweep on the diagram; `number` is the one that the list of sweeps gives it."""

    file: str
    number: int
    drive_dbm: float
    gain_db: Estimate
    phase_change_deg: Estimate
    phase_deg_per_db: float | None
    compressed: bool
    spoiled: bool
    aside: str = ""
    """Why it is set aside, in a word or two, where that is known."""

    @property
    def crossed(self) -> bool:
        """Whether it says nothing of the curve."""
        return self.spoiled or bool(self.aside)


def drive_marks(device: DeviceResult, looks: Sequence[Trace]) -> tuple[DriveMark, ...]:
    """Return a mark for each sweep whose drive is known, lowest drive first; none where all have the same drive."""
    compression, study = device.compression, device.drive
    numbers = {look.sweep.file: look.number for look in looks}
    compressed = {look.sweep.file for look in looks if look.compressed}
    why = {look.sweep.file: look.aside for look in looks}
    marks = []
    if study is not None and study.onset.points:
        for p in study.onset.points:
            gain, phase = p.gain_db, p.phase_change_deg
            hollow = p.file in compressed
            marks.append(
                DriveMark(
                    p.file,
                    numbers.get(p.file, 0),
                    p.drive_dbm,
                    gain,
                    phase,
                    p.phase_deg_per_db,
                    hollow,
                    p.spoiled,
                    why.get(p.file, ""),
                )
            )
    elif compression is not None:
        for c in compression.points:
            if c.drive_dbm is not None:
                gain = Estimate(c.gain_db)
                marks.append(
                    DriveMark(
                        c.file, numbers.get(c.file, 0), c.drive_dbm, gain, _UNKNOWN, None, c.file in compressed, False
                    )
                )
    marks = sorted((m for m in marks if m.gain_db.value is not None), key=lambda m: (m.drive_dbm, m.number))
    if not marks or marks[-1].drive_dbm - marks[0].drive_dbm < _LEAST_SPAN_DB:
        return ()
    return _turned_from_kept(marks)


def _turned_from_kept(marks: Sequence[DriveMark]) -> tuple[DriveMark, ...]:
    """Return the marks with phase counted from the lowest drive that is not spoiled."""
    base = next((m.phase_change_deg.value for m in marks if not m.spoiled), None) or 0.0
    return tuple(replace(m, phase_change_deg=lifted(m.phase_change_deg, -base)) for m in marks)


def lifted(estimate: Estimate, by: float) -> Estimate:
    """Return an estimate with value and interval raised by the same amount."""
    low, value, high = (None if v is None else v + by for v in (estimate.low, estimate.value, estimate.high))
    return replace(estimate, value=value, low=low, high=high)


def apart(marks: Sequence[DriveMark], step_db: float) -> tuple[DriveMark, ...]:
    """Return the marks with a crossed one moved a step aside where a mark that is kept has the same drive."""
    kept = [m.drive_dbm for m in marks if not m.crossed]
    return tuple(
        replace(m, drive_dbm=m.drive_dbm + step_db)
        if m.crossed and any(abs(m.drive_dbm - drive) < _LEAST_SPAN_DB for drive in kept)
        else m
        for m in marks
    )


def known(estimate: Estimate) -> float:
    """Return the value of an estimate, NaN where there is none."""
    return float("nan") if estimate.value is None else estimate.value


def levelled(onset: Onset, marks: Sequence[DriveMark]) -> Onset:
    """Return the onset with its curve through the sweeps that are kept, where a pad that is off sets others aside.

    The fit takes the loss of such a pad for unknown, so it says how gain changes with drive, not how high it is.
    """
    kept = [m for m in marks if not m.crossed]
    finite = np.all(np.isfinite(onset.curve_gain_db), axis=0)
    if not kept or not any(m.aside and not m.spoiled for m in marks) or not np.any(finite):
        return onset
    curve = np.interp([m.drive_dbm for m in kept], onset.curve_drive_dbm[finite], onset.curve_gain_db[1][finite])
    lift = float(np.mean([known(m.gain_db) for m in kept] - curve))
    return replace(
        onset,
        curve_gain_db=onset.curve_gain_db + lift,
        small_signal_gain_db=lifted(onset.small_signal_gain_db, lift),
    )
