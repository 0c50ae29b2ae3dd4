"""A device in; its gain, and the change of its phase, against drive out, with where compression sets in.

Each sweep is a mark with whiskers; behind it stands the curve that all sweeps together allow, with its band. The
shaded drives are safe for measuring figures. The words stand above the diagram: they give the numbers and are the
key to the marks. The small numbers along the top are those of the list of sweeps. A sweep that is set aside is
crossed, and the key says why: it stands off the curve for another reason than compression.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from typing import Final

import numpy as np
from matplotlib.axes import Axes

from benchtool.digits import level_text, quantity, stated
from benchtool.drive_results import Estimate, Onset
from benchtool.model import Compression, DeviceResult, FloatArray
from benchtool.page_marks import DriveMark, apart, known, levelled
from benchtool.page_panel import Panel
from benchtool.page_paper import BLUE, HEADING_PT, INK, LIGHT, VERMILLION, Paper
from benchtool.page_scales import frame, widened
from benchtool.page_text import width_pt
from benchtool.page_traces import down_word

__all__ = ["LEAST_ABOVE_PT", "draw_drive"]

LEAST_ABOVE_PT: Final = 28.0
"""Height of the words and sweep numbers between heading and diagram."""
_ROW_PT: Final = 9.2
_BAND: Final = "#dadfe4"
_SAFE: Final = "#dcebf7"
_DOWN: Final = (0.0, (1.5, 1.2))
_PHASE_FROM_PT: Final = 62.0
"""Least height of the plotting area that holds a strip for the phase as well."""
_PHASE_SHARE: Final = 0.33
_APART_PT: Final = 6.0
_PHASE_HEAD_PT: Final = 9.5
_MOST_WHISKER_DB: Final = 3.0
"""Whiskers longer than this do not set the scale."""
_RELATIVE: Final = ("drive against the source; its level is unknown", "against an unknown source level")


def draw_drive(paper: Paper, device: DeviceResult, marks: Sequence[DriveMark], panel: Panel) -> None:
    """Draw gain and phase change at the design frequency against drive."""
    onset = levelled(device.drive.onset, marks) if device.drive is not None else None
    relative = all(sweep.drive_dbm is None for sweep in device.sweeps)
    at = stated(device.compression.at_hz if device.compression else device.design_hz, "Hz")
    placed = panel.heading(paper, f"Gain, dB against drive, {'dB' if relative else 'dBm'}", at)
    _words(paper, panel, onset, marks, relative, down_word(device), "" if placed else at)
    area = panel.plot(above_pt=LEAST_ABOVE_PT)
    strip = sum(m.phase_change_deg.value is not None for m in marks) > 1 and area.height >= _PHASE_FROM_PT
    below = _PHASE_SHARE * (area.height - _PHASE_HEAD_PT) if strip else 0.0
    tall = area.height - below - (_PHASE_HEAD_PT if strip else 0.0)
    upper = Panel(area.left, area.top, area.width, tall)
    axes = upper.axes(paper)
    across = _across(marks, onset)
    reference = _reference_gain(onset, device.compression, marks)
    frame(axes, across, _gain_limits(marks, onset, reference), 5, tall)
    _shade_safe(axes, onset)
    if onset is None or onset.basis != "none":
        axes.axhline(reference - 1.0, color=VERMILLION, linewidth=0.8, linestyle=_DOWN, zorder=1.6)
    if onset is None:
        axes.axhline(reference, color=LIGHT, linewidth=0.6)
        axes.plot([m.drive_dbm for m in marks], [known(m.gain_db) for m in marks], color=INK, linewidth=0.9)
    elif onset.basis != "none":
        _draw_curve(axes, onset)
    drawn = apart(marks, _APART_PT * (across[1] - across[0]) / area.width)
    _draw_marks(axes, drawn)
    _mark_p1db(axes, device, onset, reference, across)
    _number_drives(paper, axes, upper, marks, across)
    if strip:
        axes.tick_params(labelbottom=False, bottom=False)
        lower = Panel(area.left, area.top + area.height - below, area.width, below)
        _draw_phase(paper, lower, [m for m in drawn if m.phase_change_deg.value is not None], across, onset)


def _reference_gain(onset: Onset | None, compression: Compression | None, marks: Sequence[DriveMark]) -> float:
    """Return the gain that compression is counted from."""
    if onset is not None and onset.small_signal_gain_db.value is not None:
        return onset.small_signal_gain_db.value
    points = compression.points if compression else ()
    own = next((p.gain_db for p in points if compression and p.file == compression.reference), None)
    return known(marks[0].gain_db) if own is None else own


def _across(marks: Sequence[DriveMark], onset: Onset | None) -> tuple[float, float]:
    """Return the drives that are shown: those swept, and the 1 dB point where the curve reaches it."""
    shown = [m.drive_dbm for m in marks]
    if onset is not None and onset.curve_drive_dbm.size:
        low, high = float(onset.curve_drive_dbm[0]), float(onset.curve_drive_dbm[-1])
        point = onset.input_p1db_dbm
        ends = [v for v in (point.low, point.value, point.high) if v is not None and low <= v <= high]
        if point.bound and ends:
            ends.append(ends[0] + (3.0 if point.bound == "at least" else -3.0))
        shown += ends
    return widened(shown, 0.1, 10.0)


def _gain_limits(marks: Sequence[DriveMark], onset: Onset | None, reference: float) -> tuple[float, float]:
    values = [reference, reference - 1.5]
    for mark in marks:
        gain = known(mark.gain_db)
        ends = [v for v in (mark.gain_db.low, mark.gain_db.high) if v is not None]
        values += [gain, *(min(max(v, gain - _MOST_WHISKER_DB), gain + _MOST_WHISKER_DB) for v in ends)]
    if onset is not None and onset.basis != "none" and onset.curve_drive_dbm.size:
        drives = onset.curve_drive_dbm
        swept = (drives >= marks[0].drive_dbm) & (drives <= marks[-1].drive_dbm)
        values += onset.curve_gain_db[1][swept].tolist()
    return widened(values, 0.1, 3.0)


def _words(
    paper: Paper, panel: Panel, onset: Onset | None, marks: Sequence[DriveMark], relative: bool, down: str, at: str
) -> None:
    """Write what the diagram says in numbers, and the key to its marks."""
    hollow = any(m.compressed and not m.crossed for m in marks)
    if onset is None:
        panel.note(paper, [part for part in (at, f"hollow: {down}" if hollow else "", "dotted: 1 dB down") if part])
        return
    crossed = " or ".join(dict.fromkeys(m.aside or "left out" for m in marks if m.crossed))
    y = panel.top + HEADING_PT + 5.0
    point = onset.input_p1db_dbm
    marked = point.value is not None and not relative
    left = panel.left + (9.0 if marked else 0.0)
    if marked:
        shape = {None: "D", "at least": ">", "at most": "<"}[point.bound]
        paper.marker(panel.left + 3.2, y - 2.4, shape, 4.2, VERMILLION)
    texts = _RELATIVE if relative else _p1db_texts(point)
    text = next((t for t in texts if left + width_pt(t, 6.5) <= panel.left + panel.width), texts[-1])
    paper.text(left, y, text, 6.5)
    beside = left + width_pt(text, 6.5) + 7.0
    _key(paper, panel, (beside, y), onset, (crossed, down if hollow else "", at))


def _p1db_texts(point: Estimate) -> Sequence[str]:
    """Return what is known of the 1 dB point in words, the fullest wording first."""
    if point.value is None:
        return ["input P1dB not known"]
    if point.bound:
        return [f"input P1dB {point.bound} {level_text(point.value)}", f"P1dB {point.bound} {level_text(point.value)}"]
    short = f"P1dB {level_text(point.value)}"
    if point.low is None or point.high is None:
        return [short]
    low, high = (level_text(v).removesuffix(" dBm") for v in (point.low, point.high))
    return [f"input {short} ({low} to {high})", f"{short} ({low} to {high})", short]


def _key(paper: Paper, panel: Panel, beside: tuple[float, float], onset: Onset, words_of: tuple[str, str, str]) -> None:
    """Write the safe drive and the key to the marks, as many as there is room for, the gravest first.

    `beside` is where room is left in the row above; `words_of` are what the crosses and the hollow marks stand for, and
    where the diagram holds. An empty one is not needed.
    """
    y = beside[1] + _ROW_PT
    x, right = panel.left, panel.left + panel.width
    safe = onset.safe_drive_dbm.low
    if safe is None:
        words = "safe drive not known"
    else:
        words = f"proven safe to {level_text(safe)}"
        paper.box(x, y - 5.2, 7.0, 5.6, fill=_SAFE, edge=BLUE, line=0.4)
    x += 0.0 if safe is None else 9.0
    paper.text(x, y, words, 6.5)
    x += width_pt(words, 6.5) + 7.0
    rows = [(x, y), beside]
    for shape, word in zip(("x", "o", ""), words_of, strict=True):
        taken = 7.0 if shape else 0.0
        places = (
            (n, s) for s in (6.5, 6.0) for n, (left, _) in enumerate(rows) if left + taken + width_pt(word, s) <= right
        )
        place = next(places, None)
        if not word or place is None:
            continue
        number, size = place
        x, y = rows[number]
        if shape:
            paper.marker(x + 2.4, y - 2.3, shape, 3.8, INK, "white")
        paper.text(x + taken, y, word, size, color=LIGHT)
        rows[number] = (x + taken + width_pt(word, size) + 7.0, y)


def _shade_safe(axes: Axes, onset: Onset | None) -> None:
    """Shade the drives at which gain is down by no more than 0.1 dB, with a heavy line on the limit."""
    left, right = axes.get_xlim()
    safe = None if onset is None else onset.safe_drive_dbm.low
    if safe is None or safe <= left:
        return
    axes.fill_between([left, min(safe, right)], *axes.get_ylim(), color=_SAFE, zorder=0.3, linewidth=0)
    if safe < right:
        axes.plot([safe, safe], axes.get_ylim(), color=BLUE, linewidth=0.9, zorder=0.4)


def _draw_curve(axes: Axes, onset: Onset) -> None:
    """Draw the gain that all sweeps together allow: the middle as a line, low to high as a band."""
    finite = np.all(np.isfinite(onset.curve_gain_db), axis=0)
    drive, (low, middle, high) = onset.curve_drive_dbm[finite], onset.curve_gain_db[:, finite]
    if not drive.size:
        return
    axes.fill_between(drive, low, high, color=_BAND, zorder=1.2, linewidth=0)
    axes.plot(drive, middle, color=INK, linewidth=0.9, zorder=2)


def _whiskers(axes: Axes, x: FloatArray, estimates: Sequence[Estimate]) -> None:
    """Draw an upright line with caps from low to high at each x, where both are known."""
    ends = [(at, e.low, e.high) for at, e in zip(x, estimates, strict=True) if e.low is not None and e.high is not None]
    if ends:
        at, low, high = (np.array(column, dtype=float) for column in zip(*ends, strict=True))
        gap = np.full(at.size, np.nan)
        axes.plot(np.stack([at, at, gap], -1).ravel(), np.stack([low, high, gap], -1).ravel(), color=INK, linewidth=0.8)
        axes.plot(np.tile(at, 2), np.concatenate([low, high]), "_", color=INK, markersize=5.0, markeredgewidth=0.8)


def _draw_marks(axes: Axes, marks: Sequence[DriveMark]) -> None:
    """Draw a mark for each sweep: full, hollow if compressed, crossed if left out of the curve."""
    _whiskers(axes, np.array([m.drive_dbm for m in marks]), [m.gain_db for m in marks])
    for shape, fill, chosen in (
        ("o", INK, [m for m in marks if not m.crossed and not m.compressed]),
        ("o", "white", [m for m in marks if not m.crossed and m.compressed]),
        ("x", INK, [m for m in marks if m.crossed]),
    ):
        if chosen:
            drives, gains = [m.drive_dbm for m in chosen], [known(m.gain_db) for m in chosen]
            axes.plot(drives, gains, shape, color=INK, markerfacecolor=fill, markersize=4.5, zorder=3)


def _mark_p1db(
    axes: Axes, device: DeviceResult, onset: Onset | None, reference: float, across: tuple[float, float]
) -> None:
    """Mark the 1 dB point with its interval, or draw an arrow from the bound to where it may lie."""
    if onset is None:
        figure = device.figures.get("input_p1db")
        if figure is not None and figure.value is not None and figure.bound is None:
            axes.plot([figure.value], [reference - 1.0], "D", color=VERMILLION, markersize=4.5, zorder=4)
        return
    point, level = onset.input_p1db_dbm, reference - 1.0
    if point.value is None:
        return
    if point.bound is None:
        if point.low is not None and point.high is not None:
            axes.plot(
                [point.low, point.high], [level] * 2, "|-", color=VERMILLION, linewidth=1.2, markersize=6, zorder=3.5
            )
        axes.plot([point.value], [level], "D", color=VERMILLION, markersize=4.2, zorder=4)
        return
    up = point.bound == "at least"
    reach = 0.14 * (across[1] - across[0])
    start = min(max(point.value, across[0]), across[1])
    end = min(max(start + (reach if up else -reach), across[0]), across[1])
    axes.plot([start, end], [level] * 2, color=VERMILLION, linewidth=1.4, zorder=3.5)
    axes.plot([start], [level], "|", color=VERMILLION, markersize=7, zorder=3.5)
    axes.plot([end], [level], ">" if up else "<", color=VERMILLION, markersize=4.5, zorder=4, clip_on=False)


def _number_drives(
    paper: Paper, axes: Axes, area: Panel, marks: Sequence[DriveMark], across: tuple[float, float]
) -> None:
    """Mark the drives of this session along the top, with the numbers that the sweeps have in their list."""
    top = axes.get_ylim()[1]
    drives = [m.drive_dbm for m in marks]
    axes.plot(drives, [top] * len(drives), "|", color=INK, markersize=4, markeredgewidth=0.7, clip_on=False, zorder=5)
    per_db = area.width / (across[1] - across[0])
    groups: list[tuple[float, list[str]]] = []
    for mark in (m for m in marks if m.number):
        x, names = area.left + per_db * (mark.drive_dbm - across[0]), [str(mark.number)]
        while groups and groups[-1][0] + _half(groups[-1][1]) + 1.5 > x - _half(names):
            there, earlier = groups.pop()
            x, names = (there * len(earlier) + x * len(names)) / (len(earlier) + len(names)), earlier + names
        groups.append((x, names))
    for x, names in groups:
        half = _half(names)
        inside = min(max(x, area.left + half - 6.0), area.left + area.width - half + 4.0)
        paper.text(inside, area.top - 2.8, ",".join(names), 6.0, bold=True, align="center")


def _half(names: Sequence[str]) -> float:
    """Return half the width of the numbers of sweeps that share a place."""
    return width_pt(",".join(names), 6.0, bold=True) / 2.0


def _up_to(degrees: float) -> str:
    return "below 0.01°" if degrees < 0.01 else f"up to {quantity(degrees, 'deg', digits=2 if degrees < 1.0 else 1)}"


def _draw_phase(
    paper: Paper, area: Panel, marks: Sequence[DriveMark], across: tuple[float, float], onset: Onset | None
) -> None:
    """Draw the change of phase against the lowest drive that is kept, in a strip of its own below the gain."""
    words = "phase change, °"
    # A slope is taken from the sweep below: neither of the two may be spoiled.
    slopes = [
        abs(mark.phase_deg_per_db)
        for below, mark in itertools.pairwise(marks)
        if mark.phase_deg_per_db is not None and not (mark.spoiled or below.spoiled)
    ]
    if slopes:
        steepest = max(slopes)
        words += f"; {_up_to(steepest)}/dB" if width_pt(words, 6.2) + 60.0 <= area.width else ""
    paper.text(area.left, area.top - 2.6, words, 6.2, color=LIGHT)
    axes = area.axes(paper)
    changes = [m.phase_change_deg for m in marks]
    ends = [v for e in changes for v in (e.low, e.value, e.high) if v is not None]
    frame(axes, across, widened([0.0, *ends], 0.16, 2.0), 5, 0.0)
    _shade_safe(axes, onset)
    axes.axhline(0.0, color=LIGHT, linewidth=0.6, zorder=1)
    kept = [m for m in marks if not m.spoiled]
    axes.plot(
        [m.drive_dbm for m in kept], [known(m.phase_change_deg) for m in kept], color=INK, linewidth=0.7, zorder=2
    )
    _whiskers(axes, np.array([m.drive_dbm for m in marks]), changes)
    for shape, chosen in (("s", kept), ("x", [m for m in marks if m.spoiled])):
        drives = [m.drive_dbm for m in chosen]
        axes.plot(drives, [known(m.phase_change_deg) for m in chosen], shape, color=INK, markersize=3.2, zorder=3)
