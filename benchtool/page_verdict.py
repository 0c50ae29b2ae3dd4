"""A bench and a device in; the head of the page out: the verdict, why, what to do next, and what was measured.

Each verdict has a word, a shape and a colour, so that it survives a grey printer and any eye.
"""

from __future__ import annotations

from math import cos, pi, sin
from typing import Final

from benchtool.digits import quantity, stated
from benchtool.model import BenchResult, DeviceResult, Verdict
from benchtool.page_paper import GREEN, INK, LIGHT, ORANGE, RULE, VERMILLION, WIDTH_PT, Block, Paper
from benchtool.page_text import Lines, fit

__all__ = ["VERDICT_COLOUR", "VERDICT_MARK", "head"]

VERDICT_COLOUR: Final[dict[Verdict, str]] = {"met": GREEN, "missed": VERMILLION, "undecided": ORANGE, "none": LIGHT}
VERDICT_MARK: Final[dict[Verdict, str]] = {"met": "✔", "missed": "✘", "undecided": "◆", "none": "–"}
_WORD: Final[dict[Verdict, str]] = {"met": "MET", "missed": "MISSED", "undecided": "UNDECIDED", "none": "NO TARGET"}
_PLATE_PT: Final = 112.0
_TEXT_PT: Final = _PLATE_PT + 12.0
_LABEL_PT: Final = 30.0


def _ring(x: float, y: float, radius: float, corners: int, turn: float = 0.0) -> list[tuple[float, float]]:
    steps = (turn + 2 * pi * k / corners for k in range(corners))
    return [(x + radius * sin(a), y - radius * cos(a)) for a in steps]


def _sign(paper: Paper, verdict: Verdict, x: float, y: float, radius: float) -> None:
    """Draw the sign of a verdict: a disc with a tick, an octagon with a cross, a diamond, an empty ring."""
    colour = VERDICT_COLOUR[verdict]
    if verdict == "met":
        paper.shape(_ring(x, y, radius, 40), colour)
        paper.stroke(
            [x - 0.45 * radius, x - 0.1 * radius, x + 0.5 * radius],
            [y, y + 0.38 * radius, y - 0.38 * radius],
            "white",
            3.2,
        )
    elif verdict == "missed":
        paper.shape(_ring(x, y, radius, 8, pi / 8), colour)
        arm = 0.42 * radius
        paper.stroke([x - arm, x + arm], [y - arm, y + arm], "white", 3.2)
        paper.stroke([x - arm, x + arm], [y + arm, y - arm], "white", 3.2)
    elif verdict == "undecided":
        paper.shape(_ring(x, y, radius * 1.1, 4), colour)
        paper.text(x, y + 5.5, "?", 16, bold=True, align="center")
    else:
        paper.shape(_ring(x, y, radius, 40), "white", colour, 1.8)
        paper.stroke([x - 0.5 * radius, x + 0.5 * radius], [y, y], colour, 2.4)


def _what(device: DeviceResult) -> str:
    """Return kind, design frequency and reference sweep in one line."""
    at = stated(device.design_hz, "Hz") if device.design_stated else quantity(device.design_hz, "Hz")
    design = (
        f"design frequency {at}" if device.design_stated else f"no design frequency given: figures at the peak, {at}"
    )
    return f"{device.kind}  ·  {design}  ·  reference sweep {device.reference_sweep}"


def _session(bench: BenchResult) -> str:
    return "  ·  ".join(part for part in (bench.title, bench.date, bench.operator) if part)


def head(bench: BenchResult, device: DeviceResult) -> Block:
    """Return the head of the page."""
    room = WIDTH_PT - _TEXT_PT
    name = fit(device.name, (17, 15, 13, 11.5, 10), room, bold=True)
    if len(name.lines) > 1:
        name = fit(device.name, (12, 11, 10, 9), room, bold=True, most=2)
    what = fit(_what(device), (7.5, 7, 6.5), room, most=2)
    session = fit(_session(bench), (7, 6.5, 6), room, most=2)
    sentences: list[tuple[str, Lines, bool]] = []
    for label, sentence, bold in (("Why", device.summary.reason, True), ("Next", device.summary.next_step, False)):
        if sentence:
            lines = fit(sentence, (9, 8.5, 8), room - _LABEL_PT, bold=bold)
            if len(lines.lines) > 1:
                lines = fit(sentence, (9, 8.5, 8, 7.5), room - _LABEL_PT, bold=bold, most=2)
            sentences.append((label, lines, bold))
    leading = 1.22
    height = name.height_pt(1.15) + what.height_pt() + session.height_pt() + 9.0
    height += sum(lines.height_pt(leading) + 3.0 for _, lines, _ in sentences)
    height = max(height, 76.0)

    def draw(paper: Paper, top: float) -> None:
        verdict = device.verdict
        paper.box(0, top, _PLATE_PT, height - 2.0, fill="white", edge=VERDICT_COLOUR[verdict], line=1.6)
        middle = top + height / 2.0
        _sign(paper, verdict, _PLATE_PT / 2, middle - 11.0, 19.0)
        size = 16.0 if len(_WORD[verdict]) < 8 else 13.5
        paper.text(_PLATE_PT / 2, middle + 27.0, _WORD[verdict], size, bold=True, align="center")
        y = paper.lines(_TEXT_PT, top - 2.0, name, bold=True, leading=1.15)
        y = paper.lines(_TEXT_PT, y + 1.0, what, color=LIGHT)
        y = paper.lines(_TEXT_PT, y, session, color=LIGHT) + 3.5
        paper.stroke([_TEXT_PT, WIDTH_PT], [y, y], RULE, 0.6)
        y += 2.5
        for label, lines, bold in sentences:
            paper.text(_TEXT_PT, y + lines.size_pt, label, 7.5, color=LIGHT)
            y = paper.lines(_TEXT_PT + _LABEL_PT, y, lines, bold=bold, color=INK, leading=leading) + 3.0

    return Block(height, draw)
