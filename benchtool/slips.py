"""The sweeps of one device with their lines in; signs that the sheet and the bench do not say the same out.

A pad that was in line at calibration and is not listed is put back, which is right where it was taken away and wrong
where it was forgotten. Two files that were interchanged read as if pads that neither had were in line: with the files
exchanged they agree, and no device gives less output for more drive. Common practice, no source.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from itertools import combinations
from typing import Final

from benchtool.compression import MeasuredSweep
from benchtool.digits import decibels
from benchtool.model import Compression, Finding

__all__ = ["VOID", "slips"]

VOID: Final = frozenset({"passive-shows-gain", "sweeps-interchanged"})
"""Findings with which no target is met or missed: what was measured is not what the sheet says."""
_APART_DB: Final = 6.0
_AGREE_SHARE: Final = 0.2
"""Two sweeps that differ by more than this agree, once exchanged, within this share of it."""


def slips(sweeps: Sequence[MeasuredSweep], compression: Compression | None) -> Iterator[Finding]:
    """Yield what looks like a slip in the sheet of one device."""
    yield from _put_back(sweeps)
    if compression is not None:
        yield from _interchanged(sweeps, compression)


def _put_back(sweeps: Sequence[MeasuredSweep]) -> Iterator[Finding]:
    by_pads: dict[tuple[str, ...], list[MeasuredSweep]] = {}
    for sweep in sweeps:
        path = sweep.result.path
        gone = tuple(pad.name for pad in (*path.input_removed, *path.output_removed))
        if gone:
            by_pads.setdefault(gone, []).append(sweep)
    for names, those in by_pads.items():
        path = those[0].result.path
        put_back = sum(pad.loss_db for pad in (*path.input_removed, *path.output_removed))
        files = ", ".join(sweep.file for sweep in those)
        were = "were" if len(names) > 1 else "was"
        still, them = (
            ("they were still on their ports", "them") if len(names) > 1 else ("it was still on its port", "it")
        )
        yield Finding(
            "pad-put-back",
            "caution",
            f"{', '.join(names)} {were} in line at calibration and not listed for {files}, so "
            f"{decibels(round(put_back, 2))} of loss were put back",
            f"if {still}, list {them} too: a sweep names every pad in its line",
            those[0].file if len(those) == 1 else None,
        )


def _interchanged(sweeps: Sequence[MeasuredSweep], compression: Compression) -> Iterator[Finding]:
    gain = {point.file: point.gain_db for point in compression.points}
    for one, other in combinations(sweeps, 2):
        lines = [sweep.result.input_correction_db + sweep.result.output_correction_db for sweep in (one, other)]
        apart = gain[one.file] - gain[other.file]
        exchanged = apart - 2.0 * (lines[0] - lines[1])
        drives = one.drive_dbm, other.drive_dbm
        # With more drive by so much and less gain by more than that, there would be less output.
        falls = drives[0] is not None and drives[1] is not None and apart * (drives[1] - drives[0]) > 0.0
        if falls and abs(apart) > _APART_DB and abs(exchanged) < _AGREE_SHARE * abs(apart):
            yield Finding(
                "sweeps-interchanged",
                "fault",
                f"{one.file} and {other.file} look interchanged: their gains differ by {abs(apart):.1f} dB, more than "
                f"any device gives way, and by {abs(exchanged):.1f} dB with the two files exchanged",
                "look up which file belongs to which line, and exchange them in the sheet",
            )
