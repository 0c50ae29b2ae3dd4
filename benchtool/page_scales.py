"""Data in; what a diagram shows of it, and the ticks it is read by, out."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.ticker import MaxNLocator

from benchtool.model import DeviceResult, FloatArray

__all__ = ["View", "decibels_of", "frame", "near_band", "ticks", "view_of", "widened"]

_FLOOR_DB = 200.0


@dataclass(frozen=True)
class View:
    """The stretch of frequency that diagrams show, and the unit it is read in."""

    low_hz: float
    high_hz: float
    factor: float
    unit: str
    whole: bool
    """Whether that is the whole of the reference sweep."""

    def inside(self, frequency_hz: FloatArray) -> slice:
        """Return the samples that the view shows, with one more at each end so that lines run to the frame."""
        first = int(np.searchsorted(frequency_hz, self.low_hz)) - 1
        last = int(np.searchsorted(frequency_hz, self.high_hz, side="right")) + 1
        return slice(max(first, 0), max(last, 1))


def decibels_of(s: np.ndarray) -> FloatArray:
    """Return the magnitude of (n,) in dB, held above −200 dB so that an exact zero can be drawn."""
    magnitude = np.where(np.isfinite(s), np.abs(s), np.nan)
    return np.asarray(20.0 * np.log10(np.maximum(magnitude, 10.0 ** (-_FLOOR_DB / 20.0))))


def _known(device: DeviceResult, key: str) -> float | None:
    figure = device.figures.get(key)
    return None if figure is None else figure.value


def view_of(device: DeviceResult) -> View:
    """Return what of the sweep to show: all of it, unless the band is a sliver of it.

    A band narrower than a fortieth of the sweep could not be read; then the window, the marks of the targets and
    ten bandwidths each side of the peak are shown.
    """
    frequency = device.reference.sweep.frequency_hz
    low, high = float(frequency[0]), float(frequency[-1])
    bandwidth, peak = _known(device, "bandwidth"), _known(device, "peak_frequency")
    whole = True
    if bandwidth and peak and bandwidth > 0 and (high - low) > 40.0 * bandwidth:
        wanted = [device.design_hz, peak - 10.0 * bandwidth, peak + 10.0 * bandwidth, *(device.window_hz or ())]
        for figure in device.figures.values():
            at = figure.parameters.get("at_hz")
            wanted += [at] if isinstance(at, float | int) else []
        margin = 0.03 * (max(wanted) - min(wanted))
        near_low, near_high = max(low, min(wanted) - margin), min(high, max(wanted) + margin)
        if near_high - near_low < 0.8 * (high - low):
            low, high, whole = near_low, near_high, False
    if high <= low:
        low, high = low * 0.99 - 1.0, high * 1.01 + 1.0
    factor, unit = next(((f, u) for f, u in ((1e9, "GHz"), (1e6, "MHz"), (1e3, "kHz")) if high >= f), (1.0, "Hz"))
    return View(low, high, factor, unit, whole)


def near_band(device: DeviceResult, view: View) -> View:
    """Return the part of a view within three bandwidths of the peak, where match and delay are worth reading."""
    bandwidth, peak = _known(device, "bandwidth"), _known(device, "peak_frequency")
    if not bandwidth or not peak:
        return view
    reach = 3.0 * bandwidth
    low, high = max(view.low_hz, peak - reach), min(view.high_hz, peak + reach)
    return replace(view, low_hz=low, high_hz=high, whole=False) if high > low else view


def widened(values: Iterable[float], margin: float = 0.08, least: float = 1.0) -> tuple[float, float]:
    """Return limits around the finite values, with a margin, never closer together than `least`."""
    finite = [v for v in values if math.isfinite(v)]
    if not finite:
        return 0.0, least
    low, high = min(finite), max(finite)
    if high - low < least:
        middle = (low + high) / 2.0
        low, high = middle - least / 2.0, middle + least / 2.0
    extra = margin * (high - low)
    return low - extra, high + extra


def ticks(axis: Axis, limits: Sequence[float], most: int, steps: Sequence[float] = (1, 2, 2.5, 5, 10)) -> None:
    """Put at most `most` labelled ticks on an axis, with no more decimals than the step needs.

    `steps` are what a step may be, times any power of ten.
    """
    low, high = limits
    values = [v for v in MaxNLocator(most, steps=list(steps)).tick_values(low, high) if low <= v <= high]
    step = values[1] - values[0] if len(values) > 1 else abs(high - low) or 1.0
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    if round(step, decimals) != 0 and abs(round(step, decimals) - step) > 1e-6 * step:
        decimals += 1
    labels = [f"{v + 0.0:.{decimals}f}".replace("-", "−") for v in values]
    axis.set_ticks(values, labels=[t if t.strip("−0.") else t.replace("−", "") for t in labels])


def frame(axes: Axes, x: tuple[float, float], y: tuple[float, float], columns: int, height_pt: float) -> None:
    """Set the limits, ticks and frame of a diagram; the higher it is, the more ticks it gets up its side."""
    rows = min(max(int(height_pt / 20.0), 3), 9)
    axes.set_xlim(*x)
    axes.set_ylim(*y)
    ticks(axes.xaxis, x, columns)
    ticks(axes.yaxis, y, rows)
    axes.spines[["top", "right"]].set_visible(False)
