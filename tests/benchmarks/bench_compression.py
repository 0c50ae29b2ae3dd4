"""Causes of a gain change told apart, and the 1 dB point found, over random benches whose cause is known.

Run ``python tests/benchmarks/bench_compression.py [BENCHES] [SEED] [-v]``. Each bench has one cause at work: clean,
device limiting at its output or at its input, a pad 0.5 to 3 dB off, receiver overload, noise, or a device that changes
between sweeps. Limiting is by Rapp (p 0.7 to 5), tanh or cubic, with and without phase change; there are 2 to 6 sweeps
at 2 to 5 drives, pads within ±0.3 dB, readings good to 0.05 dB, 28 dB pads at device ports that reflect up to 0.8 and
change through the resonance, an output limit that changes over the sweep by 0.3 dB (rms) and in half of the benches
pulls the tuning by 0.3 % of the band (rms) for each dB of drop (where that would not give the receiver away); noise.

Which benches can be told, by argument and not by the tool
----------------------------------------------------------
The maker knows the gain changes of a bench without noise, as the sheet's pads would show them, and so the argument can
be carried out. Let T = 0.75 dB: twice the ±0.3 dB of a pad, and 0.15 dB for readings and mismatch. A change alike at
all frequencies of less than T may be nothing but tolerances.

* clean: always told, the answer being that there is no cause. A false alarm is any cause, named or not.
* noise: told when the weakest sweep has less than 10 dB of signal over noise in 30 % or more of its span.
* output-limited, receiver overload: the change must differ by 0.5 dB or more between two frequencies, which no pad and
  no limiting ahead of the selectivity does. The two are told from each other when the stated receiver limit is 12 dB
  or more above the level at port 2, or when two sweeps of one drive with different output pads must differ by T or
  more. They cannot be told when all sweeps have the same output pads and a receiver of the stated limit (within 2 dB)
  would show the very same drop.
* input-limited, pad, drift without a change of shape: each rival makes only certain patterns over the sweeps. A wrong
  pad: the same offset in every sweep that has it. One sweep that does not repeat: an offset there. Limiting at the
  input: a gain that falls with drive, ever more steeply, by no more than drive rises. The bench is told when every
  rival pattern, at its best, leaves at least 2 T unexplained; it cannot be told when one leaves less than T/4.
* drift also: told when two sweeps of one line differ by T or more at some frequency. With a change of shape but no line
  swept twice it belongs to neither set.

Benches that are neither "told" nor "cannot be told" are counted by themselves: whether they were named rightly, not at
all, or wrongly. In the "cannot" set the right answer names no single cause.

The 1 dB point is judged where the device limits: intervals with two ends against their 95 %, bounds by themselves.
"""

from __future__ import annotations

import sys
import time
from collections import Counter
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent))

from random_benches import Bench, law_left_over_db, left_over_db, make_bench

from benchtool.analysis import correct_sweep
from benchtool.compression import MeasuredSweep
from benchtool.compression_study import CompressionStudy, study_compression
from benchtool.figures import plan_figures
from benchtool.pads import PadBank

T_DB = 0.75
RIGHT = {
    "clean": "clean",
    "output": "output-limited",
    "input": "input-limited",
    "pad": "pad-value-suspect",
    "receiver": "receiver-overload",
    "noise": "noise-limited",
    "drift": "reference-not-repeating",
}
UNNAMED = {"clean", "noise-limited", "input-limited-or-pad", "cause-unclear"}


def measure(bench: Bench) -> tuple[list[MeasuredSweep], PadBank]:
    """Return the sweeps at the device's ports, in the order of the bench, and its pads."""
    bank = PadBank.of(bench.sheet)
    measured = []
    for entry, sweep in zip(bench.entries, bench.sweeps, strict=True):
        result = correct_sweep(bench.sheet, entry, sweep, bank, bench.design_hz)
        measured.append(MeasuredSweep(result, plan_figures(result.sweep, "amplifier", bench.design_hz, None, ())))
    return measured, bank


def study(bench: Bench) -> CompressionStudy:
    """Return what the tool says of a bench."""
    measured, bank = measure(bench)
    lowest = min(measured, key=lambda sweep: sweep.drive_dbm or 0.0)
    found = study_compression(measured, bench.entries, bench.sheet, bank, bench.design_hz, lowest.file)
    assert found is not None
    return found


def flat_rivals(bench: Bench) -> dict[str, float]:
    """Return what each flat rival leaves unexplained of the true gain changes, dB."""
    k = len(bench.entries)
    single = min(left_over_db(bench.flat_db, np.eye(k)[i]) for i in range(k))
    pads = {pad for entry in bench.entries for pad in (*entry.input_pads[1:], *entry.output_pads[1:])}
    carries = [
        np.array([float(pad in entry.input_pads) + float(pad in entry.output_pads) for entry in bench.entries])
        for pad in pads
    ]
    return {
        "drift": single,
        "pad": min(left_over_db(bench.flat_db, pattern) for pattern in carries),
        "input": law_left_over_db(bench.flat_db, bench.drives),
    }


def can_tell(bench: Bench) -> bool | None:
    """Return whether the sweeps can tell the cause: True, False, or None for the benches between."""
    cause = bench.cause
    if cause == "clean":
        return True
    if cause == "noise":
        return True if bench.buried >= 0.3 else None
    if cause in ("output", "receiver"):
        if bench.shape_db < 0.5:
            return None
        if not bench.receiver_near:
            return True
        has_pad = any(len(entry.output_pads) > 1 for entry in bench.entries)
        if has_pad:
            return True if bench.output_pads_tell_db >= T_DB else None
        return False
    if cause == "drift" and bench.repeat_db >= T_DB:
        return True
    if cause == "drift" and bench.shape_db >= 0.1:
        return None
    left = [value for rival, value in flat_rivals(bench).items() if rival != cause]
    if min(left) >= 2.0 * T_DB:
        return True
    return False if min(left) < 0.25 * T_DB else None


def holds(bench: Bench, found: CompressionStudy) -> bool | None:
    """Return whether the interval, or bound, of the input 1 dB point holds the truth; None where none is given."""
    estimate, truth = found.onset.input_p1db_dbm, bench.input_p1db_dbm
    assert truth is not None
    if estimate.value is None:
        return None
    low = -np.inf if estimate.low is None else estimate.low
    high = np.inf if estimate.high is None else estimate.high
    return bool(low <= truth <= high)


def run(benches: int, seed: int) -> dict[str, object]:
    """Return the counts of a run."""
    told: Counter[tuple[str, bool]] = Counter()
    cannot: Counter[tuple[str, bool]] = Counter()
    between: Counter[str] = Counter()
    alarms: list[bool] = []
    cover: dict[str, list[bool]] = {"rapp": [], "tanh": [], "cubic": []}
    widths: list[float] = []
    bounds: list[bool] = []
    wrong: list[str] = []
    pads: list[bool] = []
    """Whether the true value of a pad named suspect lies in its interval."""
    for number in range(benches):
        cause = list(RIGHT)[number % len(RIGHT)]
        bench = make_bench(seed + number, cause)
        found = study(bench)
        assert found.verdict is not None
        code = found.verdict.code
        can = can_tell(bench)
        if cause == "pad" and code == RIGHT["pad"]:
            suspect = found.verdict.pads[0]
            pads.append(suspect.low_db <= bench.pad_losses_db[suspect.name] <= suspect.high_db)
        if cause == "clean":
            alarms.append(code != "clean")
        if can is None:
            between["rightly" if code == RIGHT[cause] else "not" if code in UNNAMED else "wrongly"] += 1
            if code not in UNNAMED and code != RIGHT[cause]:
                wrong.append(f"{seed + number} {cause} neither, said {code} ({found.verdict.confidence:.2f})")
        elif can:
            told[cause, code == RIGHT[cause]] += 1
        else:
            cannot[cause, code in UNNAMED] += 1
        if can is not None and not (code == RIGHT[cause] if can else code in UNNAMED):
            wrong.append(f"{seed + number} {cause} can={can} said {code} ({found.verdict.confidence:.2f})")
        held = holds(bench, found)
        if cause in ("output", "input") and held is not None:
            estimate = found.onset.input_p1db_dbm
            if estimate.bound is None and estimate.high is not None and estimate.low is not None:
                cover[bench.law].append(held)
                widths.append(estimate.high - estimate.low)
            else:
                bounds.append(held)
            if not held:
                truth = f"{cause} {bench.law} p {bench.p:.2f}, P1dB {bench.input_p1db_dbm:.2f} dBm"
                wrong.append(f"{seed + number} {truth}, found {estimate} {found.onset.basis} {code}")
    return {
        "told": told,
        "cannot": cannot,
        "between": between,
        "alarms": alarms,
        "cover": cover,
        "widths": widths,
        "bounds": bounds,
        "pads": pads,
        "wrong": wrong,
    }


def main() -> None:
    benches = int(sys.argv[1]) if len(sys.argv) > 1 else 420
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else 0
    start = time.perf_counter()
    found = run(benches, seed)
    for name in ("told", "cannot"):
        counts = found[name]
        good = sum(n for (_, right), n in counts.items() if right)
        total = sum(counts.values())
        print(f"{name:7s} {good}/{total} right = {good / max(total, 1):.1%}")
        for cause in RIGHT:
            if counts[cause, True] + counts[cause, False]:
                print(f"   {cause:9s} {counts[cause, True]}/{counts[cause, True] + counts[cause, False]}")
    print("neither, named", ", ".join(f"{how} {count}" for how, count in found["between"].items()))
    print(f"false alarms on clean benches {sum(found['alarms'])}/{len(found['alarms'])}")
    for law, held in found["cover"].items():
        print(f"input_p1db, {law:5s}: interval holds the truth in {sum(held)}/{len(held)} = {np.mean(held):.1%}")
    print(f"median width of the intervals {np.median(found['widths']):.2f} dB")
    print(f"where only a bound can be given it holds in {sum(found['bounds'])}/{len(found['bounds'])}")
    print(f"true value of a pad named suspect lies in its interval in {sum(found['pads'])}/{len(found['pads'])}")
    print(f"{time.perf_counter() - start:.0f} s")
    if "-v" in sys.argv:
        print("\n".join(found["wrong"]))


if __name__ == "__main__":
    main()
