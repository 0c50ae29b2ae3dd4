"""A device in; the row of smaller diagrams under its gain out: gain against drive, match, group delay.

Where two drives or more are known there are three diagrams side by side: compression is what such a session was
swept for, and the delay stays beside it because a limiting stage shows there too. Otherwise match and group delay
share the row. What was not measured is said in words in its place.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Final

import numpy as np
from matplotlib.axes import Axes

from benchtool.digits import quantity, stated
from benchtool.model import Compression, DeviceResult, FloatArray
from benchtool.page_paper import BLUE, GREEN, HEADING_PT, INK, LIGHT, VERMILLION, WIDTH_PT, ZONE, Dash, Paper
from benchtool.page_scales import View, decibels_of, frame, near_band, widened
from benchtool.page_text import fit
from benchtool.phase import group_delay_curve

__all__ = ["draw_panels"]

_LEFT_PT: Final = 27.0
_BELOW_PT: Final = 11.0
_APERTURE_SHARE: Final = 0.15
_NOTE_PT: Final = 12.0
_GUTTER_PT: Final = 12.0
_PORTS: Final[tuple[tuple[str, str, int, int, str, Dash], ...]] = (
    ("S11", "input_return_loss", 0, 0, INK, "-"),
    ("S22", "output_return_loss", 1, 1, BLUE, (0, (5, 1.5, 1.2, 1.5))),
)
_TIMES: Final = ((1.0, "s"), (1e-3, "ms"), (1e-6, "µs"), (1e-9, "ns"), (1e-12, "ps"))

_Curve = tuple[str, FloatArray, FloatArray, str, Dash]
"""Name, frequency in the view's unit, return loss in dB, colour and dash."""

Area = tuple[float, float, float, float]
"""Left, top, width and height of a diagram with its heading, in points."""


def _plot_area(area: Area, right_pt: float) -> Area:
    """Return where the plotting area goes: under the heading and one line of notes."""
    x, top, width, height = area
    above = HEADING_PT + _NOTE_PT
    return x + _LEFT_PT, top + above, width - _LEFT_PT - right_pt, height - above - _BELOW_PT


def _note(paper: Paper, area: Area, note: str) -> None:
    """Write the line between heading and diagram."""
    paper.lines(area[0], area[1] + HEADING_PT - 1.5, fit(note, (6.5, 6.2, 6.0), area[2]), color=LIGHT)


def _say(paper: Paper, area: Area, sentence: str) -> None:
    x, top, width, _ = area
    paper.lines(x, top + HEADING_PT + 6.0, fit(sentence, (7.0, 6.5), width, most=4), color=LIGHT)


def _drive_points(compression: Compression | None) -> list[tuple[float, float, bool]]:
    """Return drive, gain and whether compressed, of the sweeps whose drive is known, by rising drive."""
    points = compression.points if compression else ()
    return sorted((p.drive_dbm, p.gain_db, p.compressed) for p in points if p.drive_dbm is not None)


def _draw_drive(paper: Paper, device: DeviceResult, area: Area) -> None:
    """Draw gain at the design frequency against drive, with the line 1 dB below the reference's gain."""
    compression = device.compression
    points = _drive_points(compression)
    if compression is None:
        return
    paper.heading(area[1], "Gain, dB against drive, dBm", area[0], area[2])
    _note(paper, area, f"{stated(compression.at_hz, 'Hz')}; hollow: compressed; dotted: 1 dB down")
    left, upper, wide, tall = _plot_area(area, 4.0)
    axes = paper.axes(left, upper, wide, tall)
    drives, gains = [p[0] for p in points], [p[1] for p in points]
    reference = next((p.gain_db for p in compression.points if p.file == compression.reference), gains[0])
    across = widened(drives, 0.1, 10.0)
    frame(axes, across, widened([*gains, reference - 1.5], 0.15, 3.0), 5, tall)
    axes.axhline(reference, color=LIGHT, linewidth=0.6)
    axes.axhline(reference - 1.0, color=VERMILLION, linewidth=0.8, linestyle=(0, (1.5, 1.2)))
    axes.plot(drives, gains, color=INK, linewidth=0.9)
    for compressed, fill in ((False, INK), (True, "white")):
        chosen = [(d, g) for d, g, c in points if c is compressed]
        if chosen:
            axes.plot(*zip(*chosen, strict=True), "o", color=INK, markerfacecolor=fill, markersize=4.5, zorder=3)
    onset = device.figures.get("input_p1db")
    if onset is not None and onset.value is not None and onset.bound is None:
        axes.plot([onset.value], [reference - 1.0], "D", color=VERMILLION, markersize=4.5, zorder=4)


def _return_losses(device: DeviceResult, view: View) -> tuple[list[_Curve], list[str]]:
    """Return the curves that can be shown, and a sentence for each port that cannot."""
    sweep = device.reference.sweep
    shown = view.inside(sweep.frequency_hz)
    curves, missing = [], []
    for name, key, row, column, color, dash in _PORTS:
        figure = device.figures.get(key)
        if name not in sweep.measured:
            missing.append(f"{name} was not measured.")
        elif figure is not None and figure.value is None:
            missing.append(f"{name} was measured but cannot be trusted: see the findings.")
        else:
            frequency = sweep.frequency_hz[shown] / view.factor
            curves.append((name, frequency, -decibels_of(sweep.s[row, column][shown]), color, dash))
    return curves, missing


def _draw_match(paper: Paper, device: DeviceResult, view: View, area: Area) -> None:
    """Draw the return loss at both ports, with the least that a target wants of it."""
    x, top, width, _ = area
    paper.heading(top, f"Return loss, dB against {view.unit}", x, width)
    curves, missing = _return_losses(device, view)
    if not curves:
        _say(paper, area, " ".join(missing))
        return
    left, upper, wide, tall = _plot_area(area, 20.0)
    if missing:
        _note(paper, area, " ".join(missing))
    axes = paper.axes(left, upper, wide, tall)
    limits = _match_limits(device, curves)
    frame(axes, (view.low_hz / view.factor, view.high_hz / view.factor), limits, 5, tall)
    for number, (_, frequency, loss, color, dash) in enumerate(curves):
        axes.plot(
            frequency, np.minimum(loss, limits[1] * 1.5), color=color, linewidth=1.1, linestyle=dash, zorder=3 - number
        )
    drawn = [key for name, key, *_ in _PORTS if any(curve[0] == name for curve in curves)]
    for target in device.targets:
        if target.id in drawn and target.min is not None:
            left_x, right_x = _wanted_band(device, view)
            axes.fill_between([left_x, right_x], target.min, limits[1], color=ZONE, zorder=0.5, linewidth=0)
            dash = "-" if target.id == "input_return_loss" else _PORTS[1][5]
            axes.plot([left_x, right_x], [target.min, target.min], color=GREEN, linewidth=1.3, linestyle=dash, zorder=1)
    ends = sorted(
        (upper + tall * (limits[1] - _end(loss, limits)) / (limits[1] - limits[0]), name, color)
        for name, _, loss, color, _ in curves
    )
    if len(ends) == 2 and ends[1][0] - ends[0][0] < 7.5:
        middle = min(max((ends[0][0] + ends[1][0]) / 2, upper + 4), upper + tall - 4)
        ends = [(middle - 3.9, *ends[0][1:]), (middle + 3.9, *ends[1][1:])]
    for y, name, color in ends:
        paper.text(left + wide + 3.0, y + 2.3, name, 6.5, bold=True, color=color)


def _wanted_band(device: DeviceResult, view: View) -> tuple[float, float]:
    """Return where a return loss is asked for: the half-power band, or a sliver at the design frequency."""
    edges = [device.figures[k].value for k in ("lower_edge", "upper_edge") if k in device.figures]
    low, high = edges if len(edges) == 2 else (None, None)
    if low is None or high is None:
        sliver = 0.01 * (view.high_hz - view.low_hz)
        low, high = device.design_hz - sliver, device.design_hz + sliver
    return low / view.factor, high / view.factor


def _match_limits(device: DeviceResult, curves: Sequence[_Curve]) -> tuple[float, float]:
    wanted = [t.min for t in device.targets if t.id.endswith("return_loss") and t.min is not None]
    losses = np.concatenate([loss for _, _, loss, _, _ in curves])
    highest = max([min(float(np.nanmax(losses)), 50.0), 6.0, *(1.15 * w for w in wanted)])
    return widened([min(0.0, float(np.nanmin(losses))), highest], 0.04)


def _end(loss: FloatArray, limits: tuple[float, float]) -> float:
    last = float(loss[-1])
    return min(max(last, limits[0]), limits[1]) if np.isfinite(last) else limits[0]


def _drawn_aperture(device: DeviceResult) -> float:
    """Return the phase step in Hz that the delay curve is drawn with.

    A step of 0.15 of the half-power band reads a single-tuned peak 0.7 % low at the most (closed form); the figure in
    the table is taken more carefully and is marked beside the curve.
    """
    frequency = device.reference.sweep.frequency_hz
    spacing = float(np.ptp(frequency)) / max(len(frequency) - 1, 1)
    bandwidth = device.figures.get("bandwidth")
    if bandwidth is None or not bandwidth.value:
        return 4.0 * spacing
    return max(_APERTURE_SHARE * bandwidth.value, 2.0 * spacing)


def _draw_delay(paper: Paper, device: DeviceResult, view: View, area: Area) -> None:
    """Draw the group delay of the reference sweep with the aperture it was taken with."""
    x, top, width, _ = area
    sweep = device.reference.sweep
    aperture = _drawn_aperture(device)
    if len(sweep.frequency_hz) < 3 or aperture <= 0:
        paper.heading(top, "Group delay", x, width)
        _say(paper, area, "The sweep has too few points for a group delay.")
        return
    shown = view.inside(sweep.frequency_hz)
    delay = group_delay_curve(sweep.frequency_hz, sweep.s21, aperture)[shown]
    # On the skirts the phase is noise: the scale is set by where the response is strong.
    level = decibels_of(sweep.s21[shown])
    strong = delay[level > np.nanmax(level) - 20.0]
    low, high = widened([0.0, *strong.tolist()], 0.1, 1e-12)
    factor, unit = next((t for t in _TIMES if max(abs(low), abs(high)) >= 2 * t[0]), _TIMES[-1])
    paper.heading(top, f"Group delay, {unit} against {view.unit}", x, width)
    left, upper, wide, tall = _plot_area(area, 4.0)
    axes = paper.axes(left, upper, wide, tall)
    frame(axes, (view.low_hz / view.factor, view.high_hz / view.factor), (low / factor, high / factor), 5, tall)
    axes.plot(sweep.frequency_hz[shown] / view.factor, delay / factor, color=INK, linewidth=1.1)
    _mark_delay(axes, device, view, factor)
    _note(paper, area, f"aperture {quantity(aperture, 'Hz', digits=3)}; ring: the figure")


def _mark_delay(axes: Axes, device: DeviceResult, view: View, factor: float) -> None:
    """Mark the figure at the design frequency, and the zone that a target wants it in."""
    at = device.design_hz / view.factor
    bottom, top = axes.get_ylim()
    figure = device.figures.get("group_delay")
    if figure is not None and figure.value is not None:
        axes.plot([at], [figure.value / factor], "o", color=INK, markerfacecolor="white", markersize=4, zorder=4)
    for target in device.targets:
        if target.id == "group_delay":
            low = bottom if target.min is None else target.min / factor
            high = top if target.max is None else target.max / factor
            axes.plot([at, at], [low, high], color=ZONE, linewidth=5, solid_capstyle="butt", zorder=1)
            for limit in (target.min, target.max):
                if limit is not None:
                    axes.plot([at], [limit / factor], "_", color=GREEN, markersize=7, zorder=1.5)


def draw_panels(paper: Paper, device: DeviceResult, view: View, top: float, height: float) -> None:
    """Draw the row of smaller diagrams into `height` points below `top`."""
    near = near_band(device, view)
    draws: list[Callable[[Area], None]] = []
    if len(_drive_points(device.compression)) > 1:
        draws.append(lambda area: _draw_drive(paper, device, area))
        draws.append(lambda area: _draw_match(paper, device, near, area))
        draws.append(lambda area: _draw_delay(paper, device, near, area))
    else:
        draws.append(lambda area: _draw_delay(paper, device, near, area))
        draws.append(lambda area: _draw_match(paper, device, near, area))
    width = (WIDTH_PT - _GUTTER_PT * (len(draws) - 1)) / len(draws)
    for index, draw in enumerate(draws):
        draw((index * (width + _GUTTER_PT), top, width, height))
