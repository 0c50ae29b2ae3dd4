"""Damaged sweep files by the thousand: how each ended, how long it took, and any that changed in silence.

Run it as `python tests/benchmarks/bench_fuzz.py [COUNT] [SEED]`; 20,000 files unless told otherwise. Exit status 1 if
any file ended in anything but a sweep or one fault, or read without a finding to other numbers than the slow reader's.
"""

import sys
import time
import traceback
from collections import Counter
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))
sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from fuzz_touchstone import damaged, outcome, real_files, seeds

from benchtool.errors import SweepFileError
from benchtool.touchstone import parse_sweep

COUNT = 20_000
SHOWN = 3


def main(count: int, seed: int) -> int:
    print(f"{len(seeds())} sound files, {len(real_files())} of them measured; {count} damaged ones, seed {seed}")
    ends: Counter[str] = Counter()
    wrong: list[str] = []
    longest = 0.0
    for data in damaged(count, seed):
        begun = time.perf_counter()
        try:
            parse_sweep(data, name="x.s2p")
        except SweepFileError:
            pass
        except Exception:
            wrong.append(f"{traceback.format_exc()}\n{data!r}")
            continue
        longest = max(longest, time.perf_counter() - begun)
        try:
            ends[outcome(data)] += 1
        except Exception:
            wrong.append(f"{traceback.format_exc()}\n{data!r}")
    for end, number in sorted(ends.items()):
        print(f"{end:>8} {number:6}")
    print(f"{'wrong':>8} {len(wrong):6}\nlongest reading {longest * 1e3:.1f} ms")
    for text in wrong[:SHOWN]:
        print(text)
    return 1 if wrong else 0


if __name__ == "__main__":
    numbers = [int(argument) for argument in sys.argv[1:]]
    sys.exit(main(*(numbers + [COUNT, 1][len(numbers) :])))
