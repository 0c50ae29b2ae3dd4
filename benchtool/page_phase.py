"""A phase network in; its phase over frequency, and how straight that is where a target asks for it, out."""

from __future__ import annotations

from typing import Final

import numpy as np
from matplotlib.axes import Axes

from benchtool.figures import phase_toward
from benchtool.model import DeviceResult, FloatArray, TargetResult
from benchtool.page_panel import Panel
from benchtool.page_paper import BLUE, GREEN, INK, ZONE, Paper
from benchtool.page_scales import View, decibels_of, frame, ticks, widened
from benchtool.phase import unwrapped_phase

__all__ = ["draw_phase", "phase_matters"]

_STEPS: Final = (1, 1.5, 3, 4.5, 9, 10)
"""Steps of angles: 15°, 30°, 45°, 90° are read at a glance."""
_STRONG_DB: Final = 20.0


def phase_matters(device: DeviceResult) -> bool:
    """Whether the page should show phase: for a phase network, and where a target asks about it."""
    return device.kind == "network" or any(target.id in ("phase", "phase_linearity") for target in device.targets)


def draw_phase(paper: Paper, device: DeviceResult, view: View, panel: Panel) -> None:
    """Draw the phase of the reference sweep, the figure, and the straight line that linearity is counted from."""
    sweep = device.reference.sweep
    if sweep.frequency_hz.size < 2:
        panel.heading(paper, "Phase")
        panel.say(paper, "The sweep has too few points for a phase.")
        return
    shown = view.inside(sweep.frequency_hz)
    frequency, phase = sweep.frequency_hz[shown] / view.factor, _turned(device)[shown]
    straight = _straight_lines(device, view)
    notes = ["ring: the figure"] if _known(device) is not None else []
    notes += ["dashed: straight line"] if straight else []
    panel.heading_and_note(paper, "Phase, °", f"against {view.unit}", notes)
    area = panel.plot()
    axes = area.axes(paper)
    # On the skirts the phase is noise: the scale is set by where the response is strong.
    level = decibels_of(sweep.s21[shown])
    strong = phase[level > np.nanmax(level) - _STRONG_DB]
    wanted = [limit for target in _about_phase(device) for limit in (target.min, target.max) if limit is not None]
    limits = widened([*strong.tolist(), *wanted], 0.1, 10.0)
    frame(axes, (view.low_hz / view.factor, view.high_hz / view.factor), limits, 5, area.height)
    ticks(axes.yaxis, limits, min(max(int(area.height / 20.0), 3), 7), _STEPS)
    axes.plot(frequency, phase, color=INK, linewidth=1.1, zorder=2)
    for along, line in straight:
        axes.plot(along, line, color=BLUE, linewidth=1.1, linestyle=(0, (5, 1.5)), zorder=3)
    _mark(axes, device, view)


def _known(device: DeviceResult) -> float | None:
    """Return the phase at the design frequency, turned by whole circles to where a target wants it."""
    figure = device.figures.get("phase")
    if figure is None or figure.value is None:
        return None
    target = next(iter(_about_phase(device)), None)
    return figure.value if target is None else phase_toward(figure.value, target.min, target.max)


def _about_phase(device: DeviceResult) -> list[TargetResult]:
    return [target for target in device.targets if target.id == "phase"]


def _turned(device: DeviceResult) -> FloatArray:
    """Return the unwrapped phase of the reference sweep, turned by whole circles to the figure, or to zero."""
    sweep, figure = device.reference.sweep, _known(device) or 0.0
    phase = unwrapped_phase(sweep.frequency_hz, sweep.s21)
    here = float(np.interp(device.design_hz, sweep.frequency_hz, phase))
    return np.asarray(phase - 360.0 * np.round((here - figure) / 360.0))


def _straight_lines(device: DeviceResult, view: View) -> list[tuple[FloatArray, FloatArray]]:
    """Return the best straight line through the phase over each band whose linearity a target asks for, two points."""
    frequency, phase = device.reference.sweep.frequency_hz, _turned(device)
    lines = []
    for target in device.targets:
        over = device.figures[target.figure].parameters.get("over_hz")
        if target.id != "phase_linearity" or not isinstance(over, tuple):
            continue
        inside = (frequency >= over[0]) & (frequency <= over[1])
        if np.count_nonzero(inside) > 2:
            middle = 0.5 * (over[0] + over[1])
            line = np.polynomial.Polynomial.fit(frequency[inside] - middle, phase[inside], 1)
            # Drawn on beyond the band, or the trace would hide it.
            ends = np.array(over) + np.array([-1.0, 1.0]) * (over[1] - over[0])
            lines.append((ends / view.factor, np.asarray(line(ends - middle))))
    return lines


def _mark(axes: Axes, device: DeviceResult, view: View) -> None:
    """Mark the figure at the design frequency, and the zone that a target wants it in."""
    at, value = device.design_hz / view.factor, _known(device)
    bottom, top = axes.get_ylim()
    if value is not None:
        axes.plot([at], [value], "o", color=INK, markerfacecolor="white", markersize=4, zorder=4)
    for target in _about_phase(device):
        low, high = bottom if target.min is None else target.min, top if target.max is None else target.max
        axes.plot([at, at], [low, high], color=ZONE, linewidth=5, solid_capstyle="butt", zorder=1)
        limits = [limit for limit in (target.min, target.max) if limit is not None]
        axes.plot([at] * len(limits), limits, "_", color=GREEN, markersize=7, zorder=1.5)
