"""A device in; a map of its compression over frequency and drive out.

Between the sweeps the logarithm of the compression is taken to be straight in drive: well below saturation
compression grows as a power of the drive. Tints darken with compression, so the map reads the same in
grey; thin lines are the contours, the heavy one is 1 dB, and the scale beside the map names them. Sweeps that the
receiver or a change of the set-up may have spoiled are left out.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import Final

import numpy as np

from benchtool.model import DeviceResult, FloatArray
from benchtool.page_panel import Panel
from benchtool.page_paper import INK, LIGHT, VERMILLION, Paper
from benchtool.page_scales import View, frame, widened

__all__ = ["MapShown", "draw_map", "map_shown", "monotone_cubic"]

_CONTOURS_DB: Final = (0.5, 1.0, 2.0, 3.0, 6.0, 10.0, 20.0)
_TINTS: Final = ("#ffffff", "#dfe9f2", "#b9d0e4", "#86b0d1", "#4d8ab9", "#25649a", "#0e3f6e", "#041f3d")
"""From light to dark in even steps of lightness."""
_MOST_ABOVE: Final = 3
_FAINTEST_DB: Final = 0.2
"""The contour that is added where compression does not reach 1 dB."""
_LEAST_DRIVES: Final = 3
_LEAST_DB: Final = 0.5
"""Where no sweep is compressed by this much there is nothing to map."""
_FLOOR_DB: Final = 0.03
"""Compression below this counts as none: noise and pads make more than that."""
_ROWS: Final = 8
_COLUMNS: Final = 4
"""Steps that are drawn from one drive, or one frequency, to the next."""
_RIGHT_PT: Final = 24.0


@dataclass(frozen=True, eq=False)
class MapShown:
    """What the map draws: k drives, j frequencies, compression (k, j) in dB."""

    frequency_hz: FloatArray
    drive_dbm: FloatArray
    compression_db: FloatArray


def map_shown(device: DeviceResult) -> MapShown | None:
    """Return what the map draws, sweeps of one drive averaged; None where there is no compression to be seen.

    Where nothing compressed at the design frequency, what the sweeps differ by elsewhere is noise, pads or drift.
    """
    study = device.drive
    if study is None or study.map is None or study.onset.basis in ("bound", "none"):
        return None
    spoiled = {point.file for point in study.onset.points if point.spoiled} | study.set_aside.keys()
    whole = study.map
    kept = [k for k, file in enumerate(whole.files) if file not in spoiled]
    steps = np.round(whole.drive_dbm[kept], 1)
    drives = np.unique(steps)
    if len(drives) < _LEAST_DRIVES or whole.frequency_hz.size < 2:
        return None
    found = whole.compression_db[kept]
    compression = np.array([np.mean(found[steps == drive], axis=0) for drive in drives])
    if not np.all(np.isfinite(compression)) or float(np.max(compression)) < _LEAST_DB:
        return None
    return MapShown(whole.frequency_hz, drives, compression)


def draw_map(paper: Paper, device: DeviceResult, shown: MapShown, view: View, panel: Panel) -> None:
    """Draw the map with its contours, the drives that were swept and the 1 dB point at the design frequency."""
    panel.heading(paper, "Compression, dB")
    panel.note(paper, [f"drive, dBm against {view.unit}", "dotted: drives swept"])
    area = panel.plot(right_pt=_RIGHT_PT)
    axes = area.axes(paper)
    frequency, drive, compression = _between(shown)
    frequency = frequency / view.factor
    across = (float(frequency[0]), float(frequency[-1]))
    upright = widened(shown.drive_dbm.tolist(), 0.0, 1.0)
    frame(axes, across, upright, 4, area.height)
    axes.grid(visible=False)
    levels = _levels(float(np.max(shown.compression_db)))
    tints = _TINTS[: len(levels) + 1]
    edges = [-1e9, *levels, 1e9]
    axes.contourf(frequency, drive, compression, levels=edges, colors=tints, zorder=1)
    widths = [1.3 if level == 1.0 else 0.5 for level in levels]
    axes.contour(frequency, drive, compression, levels=levels, colors=INK, linewidths=widths, zorder=2)
    for swept in shown.drive_dbm:
        axes.axhline(float(swept), color=LIGHT, linewidth=0.5, linestyle=(0, (1.0, 1.5)), zorder=2.5)
    point = device.drive.onset.input_p1db_dbm if device.drive else None
    if point is not None and point.value is not None and not point.bound and upright[0] <= point.value <= upright[1]:
        at = device.design_hz / view.factor
        axes.plot([at], [point.value], "D", color=VERMILLION, markeredgecolor="white", markersize=4.5, zorder=4)
    _scale(paper, area, levels, tints)


def _levels(highest_db: float) -> list[float]:
    """Return the contours worth drawing: 0.5 and 1 dB, and the highest few that the map reaches beyond them."""
    reached = [level for level in _CONTOURS_DB if level < highest_db]
    return reached[:2] + reached[2:][-_MOST_ABOVE:] if len(reached) > 1 else [_FAINTEST_DB, *reached]


def _between(shown: MapShown) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return frequencies, (n,), and drives, (m,), in small steps, and the compression between the samples, (m, n)."""
    logarithm = np.log(np.maximum(shown.compression_db, _FLOOR_DB))
    frequency = _filled(shown.frequency_hz, _COLUMNS)
    # Monotonic between the samples, so that no compression appears that none of them shows.
    fine = monotone_cubic(shown.frequency_hz, logarithm, frequency)
    known, drive = shown.drive_dbm, _filled(shown.drive_dbm, _ROWS)
    step = np.clip(np.searchsorted(known, drive, side="right") - 1, 0, known.size - 2)
    share = ((drive - known[step]) / (known[step + 1] - known[step]))[:, np.newaxis]
    return frequency, drive, np.asarray(np.exp((1.0 - share) * fine[step] + share * fine[step + 1]))


def monotone_cubic(x: FloatArray, y: FloatArray, at: FloatArray) -> FloatArray:
    """Return the monotonic piecewise cubic through y (..., n) over rising x (n,), n > 1, at points (m,), (..., m).

    Slopes are weighted harmonic means of the steps on either side, zero where they differ in sign: F. N. Fritsch,
    J. Butland, SIAM J. Sci. Stat. Comput. 5(2), 1984, 300-304. Written out here because the library that has it takes
    longer to load than a page to draw.
    """
    span, step = np.diff(x), np.diff(y) / np.diff(x)
    slope = np.repeat(step[..., :1], x.size, axis=-1)
    if x.size > 2:
        first, second = 2.0 * span[1:] + span[:-1], span[1:] + 2.0 * span[:-1]
        before, after = step[..., :-1], step[..., 1:]
        with np.errstate(divide="ignore", invalid="ignore"):
            mean = (first + second) / (first / before + second / after)
        slope[..., 1:-1] = np.where(before * after > 0.0, mean, 0.0)
        slope[..., 0] = _end_slope(span[0], span[1], step[..., 0], step[..., 1])
        slope[..., -1] = _end_slope(span[-1], span[-2], step[..., -1], step[..., -2])
    piece = np.clip(np.searchsorted(x, at, side="right") - 1, 0, x.size - 2)
    h, t = span[piece], (at - x[piece]) / span[piece]
    low, high = y[..., piece], y[..., piece + 1]
    bent = t * (1.0 - t) * h * ((1.0 - t) * slope[..., piece] - t * slope[..., piece + 1])
    return np.asarray(low + (high - low) * t * t * (3.0 - 2.0 * t) + bent)


def _end_slope(near: float, far: float, step: FloatArray, next_step: FloatArray) -> FloatArray:
    """Return the slope at an end, of the parabola through three points, kept monotonic: scipy's rule, and tested so."""
    slope = ((2.0 * near + far) * step - near * next_step) / (near + far)
    slope = np.where(slope * step > 0.0, slope, 0.0)
    steep = (step * next_step < 0.0) & (np.abs(slope) > 3.0 * np.abs(step))
    return np.where(steep, 3.0 * step, slope)


def _filled(values: FloatArray, steps: int) -> FloatArray:
    """Return rising values with `steps` even steps from each to the next."""
    return np.unique(np.concatenate([np.linspace(a, b, steps + 1) for a, b in itertools.pairwise(values)]))


def _scale(paper: Paper, area: Panel, levels: list[float], tints: tuple[str, ...]) -> None:
    """Draw the tints beside the map, with the contour between two of them named."""
    left, tall = area.left + area.width + 5.0, area.height / len(tints)
    for number, tint in enumerate(tints):
        paper.box(left, area.top + area.height - tall * (number + 1), 5.0, tall, fill=tint, edge=LIGHT, line=0.3)
    for number, level in enumerate(levels):
        y = area.top + area.height - tall * (number + 1)
        paper.stroke([left, left + 6.5], [y, y], INK, 1.3 if level == 1.0 else 0.5)
        paper.text(left + 8.0, y + 2.2, f"{level:g}", 6.0, bold=level == 1.0)
