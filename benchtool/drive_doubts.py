"""Sweeps of one device and their lines in; the doubts that sweeps share, per sweep and frequency node, out.

Mismatch multiplies S21 by 1 + ρ, ρ being the product of two reflections with a phase nobody knows. To first order that
is 8.686 Re ρ dB. Where ρ stands still it shifts a sweep as a whole, with a tilt as its phase turns along the line;
where a tuned port lets ρ follow its resonance it is r e^(jφ) t with t = 1/(1 + jx) of that port's tank: two patterns,
Re t and Im t, of standard uncertainty 8.686 r/√2 each. Of a port that was measured the reflection at the design
frequency is known, and how far it moves from there: t becomes 1 − t. The tank has as much of the selectivity as S21,
or half of it where two circuits share it. Sweeps with the same line on one side have that side's mismatch in common.

Signs: a pad that truly loses δ more than stated makes the corrected gain read δ low where it was added since
calibration, δ high where it was taken away, and lowers the true drive by δ where it stands on the input side.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchtool.compression import MeasuredSweep
from benchtool.doubts import ASSUMED, Joint, SweepDoubts, pad_doubt_db
from benchtool.model import ComplexArray, FloatArray, readonly
from benchtool.pads import PadBank
from benchtool.propagation import mismatch_u_db, rectangular_u
from benchtool.sheet import SweepEntry
from benchtool.units import from_db

__all__ = ["HALF_FIT", "MismatchDoubt", "PadDoubt", "mismatch_doubts", "pad_doubts", "parabola"]

HALF_FIT: Final = 3
"""Samples either side of a node that its parabola is drawn through."""
_TILT_SHARE: Final = 0.3
"""Share of a mismatch that its phase, turning along the line, may move from one end of the sweep to the other."""
_CIRCUITS: Final = (1, 2)
"""Tuned circuits that may share the selectivity."""
_LEAST_SHARE: Final = 0.03
"""A pattern smaller than this share of the largest is left out."""


@dataclass(frozen=True, eq=False)
class PadDoubt:
    """Doubt about one pad and where it bears: (k,) per sweep, in dB for each dB the pad truly loses beyond its value.

    `reads` is what the corrected gain gains: -1 added since calibration, +1 taken away since, 0 unchanged.
    `drives` is what the true drive gains: -1 on the input side and in line now, else 0.
    """

    name: str
    loss_db: float
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


def parabola(f: FloatArray, at_hz: FloatArray) -> tuple[NDArray[np.intp], FloatArray]:
    """Return the samples nearest each frequency, (j, m), and the weights that give a parabola's value there, (j, m)."""
    every, wanted = (np.ascontiguousarray(each, np.float64).tobytes() for each in (f, at_hz))
    return _parabola(every, wanted)


@lru_cache(maxsize=12)
def _parabola(frequencies: bytes, wanted: bytes) -> tuple[NDArray[np.intp], FloatArray]:
    """Return the same, kept by the frequencies: the sweeps of a bench mostly share them."""
    f, at_hz = np.frombuffer(frequencies, np.float64), np.frombuffer(wanted, np.float64)
    count = min(2 * HALF_FIT + 1, f.size)
    middle = np.argmin(np.abs(f - at_hz[:, None]), axis=1)
    first = np.clip(middle - HALF_FIT, 0, f.size - count)
    near = first[:, None] + np.arange(count)
    x = f[near] - at_hz[:, None]
    x = x / np.maximum(np.max(np.abs(x), axis=1, keepdims=True), 1e-300)
    powers = x[..., None] ** np.arange(min(3, count))
    return readonly(near, np.intp), readonly(np.linalg.pinv(powers)[:, 0], np.float64)


def _smoothed(f: FloatArray, trace: ComplexArray, at_hz: FloatArray) -> ComplexArray:
    """Return a complex trace at each frequency, (j,), from a parabola round it."""
    near, weights = parabola(f, at_hz)
    smooth: ComplexArray = np.sum(weights * trace[near], axis=1)
    return smooth


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
    shared = np.zeros((3, k, k))
    sides = (
        ("S11", [doubt.input_joints for doubt in doubts], [entry.input_pads for entry in entries]),
        ("S22", [doubt.output_joints for doubt in doubts], [entry.output_pads for entry in entries]),
    )
    for name, joints, lines in sides:
        port = _device_port(name, joints, sweeps, doubts, nodes, at_hz)
        u = np.array([_joints_u(own, port) for own in joints])
        same = np.array([[a == b for b in lines] for a in lines])
        shared += same * np.einsum("ki,li->ikl", u, u)
    standing, resonant, moving = shared
    along = (nodes - at_hz) / max(float(np.max(np.abs(nodes - at_hz))), 1e-300)
    forms = [(np.ones(nodes.size), 1.0, standing), (along, 0.0, _TILT_SHARE**2 * standing)]
    for from_design, covariance in ((False, resonant), (True, moving)):
        tank = _tank_patterns(guide, np.append(nodes, at_hz), from_design=from_design)
        forms += [(part[:-1], float(part[-1]), covariance) for part in tank]
    return tuple(
        MismatchDoubt(readonly(pattern, np.float64), at_design, readonly(covariance, np.float64))
        for pattern, at_design, covariance in forms
        if np.any(covariance)
    )


def _tank_patterns(guide: MeasuredSweep, at_hz: FloatArray, *, from_design: bool) -> FloatArray:
    """Return the patterns, (few, j), that a port's resonance may write on a gain: orthogonal, in units of its doubt.

    With `from_design` they are counted from their value at the last frequency, the design frequency. For a single tank
    |t|² = Re t, and Im t = ∓|t| √(1 − |t|²) above and below the peak, so the magnitude is enough and the delay of the
    device does not matter.
    """
    sweep = guide.result.sweep
    level = np.abs(_smoothed(sweep.frequency_hz, sweep.s21, at_hz)) / np.max(np.abs(sweep.s21))
    side = np.where(at_hz < sweep.frequency_hz[int(np.argmax(np.abs(sweep.s21)))], 1.0, -1.0)
    parts = []
    for circuits in _CIRCUITS:
        tank = np.minimum(level, 1.0) ** (1.0 / circuits)
        parts += [tank**2, side * tank * np.sqrt(1.0 - tank**2)]
    written = np.array(parts) / np.sqrt(len(_CIRCUITS))
    if from_design:
        written = written - written[:, -1:]
    _, sizes, patterns = np.linalg.svd(written, full_matrices=False)
    keep = sizes > _LEAST_SHARE * sizes[0]
    return np.asarray(sizes[keep, None] * patterns[keep])


@dataclass(frozen=True)
class _Port:
    """A reflection of the device as some sweep shows it: at the design frequency, and how far it moves over the span.

    `assumed` is what was taken for it in a joint of a sweep that does not show it.
    """

    size: float
    moves: float
    assumed: float


def _device_port(
    name: str,
    joints: Sequence[Sequence[Joint]],
    sweeps: Sequence[MeasuredSweep],
    doubts: Sequence[SweepDoubts],
    nodes: FloatArray,
    at_hz: float,
) -> _Port | None:
    """Return a port of the device from the sweep that shows it best; None where none does.

    A reflection that one sweep buries under its pads is still the one that another shows.
    """
    shows = [k for k, own in enumerate(joints) if any(joint.device == name for joint in own)]
    if not shows:
        return None
    best = min(shows, key=lambda k: doubts[k].reflection_doubt(name))
    trace = sweeps[best].result.sweep
    seen = _smoothed(trace.frequency_hz, trace.s11 if name == "S11" else trace.s22, np.append(nodes, at_hz))
    doubt = doubts[best].reflection_doubt(name)
    side = "input" if name == "S11" else "output"
    assumed = from_db(-ASSUMED[f"return loss of an {side} that was not measured"])
    return _Port(min(1.0, abs(seen[-1]) + doubt), float(np.max(np.abs(seen[:-1] - seen[-1]))), assumed)


def _joints_u(joints: Sequence[Joint], port: _Port | None) -> FloatArray:
    """Return the standard uncertainty in dB from the joints of one side, (3,): standing, resonant, and moving."""
    parts = np.array([_joint_parts(joint, port) for joint in joints]).reshape(-1, 3)
    return np.asarray(np.sqrt(np.sum(parts**2, axis=0)))


def _joint_parts(joint: Joint, port: _Port | None) -> tuple[float, float, float]:
    at_device = joint.device is not None or joint.resonant > 0.0
    if port is None or not at_device:
        return mismatch_u_db(joint.magnitude, 1.0), mismatch_u_db(joint.resonant, 1.0), 0.0
    product = joint.magnitude if joint.device is not None else joint.magnitude / port.assumed
    return mismatch_u_db(product, port.size), 0.0, mismatch_u_db(product, port.moves)
