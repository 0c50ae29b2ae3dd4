"""A device in; the row of smaller diagrams under its gain out: gain against drive, compression, match, group delay.

Where two drives or more are known compression is what the session was swept for: gain against drive stands first,
beside it the map of compression where there are three drives, and the delay, because a limiting stage shows there
too. Match stands among them where it can be shown. With one drive match and group delay share the row, and what was
not measured is said in words in its place. Phase joins the row where it matters
(:mod:`benchtool.page_phase`) and there is room.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import partial
from typing import Final

import numpy as np
from matplotlib.axes import Axes

from benchtool.digits import quantity
from benchtool.model import DeviceResult, FloatArray
from benchtool.page_drive import LEAST_ABOVE_PT, draw_drive
from benchtool.page_map import draw_map, map_shown
from benchtool.page_marks import drive_marks
from benchtool.page_panel import NOTE_PT, Panel
from benchtool.page_paper import BLUE, GREEN, INK, WIDTH_PT, ZONE, Dash, Paper
from benchtool.page_phase import draw_phase, phase_matters
from benchtool.page_scales import View, decibels_of, frame, near_band, widened
from benchtool.page_traces import Trace
from benchtool.phase import group_delay_curve

__all__ = ["draw_panels", "least_height"]

_APERTURE_SHARE: Final = 0.15
_GUTTER_PT: Final = 12.0
_LEAST_PT: Final = 90.0
_PORTS: Final[tuple[tuple[str, str, int, int, str, Dash], ...]] = (
    ("S11", "input_return_loss", 0, 0, INK, "-"),
    ("S22", "output_return_loss", 1, 1, BLUE, (0, (5, 1.5, 1.2, 1.5))),
)
_TIMES: Final = ((1.0, "s"), (1e-3, "ms"), (1e-6, "µs"), (1e-9, "ns"), (1e-12, "ps"))

_Curve = tuple[str, FloatArray, FloatArray, str, Dash]
"""Name, frequency in the view's unit, return loss in dB, colour and dash."""


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


def _draw_match(paper: Paper, device: DeviceResult, view: View, panel: Panel) -> None:
    """Draw the return loss at both ports, with the least that a target wants of it."""
    curves, missing = _return_losses(device, view)
    if not curves:
        panel.heading(paper, "Return loss")
        panel.say(paper, " ".join(missing))
        return
    panel.heading_and_note(paper, "Return loss, dB", f"against {view.unit}", missing)
    area = panel.plot(20.0)
    left, upper, wide, tall = area.left, area.top, area.width, area.height
    axes = area.axes(paper)
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


def _draw_delay(paper: Paper, device: DeviceResult, view: View, panel: Panel) -> None:
    """Draw the group delay of the reference sweep with the aperture it was taken with."""
    sweep = device.reference.sweep
    aperture = _drawn_aperture(device)
    if len(sweep.frequency_hz) < 3 or aperture <= 0:
        panel.heading(paper, "Group delay")
        panel.say(paper, "The sweep has too few points for a group delay.")
        return
    shown = view.inside(sweep.frequency_hz)
    delay = group_delay_curve(sweep.frequency_hz, sweep.s21, aperture)[shown]
    # On the skirts the phase is noise: the scale is set by where the response is strong.
    level = decibels_of(sweep.s21[shown])
    strong = delay[level > np.nanmax(level) - 20.0]
    low, high = widened([0.0, *strong.tolist()], 0.1, 1e-12)
    factor, unit = next((t for t in _TIMES if max(abs(low), abs(high)) >= 2 * t[0]), _TIMES[-1])
    notes = [f"aperture {quantity(aperture, 'Hz', digits=3)}", "ring: the figure"]
    panel.heading_and_note(paper, f"Group delay, {unit}", f"against {view.unit}", notes)
    area = panel.plot()
    axes = area.axes(paper)
    frame(axes, (view.low_hz / view.factor, view.high_hz / view.factor), (low / factor, high / factor), 5, area.height)
    axes.plot(sweep.frequency_hz[shown] / view.factor, delay / factor, color=INK, linewidth=1.1)
    _mark_delay(axes, device, view, factor)


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


_Draw = Callable[[Panel], None]


def _row(paper: Paper, device: DeviceResult, looks: Sequence[Trace], view: View) -> list[tuple[float, _Draw]]:
    """Return the diagrams of the row from left to right, each with its share of the width."""
    near = near_band(device, view)
    delay: _Draw = partial(_draw_delay, paper, device, near)
    match: _Draw = partial(_draw_match, paper, device, near)
    marks, shown = drive_marks(device, looks), map_shown(device)
    phase: list[tuple[float, _Draw]] = (
        [(1.0, partial(draw_phase, paper, device, near))] if phase_matters(device) else []
    )
    if not marks:
        return [*phase, (1.0, delay), (1.0, match)]
    row: list[tuple[float, _Draw]] = [(1.0, partial(draw_drive, paper, device, marks))]
    if shown is not None:
        row.append((1.0, partial(draw_map, paper, device, shown, view)))
    if _return_losses(device, near)[0]:
        row.append((0.8 if shown else 1.0, match))
    if len(row) < 2:
        row += phase
    return [*row, (0.8 if len(row) > 2 else 1.0, delay)]


def least_height(device: DeviceResult, looks: Sequence[Trace]) -> float:
    """Return the least height of the row in points: the words of a study of drive need room above the diagram."""
    return _LEAST_PT + (LEAST_ABOVE_PT - NOTE_PT if device.drive and drive_marks(device, looks) else 0.0)


def draw_panels(
    paper: Paper, device: DeviceResult, looks: Sequence[Trace], view: View, top: float, height: float
) -> None:
    """Draw the row of smaller diagrams into `height` points below `top`."""
    row = _row(paper, device, looks, view)
    each = (WIDTH_PT - _GUTTER_PT * (len(row) - 1)) / sum(share for share, _ in row)
    left = 0.0
    for share, draw in row:
        draw(Panel(left, top, share * each, height))
        left += share * each + _GUTTER_PT
