"""A device and the pads of its line in; what a low-cost two-port analyzer would read, and the true drive, out.

Pads are attenuators that are not quite what their labels say and not quite matched. Line and device are cascaded
exactly, by wave-transfer matrices (D. A. Frickey, IEEE Trans. MTT 42(2), 1994, 205–211).

The analyzer was calibrated with some pads in line, which puts its planes at their far ends. What is left of its
errors is a noise floor, raised by the loss of those pads, noise in proportion to the trace, a slow drift of the
transmission reading from sweep to sweep, and a residual directivity. Its ports are taken to be matched. Its receiver
at port 2 compresses by Rapp's law on the level that comes in through the whole output line, or is taken to be linear.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import reduce
from typing import Final

import numpy as np
from circuits import REFERENCE_OHM, Circuit, ComplexArray, FloatArray, limiting, scattering
from numpy.random import Generator

__all__ = ["Pad", "Reading", "Receiver", "cascade", "drive_dbm", "measure", "read_device"]

RECEIVER_FLOOR_DB: Final = -85.0
"""Noise of a receiver below the level that a direct connection gives; pads inside the calibration raise it."""
TRACE_NOISE_DB: Final = 0.01
DRIFT_DB: Final = 0.02
DIRECTIVITY_DB: Final = -38.0
DIRECTIVITY_DELAY_S: Final = 180e-12


@dataclass(frozen=True)
class Pad:
    """A pad as it is; port 1 is where the signal from analyzer port 1 comes in."""

    loss_db: float
    delay_s: float
    reflections: tuple[complex, complex]

    def scattering(self, frequency_hz: FloatArray) -> ComplexArray:
        """Return S of the pad, (2, 2, n)."""
        through = 10.0 ** (-self.loss_db / 20.0) * np.exp(-2j * np.pi * frequency_hz * self.delay_s)
        s = np.empty((2, 2, frequency_hz.size), dtype=np.complex128)
        s[0, 1] = s[1, 0] = through
        s[0, 0], s[1, 1] = self.reflections
        return s


@dataclass(frozen=True)
class Receiver:
    """Where and how the receiver at port 2 compresses: the level that comes in at its 1 dB point, and Rapp's p."""

    p1db_dbm: float
    smoothness: float

    def limiting(self, level_dbm: FloatArray) -> FloatArray:
        """Return the factor, at most 1, by which the receiver reads a level too low, (n,).

        `level_dbm` is what a linear receiver would read. The 1 dB point lies at x = (10^(p/10) − 1)^(1/2p) of the
        saturation level (C. Rapp, Proc. 2nd European Conf. on Satellite Communications, 1991).
        """
        power = 2.0 * self.smoothness
        at_p1db = 10.0 ** (self.smoothness / 10.0) - 1.0
        return np.asarray((1.0 + at_p1db * 10.0 ** (power * (level_dbm - self.p1db_dbm) / 20.0)) ** (-1.0 / power))


@dataclass(frozen=True, eq=False)
class Reading:
    """A sweep as the analyzer shows it, and what was true meanwhile; arrays run over frequency.

    Drive and compression are the device's. `port2_dbm` is the level that comes in at port 2, `receiver_compression_db`
    by how much it is read too low.
    """

    shown: ComplexArray
    drive_dbm: FloatArray
    compression_db: FloatArray
    port2_dbm: FloatArray
    receiver_compression_db: FloatArray


def _transfer(s: ComplexArray) -> ComplexArray:
    """Return the wave-transfer matrices of S, (n, 2, 2), for S21 that is nowhere zero."""
    determinant = s[0, 0] * s[1, 1] - s[0, 1] * s[1, 0]
    t = np.array([[-determinant, s[0, 0]], [-s[1, 1], np.ones_like(determinant)]]) / s[1, 0]
    return np.moveaxis(t, -1, 0)


def cascade(parts: Sequence[ComplexArray]) -> ComplexArray:
    """Return S of two-ports one after the other from port 1 to port 2, (2, 2, n)."""
    t = np.moveaxis(reduce(np.matmul, [_transfer(part) for part in parts]), 0, -1)
    determinant = t[0, 0] * t[1, 1] - t[0, 1] * t[1, 0]
    return np.asarray(np.array([[t[0, 1], determinant], [np.ones_like(determinant), -t[1, 0]]]) / t[1, 1])


def drive_dbm(source_dbm: float, line: ComplexArray | None, device_s11: ComplexArray) -> FloatArray:
    """Return the power of the wave that meets the device behind the whole input line, (n,)."""
    if line is None:
        return np.full(device_s11.shape, source_dbm)
    wave = np.abs(line[1, 0] / (1.0 - line[1, 1] * device_s11))
    return np.asarray(source_dbm + 20.0 * np.log10(wave), dtype=np.float64)


def _complex_noise(rng: Generator, count: int) -> ComplexArray:
    """Return noise whose real and imaginary parts each have a standard deviation of 1, (count,)."""
    return np.asarray(rng.standard_normal(count) + 1j * rng.standard_normal(count), dtype=np.complex128)


def measure(
    s: ComplexArray, frequency_hz: FloatArray, calibrated_db: tuple[float, float], rng: Generator
) -> ComplexArray:
    """Return the scattering parameters `s` with the errors of the analyzer, (2, 2, n).

    `calibrated_db` is the loss of the pads inside the calibration at either port.
    """
    shown = np.empty_like(s)
    drift = 10.0 ** (DRIFT_DB * rng.standard_normal() / 20.0)
    for i in range(2):
        for j in range(2):
            floor = 10.0 ** ((RECEIVER_FLOOR_DB + calibrated_db[i] + calibrated_db[j]) / 20.0) / math.sqrt(2.0)
            in_proportion = 1.0 + TRACE_NOISE_DB * math.log(10.0) / 20.0 * _complex_noise(rng, frequency_hz.size)
            shown[i, j] = s[i, j] * in_proportion + floor * _complex_noise(rng, frequency_hz.size)
            if i == j:
                turn = 2.0 * np.pi * (rng.random() - frequency_hz * DIRECTIVITY_DELAY_S)
                shown[i, j] += 10.0 ** (DIRECTIVITY_DB / 20.0) * np.exp(1j * turn)
            else:
                shown[i, j] *= drift
    return shown


def read_device(
    circuit: Circuit,
    frequency_hz: FloatArray,
    *,
    source_dbm: float,
    calibrated: tuple[Sequence[Pad], Sequence[Pad]],
    added: tuple[Sequence[Pad], Sequence[Pad]],
    rng: Generator,
    receiver: Receiver | None = None,
) -> Reading:
    """Return the sweep of a device with pads on the input and on the output side.

    `calibrated` and `added` hold the pads inside and outside the calibration, input side and output side, each from
    the analyzer towards the device. A receiver of None is linear. At calibration the receiver saw less than it ever
    compresses at.
    """
    device = scattering(circuit, frequency_hz)
    behind, before = ([[pad.scattering(frequency_hz) for pad in side] for side in pads] for pads in (calibrated, added))
    input_line = [*behind[0], *before[0]]
    drive = drive_dbm(source_dbm, cascade(input_line) if input_line else None, device[0, 0])
    incident_volts = np.sqrt(10.0 ** (drive / 10.0) * 1e-3 * REFERENCE_OHM)
    fall = limiting(circuit, frequency_hz, incident_volts)
    device[1, 0] *= fall
    seen = cascade([*before[0], device, *reversed(before[1])])
    whole = cascade([*input_line, device, *reversed([*behind[1], *before[1]])])
    port2_dbm = np.asarray(source_dbm + 20.0 * np.log10(np.abs(whole[1, 0])), dtype=np.float64)
    read_low = np.ones_like(frequency_hz)
    if receiver is not None:
        read_low = receiver.limiting(port2_dbm)
        seen[1, 0] *= read_low
    calibrated_db = (sum(pad.loss_db for pad in calibrated[0]), sum(pad.loss_db for pad in calibrated[1]))
    shown = measure(seen, frequency_hz, calibrated_db, rng)
    return Reading(shown, drive, 0.0 - 20.0 * np.log10(fall), port2_dbm, 0.0 - 20.0 * np.log10(read_low))
