"""A seed in; a random bench session whose one cause is known out: sheet, sweeps as the analyzer would read them, truth.

The maker shares nothing with the tool but the sheet and the sweep: laws of limiting are written out again here, and
pads, readings and noise are drawn as a bench draws them. Mismatch is not drawn but follows: every pad has two faces
that reflect, the device's ports reflect up to 0.8 and change through their tank's resonance, and the line is cascaded
whole, so that sweeps through the same pads have the same mismatch.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from scipy.optimize import brentq, linprog

from benchtool.model import Sweep
from benchtool.sheet import Analyzer, BenchSheet, Calibration, Device, Pad, SweepEntry

CAUSES = ("clean", "output", "input", "pad", "receiver", "noise", "drift")
READING_DB = 0.05
SOURCE_DBM, SOURCE_HALF_DB = -8.0, 0.5
LOSSES = {"b10": 10.0, "c10": 10.0, "a3": 3.0, "a6": 6.0, "a10": 10.0, "a20": 20.0, "d10": 10.0}
TOLERANCE_DB = 0.3
PAD_REFLECTION, PORT_REFLECTION = 0.04, 0.03
"""28 dB of the sheet's pads, 30.5 dB of its ports."""
INPUT_REFLECTION, OUTPUT_REFLECTION = (0.05, 0.8), (0.2, 0.8)
"""Reach of the device's own reflections, on and off resonance each (common practice, no source)."""
LADDERS = (
    [("a20",), ()],
    [("a10",), ()],
    [("a20",), ("a6",)],
    [("a20",), ("a10",), ()],
    [("a20", "a3"), ("a10",), ()],
    [("a10",), ("a6",), ()],
    [("a20", "a6"), ("a20",), ("a6",), ()],
    [("a20", "a10"), ("a20",), ("a10",), ()],
    [("a10", "a6"), ("a10",), ("a6",), ("a3",), ()],
    [("a20", "a10"), ("a20",), ("a10", "a3"), ("a3",), ()],
)


def fundamental_drop_db(excess_db, law, p):
    """Return the drop of gain in dB at levels over the 1 dB point, by laws written out for this maker."""
    x = 10 ** (np.asarray(excess_db, float) / 20)
    if law == "rapp":
        knee = (10 ** (p / 10) - 1) ** (1 / (2 * p))
        return 20 * np.log10((1 + (knee * x) ** (2 * p)) ** (1 / (2 * p)))
    if law == "cubic":
        third = (1 - 10 ** (-1 / 20)) * np.minimum(x, 1.7507) ** 2  # output held past its maximum
        return -20 * np.log10(1 - third) + 20 * np.log10(np.maximum(x / 1.7507, 1.0))
    theta = (np.arange(400) + 0.5) * np.pi / 800
    drive = 0.71269 * x[..., None]  # half of 1.42538 VT
    return -20 * np.log10(2 * np.mean(np.tanh(drive * np.cos(theta)) * np.cos(theta), axis=-1) / drive[..., 0])


def excess_for(drop_db, law, p):
    """Return the level over the 1 dB point at which gain has dropped by `drop_db`."""
    return brentq(lambda e: float(fundamental_drop_db(np.array([e]), law, p)[0]) - drop_db, -70.0, 60.0)


def phasor(rng, f, most_delay_s=0.0):
    """Return a vector of unit length whose phase nobody knows, turning along a line of some length."""
    return np.exp(2j * np.pi * (rng.uniform() - f * rng.uniform(0, most_delay_s)))


class Line:
    """What stands either side of the device, drawn once for a bench, and the device's own reflections."""

    def __init__(self, rng, f, loss, tank):
        self.f = f
        self.pads = {}
        for name, loss_db in loss.items():
            faces = [PAD_REFLECTION * phasor(rng, f, 1e-9) for _ in range(2)]
            self.pads[name] = (faces, 10 ** (-loss_db / 20) * np.exp(-2j * np.pi * f * 95e-12))
        self.source, self.load = (PORT_REFLECTION * phasor(rng, f, 2e-9) for _ in range(2))
        self.s11, self.s22 = (self._port(rng, reach, tank) for reach in (INPUT_REFLECTION, OUTPUT_REFLECTION))

    def _port(self, rng, reach, tank):
        off, on = (rng.uniform(*reach) * phasor(rng, self.f) for _ in range(2))
        return off + (on - off) * tank

    def measure(self, s21, pads_in, pads_out):
        """Return S11 and S21 as read at the calibration planes, pads from the analyzer outwards, nothing else wrong."""
        s11, s22 = self.s11, self.s22
        for name in reversed(pads_in):
            (near, far), through = self.pads[name]
            round_trip = 1 - far * s11
            s11, s21 = near + through**2 * s11 / round_trip, s21 * through / round_trip
        for name in reversed(pads_out):
            (near, far), through = self.pads[name]
            round_trip = 1 - s22 * far
            s22, s21 = near + through**2 * s22 / round_trip, s21 * through / round_trip
        return s11 / (1 - self.source * s11), s21 / ((1 - self.source * s11) * (1 - self.load * s22))


@dataclass
class Bench:
    """A bench session: what the tool sees (`sheet`, `entries`, `sweeps`) and what is true."""

    seed: int
    cause: str
    law: str
    p: float
    sheet: BenchSheet
    entries: list
    sweeps: list
    design_hz: float
    pad_losses_db: dict = field(default_factory=dict)
    """What each pad truly loses."""
    input_p1db_dbm: float | None = None
    shape_db: float = 0.0
    """By how much more the gain truly changes at one node than at another, largest over the sweeps."""
    flat_db: np.ndarray = field(default_factory=lambda: np.zeros(1))
    """True drop of each sweep at the peak, dB."""
    drives: np.ndarray = field(default_factory=lambda: np.zeros(1))
    buried: float = 0.0
    receiver_near: bool = False
    output_pads_tell_db: float = 0.0
    """Change of gain between two sweeps of one drive that differ in output pads only."""
    repeat_db: float = 0.0
    """Largest change between two sweeps of one line."""


def make_bench(seed: int, cause: str | None = None) -> Bench:
    """Return the bench of a seed."""
    rng = np.random.default_rng([seed, 404])
    cause = cause or str(rng.choice(CAUSES))
    law = str(rng.choice(["rapp", "rapp", "tanh", "cubic"]))
    p = float(np.exp(rng.uniform(np.log(0.7), np.log(5.0))))
    ladder = [(list(pads), []) for pads in LADDERS[rng.integers(len(LADDERS))]]
    if cause in ("output", "receiver", "clean") and rng.uniform() < 0.5:
        ladder.append((ladder[-1][0], ["d10"]))
    if (cause == "drift" and rng.uniform() < 0.6) or rng.uniform() < 0.15:
        ladder.append(ladder[0])
    ladder = ladder[:6]
    f0 = 21.4e6
    band = rng.uniform(0.4e6, 1.5e6)
    f = np.linspace(
        f0 - 0.5 * band * rng.uniform(5, 10), f0 + 0.5 * band * rng.uniform(5, 10), int(rng.choice([201, 401]))
    )
    peak = f0 + rng.uniform(-0.1, 0.1) * band
    gain_db = rng.uniform(15, 38)
    sections = int(rng.integers(1, 3))

    def tank():
        q = peak / (band / np.sqrt(2 ** (1 / sections) - 1))
        return 1 / (1 + 1j * q * (f / peak - peak / f))

    def response(shift_hz=0.0):
        q = peak / (band / np.sqrt(2 ** (1 / sections) - 1))
        detuned = q * (f / (peak + shift_hz) - (peak + shift_hz) / f)
        return 10 ** (gain_db / 20) / (1 + 1j * detuned) ** sections * np.exp(-2j * np.pi * f * 20e-9)

    loss = {name: value + rng.uniform(-TOLERANCE_DB, TOLERANCE_DB) for name, value in LOSSES.items()}
    source = SOURCE_DBM + rng.uniform(-SOURCE_HALF_DB, SOURCE_HALF_DB)
    floor_db = -rng.uniform(95, 110)
    wrong = None
    if cause == "pad":
        used = sorted({pad for pads, out in ladder for pad in (*pads, *out)})
        wrong = str(rng.choice(used))
        loss[wrong] = LOSSES[wrong] + rng.choice([-1, 1]) * rng.uniform(0.5, 3.0)
    drive = np.array([source - loss["b10"] - sum(loss[pad] for pad in pads) for pads, _ in ladder])
    out_db = np.array([loss["c10"] + sum(loss[pad] for pad in out) for _, out in ladder])
    line = Line(np.random.default_rng([seed, 405]), f, loss, tank())
    device = response()
    level = 20 * np.log10(np.abs(device))
    strongest = int(np.argmax(drive - out_db))
    at_port2 = drive[strongest] + level.max() - out_db[strongest]
    stated = at_port2 + rng.uniform(12, 30)
    deepest = rng.uniform(0.5, 8.0)
    p1db = None
    receiver_p1db = None
    follows = "output"
    near = False
    if cause == "output":
        p1db = float(np.max(drive)) + level.max() - excess_for(deepest, law, p)
        if rng.uniform() < 0.25:
            near = True
            # What the receiver would have to be stated as to explain the very same drop.
            stated = at_port2 - excess_for(deepest, law, p) - 1.0 + rng.uniform(-2, 2)
    elif cause == "input":
        follows = "input"
        p1db = float(np.max(drive)) - excess_for(deepest, law, p)
    elif cause == "receiver":
        near = True
        receiver_p1db = at_port2 - excess_for(rng.uniform(0.5, 6.0), law, p)
        stated = receiver_p1db - 1.0 + rng.uniform(-2, 2)
    if p1db is None:
        p1db = float(np.max(drive)) + level.max() - excess_for(rng.uniform(0.0005, 0.03), law, p)
    at_design = np.interp(f0, f, level)
    if cause == "noise":
        quiet = int(np.argmin(drive))
        raw = level - sum(LOSSES[pad] for pad in ladder[quiet][0])
        floor_db = float(np.quantile(raw, rng.uniform(0.3, 0.7))) - rng.uniform(3, 8)
    drift_db = np.zeros(len(ladder))
    drift_hz = np.zeros(len(ladder))
    if cause == "drift":
        drift_db = rng.normal(0, 1.0, len(ladder))
        drift_db[0] += rng.choice([-1, 1]) * 0.5
        drift_hz = rng.normal(0, 0.05 * band, len(ladder)) * (rng.uniform() < 0.6)
    tilt_db = rng.normal(0, 0.3) * (f - f0) / np.ptp(f)  # the load, and so the output limit, changes over the sweep
    pull_hz = rng.normal(0, 0.003 * band) * (rng.uniform() < 0.5) * (cause == "output" and not near)  # a dB of drop
    turn = rng.uniform(0, 3.0) * (rng.uniform() < 0.5)
    entries, sweeps, drops, true = [], [], [], []
    for k, (pads, out) in enumerate(ladder):
        own = response(drift_hz[k]) * 10 ** (drift_db[k] / 20)
        own_db = 20 * np.log10(np.abs(own))
        at_input = drive[k] + np.zeros(f.size)
        excess = at_input - p1db + (own_db - tilt_db if follows == "output" else 0.0)
        drop = fundamental_drop_db(excess, law, p)
        own = own * response(pull_hz * float(np.max(drop))) / device
        if receiver_p1db is not None:
            drop = drop + fundamental_drop_db(drive[k] + own_db - drop - out_db[k] - receiver_p1db, law, p)
        s21 = own * 10 ** (-drop / 20) * np.exp(1j * np.radians(turn * drop))
        drops.append(drop - own_db + level)
        s11, through = line.measure(s21, pads, out)
        reading = 10 ** (rng.normal(0, READING_DB) / 20) * np.exp(1j * rng.normal(0, READING_DB / 8.686))
        raw = through * reading
        true.append(20 * np.log10(np.abs(s21)) + sum(LOSSES[pad] - loss[pad] for pad in (*pads, *out)))
        noise = 10 ** (floor_db / 20) * (rng.normal(size=f.size) + 1j * rng.normal(size=f.size)) / np.sqrt(2)
        trace = 1 + 3e-4 * (rng.normal(size=f.size) + 1j * rng.normal(size=f.size))
        s = np.zeros((2, 2, f.size), complex)
        s[0, 0] = s11
        s[1, 0] = raw * trace + noise
        name = f"sweep{k}.s2p"
        entries.append(
            SweepEntry(
                file=Path(name),
                name=name,
                input_pads=("b10", *pads),
                output_pads=("c10", *out),
                source_dbm=SOURCE_DBM,
            )
        )
        sweeps.append(Sweep(name, f, s, measured=("S11", "S21")))
    sheet = BenchSheet(
        folder=Path(),
        analyzer=Analyzer(
            source_dbm=SOURCE_DBM,
            source_tolerance_db=SOURCE_HALF_DB,
            port2_compression_dbm=float(np.clip(stated, -99, 59)),
            reading_db=READING_DB,
            port_match_db=30.5,
        ),
        pads={name: Pad(loss_db=value, tolerance_db=TOLERANCE_DB, return_loss_db=28) for name, value in LOSSES.items()},
        calibration=Calibration(input_pads=("b10",), output_pads=("c10",)),
        devices=(Device(name="device", kind="amplifier", design_hz=f0, sweeps=tuple(entries)),),
    )
    bench = Bench(seed, cause, law, p, sheet, entries, sweeps, f0, loss)
    bench.input_p1db_dbm = p1db - (at_design if follows == "output" else 0.0)
    _note_truth(bench, ladder, np.array(drops), np.array(true), level, floor_db)
    bench.receiver_near = near
    return bench


def _note_truth(bench, ladder, drops, true, level, floor_db):
    """Write what an argument about the bench needs: noise-free changes, as the sheet's pads would show them."""
    nominal = np.array([SOURCE_DBM - 10.0 - sum(LOSSES[pad] for pad in pads) for pads, _ in ladder])
    top = int(np.argmax(level))
    seen = level > level.max() - 40.0
    change = true - true[int(np.argmin(nominal))]
    bench.shape_db = float(np.max(np.ptp(change[:, seen], axis=1)))
    bench.flat_db = true[:, top] - true[int(np.argmin(nominal)), top]
    bench.drives = nominal
    raw = [level - sum(LOSSES[pad] for pad in (*pads, *out)) for pads, out in ladder]
    bench.buried = float(max(np.mean(trace[seen] < floor_db + 10.0) for trace in raw))
    for a, (pads_a, out_a) in enumerate(ladder):
        for b, (pads_b, out_b) in enumerate(ladder[:a]):
            apart = float(np.max(np.abs(true[a][seen] - true[b][seen])))
            if pads_a == pads_b and out_a == out_b:
                bench.repeat_db = max(bench.repeat_db, apart)
            elif pads_a == pads_b:
                bench.output_pads_tell_db = max(bench.output_pads_tell_db, float(np.max(np.abs(drops[a] - drops[b]))))


def left_over_db(gain, pattern):
    """Return the range, dB, that is left of flat gain changes when the best multiple of a pattern is taken out."""
    k = gain.size
    # Unknowns: multiple, level, half-range t.
    rows = np.concatenate(
        [np.column_stack([-pattern, -np.ones(k), -np.ones(k)]), np.column_stack([pattern, np.ones(k), -np.ones(k)])]
    )
    done = linprog([0, 0, 1], rows, np.concatenate([-gain, gain]), bounds=[(None, None), (None, None), (0, None)])
    return 2.0 * float(done.fun)


def law_left_over_db(gain, drive):
    """Return the range, dB, left of flat gain changes when the best falling, ever steeper curve is taken out."""
    order = np.argsort(drive, kind="stable")
    places, index = np.unique(np.round(drive[order], 2), return_inverse=True)
    g, m = gain[order], places.size
    rows, right = [], []
    for k, at in enumerate(index):
        for sign in (1.0, -1.0):
            row = np.zeros(m + 1)
            row[at], row[m] = sign, -1.0
            rows.append(row)
            right.append(sign * g[k])
    step = np.diff(places)
    for i in range(m - 1):
        for sign, limit in ((1.0, 0.0), (-1.0, step[i])):  # gain falls, but by no more than drive rises
            row = np.zeros(m + 1)
            row[i + 1], row[i] = sign, -sign
            rows.append(row)
            right.append(limit)
    for i in range(m - 2):  # and ever more steeply
        row = np.zeros(m + 1)
        row[i + 2] += 1 / step[i + 1]
        row[i + 1] -= 1 / step[i + 1] + 1 / step[i]
        row[i] += 1 / step[i]
        rows.append(row)
        right.append(0.0)
    cost = np.zeros(m + 1)
    cost[m] = 1.0
    done = linprog(cost, np.array(rows), np.array(right), bounds=[(None, None)] * m + [(0, None)])
    return 2.0 * float(done.fun)
