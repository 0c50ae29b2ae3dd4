"""The sweeps of one device in; all that they say about compression out: cause, onset, reference, map, findings.

The one call that other modules need: it makes the drive table, weighs the causes, and estimates the onset from what
the cause leaves standing.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from benchtool.cause_findings import cause_finding
from benchtool.causes import CauseVerdict, allowances, find_cause, set_aside
from benchtool.compression import MeasuredSweep
from benchtool.drive_results import CompressionMap, Estimate, Onset
from benchtool.drive_table import DriveTable, drive_table
from benchtool.model import Figure, Finding, Kind
from benchtool.onset import estimate_onset
from benchtool.onset_belief import NOTHING_KNOWN
from benchtool.pads import PadBank
from benchtool.sheet import BenchSheet, SweepEntry

__all__ = ["CompressionMap", "CompressionStudy", "onset_figures", "study_compression"]

_MAP_DRIVES: Final = 3


@dataclass(frozen=True, eq=False)
class CompressionStudy:
    """What the sweeps of one device say about compression."""

    table: DriveTable
    verdict: CauseVerdict | None
    onset: Onset
    map: CompressionMap | None
    findings: tuple[Finding, ...]
    set_aside: Mapping[str, str]
    """Sweeps whose gain the cause explains without the device compressing: file, and why."""


def study_compression(
    sweeps: Sequence[MeasuredSweep],
    entries: Sequence[SweepEntry],
    sheet: BenchSheet,
    bank: PadBank,
    at_hz: float,
    reference: str,
    kind: Kind = "amplifier",
) -> CompressionStudy | None:
    """Return the study of a device's sweeps; None where they have no span, or not `at_hz`, in common.

    Parameters
    ----------
    sweeps, entries : sweeps at the device's ports and their lines in the sheet, in the same order
    at_hz : the design frequency
    reference : file of the sweep that figures are taken from
    kind : of the device; a passive one is not missed a 1 dB point
    """
    table = drive_table(sweeps, entries, sheet, bank, at_hz)
    if table is None:
        return None
    confidence = sheet.decision.confidence
    verdict = find_cause(table, confidence)
    allow = NOTHING_KNOWN if verdict is None else allowances(table, verdict)
    onset = estimate_onset(table, reference, confidence, allow)
    finding = None if verdict is None else cause_finding(table, verdict)
    unknown = _onset_unknown(onset, table) if kind == "amplifier" else None
    found = tuple(each for each in (finding, unknown) if each is not None)
    aside = {} if verdict is None else set_aside(table, verdict, reference)
    return CompressionStudy(table, verdict, onset, _map(table, allow.spoiled | aside.keys()), found, aside)


def _onset_unknown(onset: Onset, table: DriveTable) -> Finding | None:
    if onset.input_p1db_dbm.value is not None or not table.levels_known:
        return None
    return Finding(
        "p1db-unknown",
        "note",
        "nothing can be said of the 1 dB compression point: fewer than two usable drives",
        "sweep at a second drive, 10 dB apart",
    )


def _map(table: DriveTable, set_aside: Collection[str]) -> CompressionMap | None:
    """Return compression over frequency and drive, from the lowest drive whose gain is not set aside."""
    drive = np.mean(table.drive_dbm, axis=1)
    kept = np.array([file not in set_aside for file in table.files])
    if len(np.unique(np.round(drive, 1))) < _MAP_DRIVES or not np.any(kept):
        return None
    lowest = kept & (np.round(drive, 1) == np.round(np.min(drive[kept]), 1))
    return CompressionMap(
        table.frequency_hz, drive, table.files, np.mean(table.gain_db[lowest], axis=0) - table.gain_db
    )


def onset_figures(onset: Onset) -> dict[str, Figure]:
    """Return `input_p1db` and `output_p1db` as figures in dBm."""

    def figure(name: str, found: Estimate) -> Figure:
        known = found.value is not None
        return Figure(
            name,
            found.value,
            "dBm",
            found.low,
            found.high,
            onset.confidence if known else None,
            found.bound,
            parameters={"drives": float(onset.drives)},
        )

    return {
        "input_p1db": figure("input_p1db", onset.input_p1db_dbm),
        "output_p1db": figure("output_p1db", onset.output_p1db_dbm),
    }
