"""A sheet and one sweep of it in; every source of doubt about that sweep out.

Each source is a distribution with a stated or an assumed width (:data:`ASSUMED`, all of them common practice, no
source; the page shows which were assumed):

* pad loss: within ± its tolerance, rectangular (JCGM 100:2008, 4.3.7), or normal where the pad was measured. A pad is
  one quantity: its error is the same in every sweep that it was added to;
* mismatch at each joint between port, pad and device: |Γ1 Γ2| known, phase unknown, so U-shaped in dB
  (EA-4/02 M:2022, example S7); the device's own S11 and S22 are used where they were measured;
* reading: normal, one draw for a sweep, in magnitude and, as the same share, in phase;
* directivity, and the reflection of an added pad: a vector of known length and unknown phase on a reflection;
* noise seen in the sweep itself, additive and proportional, a fresh draw for each sample;
* interpolation: what the curve between the samples leaves over beyond that noise.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np

from benchtool.match import BURIED_UNCERTAINTY
from benchtool.model import Sweep
from benchtool.pads import PadBank, change_of_line
from benchtool.sheet import Analyzer, BenchSheet, SweepEntry
from benchtool.units import from_db

__all__ = [
    "ASSUMED",
    "Assumption",
    "Joint",
    "SweepDoubts",
    "assumptions",
    "pad_doubt_db",
    "pads_that_count",
    "source_doubt_db",
    "sweep_doubts",
]

ASSUMED: Final[Mapping[str, float]] = {
    "pad tolerance up to 12 dB": 0.3,
    "pad tolerance above 12 dB": 0.5,
    "measured pad, standard uncertainty": 0.05,
    "pad return loss": 26.0,
    "port match": 30.0,
    "directivity": 36.0,
    "reading, standard uncertainty": 0.05,
    "source level tolerance": 0.5,
    "return loss of an input that was not measured": 10.0,
    "return loss of an output that was not measured": 3.0,
}
"""What is taken where the sheet says nothing, in dB. A tuned collector or drain is a poor match, and changes through
its resonance: an unknown port is taken to have a part of that size that stands still and another that follows S21.
"""

_SMALL_PAD_DB: Final = 12.0
_LENGTH_DOUBT: Final = 1.1
"""A vector of known length and unknown phase errs mostly by its whole length, so an interval that is short of it by
a few percent misses often: second-order reflections can make each vector that much longer.
"""


@dataclass(frozen=True)
class Assumption:
    """A width that was assumed because the sheet does not state it."""

    what: str
    value_db: float


@dataclass(frozen=True)
class Joint:
    """Two reflections that see each other: their product's magnitude, times a device reflection where one is named."""

    name: str
    magnitude: float
    device: str | None
    """'S11' or 'S22' where the product is still to be multiplied by the device's own measured reflection."""
    resonant: float = 0.0
    """Part of the product, where the device's reflection is not known, that follows the resonance in frequency."""
    through: tuple[str, ...] = ()
    """Added pads that the reflection passes twice: their loss is not known exactly either."""


@dataclass(frozen=True, eq=False)
class SweepDoubts:
    """The sources of doubt about one sweep at the device's ports."""

    file: str
    input_weights: Mapping[str, int]
    output_weights: Mapping[str, int]
    input_joints: tuple[Joint, ...]
    output_joints: tuple[Joint, ...]
    reading_db: float
    input_vectors: tuple[float, ...]
    """Lengths of the error vectors on S11 as read at the device: directivity, and what each added pad reflects."""
    output_vectors: tuple[float, ...]
    input_ports: tuple[float, ...]
    """Reflections that the device sees on its input side: the nearest added pad, and the port through the pads."""
    output_ports: tuple[float, ...]
    input_between: tuple[float, ...] = ()
    """Port and pad seeing each other in front of the device, once for each way round: twice their product."""
    output_between: tuple[float, ...] = ()
    turned: bool = False
    """Whether S22 comes from the device turned round, read through the input-side pads."""

    def reflection_doubt(self, parameter: str) -> float:
        """Return the doubt about the magnitude of S11 or S22: its error vectors together."""
        return float(np.hypot.reduce(self.input_vectors if parameter == "S11" else self.output_vectors))

    @property
    def sources(self) -> tuple[str, ...]:
        """Names of the sources that a budget lists."""
        pads = [f"pad {name}" for name in dict.fromkeys((*self.input_weights, *self.output_weights))]
        return (*pads, "mismatch", "reading", "directivity", "noise", "interpolation")


def pads_that_count(entry: SweepEntry, sheet: BenchSheet) -> tuple[str, ...]:
    """Return the pads that were added or taken away between calibration and this sweep."""
    cal = sheet.calibration
    sides = (change_of_line(entry.input_pads, cal.input_pads), change_of_line(entry.output_pads, cal.output_pads))
    return tuple(name for side in sides for name in side.weights())


def pad_doubt_db(name: str, bank: PadBank) -> tuple[float, bool]:
    """Return the doubt about a pad's loss in dB, and whether it is a half-width (True) or a standard uncertainty."""
    pad = bank.pads[name]
    if bank.measured(name):
        stated = pad.uncertainty_db
        return (ASSUMED["measured pad, standard uncertainty"] if stated is None else stated), False
    if pad.tolerance_db is not None:
        return pad.tolerance_db, True
    small = pad.loss_at(0.0) <= _SMALL_PAD_DB
    return ASSUMED["pad tolerance up to 12 dB" if small else "pad tolerance above 12 dB"], True


def assumptions(sheet: BenchSheet, pads_in_use: set[str], bank: PadBank) -> tuple[Assumption, ...]:
    """Return what had to be assumed for this sheet, for the page to show."""
    found = []
    for name in sorted(pads_in_use):
        pad = sheet.pads[name]
        if not bank.measured(name):
            if pad.tolerance_db is None:
                found.append(Assumption(f"tolerance of pad {name}", pad_doubt_db(name, bank)[0]))
            if pad.return_loss_db is None:
                found.append(Assumption(f"return loss of pad {name}", ASSUMED["pad return loss"]))
        elif pad.uncertainty_db is None:
            found.append(Assumption(f"standard uncertainty of measured pad {name}", pad_doubt_db(name, bank)[0]))
    analyzer = sheet.analyzer
    for what, stated, key in (
        ("port match", analyzer.port_match_db, "port match"),
        ("directivity", analyzer.directivity_db, "directivity"),
        ("standard uncertainty of a reading", analyzer.reading_db, "reading, standard uncertainty"),
    ):
        if stated is None:
            found.append(Assumption(what, ASSUMED[key]))
    return tuple(found)


def _magnitude(stated_db: float | None, key: str) -> float:
    return from_db(-(ASSUMED[key] if stated_db is None else stated_db))


def _error_vectors(weights: Mapping[str, int], directivity: float, bank: PadBank, at_hz: float) -> tuple[float, ...]:
    """Return the lengths of the error vectors on a reflection, as read at the device: twice the loss magnifies them.

    What the added pads themselves reflect adds to the directivity; a measured pad's reflection is taken out exactly.
    """
    grown = _LENGTH_DOUBT * from_db(2.0 * sum(sign * bank.loss_db(pad, at_hz) for pad, sign in weights.items()))
    return tuple(grown * length for length in (directivity, *_own_reflections(weights, bank)))


def _own_reflections(weights: Mapping[str, int], bank: PadBank) -> list[float]:
    return [_pad_reflection(pad, bank) for pad in weights if not bank.measured(pad)]


def _pad_reflection(name: str, bank: PadBank) -> float:
    return _magnitude(bank.pads[name].return_loss_db, "pad return loss")


def _joints_of(
    weights: Mapping[str, int], side: str, device: str | None, port: float, bank: PadBank, at_hz: float
) -> tuple[Joint, ...]:
    """Return the joints on one side; `device` names the reflection of the device there, None where it is not known."""
    unknown = 1.0 if device else from_db(-ASSUMED[f"return loss of an {side} that was not measured"])
    resonant = 0.0 if device else unknown
    joints = [Joint(f"port and {pad}", port * _pad_reflection(pad, bank), None) for pad in weights]
    if weights:
        nearest = list(weights)[-1]
        if not bank.measured(nearest):
            own = _pad_reflection(nearest, bank)
            joints.append(Joint(f"{nearest} and device", own * unknown, device, own * resonant))
    loss = sum(sign * bank.loss_db(pad, at_hz) for pad, sign in weights.items())
    through = port * from_db(-2.0 * max(loss, 0.0))
    joints.append(Joint("port and device", through * unknown, device, through * resonant, tuple(weights)))
    return tuple(joint for joint in joints if joint.magnitude > 0.0)


def sweep_doubts(sweep: Sweep, entry: SweepEntry, sheet: BenchSheet, bank: PadBank, at_hz: float) -> SweepDoubts:
    """Return the sources of doubt about one sweep; `at_hz` is where pads are evaluated."""
    analyzer, cal = sheet.analyzer, sheet.calibration
    port = _magnitude(analyzer.port_match_db, "port match")
    directivity = _magnitude(analyzer.directivity_db, "directivity")
    weights, joints, vectors, ports = [], [], [], []
    for now, before, device in (
        (entry.input_pads, cal.input_pads, "S11"),
        (entry.output_pads, cal.output_pads, "S22"),
    ):
        own = change_of_line(now, before).weights()
        vector = _error_vectors(own, directivity, bank, at_hz)
        # A reflection buried under pads is no better than one that was not measured.
        known = device in sweep.measured and float(np.hypot.reduce(vector)) <= BURIED_UNCERTAINTY
        weights.append(own)
        vectors.append(vector)
        side = "input" if device == "S11" else "output"
        joints.append(_joints_of(own, side, device if known else None, port, bank, at_hz))
        loss = sum(sign * bank.loss_db(pad, at_hz) for pad, sign in own.items())
        ports.append((port * from_db(-2.0 * max(loss, 0.0)), *_own_reflections(own, bank)[-1:]))
    reading = analyzer.reading_db
    return SweepDoubts(
        entry.name,
        weights[0],
        weights[1],
        joints[0],
        joints[1],
        ASSUMED["reading, standard uncertainty"] if reading is None else reading,
        vectors[0],
        vectors[0] if entry.reversed is not None else vectors[1],
        ports[0],
        ports[1],
        tuple(2.0 * port * reflection for reflection in _own_reflections(weights[0], bank)),
        tuple(2.0 * port * reflection for reflection in _own_reflections(weights[1], bank)),
        entry.reversed is not None,
    )


def source_doubt_db(analyzer: Analyzer) -> float:
    """Return the half-width of the source level in dB."""
    stated = analyzer.source_tolerance_db
    return ASSUMED["source level tolerance"] if stated is None else stated
