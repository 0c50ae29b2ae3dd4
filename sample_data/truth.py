"""A circuit and the targets of its device in; the true small-signal figures out, from the model itself.

No noise, no pads and no grid of samples: the peak is a bounded minimum search, the half-power points and everything
else come from the circuit solved at the very frequency.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any, Final

import numpy as np
from circuits import DESIGN_HZ, REFERENCE_OHM, Circuit, FloatArray, scattering, solve
from scipy.optimize import brentq, minimize_scalar

__all__ = ["megahertz", "true_figures"]

HALF_POWER_DB: Final = 10.0 * math.log10(2.0)
SEARCH_HZ: Final = (16e6, 28e6)
DELAY_STEP_HZ: Final = 100.0
BAND_POINTS: Final = 2001


def megahertz(text: str) -> float:
    """Return '21.4 MHz' in Hz; the sheet of the sample session writes every frequency so."""
    number, unit = text.split()
    if unit != "MHz":
        raise ValueError(f"{text!r} is not in MHz")
    return float(number) * 1e6


def _gain_db(circuit: Circuit, frequency_hz: float) -> float:
    return float(20.0 * np.log10(np.abs(scattering(circuit, np.array([frequency_hz]))[1, 0, 0])))


def _delay_s(circuit: Circuit, frequency_hz: FloatArray) -> FloatArray:
    """Return −dφ/dω of S21 by a central difference over 200 Hz, (n,)."""
    above = scattering(circuit, frequency_hz + DELAY_STEP_HZ)[1, 0]
    below = scattering(circuit, frequency_hz - DELAY_STEP_HZ)[1, 0]
    return np.asarray(-np.angle(above / below) / (4.0 * np.pi * DELAY_STEP_HZ), dtype=np.float64)


def _band(circuit: Circuit, over: list[str]) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return frequency, phase in degrees and delay in s over a band."""
    frequency_hz = np.linspace(megahertz(over[0]), megahertz(over[1]), BAND_POINTS)
    phase_deg = np.degrees(np.unwrap(np.angle(scattering(circuit, frequency_hz)[1, 0])))
    return frequency_hz, phase_deg, _delay_s(circuit, frequency_hz)


def _of_targets(circuit: Circuit, targets: Mapping[str, Any], peak_gain: float) -> dict[str, Any]:
    """Return the figures that take their frequencies from the targets."""
    found: dict[str, Any] = {}
    if "rejection" in targets:
        found["rejection"] = [
            {
                "at_hz": megahertz(t["at"]),
                "rejection_db": round(peak_gain - _gain_db(circuit, megahertz(t["at"])), 6),
            }
            for t in targets["rejection"]
        ]
    if "phase_linearity" in targets:
        frequency_hz, phase_deg, _ = _band(circuit, targets["phase_linearity"]["over"])
        offset = (frequency_hz - frequency_hz.mean()) / np.ptp(frequency_hz)
        line = np.polynomial.Polynomial.fit(offset, phase_deg, 1)
        found["phase_linearity_deg"] = round(float(np.abs(phase_deg - line(offset)).max()), 6)
    if "delay_variation" in targets:
        _, _, delay_s = _band(circuit, targets["delay_variation"]["over"])
        found["delay_variation_s"] = float(f"{np.ptp(delay_s):.6e}")
    return found


def _p1db(circuit: Circuit, gain_db: float) -> dict[str, float]:
    """Return drive and output in dBm where the gain at the design frequency has fallen 1 dB, from Rapp's law."""
    if circuit.limiter is None:
        return {}
    limiter = circuit.limiter
    relative_swing = (10.0 ** (limiter.smoothness / 10.0) - 1.0) ** (0.5 / limiter.smoothness)
    volts_per_volt = abs(solve(circuit, np.array([DESIGN_HZ]))[limiter.node][0])
    incident_volts = relative_swing * limiter.saturation_volts / volts_per_volt
    drive_dbm = 10.0 * math.log10(incident_volts**2 / REFERENCE_OHM / 1e-3)
    return {"input_p1db_dbm": round(drive_dbm, 6), "output_p1db_dbm": round(drive_dbm + gain_db - 1.0, 6)}


def true_figures(circuit: Circuit, device: Mapping[str, Any]) -> dict[str, Any]:
    """Return the small-signal figures at the device's own ports in 50 Ω, in Hz, s, dB and degrees.

    `device` is its table in the bench sheet. Rejection is the peak gain less the gain at that frequency, phase
    linearity the greatest departure from the best straight line, delay variation the greatest less the least delay.
    """
    grid = np.linspace(*SEARCH_HZ, 2401)
    coarse = float(grid[np.argmax(np.abs(scattering(circuit, grid)[1, 0]))])
    step = float(grid[1] - grid[0])
    peak_hz = float(
        minimize_scalar(
            lambda f: -_gain_db(circuit, f),
            bounds=(coarse - step, coarse + step),
            method="bounded",
            options={"xatol": 1e-3},
        ).x
    )
    peak_gain = _gain_db(circuit, peak_hz)

    def below_half_power(frequency_hz: float) -> float:
        return _gain_db(circuit, frequency_hz) - peak_gain + HALF_POWER_DB

    lower, upper = (float(brentq(below_half_power, peak_hz, end, xtol=1e-4)) for end in SEARCH_HZ)
    at_design = scattering(circuit, np.array([DESIGN_HZ]))[..., 0]
    in_band = scattering(circuit, np.linspace(lower, upper, BAND_POINTS))
    figures: dict[str, Any] = {
        "gain_db": round(_gain_db(circuit, DESIGN_HZ), 6),
        "peak_gain_db": round(peak_gain, 6),
        "peak_frequency_hz": round(peak_hz),
        "lower_edge_hz": round(lower, 1),
        "upper_edge_hz": round(upper, 1),
        "bandwidth_hz": round(upper - lower, 1),
        "centre_frequency_hz": round(math.sqrt(lower * upper), 1),
        "loaded_q": round(math.sqrt(lower * upper) / (upper - lower), 6),
        "group_delay_s": float(f"{_delay_s(circuit, np.array([DESIGN_HZ]))[0]:.6e}"),
        "phase_deg": round(float(np.degrees(np.angle(at_design[1, 0]))), 6),
        "input_return_loss_db": round(float(-20.0 * np.log10(np.abs(in_band[0, 0]).max())), 6),
        "output_return_loss_db": round(float(-20.0 * np.log10(np.abs(in_band[1, 1]).max())), 6),
    }
    if device["kind"] != "amplifier":
        figures["reverse_isolation_db"] = round(float(-20.0 * np.log10(np.abs(at_design[0, 1]))), 6)
    return figures | _p1db(circuit, _gain_db(circuit, DESIGN_HZ)) | _of_targets(circuit, device["targets"], peak_gain)
