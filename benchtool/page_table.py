"""Figures and targets in; the measured-vs-target table out, and the figures without a target in lighter type.

Each target has a strip: the shaded zone it allows, the value as a mark, its interval as a whisker where it is known.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from benchtool.digits import budget_text, figure_label, interval_text, limits_text, probability_text, value_text
from benchtool.model import DeviceResult, Figure, TargetResult, Verdict
from benchtool.page_paper import FAINT, GREEN, HEADING_PT, INK, LIGHT, RULE, WIDTH_PT, ZONE, Block, Paper
from benchtool.page_text import Lines, fit, width_pt
from benchtool.page_verdict import VERDICT_COLOUR, VERDICT_MARK

__all__ = ["other_figures", "target_table"]

_VALUE_PT: Final = 132.0
_TARGET_PT: Final = 268.0
_STRIP_PT: Final = 360.0
_STRIP_WIDE_PT: Final = 74.0
_VERDICT_PT: Final = 442.0
_CALM_TARGETS: Final = 7
"""Up to this many rows have air between them."""
_ORDER: Final[dict[Verdict, int]] = {"missed": 0, "undecided": 1, "met": 2, "none": 3}


@dataclass(frozen=True)
class _Row:
    target: TargetResult
    figure: Figure | None
    name: Lines
    value: Lines
    interval: str
    limits: Lines
    advice: Lines | None
    air: float

    @property
    def height(self) -> float:
        text = max(self.name.height_pt(1.12), self.value.height_pt(1.12), self.limits.height_pt(1.12), 8.2) + self.air
        return text + (self.advice.height_pt(1.15) + 1.6 if self.advice else 0.0)


def _decisive_note(figure: Figure | None, target: TargetResult) -> str:
    """Return what makes the interval of a target that is not met as wide as it is, and what would narrow it."""
    if target.verdict not in ("undecided", "missed"):
        return ""
    budget = budget_text(figure)
    advice = f"→ {target.advice}" if target.advice else ""
    return " ".join(part for part in (budget and f"doubt: {budget}", advice) if part)


def _row(device: DeviceResult, target: TargetResult, advise: bool) -> _Row:
    figure = device.figures.get(target.figure)
    note = _decisive_note(figure, target) if advise else ""
    advice = fit(note, (6.5, 6.0), WIDTH_PT - 12.0, most=2) if note else None
    return _Row(
        target,
        figure,
        fit(figure_label(target.figure), (7.5, 7.0, 6.5, 6.0), _VALUE_PT - 6.0),
        fit(value_text(figure), (7.5, 7.0, 6.5, 6.0), _TARGET_PT - _VALUE_PT - 6.0, bold=True),
        interval_text(figure),
        fit(limits_text(target), (7.5, 7.0, 6.5, 6.0), _STRIP_PT - _TARGET_PT - 6.0),
        advice,
        4.2 if len(device.targets) <= _CALM_TARGETS else 2.4,
    )


def _span(target: TargetResult, figure: Figure | None) -> tuple[float, float]:
    """Return the values at the ends of a strip: the zone and half as much on each side, wider if the value asks."""
    limits = [v for v in (target.min, target.max) if v is not None]
    shown = [v for v in (figure.value, figure.low, figure.high) if v is not None and math.isfinite(v)] if figure else []
    zone = limits[-1] - limits[0] if len(limits) == 2 and limits[1] > limits[0] else 0.0
    reach = max((abs(v - limit) for v in shown for limit in limits), default=0.0) if not zone else 0.0
    margin = 0.6 * zone or 1.3 * reach or 0.1 * abs(limits[0]) or 1.0
    low, high = limits[0] - margin, limits[-1] + margin
    for value in shown:
        # Far outside: the strip grows three zones wide at most; beyond that the mark is held at the end as an arrow.
        room = 3.0 * zone if zone else math.inf
        low, high = min(low, max(value - 0.15 * zone, low - room)), max(high, min(value + 0.15 * zone, high + room))
    return low, high


def _strip(paper: Paper, row: _Row, y: float) -> None:
    """Draw the strip of a row, centred on y."""
    target, figure = row.target, row.figure
    left, right = _STRIP_PT, _STRIP_PT + _STRIP_WIDE_PT
    paper.box(left, y - 3.4, _STRIP_WIDE_PT, 6.8, fill=FAINT)
    if target.min is None and target.max is None:
        return
    low, high = _span(target, figure)

    def at(value: float) -> float:
        return left + _STRIP_WIDE_PT * min(max((value - low) / (high - low), 0.0), 1.0)

    start = left if target.min is None else at(target.min)
    end = right if target.max is None else at(target.max)
    paper.box(start, y - 3.4, end - start, 6.8, fill=ZONE)
    for limit in (target.min, target.max):
        if limit is not None:
            paper.stroke([at(limit)] * 2, [y - 4.2, y + 4.2], GREEN, 1.2)
    if figure is None or figure.value is None or not math.isfinite(figure.value):
        paper.text(left + 6.0, y + 2.4, "?", 6.5, bold=True, align="center")
        return
    if figure.low is not None and figure.high is not None:
        ends = [at(figure.low), at(figure.high)]
        paper.stroke(ends, [y, y], INK, 1.0)
        for x in ends:
            paper.stroke([x, x], [y - 2.2, y + 2.2], INK, 0.8)
    shape: object = "D"
    if figure.bound:
        shape = ">" if figure.bound == "at least" else "<"
    elif not low <= figure.value <= high:
        shape = ">" if figure.value > high else "<"
    x = min(max(at(figure.value), left + 2.5), right - 2.5)
    paper.marker(x, y, shape, 4.2, INK, VERDICT_COLOUR[target.verdict] if target.verdict != "none" else "white")


def target_table(device: DeviceResult, room: float, advise: bool) -> Block:
    """Return the table of targets within `room` points: rows that do not fit are counted, missed ones stay."""
    rows = [_row(device, target, advise) for target in device.targets]
    if not rows:
        return Block(0.0, lambda _paper, _top: None)
    head = HEADING_PT + 1.0
    kept = sorted(range(len(rows)), key=lambda k: (_ORDER[rows[k].target.verdict], k))
    used = head
    chosen: list[int] = []
    for position, k in enumerate(kept):
        note = 9.0 if position + 1 < len(kept) else 0.0
        if chosen and used + rows[k].height + note > room:
            break
        used += rows[k].height
        chosen.append(k)
    shown, left_over = [rows[k] for k in sorted(chosen)], len(rows) - len(chosen)
    height = used + (9.0 if left_over else 0.0)
    confidence = next((r.figure.confidence for r in shown if r.figure and r.figure.confidence), None)

    def draw(paper: Paper, top: float) -> None:
        paper.heading(top, "Measured against target")
        interval = f"value, {100 * confidence:.0f} % interval" if confidence else "value"
        for x, word in (
            (_VALUE_PT, interval),
            (_TARGET_PT, "target"),
            (_STRIP_PT, "zone and value"),
            (_VERDICT_PT, "verdict"),
        ):
            paper.text(x, top + 9.0, word, 6.5, color=LIGHT)
        if any(row.target.probability is not None for row in shown):
            paper.text(WIDTH_PT, top + 9.0, "p(met)", 6.5, color=LIGHT, align="right")
        y = top + head
        for row in shown:
            _draw_row(paper, row, y)
            y += row.height
        if left_over:
            paper.text(0, y + 7.0, f"{left_over} more targets in results.json, none worse than these", 6.5, color=LIGHT)

    return Block(height, draw)


def _draw_row(paper: Paper, row: _Row, y: float) -> None:
    bottom = y + row.height
    y += row.air / 2.0
    paper.lines(0, y + 0.4, row.name, leading=1.12)
    paper.lines(_VALUE_PT, y + 0.4, row.value, bold=True, leading=1.12)
    if row.interval:
        start = _VALUE_PT + width_pt(row.value.lines[-1], row.value.size_pt, bold=True) + 4.0
        interval = fit(row.interval, (6.5, 6.2, 6.0), _TARGET_PT - start - 3.0)
        paper.text(start, y + 7.9, " ".join(interval.lines), interval.size_pt, color=LIGHT)
    paper.lines(_TARGET_PT, y + 0.4, row.limits, leading=1.12)
    _strip(paper, row, y + 4.9)
    verdict = row.target.verdict
    paper.text(_VERDICT_PT + 4.0, y + 7.6, VERDICT_MARK[verdict], 7.5, color=VERDICT_COLOUR[verdict], align="center")
    paper.text(_VERDICT_PT + 10.5, y + 7.6, verdict if verdict != "none" else "no target", 7.0, bold=True)
    if row.target.probability is not None:
        paper.text(WIDTH_PT, y + 7.6, probability_text(row.target.probability), 6.5, color=LIGHT, align="right")
    if row.advice:
        paper.lines(
            12.0, bottom - row.advice.height_pt(1.15) - row.air / 2.0 + 0.8, row.advice, color=LIGHT, leading=1.15
        )
    paper.stroke([0, WIDTH_PT], [bottom, bottom], RULE, 0.25)


def other_figures(device: DeviceResult, most_rows: int) -> Block:
    """Return the figures that have no target, in two columns of lighter type, `most_rows` rows at most."""
    with_target = {target.figure for target in device.targets}
    others = [(key, figure) for key, figure in device.figures.items() if key not in with_target]
    # What is known comes first: it is what is lost last when room is short.
    others.sort(key=lambda pair: pair[1].value is None)
    shown: Sequence[tuple[str, Figure]] = others[: 2 * most_rows]
    left_over = len(others) - len(shown)
    rows = (len(shown) + 1) // 2
    step, head = 8.8, (HEADING_PT - 1.0 if not device.targets else 3.0)
    height = head + rows * step + (8.0 if left_over else 0.0) if others else 0.0

    def draw(paper: Paper, top: float) -> None:
        if not others:
            return
        if not device.targets:
            paper.heading(top, "Measured; no targets were set")
        for index, (key, figure) in enumerate(shown):
            # The columns of the table above go on.
            x, value_x = ((0.0, _VALUE_PT), (_TARGET_PT + 8.0, 400.0))[index // rows]
            y = top + head + (index % rows) * step
            interval = interval_text(figure)
            name = fit(figure_label(key), (7.0, 6.5, 6.0), value_x - x - 4.0)
            paper.text(x, y + 6.6, " ".join(name.lines), name.size_pt if len(name.lines) == 1 else 6.0, color=LIGHT)
            text = value_text(figure) + (f"  ({interval})" if interval else "")
            value = fit(text, (7.0, 6.5, 6.0), 120.0)
            color = LIGHT if figure.value is None else INK
            paper.text(value_x, y + 6.6, " ".join(value.lines), value.size_pt, color=color)
        if left_over:
            paper.text(
                0,
                top + head + rows * step + 6.5,
                f"{left_over} figures without a target in results.json",
                6.5,
                color=LIGHT,
            )

    return Block(height, draw)
