"""Sweeps of one device at several drives in; which was compressed, by how much and where out.

At each frequency compression is the reference sweep's gain less this sweep's gain, with the added pads already out.
The reference is the sweep at the lowest drive that noise allows.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np

from benchtool.digits import level_text
from benchtool.figures import FigurePlan
from benchtool.fitting import fit_curve
from benchtool.model import Compression, CompressionPoint, FloatArray, SweepResult
from benchtool.response import PassbandFigures
from benchtool.units import to_db, wrap_degrees

__all__ = ["COMPRESSED_DB", "MeasuredSweep", "choose_reference", "compare_drives"]

COMPRESSED_DB: Final = 1.0
"""A sweep further down than this is called compressed (the 1 dB compression point, common practice)."""
_REFERENCE_SNR_DB: Final = 30.0
"""Signal to noise at the peak that a sweep needs to serve as the reference: 0.27 dB on a single sample."""
_NO_SIGNAL_DB: Final = -300.0
"""Stands for the level of a sweep that reads zero, so that differences of levels stay numbers."""
_CLEARLY_WORSE_DB: Final = 0.05
"""The worst place of the band is named only where it is worse than the design frequency by more than this."""
_BAND_NODES: Final = 41
_SAME_DRIVE_DB: Final = 0.01


@dataclass(frozen=True, eq=False)
class MeasuredSweep:
    """A sweep at the device with its line and the plan of its figures."""

    result: SweepResult
    plan: FigurePlan

    @property
    def file(self) -> str:
        """Name of the sweep's file."""
        return self.result.file

    @property
    def drive_dbm(self) -> float | None:
        """Drive at the design frequency."""
        return self.result.drive_dbm

    @cached_property
    def passband(self) -> PassbandFigures:
        """Peak, edges and what follows from them, as this sweep shows them."""
        plan, sweep = self.plan, self.result.sweep
        return plan.seen if sweep is plan.sweep else plan.passband.figures(sweep.s21)

    @cached_property
    def signal_to_noise_db(self) -> float | None:
        """Signal to noise ratio of S21 at its peak in dB; None where the noise cannot be told or is none."""
        noise = self.plan.noise.get("S21")
        if noise is None:
            return None
        peak = 10.0 ** (float(self.passband.peak_gain) / 20.0)
        sigma = float(noise.sigma(np.array(peak)))
        return None if sigma == 0.0 else to_db(peak / sigma)


def choose_reference(sweeps: Sequence[MeasuredSweep]) -> tuple[MeasuredSweep, str]:
    """Return the sweep to take as small-signal, and why in one sentence.

    It is the lowest drive whose signal stands 30 dB above its noise at the peak; where no sweep does, the one that
    stands highest above its noise.
    """
    if len(sweeps) == 1:
        return sweeps[0], "it is the only sweep"
    known = [sweep for sweep in sweeps if sweep.drive_dbm is not None]
    if len(known) < len(sweeps):
        # Without levels the order of drives is still known where only pads differ: more input pad is less drive.
        quiet = max(sweeps, key=lambda sweep: sum(pad.loss_db for pad in sweep.result.path.input_pads))
        return quiet, "it has the most input pad; the source level is not known, so drives are not known either"
    ordered = sorted(sweeps, key=lambda sweep: sweep.drive_dbm or 0.0)
    ratios = [sweep.signal_to_noise_db for sweep in ordered]
    for rank, (sweep, ratio) in enumerate(zip(ordered, ratios, strict=True)):
        if ratio is None or ratio >= _REFERENCE_SNR_DB:
            if rank == 0:
                return sweep, f"it has the lowest drive, {level_text(sweep.drive_dbm)}"
            return sweep, f"it has the lowest drive that noise allows, {level_text(sweep.drive_dbm)}"
    best = int(np.argmax([ratio or 0.0 for ratio in ratios]))
    return ordered[best], "every sweep is noisy, and this one least"


def _level_db(value: complex) -> float:
    return float(max(to_db(value), _NO_SIGNAL_DB))


def _read_at(sweep: MeasuredSweep, nodes: FloatArray, *places_hz: float) -> tuple[FloatArray, list[complex]]:
    """Return the level of S21 of a sweep at the nodes in dB, (g,), and S21 at some places, from its smooth curve.

    NaN at a place outside the sweep.
    """
    plan, trace = sweep.plan, sweep.result.sweep
    f, curve = trace.frequency_hz, plan.passband.curve
    inside = [float(f[0]) <= place <= float(f[-1]) for place in places_hz]
    wanted = np.array([*nodes, *(at if has else nodes[0] for at, has in zip(places_hz, inside, strict=True))])
    order = np.argsort(wanted, kind="stable")
    low, high = float(wanted[order[0]]), float(wanted[order[-1]])
    if not curve.grid_hz[0] <= low <= high <= curve.grid_hz[-1]:
        curve = fit_curve(f, trace.s21, low, high, plan.noise.get("S21"))
    values = np.empty(wanted.size, np.complex128)
    values[order] = curve.values_at(trace.s21, wanted[order])
    with np.errstate(divide="ignore"):
        level = np.maximum(to_db(values[: nodes.size]), _NO_SIGNAL_DB)
    return level, [complex(v) if has else complex("nan") for v, has in zip(values[nodes.size :], inside, strict=True)]


def _band(sweeps: Sequence[MeasuredSweep], reference: MeasuredSweep, at_hz: float) -> FloatArray:
    """Return the nodes over which sweeps are compared: the reference's half-power band that all sweeps cover."""
    figures = reference.passband
    low = max(float(sweep.result.sweep.frequency_hz[0]) for sweep in sweeps)
    high = min(float(sweep.result.sweep.frequency_hz[-1]) for sweep in sweeps)
    lower, upper = float(figures.lower_edge), float(figures.upper_edge)
    low = max(low, lower) if np.isfinite(lower) else low
    high = min(high, upper) if np.isfinite(upper) else high
    return np.linspace(low, high, _BAND_NODES) if high > low else np.array([at_hz])


def compare_drives(
    sweeps: Sequence[MeasuredSweep], reference: MeasuredSweep, reason: str, at_hz: float
) -> Compression | None:
    """Return every sweep against the reference, lowest drive first; None where there is only one sweep.

    Gain change and phase change are those at `at_hz` and at the reference's peak; the worst is over the reference's
    half-power band.
    """
    if len(sweeps) < 2:
        return None
    nodes = _band(sweeps, reference, at_hz)
    peak_hz = float(reference.passband.peak_frequency)
    base, (base_at, base_peak) = _read_at(reference, nodes, at_hz, peak_hz)
    points = []
    for sweep in sweeps:
        path = sweep.result.path
        level, (here, peak) = (
            (base, (base_at, base_peak)) if sweep is reference else _read_at(sweep, nodes, at_hz, peak_hz)
        )
        change = base - level
        worst = int(np.argmax(change))
        drop = _level_db(base_at) - _level_db(here)
        elsewhere = float(change[worst]) > drop + _CLEARLY_WORSE_DB
        deepest = float(change[worst]) if elsewhere else drop
        points.append(
            CompressionPoint(
                sweep.file,
                path.drive_dbm,
                path.device_output_dbm,
                _level_db(here),
                drop,
                float(wrap_degrees(float(np.degrees(np.angle(here * np.conj(base_at)))))),
                _level_db(base_peak) - _level_db(peak),
                deepest,
                float(nodes[worst]) if elsewhere else at_hz,
                sweep is not reference and deepest > COMPRESSED_DB,
            )
        )
    points.sort(key=lambda point: (point.drive_dbm is None, point.drive_dbm or 0.0, -point.gain_db))
    return Compression(at_hz, peak_hz, reference.file, reason, tuple(points))
