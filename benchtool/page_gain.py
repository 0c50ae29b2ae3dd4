"""A device in; its gain against frequency out, for every sweep, with the targets as shaded zones.

The zones say where a target wants the curve: a column at the design frequency or at a rejection frequency, a bar at
the height of the half-power points, a bar on the frequency axis for the peak. Words stand beside the diagram, never
over the curves.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Rectangle

from benchtool.digits import level_text, stated
from benchtool.model import DeviceResult, Figure, TargetResult
from benchtool.page_paper import GREEN, HEADING_PT, INK, LIGHT, WIDTH_PT, ZONE, Paper
from benchtool.page_scales import View, decibels_of, frame, widened
from benchtool.page_text import width_pt
from benchtool.page_traces import Trace, down_word
from benchtool.units import HALF_POWER_DB

__all__ = ["draw_gain"]

_LEFT_PT: Final = 27.0
_RIGHT_PT: Final = 64.0
_BELOW_PT: Final = 11.0
_LABEL_STEP_PT: Final = 7.8
_DEPTH_DB: Final = 90.0
_MOST_LABELS: Final = 12


@dataclass(frozen=True)
class _Zone:
    """A rectangle in Hz and dB that a target wants the curve in; None: no limit on that side."""

    low_hz: float
    high_hz: float
    low_db: float | None
    high_db: float | None
    limits_hz: tuple[float, ...] = ()
    """The limits, where they are frequencies and not gains."""


def _value(device: DeviceResult, key: str) -> float | None:
    figure: Figure | None = device.figures.get(key)
    return None if figure is None or figure.value is None or figure.bound else figure.value


def _zones(device: DeviceResult, view: View, shown_db: tuple[float, float]) -> Iterator[_Zone]:
    """Yield the zones of all targets that can be shown against frequency."""
    sliver = 0.008 * (view.high_hz - view.low_hz)
    peak = _value(device, "peak_gain")
    for target in device.targets:
        figure = device.figures.get(target.figure)
        at = figure.parameters.get("at_hz") if figure else None
        at_hz = float(at) if isinstance(at, float | int) else device.design_hz
        if target.id == "gain":
            yield _Zone(at_hz - sliver, at_hz + sliver, target.min, target.max)
        elif target.id == "insertion_loss":
            low, high = (None if v is None else -v for v in (target.max, target.min))
            yield _Zone(at_hz - sliver, at_hz + sliver, low, high)
        elif target.id == "rejection" and peak is not None and target.min is not None:
            yield _Zone(at_hz - sliver, at_hz + sliver, None, peak - target.min)
        elif peak is not None:
            yield from _frequency_zones(device, target, view, peak, shown_db)


def _frequency_zones(
    device: DeviceResult, target: TargetResult, view: View, peak_db: float, shown_db: tuple[float, float]
) -> Iterator[_Zone]:
    """Yield bars at the height of the half-power points, or on the frequency axis."""
    bottom_db = shown_db[0]
    half = 0.035 * (shown_db[1] - bottom_db)
    low = view.low_hz if target.min is None else target.min
    high = view.high_hz if target.max is None else target.max
    edge_db = peak_db - HALF_POWER_DB
    stated_hz = tuple(v for v in (target.min, target.max) if v is not None)
    if target.id in ("peak_frequency", "centre_frequency"):
        # A wish about frequency alone: a bar on the frequency axis.
        yield _Zone(low, high, None, bottom_db + half, stated_hz)
    elif target.id in ("lower_edge", "upper_edge"):
        yield _Zone(low, high, edge_db - half, edge_db + half, stated_hz)
    elif target.id == "bandwidth":
        centre = _value(device, "centre_frequency") or _value(device, "peak_frequency")
        if centre is None:
            return
        narrow = 0.0 if target.min is None else target.min
        wide = narrow * 1.5 if target.max is None else target.max
        for side in (-0.5, 0.5):
            low, high = sorted((centre + side * narrow, centre + side * wide))
            ends = tuple(centre + side * v for v in stated_hz)
            yield _Zone(low, high, edge_db - half, edge_db + half, ends)


def _shade(axes: Axes, view: View, zone: _Zone) -> None:
    bottom, top = axes.get_ylim()
    low = bottom if zone.low_db is None else zone.low_db
    high = top if zone.high_db is None else zone.high_db
    left, right = (v / view.factor for v in (zone.low_hz, zone.high_hz))
    axes.add_patch(
        Rectangle((left, low), right - left, high - low, facecolor=ZONE, edgecolor=GREEN, linewidth=0.4, zorder=1)
    )
    # A heavy line on each limit, so that the zone's open side is told from its closed one in grey too.
    for limit_hz in zone.limits_hz:
        axes.plot([limit_hz / view.factor] * 2, [low, high], color=GREEN, linewidth=1.3, zorder=1.5)
    for limit_db in () if zone.limits_hz else (zone.low_db, zone.high_db):
        if limit_db is not None:
            axes.plot([left, right], [limit_db, limit_db], color=GREEN, linewidth=1.3, zorder=1.5)


def _mark_figures(axes: Axes, device: DeviceResult, view: View) -> None:
    """Mark the peak and the half-power points of the reference sweep."""
    peak_hz, peak_db = _value(device, "peak_frequency"), _value(device, "peak_gain")
    if peak_db is None:
        return
    bottom, top = axes.get_ylim()
    if peak_hz is not None:
        lift = 0.025 * (top - bottom)
        axes.plot([peak_hz / view.factor], [peak_db + lift], "v", color=INK, markersize=4, zorder=4)
    edges = [edge for key in ("lower_edge", "upper_edge") if (edge := _value(device, key)) is not None]
    level = peak_db - HALF_POWER_DB
    if len(edges) == 2:
        axes.plot([e / view.factor for e in edges], [level, level], color=INK, linewidth=0.6, zorder=3)
    if edges:
        axes.plot([e / view.factor for e in edges], [level] * len(edges), "|", color=INK, markersize=8, zorder=4)


def _limits(device: DeviceResult, looks: Sequence[Trace], view: View) -> tuple[float, float]:
    """Return the gain that is shown: everything in view, but no more than 90 dB below the highest."""
    values: list[float] = []
    for trace in looks:
        sweep = trace.sweep.sweep
        level = decibels_of(sweep.s21[view.inside(sweep.frequency_hz)])
        level = level[np.isfinite(level)]
        if level.size:
            values += [float(level.max()), float(level.min())]
    if not values:
        return widened(values)
    highest = max(values)
    values = [max(v, highest - _DEPTH_DB) for v in values]
    for target in device.targets:
        sign = {"gain": 1.0, "insertion_loss": -1.0}.get(target.id)
        if sign:
            limits = (sign * v for v in (target.min, target.max) if v is not None)
            values += [v for v in limits if abs(v - highest) < _DEPTH_DB]
    return widened(values, 0.09, 2.0)


def _spread(wanted: list[float], step: float, low: float, high: float) -> list[float]:
    """Return rising positions as near to the rising `wanted` as a distance of `step` within the limits allows."""
    placed = []
    floor = low
    for position in wanted:
        placed.append(max(position, floor))
        floor = placed[-1] + step
    ceiling = high
    for index in range(len(placed) - 1, -1, -1):
        placed[index] = min(placed[index], ceiling)
        ceiling = placed[index] - step
    return placed


def _end_labels(
    paper: Paper, axes: Axes, looks: Sequence[Trace], view: View, frame_pt: tuple[float, float, float]
) -> None:
    """Write number and drive beside the right end of each trace, apart from one another, with a thin leader."""
    right, upper, tall = frame_pt
    bottom, top = axes.get_ylim()
    ends = []
    for trace in looks[:_MOST_LABELS]:
        sweep = trace.sweep.sweep
        level = decibels_of(sweep.s21)
        end = float(np.interp(view.high_hz, sweep.frequency_hz, level))
        share = (top - min(max(end, bottom), top)) / (top - bottom) if np.isfinite(end) else 0.5
        ends.append((upper + tall * share, trace))
    ends.sort(key=lambda end: end[0])
    step = min(_LABEL_STEP_PT, tall / max(len(ends), 1))
    places = _spread([y for y, _ in ends], step, upper + 2.0, upper + tall - 2.0)
    for (y, trace), place in zip(ends, places, strict=True):
        paper.stroke([right + 1.5, right + 7.0, right + 10.0], [y, place, place], trace.color, 0.6)
        drive = "" if trace.sweep.drive_dbm is None else level_text(trace.sweep.drive_dbm)
        paper.text(right + 21.0, place + 2.3, str(trace.number), 6.5, bold=True, align="right")
        paper.text(right + 24.0, place + 2.3, drive or "drive ?", 6.0, color=LIGHT)


def _key(paper: Paper, top: float, down: str) -> None:
    """Draw the key of the marks into the heading line; `down` names the dashed sweeps, empty where there are none."""
    y, x = top + 6.6, WIDTH_PT
    paper.text(x, top + 9.0, "wanted by a target", 6.5, color=LIGHT, align="right")
    paper.box(x - 75.0, y - 3.0, 9.0, 6.0, fill=ZONE, edge=GREEN, line=0.4)
    paper.text(x - 85.0, top + 9.0, "half-power band", 6.5, color=LIGHT, align="right")
    paper.stroke([x - 159.0, x - 145.0], [y, y], INK, 0.6)
    paper.stroke([x - 159.0, x - 159.0], [y - 3, y + 3], INK, 0.7)
    paper.stroke([x - 145.0, x - 145.0], [y - 3, y + 3], INK, 0.7)
    paper.text(x - 169.0, top + 9.0, "peak", 6.5, color=LIGHT, align="right")
    paper.marker(x - 192.0, y, "v", 4, INK)
    if down:
        paper.text(x - 202.0, top + 9.0, down, 6.5, color=LIGHT, align="right")
        left = x - 207.0 - width_pt(down, 6.5)
        paper.stroke([left - 15.0, left], [y, y], LIGHT, 0.9, (0.0, (4.0, 1.6)))


def draw_gain(
    paper: Paper, device: DeviceResult, looks: Sequence[Trace], view: View, top: float, height: float
) -> None:
    """Draw the diagram into `height` points below `top`."""
    paper.heading(top, f"Gain at the device, dB against {view.unit}")
    if not view.whole:
        frequency = device.reference.sweep.frequency_hz
        span = f"of {stated(float(frequency[0]), 'Hz')} to {stated(float(frequency[-1]), 'Hz')} swept"
        paper.text(155.0, top + 9.0, span, 6.5, color=LIGHT)
    _key(paper, top, down_word(device) if any(trace.compressed for trace in looks) else "")
    upper, tall = top + HEADING_PT + 2.0, height - HEADING_PT - 2.0 - _BELOW_PT
    wide = WIDTH_PT - _LEFT_PT - _RIGHT_PT
    axes = paper.axes(_LEFT_PT, upper, wide, tall)
    limits = _limits(device, looks, view)
    frame(axes, (view.low_hz / view.factor, view.high_hz / view.factor), limits, 10, tall)
    for zone in _zones(device, view, limits):
        _shade(axes, view, zone)
    for trace in looks:
        sweep = trace.sweep.sweep
        shown = view.inside(sweep.frequency_hz)
        axes.plot(
            sweep.frequency_hz[shown] / view.factor,
            decibels_of(sweep.s21[shown]),
            color=trace.color,
            linewidth=trace.width,
            linestyle=trace.dash,
            zorder=trace.height,
        )
    _mark_figures(axes, device, view)
    _end_labels(paper, axes, looks, view, (_LEFT_PT + wide, upper, tall))
