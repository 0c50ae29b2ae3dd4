"""One sweep, its plan of figures and its sources of doubt in; copies of it as it might have been read, out.

Only the samples that some figure rests on are copied. Distributions are those of :mod:`benchtool.doubts`.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchtool.doubts import Joint, SweepDoubts, pad_doubt_db
from benchtool.figures import FigurePlan
from benchtool.fitting import Part
from benchtool.model import ComplexArray, FloatArray, Sweep
from benchtool.noise import NOISE_FREE
from benchtool.pads import PadBank
from benchtool.units import from_db

__all__ = ["Draws"]

_REFLECTIONS: Final = {"S11": 0, "S22": 1}


class Draws:
    """Draws of the quantities that bear on all of a sweep, made on demand and kept, (trials,) each.

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
        """Return circular complex noise with rms `sigma` (m,), (trials, m)."""
        # Seven digits are plenty for noise, and are drawn in half the time.
        pairs = self.rng.standard_normal((self.trials, sigma.size, 2), np.float32)
        noise: ComplexArray = pairs.view(np.complex64)[..., 0] * (sigma / np.sqrt(2.0))
        return noise

    def perturb(self, sweep: Sweep, plan: FigurePlan, doubts: SweepDoubts) -> dict[str, Part]:
        """Return copies of a sweep at the device as it might have been read, (trials, m) of each parameter in use."""
        into = self._pads_factor(doubts.input_weights)
        out = self._pads_factor(doubts.output_weights)
        through: ComplexArray | FloatArray = into * out
        if self.active("reading") and doubts.reading_db > 0.0:
            through = through * self._reading(doubts.reading_db)
        joints = list(self._joints(doubts)) if self.active("mismatch") else []
        copies: dict[str, ComplexArray] = {}
        for name, used in plan.used.items():
            trace = _trace(sweep, name)[used]
            if name not in _REFLECTIONS:
                copies[name] = trace * through
                for joint in joints:
                    copies[name] *= joint.factor(sweep, used)
                continue
            port = _REFLECTIONS[name]
            turned = port == 1 and not doubts.turned
            factor: ComplexArray | FloatArray = (out if turned else into) ** 2
            if self.active("reading") and doubts.reading_db > 0.0:
                factor = factor * self._reading(doubts.reading_db)
            copies[name] = (trace * factor).astype(np.complex128, copy=False)
            if self.active("directivity"):
                vectors = doubts.output_vectors if port else doubts.input_vectors
                copies[name] += sum(vector * self.phasor() for vector in vectors)
            if self.active("mismatch"):
                copies[name] += self._seen_through(sweep, doubts, port, used)
        for source, sigma in self._sample_noise(sweep, plan):
            if self.active(source):
                for name, spread in sigma.items():
                    if np.any(spread):
                        copies[name] = copies[name] + self.circular(spread)
        return {
            name: Part(np.broadcast_to(values, (self.trials, values.shape[-1])), plan.used[name])
            for name, values in copies.items()
        }

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

    def _joints(self, doubts: SweepDoubts) -> Iterator[_DrawnJoint]:
        for joint in (*doubts.input_joints, *doubts.output_joints):
            passed: FloatArray = np.ones((self.trials, 1))
            for pad in joint.through:
                passed = passed * from_db(-2.0 * self.pad_db(pad))[:, None]
            product = joint.magnitude * self.phasor() * passed
            resonant = joint.resonant * self.phasor() * passed if joint.resonant > 0.0 else None
            yield _DrawnJoint(joint, product, resonant)

    def _seen_through(self, sweep: Sweep, doubts: SweepDoubts, port: int, used: NDArray[np.intp]) -> ComplexArray:
        """Return what the ports' own match adds to a reflection: round the near joint, and through to the far port."""
        sides = (doubts.input_ports, doubts.output_ports)
        near, far = sides if port == 0 else sides[::-1]
        own = sweep.s[port, port, used]
        added: ComplexArray = sum(size * self.phasor() for size in near) * own**2
        if port == 0:
            for product in doubts.input_between:
                added = added + product * self.phasor() * own
        if "S12" in sweep.measured and "S21" in sweep.measured:
            added = added + sum(size * self.phasor() for size in far) * (sweep.s12[used] * sweep.s21[used])
        return added

    def _sample_noise(self, sweep: Sweep, plan: FigurePlan) -> Iterator[tuple[str, dict[str, FloatArray]]]:
        yield (
            "noise",
            {
                name: (plan.noise.get(name) or NOISE_FREE).sigma(np.abs(_trace(sweep, name)[used]))
                for name, used in plan.used.items()
            },
        )
        misfit = np.zeros(sweep.frequency_hz.size)
        for fit in (*plan.passband.curve.fits, *plan.design_curve.fits):
            misfit[fit.start : fit.stop] = np.maximum(misfit[fit.start : fit.stop], fit.misfit)
        yield "interpolation", {"S21": misfit[plan.used["S21"]]}


class _DrawnJoint:
    """One joint of reflections with its phases drawn."""

    def __init__(self, joint: Joint, product: ComplexArray, resonant: ComplexArray | None) -> None:
        self._joint, self._product, self._resonant = joint, product, resonant

    def factor(self, sweep: Sweep, used: NDArray[np.intp]) -> ComplexArray:
        """Return what the joint makes of a wave that goes through it, at the samples in use."""
        device = self._joint.device
        added = self._product if device is None else self._product * _trace(sweep, device)[used]
        if self._resonant is not None:
            added = added + self._resonant * (sweep.s21[used] / np.max(np.abs(sweep.s21)))
        return 1.0 + added


def _trace(sweep: Sweep, name: str) -> ComplexArray:
    trace: ComplexArray = sweep.s[int(name[1]) - 1, int(name[2]) - 1]
    return trace
