"""Sweeps of one device in; gain over drive and frequency on common nodes out, with every doubt that bears on it.

Nodes are spread evenly along the trace as an eye follows it: half by frequency, half by rise and fall of the gain, so
that a narrow peak and long skirts are both seen. At a node each sweep's level in dB is a local parabola through seven
samples; noise of a sample of magnitude m and complex rms σ is 8.686 σ/(√2 m) dB.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from benchtool.compression import MeasuredSweep
from benchtool.doubts import source_doubt_db, sweep_doubts
from benchtool.drive_doubts import HALF_FIT, MismatchDoubt, PadDoubt, mismatch_doubts, pad_doubts, parabola
from benchtool.fitting import fit_curve
from benchtool.model import FloatArray, Sweep, readonly
from benchtool.noise import NOISE_FREE, NoiseModel, moving_average
from benchtool.pads import PadBank
from benchtool.sheet import BenchSheet, SweepEntry
from benchtool.units import to_db

__all__ = ["DriveTable", "MismatchDoubt", "PadDoubt", "drive_table"]

_PER_SWEEP: Final = (
    "gain_db",
    "noise_db",
    "buried",
    "drive_dbm",
    "output_loss_db",
    "design_gain_db",
    "design_noise_db",
    "design_phase_deg",
    "reading_u_db",
)
_NODES: Final = 15
_DEEPEST_DB: Final = 40.0
"""Nodes reach no further below the peak than this."""
_NODE_DOUBT_DB: Final = 0.02
"""Standard uncertainty of one node for what neither noise nor the flat doubts cover: ripple, interpolation."""
_TOO_BURIED: Final = 0.2
"""Share of a sweep's span under its noise from which it is no guide to the shape of the resonance."""
_BURIED_SNR_DB: Final = 10.0
"""Below this signal to noise ratio of a sample the mean of decibels reads high, and a node counts as buried."""


@dataclass(frozen=True, eq=False)
class DriveTable:
    """Gain of one device over k sweeps, lowest drive first, and j frequency nodes.

    Levels are nominal: source less stated pads. `reading_u_db` (k,) is the flat doubt of each reading alone; `noise_db`
    (k, j) that of each node alone; `pads` and `mismatch` are doubts that sweeps share.
    """

    files: tuple[str, ...]
    lines: tuple[tuple[float | None, tuple[str, ...], tuple[str, ...]], ...]
    """Source level, input pads and output pads of each sweep: two sweeps with equal lines are one sweep taken again."""
    at_hz: float
    frequency_hz: FloatArray
    gain_db: FloatArray
    noise_db: FloatArray
    buried: FloatArray
    """Share of each sweep's span, (k,), where the device's signal stands less than 10 dB above the sweep's noise."""
    drive_dbm: FloatArray
    output_loss_db: FloatArray
    """Loss of the output pads in line, calibrated or not, (k,)."""
    design_gain_db: FloatArray
    design_noise_db: FloatArray
    design_phase_deg: FloatArray
    reading_u_db: FloatArray
    pads: tuple[PadDoubt, ...]
    source_half_width_db: float
    port2_compression_dbm: float | None
    levels_known: bool
    """Whether the source level is known; if not, drives are relative to a source of 0 dBm."""
    mismatch: tuple[MismatchDoubt, ...] = ()

    @property
    def sweeps(self) -> int:
        """How many sweeps."""
        return len(self.files)

    @property
    def design_covariance_db2(self) -> FloatArray:
        """Covariance of readings and mismatch between the sweeps at the design frequency, dB², (k, k)."""
        own = np.diag(self.reading_u_db**2)
        return np.asarray(own + sum(doubt.at_design**2 * doubt.covariance for doubt in self.mismatch))

    @property
    def slope_db(self) -> FloatArray:
        """Gain change in dB at each node for a device tuned up by 1 % of the span of the nodes, (j,)."""
        f = self.frequency_hz
        if f.size < 3:
            return np.zeros(f.size)
        mean = np.mean(self.gain_db, axis=0)
        return np.asarray(-np.gradient(mean, f) * 0.01 * (f[-1] - f[0]))

    @property
    def bend_db(self) -> FloatArray:
        """Second-order gain change in dB at each node for the same shift in tuning, (j,)."""
        f = self.frequency_hz
        if f.size < 3:
            return np.zeros(f.size)
        return np.asarray(-np.gradient(self.slope_db, f) * 0.01 * (f[-1] - f[0]))

    def repeats(self) -> bool:
        """Whether sweeps that were taken again agree within their own doubts."""
        return not self.disagreeing()

    def disagreeing(self) -> tuple[tuple[int, int], ...]:
        """Return pairs of sweeps with one line that differ by more than four standard uncertainties of their own.

        Mismatch is none of these: the line is the same.
        """
        found = []
        for a, b in self.taken_again():
            doubt = (
                self.noise_db[a] ** 2 + self.noise_db[b] ** 2 + self.reading_u_db[a] ** 2 + self.reading_u_db[b] ** 2
            )
            if np.any(np.abs(self.gain_db[a] - self.gain_db[b]) > 4.0 * np.sqrt(doubt)):
                found.append((a, b))
        return tuple(found)

    def taken_again(self) -> tuple[tuple[int, int], ...]:
        """Return pairs of sweeps that were taken with the same source level and the same pads."""
        k = range(self.sweeps)
        return tuple((a, b) for a in k for b in k if a < b and self.lines[a] == self.lines[b])

    def only(self, keep: Sequence[int]) -> DriveTable:
        """Return the table of some of the sweeps."""
        rows = list(keep)
        pads = tuple(replace(pad, reads=pad.reads[rows], drives=pad.drives[rows]) for pad in self.pads)
        mismatch = tuple(replace(each, covariance=each.covariance[np.ix_(rows, rows)]) for each in self.mismatch)
        arrays = {name: getattr(self, name)[rows] for name in _PER_SWEEP}
        return replace(
            self,
            files=tuple(self.files[row] for row in rows),
            lines=tuple(self.lines[row] for row in rows),
            pads=pads,
            mismatch=mismatch,
            **arrays,
        )


def drive_table(
    sweeps: Sequence[MeasuredSweep], entries: Sequence[SweepEntry], sheet: BenchSheet, bank: PadBank, at_hz: float
) -> DriveTable | None:
    """Return the table of a device's sweeps; None where the sweeps have no span, or `at_hz` not, in common.

    Parameters
    ----------
    sweeps, entries : the sweeps at the device's ports and their lines in the sheet, in the same order
    at_hz : the design frequency, where pads and drives are evaluated
    """
    low = max(float(sweep.result.sweep.frequency_hz[0]) for sweep in sweeps)
    high = min(float(sweep.result.sweep.frequency_hz[-1]) for sweep in sweeps)
    if not low <= at_hz <= high or not high > low:
        return None
    levels = [entry.source_at(at_hz) for entry in entries]
    known = all(level is not None for level in levels)
    if not known and len({str(entry.source_dbm) for entry in entries}) > 1:
        return None
    into = [sum(bank.loss_db(pad, at_hz) for pad in entry.input_pads) for entry in entries]
    drive = np.array([(level or 0.0) - loss for level, loss in zip(levels, into, strict=True)])
    order = [int(k) for k in np.argsort(drive, kind="stable")]
    sweeps, entries, drive = [sweeps[k] for k in order], [entries[k] for k in order], drive[order]
    nodes = _nodes(sweeps, low, high)
    grids = [sweep.result.sweep.frequency_hz for sweep in sweeps]
    alike = all(np.array_equal(grids[0], grid) for grid in grids[1:])
    read = [_levels(sweep, nodes, alike=alike) for sweep in sweeps]
    design = [_levels(sweep, np.array([at_hz]), alike=alike) for sweep in sweeps]
    tilt = np.array([_source_tilt(entry, nodes, at_hz) for entry in entries])
    doubts = [
        sweep_doubts(sweep.result.sweep, entry, sheet, bank, at_hz)
        for sweep, entry in zip(sweeps, entries, strict=True)
    ]
    buried = _buried(sweeps)
    guide = sweeps[int(np.argmax(buried < _TOO_BURIED))]
    arrays = {
        "frequency_hz": nodes,
        "gain_db": np.array([gain for gain, _ in read]),
        "noise_db": np.hypot([u for _, u in read], _NODE_DOUBT_DB),
        "buried": buried,
        "drive_dbm": drive[:, None] + tilt,
        "output_loss_db": np.array([sum(bank.loss_db(pad, at_hz) for pad in e.output_pads) for e in entries]),
        "design_gain_db": np.array([gain[0] for gain, _ in design]),
        "design_noise_db": np.array([u[0] for _, u in design]),
        "design_phase_deg": np.array([_phase_deg(sweep, at_hz) for sweep in sweeps]),
        "reading_u_db": np.array([doubt.reading_db for doubt in doubts]),
    }
    return DriveTable(
        files=tuple(sweep.file for sweep in sweeps),
        lines=tuple((entry.source_at(at_hz), entry.input_pads, entry.output_pads) for entry in entries),
        at_hz=at_hz,
        pads=pad_doubts(doubts, entries, bank, at_hz),
        mismatch=mismatch_doubts(sweeps, entries, doubts, guide, nodes, at_hz),
        source_half_width_db=source_doubt_db(sheet.analyzer),
        port2_compression_dbm=sheet.analyzer.port2_compression_dbm,
        levels_known=known,
        **{name: readonly(array, np.float64) for name, array in arrays.items()},
    )


def _source_tilt(entry: SweepEntry, nodes: FloatArray, at_hz: float) -> FloatArray:
    """Return how far the source level at each node stands from that at the design frequency, dB."""
    base = entry.source_at(at_hz)
    if base is None:
        return np.zeros(nodes.size)
    return np.array([(entry.source_at(float(f)) or base) - base for f in nodes])


def _noise_model(sweep: MeasuredSweep) -> NoiseModel:
    return sweep.plan.noise.get("S21") or NOISE_FREE


def _smooth_level(sweep: Sweep) -> FloatArray:
    """Return the level of S21 in dB, (n,), as a running mean of power over five samples."""
    return np.asarray(10.0 * np.log10(np.maximum(moving_average(np.abs(sweep.s21) ** 2, 5), 1e-300)))


def _inside(sweep: MeasuredSweep, low: float, high: float) -> int:
    f = sweep.result.sweep.frequency_hz
    return int(np.count_nonzero((f >= low) & (f <= high)))


def _nodes(sweeps: Sequence[MeasuredSweep], low: float, high: float) -> FloatArray:
    """Return the frequencies, (j,), at which the sweeps are compared: those with signal in most of the sweeps."""
    fit = [sweep for sweep in sweeps if _inside(sweep, low, high) >= 3]
    if not fit:
        return np.linspace(low, high, 3)
    # A sweep too short to show its noise is not for that the quietest.
    quietest = min(fit, key=lambda sweep: (sweep.plan.noise.get("S21") is None, _noise_model(sweep).additive))
    f = quietest.result.sweep.frequency_hz
    level = _smooth_level(quietest.result.sweep)
    floor = max(
        (20.0 * np.log10(max(_noise_model(sweep).additive, 1e-15)) + _BURIED_SNR_DB for sweep in sweeps), default=-300.0
    )
    inside = (f >= low) & (f <= high)
    use = inside & (level > np.max(level[inside]) - _DEEPEST_DB) & (level > floor)
    if np.count_nonzero(use) < 3:
        use = inside
    f, level = f[use], level[use]
    if f.size < 3:
        return np.unique(np.clip(f, low, high))
    rise = np.concatenate([[0.0], np.cumsum(np.abs(np.diff(level)))])
    along = (f - f[0]) / (f[-1] - f[0]) + (rise / rise[-1] if rise[-1] > 1.0 else 0.0)
    return np.unique(np.interp(np.linspace(0.0, along[-1], min(_NODES, f.size)), along, f))


def _levels(sweep: MeasuredSweep, at_hz: FloatArray, *, alike: bool) -> tuple[FloatArray, FloatArray]:
    """Return the level of S21 in dB and its noise at each frequency, (j,) each, from a parabola round it.

    What a parabola misses of a sharp curve is the same in every sweep that has the same frequencies. Sweeps that are
    not `alike` in that are read from their own smooth curve, and what that leaves over counts as noise.
    """
    f, s21 = sweep.result.sweep.frequency_hz, sweep.result.sweep.s21
    smooth = 10.0 ** (_smooth_level(sweep.result.sweep) / 20.0)
    to_decibels = 20.0 / np.log(10.0) / np.sqrt(2.0)
    sigma = to_decibels * _noise_model(sweep).sigma(smooth) / smooth
    near, weights = parabola(f, at_hz)
    gain = np.sum(weights * np.maximum(to_db(s21), -300.0)[near], axis=1)
    noise = np.sqrt(np.sum((weights * sigma[near]) ** 2, axis=1))
    if not alike:
        curve = fit_curve(f, s21, float(at_hz[0]), float(at_hz[-1]), sweep.plan.noise.get("S21"))
        gain = curve.level_at(s21, at_hz)
        misfit = np.max([fit.misfit for fit in curve.fits])
        noise = np.hypot(noise, to_decibels * misfit / 10.0 ** (gain / 20.0))
    return np.asarray(gain), np.asarray(noise)


def _phase_deg(sweep: MeasuredSweep, at_hz: float) -> float:
    trace = sweep.result.sweep
    middle = int(np.argmin(np.abs(trace.frequency_hz - at_hz)))
    first = max(0, min(middle - HALF_FIT, trace.frequency_hz.size - 2 * HALF_FIT - 1))
    near = slice(first, first + 2 * HALF_FIT + 1)
    turned = np.degrees(np.unwrap(np.angle(trace.s21[near])))
    return float(np.polyval(np.polyfit(trace.frequency_hz[near] - at_hz, turned, min(2, turned.size - 1)), 0.0))


def _buried(sweeps: Sequence[MeasuredSweep]) -> FloatArray:
    """Return the share of each sweep, (k,), in which what the quietest sweep shows lies under that sweep's noise."""
    quietest = min(sweeps, key=lambda sweep: _noise_model(sweep).additive)
    level = _smooth_level(quietest.result.sweep)
    level = level[level > np.max(level) - _DEEPEST_DB]
    floors = [20.0 * np.log10(max(_noise_model(sweep).additive, 1e-15)) for sweep in sweeps]
    return np.array([np.mean(level < floor + _BURIED_SNR_DB) for floor in floors])
