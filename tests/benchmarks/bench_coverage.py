"""How often the 95 % intervals hold the truth, and how wide they are, over random benches whose truth is known.

Each bench is a device with closed-form scattering parameters (single-tuned amplifier, two- and three-pole filter,
phase network), an added input pad and sometimes an output pad whose loss is drawn from its tolerance, reflections of
ports, pads and device with drawn phases, a reading error, directivity, additive and proportional noise. The cascade
is exact; the tool sees only the sweep and the sheet.

"Ideal" is the width between the 2.5 % and 97.5 % points of the tool's own value when the very same bench is measured
again and again with fresh errors: what the known draws justify.

Run: python tests/benchmarks/bench_coverage.py [BENCHES] [SEED]
"""

from __future__ import annotations

import sys
import time
from collections import defaultdict
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy import signal

from benchtool.analysis import correct_sweep
from benchtool.compression import MeasuredSweep
from benchtool.doubts import sweep_doubts
from benchtool.figures import plan_figures, target_key
from benchtool.model import Sweep
from benchtool.pads import PadBank, cascade
from benchtool.sheet import Analyzer, BenchSheet, Calibration, Device, Pad, SweepEntry, TargetSpec
from benchtool.uncertainty import figure_trials
from benchtool.verdict import judge

FIGURES = ("gain", "peak_gain", "peak_frequency", "bandwidth", "loaded_q", "group_delay", "input_return_loss")
PORT_DB, DIRECTIVITY_DB, READING_DB, TOLERANCE_DB, PAD_RETURN_DB = 34.0, 40.0, 0.05, 0.3, 30.0


def phasor(rng):
    return np.exp(2j * np.pi * rng.uniform())


def circular(rng, sigma):
    return sigma / np.sqrt(2) * (rng.standard_normal(sigma.shape) + 1j * rng.standard_normal(sigma.shape))


@dataclass
class Bench:
    """A device whose truth is known, and the bench it stands on."""

    kind: str
    full: bool
    design_hz: float
    frequency_hz: np.ndarray
    parameters: tuple
    pads: tuple[float, float]
    """Labels of the added pads, input and output, dB; 0: none."""
    floor: float
    trace: float

    def device(self, f):
        """S at frequencies f, closed form, (2, 2, n)."""
        shape, f0, b, gain, s11, s22, delay = self.parameters
        x = 2 * (f - f0) / b if shape[0] != "single" else f0 / b * (f / f0 - f0 / f)
        line = np.exp(-2j * np.pi * (f - f0) * delay)
        zeros, poles, k = shape[1]
        through = signal.freqs_zpk(zeros, poles, k, x)[1]
        s21 = gain * through * line
        inner = 1 / (1 + 1j * f0 / b * (f / f0 - f0 / f))
        if self.full:
            # A lossy reciprocal filter: reflects what it does not pass, less its loss.
            reflect = 0.15 + 0.75 * (1 - inner)
            return np.array([[reflect * s11[0], s21], [s21, reflect * s22[0]]])
        zero = np.zeros_like(s21)
        return np.array([[s11[0] + s11[1] * inner, zero], [s21, s22[0] + s22[1] * inner]])

    def truth(self):
        """Figures from a grid 400 times denser than any sweep, by parabolas: independent of the tool."""
        f0, b = self.parameters[1], self.parameters[2]
        f = np.linspace(f0 - 2.5 * b, f0 + 2.5 * b, 400001)
        s = self.device(f)
        level = 20 * np.log10(np.abs(s[1, 0]))
        top = int(np.argmax(level))
        target = level[top] - 10 * np.log10(2)
        low = top - int(np.argmax(level[top::-1] < target))
        high = top + int(np.argmax(level[top:] < target))

        def cross(i, j):
            return f[i] + (f[j] - f[i]) * (level[i] - target) / (level[i] - level[j])

        lower, upper = cross(low + 1, low), cross(high - 1, high)
        at = self.design_hz + np.array([-1.0, 0.0, 1.0]) * 1e-4 * b
        sd = self.device(at)[1, 0]
        band = (f >= lower) & (f <= upper)
        return {
            "gain": 20 * np.log10(abs(sd[1])),
            "peak_gain": level[top],
            "peak_frequency": f[top],
            "bandwidth": upper - lower,
            "loaded_q": np.sqrt(lower * upper) / (upper - lower),
            "group_delay": -np.angle(sd[2] * np.conj(sd[0])) / (2 * np.pi * (at[2] - at[0])),
            "input_return_loss": -20 * np.log10(np.max(np.abs(s[0, 0][band]))),
        }

    def measure(self, rng):
        """One sweep of the bench with fresh errors, as the analyzer would give it."""
        f = self.frequency_hz
        s = self.device(f)
        reflection = 10 ** (-PAD_RETURN_DB / 20)
        for side, label in enumerate(self.pads):
            if label:
                k = 10 ** (-(label + rng.uniform(-TOLERANCE_DB, TOLERANCE_DB)) / 20) * np.ones_like(f)
                pad = np.array(
                    [[reflection * phasor(rng) * np.ones_like(f), k], [k, reflection * phasor(rng) * np.ones_like(f)]]
                )
                s = cascade(pad, s) if side == 0 else cascade(s, pad)
        port = 10 ** (-PORT_DB / 20)
        gs, gl = port * phasor(rng), port * phasor(rng)
        loop = (1 - gs * s[0, 0]) * (1 - gl * s[1, 1]) - gs * gl * s[0, 1] * s[1, 0]
        seen = np.zeros_like(s)
        seen[1, 0], seen[0, 1] = s[1, 0] / loop, s[0, 1] / loop
        far = s[0, 1] * s[1, 0]
        d1, d2 = (10 ** (-DIRECTIVITY_DB / 20) * phasor(rng) for _ in range(2))
        in1 = s[0, 0] + far * gl / (1 - s[1, 1] * gl)
        in2 = s[1, 1] + far * gs / (1 - s[0, 0] * gs)
        seen[0, 0], seen[1, 1] = d1 + in1 / (1 - gs * in1), d2 + in2 / (1 - gs * in2)
        spread = READING_DB * np.log(10) / 20
        through = np.exp(spread * (rng.standard_normal() + 1j * rng.standard_normal()))
        for i in range(2):
            for j in range(2):
                own = through if i != j else np.exp(spread * (rng.standard_normal() + 1j * rng.standard_normal()))
                peak = np.max(np.abs(seen[1, 0]))
                sigma = np.hypot(self.floor * (peak if i != j else 1.0), self.trace * np.abs(seen[i, j]))
                seen[i, j] = seen[i, j] * own + circular(rng, sigma)
        if not self.full:
            seen[0, 1] = seen[1, 1] = 0
        return Sweep("sweep.s2p", f, seen, ("S11", "S21", "S12", "S22") if self.full else ("S11", "S21"))

    def sheet(self):
        """The sheet a careful person would write for it."""
        pads = {
            f"p{side}": Pad(loss_db=label, tolerance_db=TOLERANCE_DB, return_loss_db=PAD_RETURN_DB)
            for side, label in enumerate(self.pads)
            if label
        }
        entry = SweepEntry(
            file=Path("sweep.s2p"),
            name="sweep.s2p",
            input_pads=("p0",) if self.pads[0] else (),
            output_pads=("p1",) if self.pads[1] else (),
        )
        kind = {"filter": "filter", "network": "network"}.get(self.kind, "amplifier")
        device = Device(name=self.kind, kind=kind, design_hz=self.design_hz, sweeps=(entry,))
        analyzer = Analyzer(
            source_dbm=-10.0, directivity_db=DIRECTIVITY_DB, port_match_db=PORT_DB, reading_db=READING_DB
        )
        return BenchSheet(folder=Path(), analyzer=analyzer, pads=pads, calibration=Calibration(), devices=(device,))


def draw_bench(rng):
    """A random bench: kind, response, pads, noise and points as on real benches."""
    kind = rng.choice(["amplifier", "filter", "network"], p=[0.4, 0.4, 0.2])
    f0 = 10 ** rng.uniform(6.7, 9.0)
    b = f0 / rng.uniform(8, 60)
    full = kind == "filter" or bool(rng.integers(2))
    if kind == "filter":
        order = int(rng.choice([2, 3]))
        kinds = [signal.buttap(order), signal.cheb1ap(order, 0.3), signal.besselap(order, norm="mag")]
        shape = ("multi", kinds[rng.integers(3)])
        gain = 10 ** (-rng.uniform(0.5, 4) / 20)
    else:
        shape = ("single", signal.buttap(1))
        gain = 10 ** ((rng.uniform(6, 40) if kind == "amplifier" else -rng.uniform(1, 10)) / 20)
        if kind == "network":
            full = False
    delay = rng.uniform(0, 0.3) / b if kind == "network" else rng.uniform(0, 0.02) / b
    # What the tool assumes of a port it cannot see is drawn as assumed: 10 dB return loss at the input and 3 dB at the
    # output, and as much again that follows the resonance.
    s11 = (10 ** (-10 / 20) * phasor(rng), 10 ** (-10 / 20) * phasor(rng))
    s22 = (10 ** (-3 / 20) * phasor(rng), 10 ** (-3 / 20) * phasor(rng))
    if kind == "filter":
        s11, s22 = (phasor(rng), 0.0), (phasor(rng), 0.0)
    points = int(rng.choice([101, 201, 401, 801, 1601]))
    span = rng.uniform(2.5, 8) * b
    f = f0 + rng.uniform(-0.1, 0.1) * b + np.linspace(-span / 2, span / 2, points)
    pads = (float(rng.choice([0, 3, 6])), float(rng.choice([0, 0, 3, 6])))
    if kind == "amplifier" and not full and rng.uniform() < 0.4:
        pads = (float(rng.choice([10, 20])), pads[1])
    design = f0 + rng.uniform(-0.15, 0.15) * b
    full = bool(full and kind != "amplifier")
    return Bench(
        str(kind),
        full,
        design,
        f,
        (shape, f0, b, gain, s11, s22, delay),
        pads,
        10 ** (-rng.uniform(30, 70) / 20),
        10 ** (rng.uniform(-3.8, -2.6)),
    )


def evaluate(bench, sweep, trials, seed):
    """The tool's figures and possible true values of one sweep."""
    sheet = bench.sheet()
    bank = PadBank.of(sheet)
    device, entry = sheet.devices[0], sheet.devices[0].sweeps[0]
    result = correct_sweep(sheet, entry, sweep, bank, bench.design_hz)
    plan = plan_figures(result.sweep, device.kind, device.design_hz, None)
    figures = plan.figures(result.sweep.s)
    if not trials:
        return figures, None, None
    doubts = sweep_doubts(sweep, entry, sheet, bank, bench.design_hz)
    found = figure_trials(MeasuredSweep(result, plan), doubts, bank, figures, 0.95, trials=trials, seed=seed)
    return found.figures, found.values, doubts


def of(figures, name):
    """The figure under its general name, and the sign it has there."""
    if name == "gain" and "insertion_loss" in figures:
        return figures["insertion_loss"], "insertion_loss", -1.0
    return figures[name], name, 1.0


def run(benches, seed, trials=1000, ideal_every=10, repeats=80):
    """Count hits, verdicts and widths over random benches; returns a dict of counts."""
    rng = np.random.default_rng(seed)
    hits, widths, verdicts = defaultdict(list), defaultdict(list), []
    for number in range(benches):
        bench = draw_bench(rng)
        truth = bench.truth()
        figures, values, doubts = evaluate(bench, bench.measure(rng), trials, number)
        again = defaultdict(list)
        if number % ideal_every == 0:
            for _ in range(repeats):
                repeated, _, _ = evaluate(bench, bench.measure(rng), 0, 0)
                for name in FIGURES:
                    if of(repeated, name)[0].value is not None:
                        again[name].append(of(repeated, name)[0].value)
        for name in FIGURES:
            figure, key, sign = of(figures, name)
            if figure.value is None or figure.low is None or figure.high is None or figure.bound is not None:
                continue
            if name == "input_return_loss" and doubts.reflection_doubt("S11") > 0.3:
                continue
            true = sign * truth[name]
            hits[name].append(figure.low <= true <= figure.high)
            if len(again[name]) > 10:
                low, high = np.quantile(again[name], [0.025, 0.975])
                if high > low:
                    widths[name].append((figure.high - figure.low) / (high - low))
            # A one-sided target somewhere near the figure: is the verdict as likely right as it says?
            limit = figure.value + rng.normal(0, 1.5) * max(figure.standard_uncertainty, 1e-300)
            target = TargetSpec(figure=figure.id, min=limit)
            assert target_key(target) == key
            verdict = judge(figure, target, values[key])
            if verdict.probability is not None:
                verdicts.append((verdict.probability, true >= limit))
    return hits, widths, verdicts


def main():
    benches = int(sys.argv[1]) if len(sys.argv) > 1 else 500
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else 1
    start = time.perf_counter()
    hits, widths, verdicts = run(benches, seed)
    print(f"{benches} benches, seed {seed}, {time.perf_counter() - start:.0f} s")
    print(f"{'figure':20s} {'benches':>8s} {'held':>8s} {'width/ideal':>12s}")
    for name in FIGURES:
        ratio = f"{np.median(widths[name]):.2f}" if widths[name] else "-"
        mean = f"{np.mean(widths[name]):.2f}" if widths[name] else "-"
        print(f"{name:20s} {len(hits[name]):8d} {np.mean(hits[name]):8.1%} {mean:>6s} (median {ratio})")
    sure = [right for p, right in verdicts if p >= 0.9] + [not right for p, right in verdicts if p <= 0.1]
    print(f"verdicts given with probability 0.9 to 1.0: {len(sure)}, right {np.mean(sure):.1%}")


if __name__ == "__main__":
    main()
