"""A sheet and one sweep of it in; every source of doubt about that sweep out, and perturbed copies of the sweep.

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

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np

from benchtool.figures import FigurePlan
from benchtool.match import BURIED_UNCERTAINTY
from benchtool.model import ComplexArray, FloatArray, Sweep
from benchtool.noise import NOISE_FREE
from benchtool.pads import PadBank, change_of_line
from benchtool.sheet import Analyzer, BenchSheet, SweepEntry
from benchtool.units import from_db

__all__ = [
    "ASSUMED",
    "Assumption",
    "Draws",
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
        entry.reversed is not None,
    )


class Draws:
    """Draws of the quantities that several sweeps share, made on demand and kept, (trials,) each.

    With `only` set, every source but the named one stands still: that is how a budget is made.
    """

    def __init__(self, rng: np.random.Generator, trials: int, bank: PadBank, only: str | None = None) -> None:
        self.rng = rng
        self.trials = trials
        self.bank = bank
        self.only = only
        self._pads: dict[str, FloatArray] = {}

    def active(self, source: str) -> bool:
        """Whether a source is drawn."""
        return self.only is None or self.only == source

    def pad_db(self, name: str) -> FloatArray:
        """Return the error of a pad's loss, dB, (trials,): the same for every sweep."""
        if name not in self._pads:
            width, is_limit = pad_doubt_db(name, self.bank)
            if not self.active(f"pad {name}"):
                self._pads[name] = np.zeros(self.trials)
            elif is_limit:
                self._pads[name] = self.rng.uniform(-width, width, self.trials)
            else:
                self._pads[name] = self.rng.normal(0.0, width, self.trials)
        return self._pads[name]

    def phasor(self) -> ComplexArray:
        """Return vectors of unit length and unknown phase, (trials, 1)."""
        turned: ComplexArray = np.exp(2j * np.pi * self.rng.uniform(size=(self.trials, 1)))
        return turned

    def circular(self, sigma: FloatArray) -> ComplexArray:
        """Return circular complex noise with rms `sigma` (n,), (trials, n)."""
        pairs = self.rng.standard_normal((self.trials, sigma.size, 2))
        noise: ComplexArray = pairs.view(np.complex128)[..., 0]
        noise *= sigma / np.sqrt(2.0)
        return noise

    def perturb(self, sweep: Sweep, plan: FigurePlan, doubts: SweepDoubts) -> ComplexArray:
        """Return copies of a sweep at the device as it might have been read, (trials, 2, 2, n)."""
        s = np.repeat(sweep.s[None], self.trials, axis=0)
        into = self._pads_factor(doubts.input_weights)
        out = self._pads_factor(doubts.output_weights)
        through: ComplexArray | FloatArray = into * out
        if self.active("reading") and doubts.reading_db > 0.0:
            through = through * self._reading(doubts.reading_db)
        if self.active("mismatch"):
            through = through * self._joints(sweep, doubts)
        s[:, 1, 0] *= through
        if "S12" in sweep.measured:
            s[:, 0, 1] *= through
        second = into if doubts.turned else out
        for i, weights, vectors in ((0, into, doubts.input_vectors), (1, second, doubts.output_vectors)):
            if f"S{i + 1}{i + 1}" not in sweep.measured:
                continue
            s[:, i, i] *= weights**2
            if self.active("reading") and doubts.reading_db > 0.0:
                s[:, i, i] *= self._reading(doubts.reading_db)
            if self.active("directivity"):
                s[:, i, i] += sum(vector * self.phasor() for vector in vectors)
            if self.active("mismatch"):
                s[:, i, i] += self._seen_through(sweep, doubts, i)
        for source, sigma in self._sample_noise(sweep, plan):
            if self.active(source):
                for name, spread in sigma.items():
                    if np.any(spread):
                        s[:, int(name[1]) - 1, int(name[2]) - 1] += self.circular(spread)
        return s

    def _pads_factor(self, weights: Mapping[str, int]) -> FloatArray:
        total = np.zeros(self.trials)
        for name, sign in weights.items():
            total = total + sign * self.pad_db(name)
        return from_db(total)[:, None]

    def _reading(self, reading_db: float) -> ComplexArray:
        # The same share in magnitude and in phase: 0.05 dB is 0.58 %, hence 0.33°.
        spread = np.log(10.0) / 20.0 * reading_db
        both = self.rng.normal(0.0, spread, (self.trials, 2)) @ np.array([1.0, 1j])
        factor: ComplexArray = np.exp(both)[:, None]
        return factor

    def _joints(self, sweep: Sweep, doubts: SweepDoubts) -> ComplexArray:
        factor: ComplexArray = np.ones((self.trials, 1), np.complex128)
        shape = sweep.s21 / np.max(np.abs(sweep.s21))
        for joint in (*doubts.input_joints, *doubts.output_joints):
            seen: ComplexArray | float = 1.0
            if joint.device is not None:
                seen = sweep.s11 if joint.device == "S11" else sweep.s22
            product = joint.magnitude * self.phasor() * seen
            if joint.resonant > 0.0:
                product = product + joint.resonant * self.phasor() * shape
            for pad in joint.through:
                product = product * from_db(-2.0 * self.pad_db(pad))[:, None]
            factor = factor * (1.0 + product)
        return factor

    def _seen_through(self, sweep: Sweep, doubts: SweepDoubts, port: int) -> ComplexArray:
        """Return what the ports' own match adds to a reflection: round the near joint, and through to the far port."""
        sides = (doubts.input_ports, doubts.output_ports)
        near, far = sides if port == 0 else sides[::-1]
        added: ComplexArray = sum(size * self.phasor() for size in near) * sweep.s[port, port] ** 2
        if port == 0:
            for product in doubts.input_between:
                added = added + product * self.phasor() * sweep.s11
        if "S12" in sweep.measured and "S21" in sweep.measured:
            added = added + sum(size * self.phasor() for size in far) * (sweep.s12 * sweep.s21)
        return added

    def _sample_noise(self, sweep: Sweep, plan: FigurePlan) -> Iterator[tuple[str, dict[str, FloatArray]]]:
        yield (
            "noise",
            {
                name: (plan.noise.get(name) or NOISE_FREE).sigma(np.abs(sweep.s[int(name[1]) - 1, int(name[2]) - 1]))
                for name in sweep.measured
            },
        )
        misfit = np.zeros(sweep.frequency_hz.size)
        for fit in (*plan.passband.curve.fits, *plan.design_curve.fits):
            misfit[fit.start : fit.stop] = np.maximum(misfit[fit.start : fit.stop], fit.misfit)
        yield "interpolation", {"S21": misfit}


def source_doubt_db(analyzer: Analyzer) -> float:
    """Return the half-width of the source level in dB."""
    stated = analyzer.source_tolerance_db
    return ASSUMED["source level tolerance"] if stated is None else stated
