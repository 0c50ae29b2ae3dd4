"""One sweep, its plan of figures and its sources of doubt in; copies of it as it might have been read, out.

Distributions are those of :mod:`benchtool.doubts`; how copies come to the figures is told in :mod:`benchtool.copies`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Final, TypeAlias

import numpy as np

from benchtool.copies import TraceCopies, TraceModel
from benchtool.doubts import Joint, SweepDoubts, pad_doubt_db
from benchtool.even_draws import EvenDraws
from benchtool.figures import FigurePlan
from benchtool.model import ComplexArray, FloatArray, Sweep
from benchtool.noise import NOISE_FREE
from benchtool.pads import PadBank
from benchtool.units import from_db

__all__ = ["Segment", "SweepCopier"]

Segment: TypeAlias = tuple[str | None, int]
"""A number of copies in which one source of doubt moves alone, as a budget needs them, or with None all together."""

_REFLECTIONS: Final = {"S11": 0, "S22": 1}


class _Draws:
    """Draws of the quantities that bear on all of a sweep, made on demand and kept, (trials,) each."""

    def __init__(self, rng: np.random.Generator, segments: Sequence[Segment], bank: PadBank) -> None:
        self.bank = bank
        self._sources = [only for only, _ in segments]
        self._counts = [count for _, count in segments]
        self._even = EvenDraws(rng, self._counts)
        self.trials = sum(self._counts)
        self._pads: dict[str, FloatArray] = {}

    def _lengths(self, source: str) -> list[float]:
        """Return one for each segment in which a source is drawn, zero for those in which it stands still."""
        return [float(only in (None, source)) for only in self._sources]

    def moves(self, source: str) -> FloatArray:
        """Return the same for each trial."""
        return np.repeat(self._lengths(source), self._counts)

    def active(self, source: str) -> bool:
        """Whether a source is drawn in any trial."""
        return any(only in (None, source) for only in self._sources)

    def pad_db(self, name: str) -> FloatArray:
        """Return the error of a pad's loss, dB: the same for every sweep."""
        if name not in self._pads:
            width, is_limit = pad_doubt_db(name, self.bank)
            source = f"pad {name}"
            if not self.active(source):
                self._pads[name] = np.zeros(self.trials)
            elif is_limit:
                self._pads[name] = width * (2.0 * self._even.uniform() - 1.0) * self.moves(source)
            else:
                self._pads[name] = width * self._even.normal(self._lengths(source)).real
        return self._pads[name]

    def pads_factor(self, weights: Mapping[str, int]) -> FloatArray:
        """Return what the errors of pads make of a wave that went through them."""
        total = np.zeros(self.trials)
        for name, sign in weights.items():
            total = total + sign * self.pad_db(name)
        return from_db(total)

    def phasor(self, source: str) -> ComplexArray:
        """Return vectors of unit length and unknown phase; of no length where their source stands still."""
        if not self.active(source):
            return np.zeros(self.trials, np.complex128)
        return self._even.phasors(self._lengths(source))

    def reading(self, reading_db: float) -> ComplexArray:
        """Return the factor of a reading's error."""
        if not self.active("reading") or reading_db <= 0.0:
            return np.ones(self.trials, np.complex128)
        # The same share in magnitude and in phase: 0.05 dB is 0.58 %, hence 0.33°.
        spread = np.log(10.0) / 20.0 * reading_db
        factor: ComplexArray = np.exp(spread * self._even.normal(self._lengths("reading")))
        return factor


class SweepCopier:
    """Makes copies of one sweep at the device; what does not change from copy to copy is worked out once."""

    def __init__(self, sweep: Sweep, plan: FigurePlan, doubts: SweepDoubts, bank: PadBank) -> None:
        self._doubts, self._bank = doubts, bank
        self._joints = (*doubts.input_joints, *doubts.output_joints)
        traces = {f"S{i + 1}{j + 1}": sweep.s[i, j] for i in range(2) for j in range(2)}
        through = traces["S21"]
        shape = through / max(float(np.max(np.abs(through))), 1e-300)
        joints = [_functions(joint, traces, shape) for joint in self._joints]
        # Turned end for end, the device shows the line its other ports.
        turned = [_functions(_turned(joint), traces, shape) for joint in self._joints]
        loop = [traces["S12"] * through] if "S12" in sweep.measured else []
        misfit = np.zeros(sweep.frequency_hz.size)
        for fit in (*plan.passband.curve.fits, *plan.design_curve.fits):
            misfit[fit.start : fit.stop] = np.maximum(misfit[fit.start : fit.stop], fit.misfit)
        self._models: dict[str, TraceModel] = {}
        for name, curves in plan.curves.items():
            own, fits = traces[name], [fit for curve in curves for fit in curve.fits]
            noises = {"noise": (plan.noise.get(name) or NOISE_FREE).sigma(np.abs(own))}
            if name not in _REFLECTIONS:
                if name == "S21":
                    noises["interpolation"] = misfit
                seen = turned if name == "S12" and doubts.turned else joints
                self._models[name] = TraceModel(own, fits, seen, (), noises)
                continue
            # Error vectors; the near joint, passed twice; between port and pad, once; the far port, through the device.
            self._models[name] = TraceModel(own, fits, (), [np.ones_like(own), own**2, own, *loop], noises)

    @property
    def samples(self) -> int:
        """How many samples each copy takes that are drawn one by one; most traces are copied as coefficients."""
        return sum(model.used.size for model in self._models.values() if model.by_samples)

    def copies(self, rng: np.random.Generator, segments: Sequence[Segment]) -> dict[str, TraceCopies]:
        """Return copies of every trace that figures are taken from, segment after segment."""
        draws = _Draws(rng, segments, self._bank)
        doubts = self._doubts
        into, out = draws.pads_factor(doubts.input_weights), draws.pads_factor(doubts.output_weights)
        through, sizes = self._through(draws, into * out)
        found = {}
        for name, model in self._models.items():
            noises = {source: draws.moves(source) for source in model.noises if draws.active(source)}
            if name == "S12" and doubts.turned:
                # Another reading, with the device the other way round; the pads are the same.
                found[name] = TraceCopies(model, rng, *self._through(draws, into * out), (), noises)
                continue
            if name not in _REFLECTIONS:
                found[name] = TraceCopies(model, rng, through, sizes, (), noises)
                continue
            first = name == "S11"
            scale = (into if first or doubts.turned else out) ** 2 * draws.reading(doubts.reading_db)
            added = self._added(draws, first, len(model.terms))
            found[name] = TraceCopies(model, rng, scale, (), added, noises)
        return found

    def _through(self, draws: _Draws, pads: FloatArray) -> tuple[ComplexArray, list[ComplexArray]]:
        """Return the factor of a wave through the line that is the same at all frequencies, and the sizes beside it."""
        factor = pads * draws.reading(self._doubts.reading_db)
        sizes: list[ComplexArray] = []
        for joint in self._joints:
            alone, seen = _drawn(joint, draws)
            factor = factor * alone
            sizes += seen
        return factor, sizes

    def _added(self, draws: _Draws, first: bool, count: int) -> list[ComplexArray]:
        """Return the size of each term of a reflection: what directivity, pads and the ports' own match add to it."""
        doubts = self._doubts
        vectors = doubts.input_vectors if first else doubts.output_vectors
        # Turned end for end, S22 was read through the input side, with S11 at the other end.
        by_input = first or doubts.turned
        near, far = (doubts.input_ports, doubts.output_ports)[:: 1 if by_input else -1]
        between = doubts.input_between if by_input else doubts.output_between
        sources = (("directivity", vectors), ("mismatch", near), ("mismatch", between), ("mismatch", far))
        nothing = np.zeros(draws.trials, np.complex128)
        return [sum((size * draws.phasor(source) for size in sizes), nothing) for source, sizes in sources[:count]]


def _turned(joint: Joint) -> Joint:
    """Return a joint as it is with the device end for end."""
    return joint if joint.device is None else replace(joint, device="S22" if joint.device == "S11" else "S11")


def _functions(joint: Joint, traces: Mapping[str, ComplexArray], shape: ComplexArray) -> list[ComplexArray]:
    """Return what of a joint follows frequency: a reflection of the device, or the resonance."""
    found = [] if joint.device is None else [traces[joint.device]]
    return [*found, shape] if joint.resonant > 0.0 else found


def _drawn(joint: Joint, draws: _Draws) -> tuple[ComplexArray, list[ComplexArray]]:
    """Return the factor of a joint that is the same at all frequencies, and the sizes of its functions beside it."""
    passed = np.ones(draws.trials)
    for pad in joint.through:
        passed = passed * from_db(-2.0 * draws.pad_db(pad))
    product = joint.magnitude * draws.phasor("mismatch") * passed
    resonant = [joint.resonant * draws.phasor("mismatch") * passed] if joint.resonant > 0.0 else []
    if joint.device is not None:
        return np.ones(draws.trials, np.complex128), [product, *resonant]
    return 1.0 + product, [size / (1.0 + product) for size in resonant]
