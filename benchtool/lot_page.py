"""A lot in; its one A4 page out, as a matplotlib figure or as PDF and PNG.

From top to bottom: how many devices have each verdict; how the values of each targeted figure spread against its
target, a strip for each target; the devices, the worst first; the benches that could not be used.
"""

from __future__ import annotations

import io
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Final

import numpy as np
from matplotlib import rc_context
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_pdf import FigureCanvasPdf
from matplotlib.figure import Figure as Canvas

from benchtool.digits import figure_label, limits_text, quantity
from benchtool.lots import Lot, LotDevice, LotTarget, counted
from benchtool.model import TargetResult, Verdict
from benchtool.page_paper import FAINT, HEADING_PT, HEIGHT_PT, INK, LIGHT, RULE, STYLE, WIDTH_PT, ZONE, Block, Paper
from benchtool.page_text import Lines, fit, literal, width_pt
from benchtool.page_verdict import VERDICT_COLOUR, VERDICT_MARK

__all__ = ["draw_lot", "render_lot"]

_GAP_PT: Final = 7.0
_STRIP_PT: Final = 158.0
_STRIP_WIDE_PT: Final = 246.0
_STRIP_TALL_PT: Final = 17.0
_STRIP_ROW_PT: Final = 28.0
_COUNT_PT: Final = _STRIP_PT + _STRIP_WIDE_PT + 10.0
_COUNT_STEP_PT: Final = 54.0
_MOST_STRIPS: Final = 10
_MOST_UNUSABLE: Final = 8
_ROW_PT: Final = 10.0
_BENCH_PT: Final = 68.0
_NAME_PT: Final = 156.0
_REASON_PT: Final = 258.0
_BINS: Final = 54
_RANK: Final[tuple[Verdict, ...]] = ("missed", "undecided", "met", "none")
_WORD: Final[dict[Verdict, str]] = {"missed": "missed", "undecided": "undecided", "met": "met", "none": "no target"}
_STACK: Final[tuple[Verdict, ...]] = ("met", "undecided", "missed", "none")
_PNG_DPI: Final = 150


@dataclass(frozen=True, eq=False)
class _Group:
    """The same target of several devices."""

    target: LotTarget
    members: tuple[LotTarget, ...]

    @property
    def counts(self) -> Counter[Verdict]:
        return Counter(member.verdict for member in self.members)

    @property
    def limits(self) -> str:
        t = self.target
        return limits_text(TargetResult(t.figure, t.figure, t.unit, t.min, t.max, t.verdict))


def _groups(devices: Sequence[LotDevice]) -> list[_Group]:
    """Return the targets of the lot, those missed most often first."""
    found: dict[tuple[object, ...], list[LotTarget]] = {}
    for device in devices:
        for target in device.targets:
            found.setdefault((target.figure, target.min, target.max), []).append(target)
    groups = [_Group(members[0], tuple(members)) for members in found.values()]
    return sorted(groups, key=lambda g: (-g.counts["missed"], -g.counts["undecided"], -len(g.members), g.target.figure))


def _head(lot: Lot) -> Block:
    title = fit(lot.title, (17, 15, 13, 11, 9), WIDTH_PT - 110.0, bold=True, most=2)
    size = f"{counted(len(lot.benches), 'bench', 'benches')}, {counted(len(lot.devices), 'device')}"
    top_pt = title.height_pt(1.15) + 4.0

    def draw(paper: Paper, top: float) -> None:
        paper.lines(0, top - 2.0, title, bold=True, leading=1.15)
        paper.text(WIDTH_PT, top + 8.0, "lot", 9.0, bold=True, color=LIGHT, align="right")
        paper.text(WIDTH_PT, top + 18.0, size, 7.0, color=LIGHT, align="right")
        _plates(paper, lot, top + top_pt)

    return Block(top_pt + 44.0, draw)


def _plates(paper: Paper, lot: Lot, y: float) -> None:
    """Draw how many devices have each verdict, and a bar that shows their shares."""
    step = WIDTH_PT / 5.0
    for place, (verdict, number) in enumerate(lot.counts.items()):
        x = place * step
        colour = VERDICT_COLOUR[verdict]
        paper.text(x, y + 17.0, VERDICT_MARK[verdict], 13, color=colour)
        number_pt = width_pt(str(number), 17, bold=True)
        paper.text(x + 17.0, y + 18.0, str(number), 17, bold=True, color=INK if number else LIGHT)
        paper.text(x + 21.0 + number_pt, y + 18.0, _WORD[verdict], 7.5, color=INK if number else LIGHT)
    bad = len(lot.unusable)
    x = 4 * step
    paper.text(x, y + 18.0, str(bad), 17, bold=True, color=INK if bad else LIGHT)
    words = f"{'bench' if bad == 1 else 'benches'} unusable"
    paper.text(x + 4.0 + width_pt(str(bad), 17, bold=True), y + 18.0, words, 7.5, color=INK if bad else LIGHT)
    total, left = len(lot.devices), 0.0
    for verdict, number in lot.counts.items():
        if number:
            wide = WIDTH_PT * number / total
            paper.box(left, y + 27.0, wide, 8.0, fill=VERDICT_COLOUR[verdict], edge="white", line=0.8)
            if wide > 14.0:
                paper.text(left + wide / 2, y + 33.8, VERDICT_MARK[verdict], 6.5, color="white", align="center")
            left += wide


def _span(group: _Group) -> tuple[float, float]:
    """Return the values at the ends of a strip: the limits and the middle 96 % of values, with a margin."""
    limits = [limit for limit in (group.target.min, group.target.max) if limit is not None]
    values = [m.value for m in group.members if m.value is not None]
    low, high = min(limits), max(limits)
    if values:
        first, last = np.quantile(values, (0.02, 0.98))
        low, high = min(low, float(first)), max(high, float(last))
    margin = 0.08 * (high - low) or 0.1 * abs(high) or 1.0
    return low - margin, high + margin


def _strip(paper: Paper, group: _Group, x: float, y: float) -> None:
    """Draw the zone of a target and a stack of marks for each bin of values: its height is how many there are."""
    low, high = _span(group)
    tall, wide = _STRIP_TALL_PT, _STRIP_WIDE_PT

    def at(value: float) -> float:
        return x + wide * min(max((value - low) / (high - low), 0.0), 1.0)

    paper.box(x, y, wide, tall, fill=FAINT)
    target = group.target
    start = x if target.min is None else at(target.min)
    stop = x + wide if target.max is None else at(target.max)
    paper.box(start, y, stop - start, tall, fill=ZONE)
    for limit in (target.min, target.max):
        if limit is not None:
            paper.stroke([at(limit)] * 2, [y - 1.5, y + tall + 1.5], INK, 0.8)
    bins: dict[int, Counter[Verdict]] = {}
    for member in group.members:
        if member.value is not None:
            place = min(int((at(member.value) - x) / wide * _BINS), _BINS - 1)
            bins.setdefault(place, Counter())[member.verdict] += 1
    most = max((sum(counts.values()) for counts in bins.values()), default=1)
    unit = min(4.0, (tall - 1.0) / most)
    for place, counts in bins.items():
        foot = y + tall
        for verdict in _STACK:
            if counts[verdict]:
                height = unit * counts[verdict]
                foot -= height
                left = x + place * wide / _BINS + 0.4
                paper.box(left, foot, wide / _BINS - 0.8, height, fill=VERDICT_COLOUR[verdict])
    _ends(paper, group, low, high, x, y + tall)


def _ends(paper: Paper, group: _Group, low: float, high: float, x: float, y: float) -> None:
    unit = group.target.unit
    paper.text(x, y + 7.2, _tick(low, unit), 6.0, color=LIGHT)
    paper.text(x + _STRIP_WIDE_PT, y + 7.2, _tick(high, unit), 6.0, color=LIGHT, align="right")
    values = [member.value for member in group.members if member.value is not None]
    if values:
        middle = f"median {_tick(float(np.median(values)), unit)}"
        paper.text(x + _STRIP_WIDE_PT / 2, y + 7.2, middle, 6.0, color=LIGHT, align="center")


def _tick(value: float, unit: str) -> str:
    return quantity(value, unit)


def _spread(lot: Lot, room: float) -> Block:
    """Return the strips, as many as `room` points hold; the rest are counted."""
    groups = _groups(lot.devices)
    if not groups:
        return Block(HEADING_PT, lambda paper, top: paper.heading(top, "No targets were set"))
    most = max(1, min(_MOST_STRIPS, int((room - HEADING_PT - 10.0) / _STRIP_ROW_PT)))
    shown, left_over = groups[:most], len(groups) - most
    height = HEADING_PT + 4.0 + _STRIP_ROW_PT * len(shown) + (10.0 if left_over > 0 else 0.0)

    def draw(paper: Paper, top: float) -> None:
        paper.heading(top, "Spread against target", aside="shaded: met  ·  each bar: devices with about that value")
        y = top + HEADING_PT + 4.0
        for group in shown:
            name = fit(figure_label(group.target.figure), (7.5, 7.0, 6.5, 6.0), _STRIP_PT - 10.0, bold=True, most=1)
            paper.text(0, y + 8.0, name.lines[0], name.size_pt, bold=True)
            rest = " ".join([*name.lines[1:], group.limits])
            limits = fit(rest, (7.0, 6.5, 6.0), _STRIP_PT - 10.0)
            paper.text(0, y + 17.0, limits.lines[0], limits.size_pt, color=LIGHT)
            _strip(paper, group, _STRIP_PT, y)
            _tally(paper, group, y)
            y += _STRIP_ROW_PT
        if left_over > 0:
            paper.text(
                0, y + 7.0, f"{counted(left_over, 'more target')} in lot.csv, none missed oftener", 6.5, color=LIGHT
            )

    return Block(height, draw)


def _tally(paper: Paper, group: _Group, y: float) -> None:
    """Write how many devices have each verdict of one target, in lines of two."""
    words: list[tuple[str, str, str]] = [
        (VERDICT_MARK[v], VERDICT_COLOUR[v], f"{group.counts[v]} {_WORD[v]}") for v in _RANK if group.counts[v]
    ]
    unknown = sum(member.value is None for member in group.members)
    if unknown:
        words.append(("?", LIGHT, f"{unknown} not known"))
    for place, (mark, colour, text) in enumerate(words):
        x = _COUNT_PT + (place % 2) * _COUNT_STEP_PT
        base = y + 7.0 + (place // 2) * 8.6
        paper.text(x, base, mark, 6.5, color=colour)
        paper.text(x + 7.5, base, text, 6.2)


def _unusable(lot: Lot) -> Block:
    benches = lot.unusable
    if not benches:
        return Block(0.0, lambda _paper, _top: None)
    rows: list[tuple[Lines, Lines]] = []
    for bench in benches[:_MOST_UNUSABLE]:
        more = f" (and {counted(len(bench.faults) - 1, 'more fault')})" if len(bench.faults) > 1 else ""
        # From the bench on: where the lot lies is nobody's business who is sent the page.
        fault = bench.faults[0]
        said = fit(f"{fault[max(fault.find(bench.name), 0) :]}{more}", (6.5, 6.2), WIDTH_PT - _BENCH_PT - 60.0, most=2)
        rows.append((fit(bench.name, (7.0, 6.5, 6.0), _BENCH_PT + 46.0, bold=True, most=2), _cut(said, 3)))
    heights = [max(name.height_pt(1.15), said.height_pt(1.15)) + 2.0 for name, said in rows]
    left_over = len(benches) - len(rows)

    def draw(paper: Paper, top: float) -> None:
        paper.heading(top, "Unusable benches", aside=str(len(benches)))
        y = top + HEADING_PT + 1.0
        for (name, said), height in zip(rows, heights, strict=True):
            paper.lines(0, y, name, bold=True, leading=1.15)
            paper.lines(_BENCH_PT + 60.0, y, said, leading=1.15)
            y += height
        if left_over:
            paper.text(0, y + 7.0, f"{counted(left_over, 'more bench', 'more benches')} in lot.csv", 6.5, color=LIGHT)

    return Block(HEADING_PT + 1.0 + sum(heights) + (9.0 if left_over else 0.0), draw)


def _cut(setting: Lines, most: int) -> Lines:
    """Return the first lines of a text that has more than a row has room for; an ellipsis marks the cut."""
    if len(setting.lines) <= most:
        return setting
    return Lines((*setting.lines[: most - 1], setting.lines[most - 1][:-1] + "…"), setting.size_pt)


@dataclass(frozen=True, eq=False)
class _Row:
    device: LotDevice
    bench: Lines
    name: Lines
    reason: Lines

    @property
    def height(self) -> float:
        tallest = max(part.height_pt(1.12) for part in (self.bench, self.name, self.reason))
        return max(_ROW_PT, tallest + 2.6)


def _row(device: LotDevice) -> _Row:
    return _Row(
        device,
        _cut(fit(device.bench, (7.0, 6.5, 6.0), _NAME_PT - _BENCH_PT - 5.0), 2),
        _cut(fit(device.name, (7.0, 6.5, 6.0), _REASON_PT - _NAME_PT - 5.0), 2),
        _cut(fit(device.reason, (7.0, 6.5, 6.2), WIDTH_PT - _REASON_PT), 2),
    )


def _devices(lot: Lot, room: float) -> Block:
    """Return the table of devices, the worst first, as many as `room` points hold; the rest are counted."""
    devices = lot.devices
    rows: list[_Row] = []
    used = HEADING_PT + 1.0
    for device in devices:
        row = _row(device)
        if rows and used + row.height + 9.0 > room:
            break
        rows.append(row)
        used += row.height
    left_over = len(devices) - len(rows)

    def draw(paper: Paper, top: float) -> None:
        if not devices:
            paper.heading(top, "No device was measured")
            return
        paper.heading(top, "Devices, the worst first")
        for x, word in ((_BENCH_PT, ""), (_NAME_PT, "device"), (_REASON_PT, "why")):
            paper.text(x, top + 9.0, word, 6.5, color=LIGHT)
        y = top + HEADING_PT + 1.0
        for row in rows:
            verdict = row.device.verdict
            paper.text(4.0, y + 7.2, VERDICT_MARK[verdict], 7.5, color=VERDICT_COLOUR[verdict], align="center")
            paper.text(11.0, y + 7.2, _WORD[verdict], 7.0, bold=True)
            for x, part in ((_BENCH_PT, row.bench), (_NAME_PT, row.name), (_REASON_PT, row.reason)):
                paper.lines(x, y + 0.2, part, leading=1.12)
            y += row.height
            paper.stroke([0, WIDTH_PT], [y, y], RULE, 0.25)
        if left_over:
            more = f"{counted(left_over, 'more device')} in lot.csv, none worse than these"
            paper.text(0, y + 7.2, more, 6.5, bold=True)

    return Block(used + (9.0 if left_over else 0.0), draw)


def _foot(lot: Lot) -> Block:
    newest = f"Newest result {lot.made_at}. " if lot.made_at else ""
    said = fit(
        f"{newest}benchtool {lot.version}. The numbers are in lot.csv; each bench has its own report folder with a "
        "page for each device.",
        (6.0,),
        WIDTH_PT,
        most=4,
    )

    def draw(paper: Paper, top: float) -> None:
        paper.stroke([0, WIDTH_PT], [top, top], LIGHT, 0.4)
        paper.lines(0, top + 2.0, said, color=LIGHT, leading=1.2)

    return Block(said.height_pt(1.2) + 3.0, draw)


def _compose(lot: Lot) -> Canvas:
    """Return the page; the house style must be in force."""
    paper = Paper()
    head, unusable, foot = _head(lot), _unusable(lot), _foot(lot)
    free = HEIGHT_PT - head.height - unusable.height - foot.height - 5 * _GAP_PT
    # The strips tell the lot as a whole; the table has what they leave, a third of the page at least.
    spread = _spread(lot, 0.62 * free)
    table = _devices(lot, free - spread.height)
    y = 0.0
    for part in (head, spread, table, unusable):
        if part.height > 0.0:
            part.draw(paper, y)
            y += part.height + _GAP_PT
    foot.draw(paper, HEIGHT_PT - foot.height - 2.0)
    return paper.canvas


def draw_lot(lot: Lot) -> Canvas:
    """Return the page of a lot as a matplotlib figure, A4 portrait."""
    with rc_context(STYLE):
        return _compose(lot)


def render_lot(lot: Lot) -> tuple[bytes, bytes]:
    """Return the page of a lot as (PDF, PNG); the same lot gives the same bytes."""
    pdf, png = io.BytesIO(), io.BytesIO()
    maker = f"benchtool {lot.version}"
    try:
        made = datetime.fromisoformat(lot.made_at)
    except ValueError:
        made = None
    with rc_context(STYLE):
        canvas = _compose(lot)
        about = {"Title": literal(lot.title), "Subject": "lot", "Creator": maker, "CreationDate": made}
        FigureCanvasPdf(canvas).print_figure(pdf, format="pdf", metadata=about)
        FigureCanvasAgg(canvas).print_figure(
            png, format="png", dpi=_PNG_DPI, metadata={"Software": maker}, pil_kwargs={"compress_level": 3}
        )
    return pdf.getvalue(), png.getvalue()
