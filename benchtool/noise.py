"""One noisy trace in, its noise out: how much of it is additive (floor) and how much proportional (trace noise).

Differences of high order along frequency wipe out a smooth response and leave noise [1]_. Each sample is
differenced twice, as S and as 1/S: the reciprocal of a resonator's transmission is a straight line in frequency, so
a sharp resonance that would pass for noise in S leaves nothing in 1/S. Where a higher order finds much less than a
lower one the lower one saw curvature, and the higher is believed.

.. [1] T. Gasser, L. Sroka, C. Jennen-Steinmetz, "Residual variance and residual pattern in nonlinear regression",
   Biometrika 73(3), 1986, 625-633 (difference-based variance; here of orders 4, 6 and 8).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Final, TypeVar, cast

import numpy as np

from benchtool.model import ComplexArray, FloatArray

__all__ = [
    "NOISE_FREE",
    "NoiseModel",
    "estimate_noise",
    "extended",
    "line_delay",
    "moving_average",
    "rotation",
    "trend_delay",
]

Values = TypeVar("Values", FloatArray, ComplexArray)

_ORDERS: Final = (4, 6, 8)
_NEIGHBOURS: Final = 31
"""Samples over which the local variance is averaged."""
_CLEARLY_LESS: Final = 0.6
"""A rival estimate replaces the first one only when it is below this share of it, so that picking adds no bias."""
_ROUNDS: Final = 30
_STILL: Final = 1e-6
"""Share of the additive variance below which a round that moved no more was the last."""
_SINGULAR: Final = 1e-12
"""Determinant, over the product of its diagonal, below which power varies too little to tell the two parts apart."""
_ROUNDING: Final = 1e-9
"""Noise below this share of the largest sample is rounding of the file, not noise."""


@dataclass(frozen=True)
class NoiseModel:
    """Noise of one trace: complex variance ``additive**2 + (proportional * |S|)**2`` at each sample.

    Both numbers are rms values of the complex error, real and imaginary part together, in units of S.
    """

    additive: float
    proportional: float

    def sigma(self, magnitude: FloatArray) -> FloatArray:
        """Return the rms complex error at samples of that magnitude, same shape."""
        return np.hypot(self.additive, self.proportional * magnitude)


NOISE_FREE: Final = NoiseModel(0.0, 0.0)


def moving_average(values: Values, width: int) -> Values:
    """Return the mean of `width` neighbours (an odd number; an even one counts one more) at each sample, (n,).

    The ends go on as they are. Written out here because the library that has it takes longer to load than a sweep
    to measure.
    """
    half = width // 2
    weights = np.full(2 * half + 1, 1.0 / (2 * half + 1))
    return cast(Values, np.convolve(extended(values, half), weights, mode="valid"))


def extended(values: Values, by: int) -> Values:
    """Return values, (n,), that go on as they are for `by` more at either end, (n + 2 by,)."""
    return cast(Values, np.concatenate([np.repeat(values[:1], by), values, np.repeat(values[-1:], by)]))


def trend_delay(frequency_hz: FloatArray, s: ComplexArray) -> float:
    """Return the mean delay of a trace in s: its phase steps, each weighted by the power it carries."""
    if frequency_hz.size < 2:
        return 0.0
    step = s[1:] * np.conj(s[:-1])
    span = np.diff(frequency_hz)
    weight = np.abs(step) * span**2
    total = float(np.sum(weight))
    if total == 0.0:
        return 0.0
    return float(-np.sum(weight * np.angle(step) / span) / total / (2 * np.pi))


def line_delay(frequency_hz: FloatArray, s: ComplexArray) -> float:
    """Return the delay of the line a device stands in, s: the median phase step, which resonances hardly move."""
    if frequency_hz.size < 2:
        return 0.0
    return float(np.median(-np.angle(s[1:] * np.conj(s[:-1])) / np.diff(frequency_hz))) / (2 * np.pi)


def rotation(frequency_hz: FloatArray, delay_s: float) -> ComplexArray:
    """Return exp(+jωτ), which takes a delay out of a trace."""
    turned: ComplexArray = np.exp(2j * np.pi * delay_s * frequency_hz)
    return turned


@lru_cache(maxsize=12)
def _difference_weights(frequencies: bytes, order: int) -> FloatArray:
    """Return (n - order, order + 1) divided-difference weights with unit sum of squares; any spacing will do.

    Kept by the frequencies, which the sweeps of a bench mostly share.
    """
    windows = np.lib.stride_tricks.sliding_window_view(np.frombuffer(frequencies, np.float64), order + 1)
    gaps = windows[:, :, None] - windows[:, None, :]
    gaps /= np.ptp(windows, axis=1)[:, None, None]
    gaps[:, np.arange(order + 1), np.arange(order + 1)] = 1.0
    weights = 1.0 / np.prod(gaps, axis=2)
    weights /= np.linalg.norm(weights, axis=1, keepdims=True)
    weights.flags.writeable = False
    return np.asarray(weights)


def _local_variance(frequency_hz: FloatArray, s: ComplexArray) -> FloatArray:
    """Return the local complex variance at each sample, (n,): the order and form that saw least curvature."""
    power = np.abs(s) ** 2
    floor = 1e-12 * float(np.max(power))
    inverse = np.conj(s) / np.maximum(power, floor)
    frequencies = np.ascontiguousarray(frequency_hz, np.float64).tobytes()
    both, scales = np.array([s, inverse]), (1.0, power**2)
    best: FloatArray | None = None
    for order in _ORDERS:
        if s.size < order + 3:
            break
        windows = np.lib.stride_tricks.sliding_window_view(both, order + 1, axis=1)
        left = np.einsum("kij,ij->ki", windows, _difference_weights(frequencies, order))
        residuals = left.real**2 + left.imag**2
        for residual, scale in zip(residuals, scales, strict=True):
            padded: FloatArray = extended(residual, order // 2) * scale
            variance = moving_average(padded, min(_NEIGHBOURS, s.size))
            best = variance if best is None else np.where(variance < _CLEARLY_LESS * best, variance, best)
    assert best is not None
    return best


def estimate_noise(frequency_hz: FloatArray, s: ComplexArray) -> NoiseModel | None:
    """Return the noise seen in one trace, or None where there are too few samples to tell (fewer than 9).

    Parameters
    ----------
    frequency_hz : (n,) rising, any spacing
    s : (n,) one scattering parameter
    """
    if s.size < _ORDERS[0] + 5:
        return None
    if not np.any(s):
        return NOISE_FREE
    turned = s * rotation(frequency_hz, trend_delay(frequency_hz, s))
    variance = _local_variance(frequency_hz, turned)
    power = moving_average(np.abs(s) ** 2, 5)
    rounding = (_ROUNDING * float(np.max(np.abs(s)))) ** 2
    if float(np.median(variance)) <= rounding:
        return NOISE_FREE
    # Alternate between the two parts, each sample weighted by the inverse square of the variance it is expected to
    # have (a variance estimate has a relative error); samples far above the line are left-over curvature.
    additive, proportional = float(np.median(variance)), 0.0
    for _ in range(_ROUNDS):
        before = additive, proportional
        expected = additive + proportional * power + rounding
        keep = variance < 4.0 * expected
        if np.count_nonzero(keep) < 5:
            break
        weight = np.where(keep, expected**-2.0, 0.0)
        weighted = weight * power
        one, first, second = float(np.sum(weight)), float(np.sum(weighted)), float(weighted @ power)
        level, slope = float(weight @ variance), float(weighted @ variance)
        determinant = one * second - first**2
        if determinant > _SINGULAR * one * second:
            additive = (second * level - first * slope) / determinant
            proportional = (one * slope - first * level) / determinant
        if additive < 0.0:
            additive, proportional = 0.0, slope / second
        elif proportional < 0.0:
            additive, proportional = level / one, 0.0
        moved = abs(additive - before[0]) + abs(proportional - before[1]) * float(np.max(power))
        if moved <= _STILL * (additive + rounding):
            break
    return NoiseModel(float(np.sqrt(additive)), float(np.sqrt(proportional)))
