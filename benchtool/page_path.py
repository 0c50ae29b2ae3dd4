"""The line of the reference sweep in; the signal path drawn as a strip from port 1 to port 2 out.

Every pad stands where it stood, with its loss; the level is written at each joint; the dashed lines are the
calibration planes, beyond which the analyzer knew nothing of what was in line.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final, Literal

from benchtool.digits import decibels, quantity, stated
from benchtool.model import DeviceResult, PadInLine, SignalPath
from benchtool.page_paper import BLUE, FAINT, INK, LIGHT, VERMILLION, WIDTH_PT, Block, Paper
from benchtool.page_text import Lines, fit, width_pt

__all__ = ["path_strip"]

Role = Literal["source", "pad", "removed", "device", "receiver"]

_WEIGHT: Final[dict[Role, float]] = {"source": 1.25, "pad": 1.0, "removed": 1.0, "device": 1.6, "receiver": 1.25}
_BOX_PT: Final = 18.0
_WIDEST_BOX_PT: Final = 64.0
_GAP_PT: Final = 6.0
_NAME_LINES: Final = 3


@dataclass(frozen=True)
class _Slot:
    """One thing in line, and the level that leaves it towards port 2."""

    role: Role
    name: str
    pad: PadInLine | None
    level_dbm: float | None
    planed: bool = False
    """Whether a calibration plane stands right after this slot."""


def _sides(path: SignalPath) -> list[_Slot]:
    """Return everything in line from port 1 to port 2."""
    behind_in = _leading(path.input_pads)
    behind_out = _leading(path.output_pads)
    level = path.source_dbm
    slots = [_Slot("source", "source", None, level)]
    for pad in behind_in:
        level = _less(level, pad)
        slots.append(_Slot("pad", pad.name, pad, level))
    slots += [_Slot("removed", pad.name, pad, level) for pad in path.input_removed]
    slots[-1] = _planed(slots[-1])
    for pad in path.input_pads[len(behind_in) :]:
        level = _less(level, pad)
        slots.append(_Slot("pad", pad.name, pad, level))
    level = path.device_output_dbm
    slots.append(_Slot("device", "device", None, level))
    for pad in reversed(path.output_pads[len(behind_out) :]):
        level = _less(level, pad)
        slots.append(_Slot("pad", pad.name, pad, level))
    slots[-1] = _planed(slots[-1])
    slots += [_Slot("removed", pad.name, pad, level) for pad in reversed(path.output_removed)]
    for pad in reversed(behind_out):
        level = _less(level, pad)
        slots.append(_Slot("pad", pad.name, pad, level))
    return [*slots, _Slot("receiver", "receiver", None, None)]


def _leading(pads: Sequence[PadInLine]) -> list[PadInLine]:
    """Return the pads, from the analyzer outwards, that come before the first added one."""
    count = next((k for k, pad in enumerate(pads) if not pad.calibrated), len(pads))
    return list(pads[:count])


def _less(level: float | None, pad: PadInLine) -> float | None:
    return None if level is None else level - pad.loss_db


def _planed(slot: _Slot) -> _Slot:
    return _Slot(slot.role, slot.name, slot.pad, slot.level_dbm, planed=True)


def _first_that_fits(options: Sequence[str], size: float, width: float, bold: bool = False) -> str:
    return next((option for option in options if width_pt(option, size, bold) <= width), options[-1])


def _loss_options(pad: PadInLine) -> list[str]:
    loss = decibels(pad.loss_db)
    with_limits = [f"{loss} ±{pad.tolerance_db:g}"] if pad.tolerance_db is not None else []
    return [*with_limits, loss, loss.removesuffix(" dB")]


def _state_options(slot: _Slot) -> list[str]:
    if slot.role == "removed":
        return ["removed since calibration", "removed"]
    if slot.pad is None:
        return [""]
    where = ("in calibration", "in cal.") if slot.pad.calibrated else ("added", "added")
    file = [f"{where[0]}, measured pad", f"{where[0]}, measured"] if slot.pad.measured else []
    return [*file, *where]


def _level_lines(level_dbm: float | None, width: float) -> Lines:
    text = "level unknown" if level_dbm is None else quantity(level_dbm, "dBm")
    shown = fit(text, (7.0, 6.5, 6.0), width)
    if len(shown.lines) == 1:
        return shown
    return Lines(tuple(text.rsplit(" ", 1)), 6.5 if level_dbm is not None else 6.0)


def _caption(device: DeviceResult) -> str:
    """Return one sentence on the strip: where the levels hold, and the limits of port 2."""
    path = device.reference.path
    limits = [
        f"{word} {quantity(level, 'dBm')}"
        for word, level in (("compresses at", path.port2_compression_dbm), ("is damaged at", path.port2_damage_dbm))
        if level is not None
    ]
    port2 = f"port 2 {' and '.join(limits)}" if limits else "limits of port 2 not given"
    return f"Levels at {stated(path.at_hz, 'Hz')}  ·  {port2}"


def path_strip(device: DeviceResult) -> Block:
    """Return the strip of the reference sweep's signal path."""
    path = device.reference.path
    slots = _sides(path)
    unit = WIDTH_PT / sum(_WEIGHT[slot.role] for slot in slots)
    edges = [0.0]
    for slot in slots:
        edges.append(edges[-1] + unit * _WEIGHT[slot.role])
    key: list[str] = []
    names: list[Lines] = []
    for slot, left, right in zip(slots, edges, edges[1:], strict=False):
        name = fit(slot.name, (7.0, 6.5, 6.0), right - left - 3.0, most=_NAME_LINES)
        if len(name.lines) > _NAME_LINES:
            # Too long to stand over its box: the box gets a letter and the name follows below, in full.
            letter = chr(ord("A") + len(key))
            key.append(f"{letter} = {slot.name}")
            name = Lines((letter,), 7.0)
        names.append(name)
    levels = [
        _level_lines(slot.level_dbm, (right - left) * 0.96)
        for slot, left, right in zip(slots, edges, edges[1:], strict=False)
    ]
    drive = _level_lines(path.drive_dbm, unit * 1.0)
    tall_names = max(name.height_pt(1.15) for name in names)
    tall_levels = max(lines.height_pt(1.1) for lines in [*levels, drive])
    caption = fit("  ·  ".join([_caption(device), *key]), (6.5, 6.0), WIDTH_PT, most=1)
    middle = 13.0 + 9.0 + tall_names + 2.0 + _BOX_PT / 2.0
    under = middle + _BOX_PT / 2.0 + 11.5
    height = under + tall_levels + 3.0 + caption.height_pt()

    def draw(paper: Paper, top: float) -> None:
        paper.heading(top, "Signal path", aside="of the reference sweep")
        line_y = top + middle
        paper.stroke([edges[1] / 2, (edges[-2] + edges[-1]) / 2], [line_y, line_y], INK, 1.0)
        for index, slot in enumerate(slots):
            left, right = edges[index], edges[index + 1]
            _draw_slot(paper, device, slot, names[index], (left, right), line_y)
            if slot.planed:
                _draw_plane(paper, right, top + 14.0, top + under, index < len(slots) // 2)
            if index + 1 < len(slots) and slot.role != "removed":
                feeds_device = slots[index + 1].role == "device"
                feeds_port2 = slots[index + 1].role == "receiver"
                level = path.drive_dbm if feeds_device else path.port2_dbm if feeds_port2 else slot.level_dbm
                paper.marker(right, line_y, "o", 2.4, INK)
                paper.lines(right, top + under, _level_lines(level, unit * 0.96), align="center", leading=1.1)
        paper.lines(0, top + under + tall_levels + 3.0, caption, color=LIGHT)

    return Block(height, draw)


def _draw_slot(
    paper: Paper, device: DeviceResult, slot: _Slot, name: Lines, edges: tuple[float, float], line_y: float
) -> None:
    left, right = edges
    centre = (left + right) / 2.0
    width = min(_WIDEST_BOX_PT * _WEIGHT[slot.role], right - left - _GAP_PT)
    upper = line_y - _BOX_PT / 2.0
    above = upper - 2.0 - name.height_pt(1.15)
    paper.lines(centre, above, name, align="center", color=LIGHT if slot.pad is None else INK, leading=1.15)
    size = 7.0
    if slot.pad is None:
        text = {"source": "port 1", "receiver": "port 2"}.get(slot.role, device.kind)
        if slot.role == "device":
            corners = [
                (centre - width / 2, upper),
                (centre + width / 2 - 7, upper),
                (centre + width / 2, line_y),
            ]
            corners += [(centre + width / 2 - 7, upper + _BOX_PT), (centre - width / 2, upper + _BOX_PT)]
            paper.shape(corners, "white", INK, 1.4)
        else:
            paper.box(centre - width / 2, upper, width, _BOX_PT, fill="white", edge=INK)
    elif slot.role == "removed":
        paper.box(centre - width / 2 - 1, upper, width + 2, _BOX_PT, fill="white")
        paper.box(centre - width / 2, upper, width, _BOX_PT - 3, fill="white", edge=VERMILLION, dash=(0, (2, 1.5)))
        start, end, low = centre - width / 2 - 2, centre + width / 2 + 2, upper + _BOX_PT
        paper.stroke([start, start, end, end], [line_y, low, low, line_y], INK, 1.0)
        text = ""
        paper.text(
            centre,
            line_y + 0.8,
            _first_that_fits(_loss_options(slot.pad), 6.5, width - 2),
            6.5,
            align="center",
            color=LIGHT,
        )
    else:
        fill, edge, weight = (FAINT, LIGHT, 0.7) if slot.pad.calibrated else ("white", BLUE, 1.6)
        paper.box(centre - width / 2, upper, width, _BOX_PT, fill=fill, edge=edge, line=weight)
        text = _first_that_fits(_loss_options(slot.pad), size, width - 2.5)
    if text:
        size = fit(text, (7.0, 6.5, 6.0), width - 1.5).size_pt
        paper.text(centre - (1.5 if slot.role == "device" else 0), line_y + 2.5, text, size, align="center")
    state = _first_that_fits(_state_options(slot), 6.0, right - left - 2.0)
    if state:
        paper.text(centre, upper + _BOX_PT + 7.5, state, 6.0, align="center", color=LIGHT)


def _draw_plane(paper: Paper, x: float, upper: float, lower: float, input_side: bool) -> None:
    paper.stroke([x, x], [upper, lower], BLUE, 1.0, (0, (3, 2)))
    label, room = "calibration plane", width_pt("calibration plane", 6.5) + 4
    before = input_side if room < min(x, WIDTH_PT - x) else x > WIDTH_PT / 2
    paper.text(x + (-3 if before else 3), upper + 6.0, label, 6.5, color=BLUE, align="right" if before else "left")
