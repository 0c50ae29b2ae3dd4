"""The sweeps of a device in; a list of them out: how each is drawn, its drive, its level at port 2, its own line."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from benchtool.digits import decibels, level_text, quantity
from benchtool.model import DeviceResult, PadInLine, SweepResult
from benchtool.page_paper import LIGHT, WIDTH_PT, Block, Paper
from benchtool.page_text import MIN_SIZE_PT, Lines, fit, literal, width_pt
from benchtool.page_traces import Trace, down_word

__all__ = ["sweep_list"]

_NAME_PT: Final = 36.0
_LEVELS_PT: Final = 167.0
"""Width of the columns of drive, level at port 2 and pads taken out."""
_LEAST_NAME_PT: Final = 130.0
_MOST_NAME_PT: Final = 215.0
_LEADING: Final = 1.12
_MOST: Final = 12


def _difference(side: str, own: Sequence[PadInLine], reference: Sequence[PadInLine]) -> list[str]:
    """Return how the pads in line on one side differ from the reference sweep's."""
    here, there = Counter(pad.name for pad in own), Counter(pad.name for pad in reference)
    extra, gone = (", ".join(sorted(pads.elements())) for pads in (here - there, there - here))
    if extra and gone:
        return [f"{side} {extra} for {gone}"]
    return [f"{side} with {extra}"] if extra else [f"{side} without {gone}"] if gone else []


def _taken_out(sweep: SweepResult) -> str:
    """Return what the pads were corrected by, input side and output side."""
    return f"{decibels(sweep.input_correction_db).removesuffix(' dB')} | {decibels(sweep.output_correction_db)}"


def _remark(trace: Trace, reference: SweepResult, word: str) -> str:
    if trace.reference:
        return f"reference, but {trace.aside}" if trace.aside else "reference"
    path, parts = trace.sweep.path, []
    change = "" if trace.point is None else quantity(abs(trace.point.compression_db), "dB", digits=1)
    if trace.aside:
        lower = trace.point is not None and trace.point.compression_db > 0.0
        parts.append(f"set aside: {trace.aside}" + (f", {change} {'lower' if lower else 'higher'}" if change else ""))
    elif trace.compressed:
        parts.append(f"{change} {'compressed' if word == 'compressed' else 'lower'}")
    parts += _difference("input", path.input_pads, reference.path.input_pads)
    parts += _difference("output", path.output_pads, reference.path.output_pads)
    if path.source_dbm != reference.path.source_dbm and path.source_dbm is not None:
        parts.append(f"source {quantity(path.source_dbm, 'dBm')}")
    return "; ".join(parts) or "line as for the reference"


@dataclass(frozen=True)
class _Row:
    trace: Trace
    name: Lines
    remark: Lines
    below: bool
    """Whether the remark needs the width of the page and stands under the row."""

    @property
    def height(self) -> float:
        beside = max(self.name.height_pt(_LEADING), 7.4, 0.0 if self.below else self.remark.height_pt(_LEADING))
        return beside + (self.remark.height_pt(_LEADING) if self.below else 0.0) + 0.8


def _row(device: DeviceResult, trace: Trace, name_pt: float) -> _Row:
    text = _remark(trace, device.reference, down_word(device))
    remark = fit(text, (6.5, 6.0), WIDTH_PT - _NAME_PT - name_pt - _LEVELS_PT)
    below = len(remark.lines) > 2
    if below:
        remark = fit(text, (6.5, 6.0), WIDTH_PT - _NAME_PT)
    return _Row(trace, fit(trace.sweep.file, (7.0, 6.5, 6.0), name_pt), remark, below)


def sweep_list(device: DeviceResult, looks: Sequence[Trace]) -> Block:
    """Return the list of sweeps, which is also the key to the diagrams."""
    listed = looks[:_MOST]
    longest = max(width_pt(literal(trace.sweep.file), MIN_SIZE_PT) for trace in listed)
    name_pt = min(max(longest + 1.0, _LEAST_NAME_PT), _MOST_NAME_PT)
    rows = [_row(device, trace, name_pt) for trace in listed]
    left_over = len(looks) - len(rows)
    height = 9.0 + sum(row.height for row in rows) + (8.0 if left_over else 0.0)
    drive_x = _NAME_PT + name_pt + 49.0
    port2_x, taken_x, remark_x = drive_x + 50.0, drive_x + 108.0, _NAME_PT + name_pt + _LEVELS_PT

    def draw(paper: Paper, top: float) -> None:
        for x, word in ((drive_x, "drive"), (port2_x, "at port 2"), (taken_x, "taken out, in | out")):
            paper.text(x, top + 6.5, word, 6.0, color=LIGHT, align="right")
        paper.text(_NAME_PT, top + 6.5, "sweep", 6.0, color=LIGHT)
        paper.text(remark_x, top + 6.5, "against the reference", 6.0, color=LIGHT)
        y = top + 9.0
        for row in rows:
            trace = row.trace
            paper.stroke([0, 19], [y + 4.4, y + 4.4], trace.color, trace.width, trace.dash)
            paper.text(31, y + 6.8, str(trace.number), 6.5, bold=True, align="right")
            under = paper.lines(_NAME_PT, y + 0.2, row.name, leading=_LEADING)
            for x, level in ((drive_x, trace.sweep.drive_dbm), (port2_x, trace.sweep.path.port2_dbm)):
                paper.text(x, y + 6.8, level_text(level), 6.0 if level is None else 6.5, align="right")
            paper.text(taken_x, y + 6.8, _taken_out(trace.sweep), 6.5, align="right")
            place = (_NAME_PT, max(under, y + 7.6)) if row.below else (remark_x, y + 0.2)
            paper.lines(*place, row.remark, color=LIGHT, leading=_LEADING)
            y += row.height
        if left_over:
            paper.text(_NAME_PT, y + 6.5, f"{left_over} more in results.json", 6.5, color=LIGHT)

    return Block(height, draw)
