"""Sweeps of one device and their lines in; the doubts that sweeps share, per sweep and frequency node, out.

Mismatch multiplies S21 by 1 + ρ, ρ being the product of two reflections with a phase nobody knows. To first order that
is 8.686 Re ρ dB. Where ρ stands still it shifts a sweep as a whole, with a tilt as its phase turns along the line;
where ρ follows the resonance it is r e^(jφ) s with s the shape of S21: two patterns, Re s and Im s, of standard
uncertainty 8.686 r/√2 each. Sweeps with the same line on one side have that side's mismatch in common.

Signs: a pad that truly loses δ more than stated makes the corrected gain read δ low where it was added since
calibration, δ high where it was taken away, and lowers the true drive by δ where it stands on the input side.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from benchtool.compression import MeasuredSweep
from benchtool.doubts import Joint, SweepDoubts, pad_doubt_db
from benchtool.model import ComplexArray, FloatArray, readonly
from benchtool.pads import PadBank
from benchtool.propagation import mismatch_u_db, rectangular_u
from benchtool.sheet import SweepEntry

__all__ = ["HALF_FIT", "MismatchDoubt", "PadDoubt", "mismatch_doubts", "pad_doubts", "parabola"]

HALF_FIT: Final = 3
"""Samples either side of a node that its parabola is drawn through."""
_TILT_SHARE: Final = 0.3
"""Share of a mismatch that its phase, turning along the line, may move from one end of the sweep to the other."""


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


def parabola(f: FloatArray, hz: float) -> tuple[slice, FloatArray]:
    """Return the samples nearest a frequency and the weights that give a parabola's value there."""
    middle = int(np.argmin(np.abs(f - hz)))
    first = max(0, min(middle - HALF_FIT, f.size - 2 * HALF_FIT - 1))
    near = slice(first, first + 2 * HALF_FIT + 1)
    x = f[near] - hz
    powers = np.vander(x / max(float(np.max(np.abs(x))), 1e-300), min(3, x.size), increasing=True)
    return near, np.linalg.pinv(powers)[0]


def _smoothed(f: FloatArray, trace: ComplexArray, at_hz: FloatArray) -> ComplexArray:
    """Return a complex trace at each frequency, (j,), from a parabola round it."""
    found = [parabola(f, float(hz)) for hz in at_hz]
    return np.array([weights @ trace[near] for near, weights in found])


def pad_doubts(
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


def mismatch_doubts(
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


def _joints_u(joints: Sequence[Joint], sweep: MeasuredSweep, nodes: FloatArray, at_hz: float) -> tuple[float, float]:
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
