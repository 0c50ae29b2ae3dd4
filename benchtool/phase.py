"""A complex trace in; unwrapped phase, group delay over a stated aperture, phase linearity and delay variation out.

Group delay is τ = -dφ/dω. The figure at one frequency comes from the slope of the fitted curve
(:mod:`benchtool.fitting`); :func:`group_delay_curve`, which the page draws, is the phase step over an aperture,
τ = -Δφ/(360° Δf), and needs that step to stay under 180° (closed form; common practice, no source).
"""

from __future__ import annotations

from typing import Final

import numpy as np

from benchtool.curves import Curve, Trace
from benchtool.model import ComplexArray, FloatArray
from benchtool.noise import rotation, trend_delay

__all__ = [
    "AMBIGUOUS_STEP_DEG",
    "ambiguous_steps",
    "delay_variation",
    "group_delay_curve",
    "phase_linearity",
    "unwrapped_phase",
]

AMBIGUOUS_STEP_DEG: Final = 150.0
"""Phase step from sample to sample above which the turn could be one way or the other."""


def unwrapped_phase(frequency_hz: FloatArray, s: ComplexArray) -> FloatArray:
    """Return the phase in degrees, (..., n), without jumps of 360°; unwrapped with the mean delay out."""
    delay = trend_delay(frequency_hz, s if s.ndim == 1 else s.reshape(-1, s.shape[-1])[0])
    turned = np.unwrap(np.angle(s * rotation(frequency_hz, delay)), axis=-1)
    return np.asarray(np.degrees(turned) - 360.0 * delay * frequency_hz)


def ambiguous_steps(s: ComplexArray, magnitude_floor: float = 0.0) -> int:
    """Return how many sample-to-sample phase steps are too large to unwrap safely; s is (n,).

    Steps between samples below `magnitude_floor` are noise and do not count.
    """
    step = np.degrees(np.angle(s[1:] * np.conj(s[:-1])))
    strong = np.minimum(np.abs(s[1:]), np.abs(s[:-1])) > magnitude_floor
    return int(np.count_nonzero((np.abs(step) > AMBIGUOUS_STEP_DEG) & strong))


def group_delay_curve(frequency_hz: FloatArray, s: ComplexArray, aperture_hz: float) -> FloatArray:
    """Return the group delay in s at each sample, (..., n): the phase step over `aperture_hz` centred on it.

    At the ends of the sweep the aperture is cut off where the sweep is. For a single-tuned peak of bandwidth B an
    aperture of x·B reads atan(x)/x of the truth (closed form).

    Parameters
    ----------
    frequency_hz : (n,) rising
    s : (..., n)
    aperture_hz : width of the step; not less than the spacing of the samples
    """
    phase = unwrapped_phase(frequency_hz, s)
    spacing = float(np.max(np.diff(frequency_hz)))
    half = 0.5 * max(aperture_hz, spacing)
    low = np.maximum(frequency_hz - half, frequency_hz[0])
    high = np.minimum(frequency_hz + half, frequency_hz[-1])
    rows = phase.reshape(-1, phase.shape[-1])
    delay = [
        -(np.interp(high, frequency_hz, r) - np.interp(low, frequency_hz, r)) / (360.0 * (high - low)) for r in rows
    ]
    return np.asarray(delay).reshape(phase.shape)


def phase_linearity(curve: Curve, s: Trace) -> FloatArray:
    """Return the largest departure of the phase from its best straight line over the curve, degrees, (...,)."""
    value, _ = curve.on_grid(s)
    grid = curve.grid_hz
    delay = trend_delay(grid, value if value.ndim == 1 else value.reshape(-1, grid.size)[0])
    phase = np.degrees(np.unwrap(np.angle(value * rotation(grid, delay)), axis=-1))
    u = (grid - grid.mean()) / max(float(np.ptp(grid)), 1e-300)
    # Weights of the trapezoid rule: the line is fitted over frequency, not over nodes, which may lie unevenly.
    weight = np.gradient(grid)
    weight[[0, -1]] *= 0.5
    basis = np.stack([np.ones_like(u), u], axis=-1)
    solve = np.linalg.pinv(basis * np.sqrt(weight)[:, None]) * np.sqrt(weight)
    return np.asarray(np.max(np.abs(phase - phase @ solve.T @ basis.T), axis=-1))


def delay_variation(curve: Curve, s: Trace) -> FloatArray:
    """Return the largest less the smallest group delay over the curve, s, (...,)."""
    _, delay = curve.on_grid(s)
    return np.asarray(np.max(delay, axis=-1) - np.min(delay, axis=-1))
