"""S21 of one sweep in; peak, half-power edges, bandwidth, loaded Q and the gain anywhere between samples out.

A :class:`Passband` is planned once, on the data as measured: where the peak and its edges are, roughly, and which
smooth curve describes the stretch between them. Its figures are then taken from the trace itself or from any number
of perturbed copies of it, (..., n), by the same code. Decisions made on purpose:

* The peak is the largest magnitude inside the window. The edges are the first half-power points outward from it,
  anywhere in the sweep. A flat or rippled top that dips by less than 3.01 dB is one passband; a deeper dip ends it,
  and a second hump is reported by :attr:`Passband.other_humps`.
* An edge outside the sweep makes a bound of every figure that rests on it.
* The centre frequency is the geometric mean of the edges, exact for a single-tuned circuit (f1 f2 = f0**2), and
  loaded Q is centre frequency over bandwidth (D. M. Pozar, Microwave Engineering, 4th ed., ch. 6).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchtool.curves import Curve, Trace
from benchtool.fitting import fit_curve
from benchtool.level_search import Levels, LevelSearch
from benchtool.model import ComplexArray, FloatArray
from benchtool.noise import NoiseModel, moving_average, rotation, trend_delay
from benchtool.units import HALF_POWER_DB, to_db

__all__ = ["LevelWidth", "Passband", "PassbandFigures", "crossing", "plan_level_width", "plan_passband", "span_of"]

_MARGIN: Final = 0.25
"""The curve reaches this share of the bandwidth beyond each edge, so that an edge that moves stays on it."""
_SKIRT_DB: Final = 7.0
_FEW_POINTS: Final = 7
_SMOOTHING: Final = 0.1


@dataclass(frozen=True, eq=False)
class PassbandFigures:
    """Figures of a passband, each with the leading shape of the copies, (...,). NaN: not found on the curve."""

    peak_gain: FloatArray
    peak_frequency: FloatArray
    curve: Curve
    trace: Trace
    levels: Levels
    """The trace's; they serve what is worked out only when it is asked for."""

    @cached_property
    def _edges(self) -> tuple[FloatArray, FloatArray]:
        return self.levels.edges(self.peak_gain - HALF_POWER_DB)

    @property
    def lower_edge(self) -> FloatArray:
        """Half-power point below the peak, Hz."""
        return self._edges[0]

    @property
    def upper_edge(self) -> FloatArray:
        """Half-power point above the peak, Hz."""
        return self._edges[1]

    @cached_property
    def _smooth(self) -> tuple[ComplexArray, FloatArray]:
        return self.curve.on_grid(self.trace)

    @cached_property
    def delay_at_peak(self) -> FloatArray:
        """Group delay at the peak, s."""
        return _interpolate(self.curve.grid_hz, self._smooth[1], self.peak_frequency)

    @cached_property
    def phase_q(self) -> FloatArray:
        """Loaded Q from the width between the points where the phase has turned 45° either way from the peak."""
        grid = self.curve.grid_hz
        angle = np.unwrap(np.angle(self._smooth[0]), axis=-1) * (180 / np.pi)
        at_peak = _interpolate(grid, angle, self.peak_frequency)
        node = np.searchsorted(grid, self.peak_frequency)
        early = crossing(grid, -angle, -at_peak - 45.0, node, -1)
        late = crossing(grid, angle, at_peak - 45.0, node - 1, +1)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(np.sqrt(early * late) / (late - early))

    @property
    def bandwidth(self) -> FloatArray:
        """Upper less lower half-power point, Hz."""
        return self.upper_edge - self.lower_edge

    @property
    def centre_frequency(self) -> FloatArray:
        """Geometric mean of the half-power points, Hz."""
        return np.sqrt(self.upper_edge * self.lower_edge)

    @property
    def loaded_q(self) -> FloatArray:
        """Centre frequency over bandwidth."""
        with np.errstate(divide="ignore", invalid="ignore"):
            return self.centre_frequency / self.bandwidth

    @property
    def delay_q(self) -> FloatArray:
        """Loaded Q from the group delay at the peak, π f0 τ: exact for a single-tuned circuit."""
        return np.pi * self.peak_frequency * self.delay_at_peak


@dataclass(frozen=True, eq=False)
class Passband:
    """Where a sweep peaks and how that peak is to be measured."""

    curve: Curve
    search: LevelSearch
    """Where on the curve the peak is looked for."""
    lower_inside: bool
    upper_inside: bool
    peak_inside: bool
    """Whether the magnitude falls on both sides of the peak within the window."""
    points_inside: int
    """Samples between the half-power points."""
    start_hz: float
    stop_hz: float
    other_humps: tuple[float, ...]
    """Frequencies of other maxima within 3.01 dB of the peak, outside its half-power band."""

    def figures(self, s21: Trace) -> PassbandFigures:
        """Return the figures of a trace, or of copies of it."""
        levels = self.search.levels(s21)
        peak_frequency, peak_gain = levels.highest()
        return PassbandFigures(peak_gain, peak_frequency, self.curve, s21, levels)


def _gather(values: FloatArray, index: np.ndarray) -> FloatArray:
    """Return one of the values (..., g) of each copy, (...,)."""
    flat = values.reshape(-1, values.shape[-1])
    return np.asarray(flat[np.arange(len(flat)), np.reshape(index, -1)].reshape(values.shape[:-1]))


def _within(index: NDArray[np.intp], low: int, high: int) -> NDArray[np.intp]:
    return np.asarray(np.minimum(np.maximum(index, low), high), np.intp)


def _interpolate(grid: FloatArray, values: FloatArray, at_hz: FloatArray) -> FloatArray:
    """Return `values` (..., g) at one frequency a copy, (...,), by the parabola through three nodes."""
    if grid.size < 3:
        return np.asarray(values[..., 0])
    middle = _within(np.searchsorted(grid, at_hz), 1, grid.size - 2)
    x0, x1, x2 = grid[middle - 1], grid[middle], grid[middle + 1]
    y0, y1, y2 = (_gather(values, middle + k) for k in (-1, 0, 1))
    a, b, c = at_hz - x0, at_hz - x1, at_hz - x2
    return np.asarray(
        y0 * b * c / ((x0 - x1) * (x0 - x2))
        + y1 * a * c / ((x1 - x0) * (x1 - x2))
        + y2 * a * b / ((x2 - x0) * (x2 - x1))
    )


def crossing(grid: FloatArray, level: FloatArray, target: FloatArray, index: np.ndarray, direction: int) -> FloatArray:
    """Return where `level` (..., g) first falls below `target` (...,), going from node `index` in `direction`.

    Between nodes the crossing is that of the parabola through the nearest three. NaN where the level stays above to
    the end of the grid.
    """
    # Only the side that some copy looks at is gone through.
    first, last = (int(np.min(index)), grid.size) if direction > 0 else (0, int(np.max(index)) + 1)
    nodes = np.arange(first, last)
    beyond = nodes > index[..., None] if direction > 0 else nodes < index[..., None]
    below = beyond & (level[..., first:last] < target[..., None])
    found = below.any(axis=-1)
    outer = first + np.argmax(below, axis=-1) if direction > 0 else last - 1 - np.argmax(below[..., ::-1], axis=-1)
    outer = np.where(found, outer, 0 if direction < 0 else grid.size - 1)
    inner = _within(outer - direction, 0, grid.size - 1)
    y0, y1 = _gather(level, inner) - target, _gather(level, outer) - target
    with np.errstate(divide="ignore", invalid="ignore"):
        at = grid[inner] + (grid[outer] - grid[inner]) * y0 / (y0 - y1)
        for _ in range(2):
            off = _interpolate(grid, level, at) - target
            at = at - off * (grid[outer] - grid[inner]) / (y1 - y0)
    return np.where(found, at, np.nan)


def _coarse_edges(level: FloatArray, peak: int, below_db: float = HALF_POWER_DB) -> tuple[int, int]:
    """Return the outermost samples still within `below_db` of the peak, going outward until the first below."""
    below = level < level[peak] - below_db
    left = np.flatnonzero(below[:peak])
    right = np.flatnonzero(below[peak + 1 :])
    return (int(left[-1]) + 1 if left.size else 0), (peak + int(right[0]) if right.size else level.size - 1)


def _window_slice(frequency_hz: FloatArray, window_hz: tuple[float, float] | None) -> tuple[int, int]:
    if window_hz is None:
        return 0, frequency_hz.size
    start = int(np.searchsorted(frequency_hz, window_hz[0], side="left"))
    stop = int(np.searchsorted(frequency_hz, window_hz[1], side="right"))
    return start, stop


def span_of(frequency_hz: FloatArray, window_hz: tuple[float, float] | None) -> int:
    """Return how many samples the window holds."""
    start, stop = _window_slice(frequency_hz, window_hz)
    return stop - start


def plan_passband(
    frequency_hz: FloatArray,
    s21: ComplexArray,
    window_hz: tuple[float, float] | None = None,
    noise: NoiseModel | None = None,
) -> Passband:
    """Return how the peak of one trace is to be measured.

    Parameters
    ----------
    frequency_hz, s21 : (n,) rising frequencies and S21 at the device's ports
    window_hz : where to look for the peak; None is the whole sweep. It must hold at least one sample
    noise : noise of the trace, from :func:`benchtool.noise.estimate_noise`

    Raises
    ------
    ValueError : the window holds no sample.
    """
    start, stop = _window_slice(frequency_hz, window_hz)
    if stop <= start:
        raise ValueError("the window holds no sample")
    turned = s21 * rotation(frequency_hz, trend_delay(frequency_hz, s21))
    level = to_db(s21)
    peak = start + int(np.argmax(level[start:stop]))
    left, right = _coarse_edges(level, peak)
    # The largest of many noisy samples is too high and its neighbours fall "below half power" too early: smooth
    # over a tenth of the band, which no resonance notices, and look again.
    for _ in range(3):
        width = int(_SMOOTHING * (right - left))
        if width < 3:
            break
        level = to_db(moving_average(turned, width | 1))
        peak = start + int(np.argmax(level[start:stop]))
        left, right = _coarse_edges(level, peak)
    lower_inside, upper_inside = left > 0, right < frequency_hz.size - 1
    inside = right - left + 1
    low_hz, high_hz = float(frequency_hz[left]), float(frequency_hz[right])
    step = (
        (high_hz - low_hz) / max(right - left, 1) if right > left else float(np.min(np.diff(frequency_hz), initial=1.0))
    )
    if lower_inside and upper_inside:
        step = min(step, float(frequency_hz[right + 1] - frequency_hz[left - 1]))
    # A steep skirt is left out: deep down there the noise would rule the fit.
    skirts = _coarse_edges(level, peak, _SKIRT_DB)
    margin = _MARGIN * (high_hz - low_hz)
    low_end = min(max(low_hz - margin, float(frequency_hz[skirts[0]])), low_hz - 1.5 * step)
    high_end = max(min(high_hz + margin, float(frequency_hz[skirts[1]])), high_hz + 1.5 * step)
    curve = fit_curve(frequency_hz, s21, low_end, high_end, noise, points=_FEW_POINTS)
    search = LevelSearch(curve, s21, *(window_hz or (-np.inf, np.inf)))
    at_hz = float(search.levels(s21).highest()[0])
    humps = _humps(frequency_hz, level, (start, stop), (left, right), float(level[peak]))
    return Passband(
        curve,
        search,
        lower_inside,
        upper_inside,
        search.low_hz < at_hz < search.high_hz,
        inside,
        float(frequency_hz[0]),
        float(frequency_hz[-1]),
        humps,
    )


def _humps(
    frequency_hz: FloatArray, level: FloatArray, window: tuple[int, int], band: tuple[int, int], peak_db: float
) -> tuple[float, ...]:
    """Return the highest frequency of each other stretch of the window within half power of the peak."""
    near = level > peak_db - HALF_POWER_DB
    near[: window[0]] = False
    near[window[1] :] = False
    near[band[0] : band[1] + 1] = False
    changes = np.flatnonzero(np.diff(np.concatenate([[0], near.astype(np.int8), [0]])))
    stretches = zip(changes[::2], changes[1::2], strict=True)
    return tuple(float(frequency_hz[a + int(np.argmax(level[a:b]))]) for a, b in stretches)


@dataclass(frozen=True, eq=False)
class LevelWidth:
    """How to measure the width of a response some dB below its peak."""

    below_db: float
    lower: Curve
    upper: Curve
    searches: tuple[LevelSearch, LevelSearch]

    def width(self, s21: Trace, peak_gain_db: FloatArray) -> FloatArray:
        """Return the width in Hz, (...,), of a trace or copies of it; NaN where an edge is lost."""
        target = peak_gain_db - self.below_db
        lower, upper = (
            search.levels(s21).falls(target, direction)
            for search, direction in zip(self.searches, (-1, 1), strict=True)
        )
        return upper - lower


def plan_level_width(
    frequency_hz: FloatArray, s21: ComplexArray, passband: Passband, below_db: float, noise: NoiseModel | None
) -> LevelWidth | None:
    """Return how to measure the width `below_db` under the peak; None where an edge is not in the sweep.

    A shape factor is the ratio of two such widths (A. I. Zverev, Handbook of Filter Synthesis, Wiley 1967, from
    memory).
    """
    peak = passband.figures(s21)
    target, centre = float(peak.peak_gain) - below_db, float(peak.peak_frequency)
    level = to_db(s21)
    index = np.array(int(np.argmin(np.abs(frequency_hz - centre))))
    curves = []
    for direction in (-1, 1):
        coarse = float(crossing(frequency_hz, level, np.array(target), index, direction))
        if not np.isfinite(coarse):
            return None
        reach = _SMOOTHING * abs(coarse - centre)
        curves.append(fit_curve(frequency_hz, s21, coarse - reach, coarse + reach, noise))
    lower, upper = curves
    return LevelWidth(below_db, lower, upper, (LevelSearch(lower, s21), LevelSearch(upper, s21)))
