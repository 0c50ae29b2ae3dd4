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

from benchtool.model import Compression, DeviceResult, FloatArray
from benchtool.page_numbers import quantity
from benchtool.page_paper import BLUE, GREEN, HEADING_PT, INK, LIGHT, VERMILLION, WIDTH_PT, ZONE, Paper
from benchtool.page_scales import View, decibels_of, frame, widened
from benchtool.page_text import fit
from benchtool.phase import group_delay_curve

__all__ = ["draw_panels"]

_LEFT_PT: Final = 27.0
_BELOW_PT: Final = 11.0
_GUTTER_PT: Final = 12.0
_PORTS: Final = (
    ("S11", "input_return_loss", 0, 0, INK, "-"),
    ("S22", "output_return_loss", 1, 1, BLUE, (0, (5, 1.5, 1.2, 1.5))),
)
_TIMES: Final = ((1.0, "s"), (1e-3, "ms"), (1e-6, "µs"), (1e-9, "ns"), (1e-12, "ps"))

Area = tuple[float, float, float, float]
"""Left, top, width and height of a diagram with its heading, in points."""


def _plot_area(area: Area, right_pt: float) -> Area:
    x, top, width, height = area
    return x + _LEFT_PT, top + HEADING_PT + 2.0, width - _LEFT_PT - right_pt, height - HEADING_PT - 2.0 - _BELOW_PT


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
    x, top, width, _ = area
    at = f"at {quantity(compression.at_hz, 'Hz')}" if compression else ""
    paper.heading(top, "Gain, dB against drive, dBm", x, width, at if width > 170 else "")
    axes = paper.axes(*_plot_area(area, 4.0))
    drives, gains = [p[0] for p in points], [p[1] for p in points]
    reference = next((p.gain_db for p in compression.points if p.file == compression.reference), gains[0]) if compression else gains[0]
    across = widened(drives, 0.1, 10.0)
    frame(axes, across, widened([*gains, reference - 1.5], 0.15, 3.0), 5, 4)
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


def _return_losses(device: DeviceResult, view: View) -> tuple[list[tuple[str, FloatArray, FloatArray, str, object]], list[str]]:
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
            frequency = np.asarray(view.scaled(sweep.frequency_hz[shown]))
            curves.append((name, frequency, -decibels_of(sweep.s[row, column][shown]), color, dash))
    return curves, missing


def _draw_match(paper: Paper, device: DeviceResult, view: View, area: Area) -> None:
    """Draw the return loss at both ports, with the least that a target wants of it."""
    x, top, width, height = area
    paper.heading(top, f"Return loss, dB against {view.unit}", x, width)
    curves, missing = _return_losses(device, view)
    if not curves:
        _say(paper, area, " ".join(missing) + " To know it, sweep with the device the other way round." * ("S22 was not measured." in missing))
        return
    note_pt = 8.0 if missing else 0.0
    left, upper, wide, tall = _plot_area((x, top + note_pt, width, height - note_pt), 20.0)
    if missing:
        paper.lines(x, top + HEADING_PT - 0.5, fit(" ".join(missing), (6.5, 6.0), width, most=1), color=LIGHT)
    axes = paper.axes(left, upper, wide, tall)
    limits = _match_limits(device, curves)
    frame(axes, (view.low_hz / view.factor, view.high_hz / view.factor), limits, 5, 4)
    for number, (_, frequency, loss, color, dash) in enumerate(curves):
        axes.plot(frequency, np.minimum(loss, limits[1] * 1.5), color=color, linewidth=1.1, linestyle=dash, zorder=3 - number)
    for target in device.targets:
        if target.id in ("input_return_loss", "output_return_loss") and target.min is not None:
            axes.axhspan(target.min, limits[1], color=ZONE, zorder=0.5, linewidth=0)
            axes.axhline(target.min, color=GREEN, linewidth=1.0, linestyle="-" if target.id[0] == "i" else (0, (5, 1.5)))
    ends = sorted((upper + tall * (limits[1] - _end(loss, limits)) / (limits[1] - limits[0]), name, color) for name, _, loss, color, _ in curves)
    if len(ends) == 2 and ends[1][0] - ends[0][0] < 7.5:
        middle = min(max((ends[0][0] + ends[1][0]) / 2, upper + 4), upper + tall - 4)
        ends = [(middle - 3.9, *ends[0][1:]), (middle + 3.9, *ends[1][1:])]
    for y, name, color in ends:
        paper.text(left + wide + 3.0, y + 2.3, name, 6.5, bold=True, color=color)


def _match_limits(device: DeviceResult, curves: Sequence[tuple[str, FloatArray, FloatArray, str, object]]) -> tuple[float, float]:
    wanted = [t.min for t in device.targets if t.id.endswith("return_loss") and t.min is not None]
    losses = np.concatenate([loss for _, _, loss, _, _ in curves])
    return widened([0.0, min(float(np.nanmax(losses)), 50.0), *(1.15 * w for w in wanted)], 0.04, 6.0)


def _end(loss: FloatArray, limits: tuple[float, float]) -> float:
    last = float(loss[-1])
    return min(max(last, limits[0]), limits[1]) if np.isfinite(last) else limits[0]


def _draw_delay(paper: Paper, device: DeviceResult, view: View, area: Area) -> None:
    """Draw the group delay of the reference sweep with the aperture it was taken with."""
    x, top, width, _ = area
    sweep = device.reference.sweep
    figure = device.figures.get("group_delay")
    asked = figure.parameters.get("aperture_hz") if figure else None
    aperture = float(asked) if isinstance(asked, float | int) else float(np.ptp(sweep.frequency_hz)) / max(len(sweep.frequency_hz) - 1, 1)
    if len(sweep.frequency_hz) < 3 or aperture <= 0:
        paper.heading(top, "Group delay", x, width)
        _say(paper, area, "The sweep has too few points for a group delay.")
        return
    shown = view.inside(sweep.frequency_hz)
    delay = group_delay_curve(sweep.frequency_hz, sweep.s21, aperture)[shown]
    # On the skirts the phase is noise: the scale is set by where the response is strong.
    level = decibels_of(sweep.s21[shown])
    strong = delay[level > np.nanmax(level) - 20.0]
    low, high = widened([0.0, *strong.tolist()], 0.1, 1e-13)
    factor, unit = next((t for t in _TIMES if max(abs(low), abs(high)) >= 2 * t[0]), _TIMES[-1])
    paper.heading(top, f"Group delay, {unit} against {view.unit}", x, width)
    axes = paper.axes(*_plot_area(area, 4.0))
    frame(axes, (view.low_hz / view.factor, view.high_hz / view.factor), (low / factor, high / factor), 5, 4)
    axes.plot(view.scaled(sweep.frequency_hz[shown]), delay / factor, color=INK, linewidth=1.1)
    _mark_target_delay(axes, device, view, factor)
    paper.text(x + width, area[1] + area[3] - 0.5, f"aperture {quantity(aperture, 'Hz')}", 6.0, color=LIGHT, align="right")


def _mark_target_delay(axes: Axes, device: DeviceResult, view: View, factor: float) -> None:
    at = float(view.scaled(device.design_hz))
    bottom, top = axes.get_ylim()
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
    draws: list[Callable[[Area], None]] = []
    if len(_drive_points(device.compression)) > 1:
        draws.append(lambda area: _draw_drive(paper, device, area))
    else:
        draws.append(lambda area: _draw_delay(paper, device, view, area))
    draws.append(lambda area: _draw_match(paper, device, view, area))
    if len(_drive_points(device.compression)) > 1:
        draws.append(lambda area: _draw_delay(paper, device, view, area))
    width = (WIDTH_PT - _GUTTER_PT * (len(draws) - 1)) / len(draws)
    for index, draw in enumerate(draws):
        draw((index * (width + _GUTTER_PT), top, width, height))
