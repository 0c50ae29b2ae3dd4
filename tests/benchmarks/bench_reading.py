"""Time to read a sweep: this reader, scikit-rf, and a bare NumPy parse of the same text, side by side in one run.

Run it as `python tests/benchmarks/bench_reading.py`. The readers take turns, so that a machine that slows down slows
all of them; the smallest time of each is shown, in ms, and its ratios.
"""

import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import skrf

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))
from benchtool.touchstone import read_sweep

TURNS = 25
LIMITS = {"RI": ((-1, 1), (-1, 1)), "MA": ((0, 1), (-180, 180)), "DB": ((-60, 0), (-180, 180))}
FORMATS = {"9 digits": "{:.8e}", "17 digits": "{!r}"}


def write_sweep(path: Path, points: int, number: str, form: str) -> None:
    """Write a file of `points` rows of random numbers such as an analyzer gives, all digits of which count."""
    rng = np.random.default_rng(1)
    first, second = LIMITS[form]
    values = np.stack([rng.uniform(*first, (points, 4)), rng.uniform(*second, (points, 4))], axis=2).reshape(points, 8)
    rows = np.column_stack([np.linspace(1e6, 1e9, points), values]).tolist()
    lines = [" ".join(number.format(value) for value in row) for row in rows]
    path.write_text(f"# Hz S {form} R 50\n" + "\n".join(lines) + "\n", encoding="utf-8")


def parse_bare(path: Path) -> np.ndarray:
    """Return the numbers of a file that is known to be sound, with nothing checked."""
    text = path.read_text(encoding="utf-8").partition("\n")[2]
    return np.array(text.split(), dtype=float).reshape(-1, 9)


def milliseconds(readers, path: Path, points: int) -> list[float]:
    """Return the smallest time of each reader for one file."""
    number = max(1, 4000 // points)
    best = [float("inf")] * len(readers)
    for _ in range(TURNS):
        for place, read in enumerate(readers):
            start = time.perf_counter()
            for _ in range(number):
                read(path)
            best[place] = min(best[place], (time.perf_counter() - start) / number * 1e3)
    return best


def main() -> None:
    readers = {"benchtool": read_sweep, "scikit-rf": lambda path: skrf.Network(str(path)), "bare NumPy": parse_bare}
    heads = ["points", "numbers", "format", *readers, "scikit-rf / benchtool", "benchtool / bare"]
    print("  ".join(f"{head:>10}" for head in heads))
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "sweep.s2p"
        for points in (401, 10001):
            for digits, number in FORMATS.items():
                for form in ("RI", "MA", "DB"):
                    write_sweep(path, points, number, form)
                    ours, other, bare = times = milliseconds(list(readers.values()), path, points)
                    cells = [points, digits, form, *(f"{time:.3f}" for time in times)]
                    cells += [f"{other / ours:.2f}", f"{ours / bare:.2f}"]
                    print("  ".join(f"{cell:>{max(10, len(head))}}" for cell, head in zip(cells, heads, strict=True)))


if __name__ == "__main__":
    main()
