"""The sweeps of a device in; a list of them out: how each is drawn, its drive, its level at port 2, its own line."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from typing import Final

from benchtool.model import DeviceResult, PadInLine, SweepResult
from benchtool.page_numbers import decibels, level_text, quantity
from benchtool.page_paper import LIGHT, WIDTH_PT, Block, Paper
from benchtool.page_text import Lines, fit
from benchtool.page_traces import Trace

__all__ = ["sweep_list"]

_NAME_PT: Final = 36.0
_DRIVE_PT: Final = 297.0
_PORT2_PT: Final = 347.0
_REST_PT: Final = 357.0
_MOST: Final = 12


def _difference(side: str, own: Sequence[PadInLine], reference: Sequence[PadInLine]) -> list[str]:
    """Return how the pads in line on one side differ from the reference sweep's."""
    here, there = Counter(pad.name for pad in own), Counter(pad.name for pad in reference)
    parts = []
    if extra := sorted((here - there).elements()):
        parts.append(f"{side} with {', '.join(extra)}")
    if gone := sorted((there - here).elements()):
        parts.append(f"{side} without {', '.join(gone)}")
    return parts


def _remark(trace: Trace, reference: SweepResult) -> str:
    if trace.reference:
        return "reference"
    path, parts = trace.sweep.path, []
    if trace.compressed and trace.point is not None:
        parts.append(f"compressed {quantity(trace.point.compression_db, 'dB')}")
    parts += _difference("input", path.input_pads, reference.path.input_pads)
    parts += _difference("output", path.output_pads, reference.path.output_pads)
    if path.source_dbm != reference.path.source_dbm and path.source_dbm is not None:
        parts.append(f"source {quantity(path.source_dbm, 'dBm')}")
    for side, own, other in (
        ("input", trace.sweep.input_correction_db, reference.input_correction_db),
        ("output", trace.sweep.output_correction_db, reference.output_correction_db),
    ):
        if own != other:
            parts.append(f"{decibels(own)} taken out on the {side}")
    return "; ".join(parts) or "line as for the reference"


def sweep_list(device: DeviceResult, looks: Sequence[Trace]) -> Block:
    """Return the list of sweeps, which is also the key to the diagrams."""
    rows: list[tuple[Trace, Lines, Lines]] = []
    for trace in looks[:_MOST]:
        name = fit(trace.sweep.file, (7.0, 6.5, 6.0), _DRIVE_PT - 50.0 - _NAME_PT, most=1)
        remark = fit(_remark(trace, device.reference), (6.5, 6.0), WIDTH_PT - _REST_PT, most=1)
        rows.append((trace, name, remark))
    heights = [max(name.height_pt(1.12), remark.height_pt(1.12), 7.4) + 0.8 for _, name, remark in rows]
    left_over = len(looks) - len(rows)
    height = 9.0 + sum(heights) + (8.0 if left_over else 0.0)

    def draw(paper: Paper, top: float) -> None:
        for x, word in ((_DRIVE_PT, "drive"), (_PORT2_PT, "at port 2")):
            paper.text(x, top + 6.5, word, 6.0, color=LIGHT, align="right")
        paper.text(_NAME_PT, top + 6.5, "sweep", 6.0, color=LIGHT)
        paper.text(_REST_PT, top + 6.5, "against the reference", 6.0, color=LIGHT)
        y = top + 9.0
        for (trace, name, remark), tall in zip(rows, heights, strict=True):
            paper.stroke([0, 22], [y + 4.4, y + 4.4], trace.color, trace.width, trace.dash)
            paper.text(31, y + 6.8, str(trace.number), 6.5, bold=True, align="right")
            paper.lines(_NAME_PT, y + 0.2, name, leading=1.12)
            paper.text(_DRIVE_PT, y + 6.8, level_text(trace.sweep.drive_dbm), 6.5, align="right")
            paper.text(_PORT2_PT, y + 6.8, level_text(trace.sweep.path.port2_dbm), 6.5, align="right")
            paper.lines(_REST_PT, y + 0.2, remark, color=LIGHT, leading=1.12)
            y += tall
        if left_over:
            paper.text(_NAME_PT, y + 6.5, f"{left_over} more in results.json", 6.5, color=LIGHT)

    return Block(height, draw)
