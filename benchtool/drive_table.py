"""Sweeps of one device in; gain over drive and frequency on common nodes out, with every doubt that bears on it.

Nodes are spread evenly along the trace as an eye follows it: half by frequency, half by rise and fall of the gain, so
that a narrow peak and long skirts are both seen. At a node each sweep's level in dB is a local parabola through seven
samples; noise of a sample of magnitude m and complex rms σ is 8.686 σ/(√2 m) dB.

Mismatch multiplies S21 by 1 + ρ, ρ being the product of two reflections with a phase nobody knows. To first order that
is 8.686 Re ρ dB. Where ρ stands still it shifts a sweep as a whole, with a tilt as its phase turns along the line;
where ρ follows the resonance it is r e^(jφ) s with s the shape of S21: two patterns, Re s and Im s, of standard
uncertainty 8.686 r/√2 each. Sweeps with the same line on one side have that side's mismatch in common.

Signs: a pad that truly loses δ more than stated makes the corrected gain read δ low where it was added since
calibration, δ high where it was taken away, and lowers the true drive by δ where it stands on the input side.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from benchtool.compression import MeasuredSweep
from benchtool.doubts import Joint, SweepDoubts, pad_doubt_db, source_doubt_db, sweep_doubts
from benchtool.model import ComplexArray, FloatArray, Sweep, readonly
from benchtool.noise import NOISE_FREE, NoiseModel
from benchtool.pads import PadBank
from benchtool.propagation import mismatch_u_db, rectangular_u
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
_HALF_FIT: Final = 3
"""Samples either side of a node that its parabola is drawn through."""
_DEEPEST_DB: Final = 40.0
"""Nodes reach no further below the peak than this."""
_NODE_DOUBT_DB: Final = 0.02
"""Standard uncertainty of one node for what neither noise nor the flat doubts cover: ripple, interpolation."""
_TILT_SHARE: Final = 0.3
"""Share of a mismatch that its phase, turning along the line, may move from one end of the sweep to the other."""
_TOO_BURIED: Final = 0.2
"""Share of a sweep's span under its noise from which it is no guide to the shape of the resonance."""
_BURIED_SNR_DB: Final = 10.0
"""Below this signal to noise ratio of a sample the mean of decibels reads high, and a node counts as buried."""


@dataclass(frozen=True, eq=False)
class PadDoubt:
    """Doubt about one pad and where it bears: (k,) per sweep, in dB for each dB the pad truly loses beyond its value.

    `reads` is what the corrected gain gains: -1 added since calibration, +1 taken away since, 0 unchanged.
    `drives` is what the true drive gains: -1 on the input side and in line now, else 0.
    """

    name: str
    loss_db: float
    half_width_db: float
    u_db: float
    reads: FloatArray
    drives: FloatArray


@dataclass(frozen=True, eq=False)
class MismatchDoubt:
    """One form that mismatch may give a sweep: `pattern` (j,) over the nodes, `at_design` at the design frequency.

    `covariance` (k, k) in dB² is that of its size between sweeps: equal lines have it in common, and so lose it when
    they are compared.
    """

    pattern: FloatArray
    at_design: float
    covariance: FloatArray

    @property
    def between(self) -> FloatArray:
        """Return the covariance of what is left when the lowest drive is taken away, dB², (k, k)."""
        c = self.covariance
        return np.asarray(c - c[:1] - c[:, :1] + c[0, 0])


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
        """Whether sweeps that were taken again agree within their own doubts (four standard uncertainties).

        Mismatch is none of these: the line is the same.
        """
        for a, b in self.taken_again():
            doubt = (
                self.noise_db[a] ** 2 + self.noise_db[b] ** 2 + self.reading_u_db[a] ** 2 + self.reading_u_db[b] ** 2
            )
            if np.any(np.abs(self.gain_db[a] - self.gain_db[b]) > 4.0 * np.sqrt(doubt)):
                return False
        return True

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
    read = [_levels(sweep, nodes) for sweep in sweeps]
    design = [_levels(sweep, np.array([at_hz])) for sweep in sweeps]
    tilt = np.array([_source_tilt(entry, nodes, at_hz) for entry in entries])
    doubts = [
        sweep_doubts(sweep.result.sweep, entry, sheet, bank, at_hz)
        for sweep, entry in zip(sweeps, entries, strict=True)
    ]
    buried = _buried(sweeps, nodes)
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
        pads=_pad_doubts(doubts, entries, bank, at_hz),
        mismatch=_mismatch(sweeps, entries, doubts, guide, nodes, at_hz),
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
    power = np.pad(np.abs(sweep.s21) ** 2, 2, mode="edge")
    return np.asarray(10.0 * np.log10(np.maximum(np.convolve(power, np.full(5, 0.2), "valid"), 1e-300)))


def _nodes(sweeps: Sequence[MeasuredSweep], low: float, high: float) -> FloatArray:
    """Return the frequencies, (j,), at which the sweeps are compared: those with signal in most of the sweeps."""
    quietest = min(sweeps, key=lambda sweep: _noise_model(sweep).additive)
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


def _parabola(f: FloatArray, hz: float) -> tuple[slice, FloatArray]:
    """Return the samples nearest a frequency and the weights that give a parabola's value there."""
    middle = int(np.argmin(np.abs(f - hz)))
    first = max(0, min(middle - _HALF_FIT, f.size - 2 * _HALF_FIT - 1))
    near = slice(first, first + 2 * _HALF_FIT + 1)
    x = f[near] - hz
    powers = np.vander(x / max(float(np.max(np.abs(x))), 1e-300), min(3, x.size), increasing=True)
    return near, np.linalg.pinv(powers)[0]


def _levels(sweep: MeasuredSweep, at_hz: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the level of S21 in dB and its noise at each frequency, (j,) each, from a parabola round it."""
    f, s21 = sweep.result.sweep.frequency_hz, sweep.result.sweep.s21
    smooth = 10.0 ** (_smooth_level(sweep.result.sweep) / 20.0)
    sigma = 20.0 / np.log(10.0) * _noise_model(sweep).sigma(smooth) / (np.sqrt(2.0) * smooth)
    level = to_db(s21)
    gain, noise = np.empty(at_hz.size), np.empty(at_hz.size)
    for j, hz in enumerate(at_hz):
        near, weights = _parabola(f, float(hz))
        gain[j] = weights @ np.maximum(level[near], -300.0)
        noise[j] = np.sqrt(np.sum((weights * sigma[near]) ** 2))
    return gain, noise


def _smoothed(f: FloatArray, trace: ComplexArray, at_hz: FloatArray) -> ComplexArray:
    """Return a complex trace at each frequency, (j,), from a parabola round it."""
    found = [_parabola(f, float(hz)) for hz in at_hz]
    return np.array([weights @ trace[near] for near, weights in found])


def _phase_deg(sweep: MeasuredSweep, at_hz: float) -> float:
    trace = sweep.result.sweep
    middle = int(np.argmin(np.abs(trace.frequency_hz - at_hz)))
    first = max(0, min(middle - _HALF_FIT, trace.frequency_hz.size - 2 * _HALF_FIT - 1))
    near = slice(first, first + 2 * _HALF_FIT + 1)
    turned = np.degrees(np.unwrap(np.angle(trace.s21[near])))
    return float(np.polyval(np.polyfit(trace.frequency_hz[near] - at_hz, turned, min(2, turned.size - 1)), 0.0))


def _buried(sweeps: Sequence[MeasuredSweep], nodes: FloatArray) -> FloatArray:
    """Return the share of each sweep, (k,), in which what the quietest sweep shows lies under that sweep's noise."""
    quietest = min(sweeps, key=lambda sweep: _noise_model(sweep).additive)
    level = _smooth_level(quietest.result.sweep)
    level = level[level > np.max(level) - _DEEPEST_DB]
    floors = [20.0 * np.log10(max(_noise_model(sweep).additive, 1e-15)) for sweep in sweeps]
    return np.array([np.mean(level < floor + _BURIED_SNR_DB) for floor in floors])


def _pad_doubts(
    doubts: Sequence[SweepDoubts], entries: Sequence[SweepEntry], bank: PadBank, at_hz: float
) -> tuple[PadDoubt, ...]:
    """Return the doubts about pads: those that were added or taken away, and those that set the drive."""
    reads: dict[str, list[float]] = {}
    for k, doubt in enumerate(doubts):
        for weights in (doubt.input_weights, doubt.output_weights):
            _count(reads, weights, k, len(doubts))
    names = dict.fromkeys([*reads, *(pad for entry in entries for pad in entry.input_pads)])
    pads = []
    for name in names:
        width, is_limit = pad_doubt_db(name, bank)
        drives = np.array([-float(name in entry.input_pads) for entry in entries])
        pads.append(
            PadDoubt(
                name,
                bank.loss_db(name, at_hz),
                width if is_limit else 2.0 * width,
                rectangular_u(width) if is_limit else width,
                readonly(reads.get(name, [0.0] * len(doubts)), np.float64),
                readonly(drives, np.float64),
            )
        )
    return tuple(pads)


def _count(reads: dict[str, list[float]], weights: Mapping[str, int], sweep: int, sweeps: int) -> None:
    for name, sign in weights.items():
        reads.setdefault(name, [0.0] * sweeps)[sweep] -= float(sign)


def _mismatch(
    sweeps: Sequence[MeasuredSweep],
    entries: Sequence[SweepEntry],
    doubts: Sequence[SweepDoubts],
    guide: MeasuredSweep,
    nodes: FloatArray,
    at_hz: float,
) -> tuple[MismatchDoubt, ...]:
    """Return what mismatch may do: shift a sweep, tilt it, or follow the resonance, whose shape `guide` shows."""
    k = len(sweeps)
    standing, resonant = np.zeros((k, k)), np.zeros((k, k))
    sides = (
        ([doubt.input_joints for doubt in doubts], [entry.input_pads for entry in entries]),
        ([doubt.output_joints for doubt in doubts], [entry.output_pads for entry in entries]),
    )
    for joints, lines in sides:
        u = np.array([_joints_u(own, sweep, nodes, at_hz) for own, sweep in zip(joints, sweeps, strict=True)])
        same = np.array([[a == b for b in lines] for a in lines])
        standing += same * np.outer(u[:, 0], u[:, 0])
        resonant += same * np.outer(u[:, 1], u[:, 1])
    along = (nodes - at_hz) / max(float(np.max(np.abs(nodes - at_hz))), 1e-300)
    trace = guide.result.sweep
    shape = _smoothed(trace.frequency_hz, trace.s21, np.append(nodes, at_hz)) / np.max(np.abs(trace.s21))
    forms = [(np.ones(nodes.size), 1.0, standing), (along, 0.0, _TILT_SHARE**2 * standing)]
    forms += [(part[:-1], float(part[-1]), resonant) for part in (shape.real, shape.imag)]
    return tuple(
        MismatchDoubt(readonly(pattern, np.float64), at_design, readonly(covariance, np.float64))
        for pattern, at_design, covariance in forms
        if np.any(covariance)
    )


def _joints_u(
    joints: Sequence[Joint], sweep: MeasuredSweep, nodes: FloatArray, at_hz: float
) -> tuple[float, float]:
    """Return the standard uncertainty in dB from the joints of one side: what stands still and what is resonant."""
    parts = np.array([_joint_parts(joint, sweep, nodes, at_hz) for joint in joints]).reshape(-1, 2)
    standing, resonant = np.sqrt(np.sum(parts**2, axis=0))
    return float(standing), float(resonant)


def _joint_parts(joint: Joint, sweep: MeasuredSweep, nodes: FloatArray, at_hz: float) -> tuple[float, float]:
    if joint.device is None:
        return mismatch_u_db(joint.magnitude, 1.0), mismatch_u_db(joint.resonant, 1.0)
    trace = sweep.result.sweep
    reflection = trace.s11 if joint.device == "S11" else trace.s22
    seen = _smoothed(trace.frequency_hz, reflection, np.append(nodes, at_hz))
    # A reflection that was measured is known in how far it moves over the sweep too.
    moves = float(np.max(np.abs(seen[:-1] - seen[-1])))
    return mismatch_u_db(joint.magnitude, min(1.0, abs(seen[-1]))), mismatch_u_db(joint.magnitude, min(2.0, moves))
