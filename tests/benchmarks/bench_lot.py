"""What reading, starting and a whole lot cost, side by side in one run: the table for the README.

* Reading one sweep: `bench_reading.py`.
* `benchtool --help` against the help of an empty typer program, as commands.
* A lot of 200 devices with three sweeps of 401 points each, default trials, numbers only, against the time scikit-rf
  takes only to read the same 600 files inside one warm process; then the same lot again with nothing changed.
* Peak memory while the lot is measured: of the largest process, and of all of them together (resident, so that pages
  that processes share count once for each).

Ratios are of times taken in turn in one run, the best of several, since machines are noisy; of the lot also those of
each turn, with the reading that was timed beside it. All commands find their
modules compiled, as an installation leaves them, in a folder of this run's own.
Run: python tests/benchmarks/bench_lot.py [DEVICES]
"""

from __future__ import annotations

import importlib.util
import os
import subprocess
import sys
import tempfile
import threading
import time
from pathlib import Path

import skrf

HERE = Path(__file__).resolve().parent
ROOT = HERE.parents[1]
TURNS = 5
HELP_TURNS = 15
OURS = [sys.executable, "-c", "from benchtool.cli import main; main()"]
EMPTY = """
import typer
app = typer.Typer(add_completion=False)
@app.callback()
def root() -> None: pass
@app.command()
def nothing() -> None: pass
app()
"""


def load(name):
    spec = importlib.util.spec_from_file_location(name, HERE / f"{name}.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def seconds(job):
    start = time.perf_counter()
    job()
    return time.perf_counter() - start


def compiled(folder):
    """Return the environment in which modules are compiled once, into a folder, whatever the caller's says."""
    kept = {name: value for name, value in os.environ.items() if name != "PYTHONDONTWRITEBYTECODE"}
    return {**kept, "PYTHONPYCACHEPREFIX": str(folder)}


def command(environment, *arguments):
    done = subprocess.run(arguments, capture_output=True, cwd=ROOT, env=environment, check=False)
    assert done.returncode in (0, 1), done.stderr.decode()


def resident_mib(process, field):
    """One figure of /proc for a process, MiB; 0 where it has ended."""
    try:
        text = Path(f"/proc/{process}/status").read_text(encoding="utf-8")
        return int(text.partition(f"{field}:")[2].split()[0]) / 1024
    except (OSError, IndexError, ValueError):
        return 0.0


def family(process):
    """The process and its children."""
    try:
        children = Path(f"/proc/{process}/task/{process}/children").read_text(encoding="utf-8").split()
    except OSError:
        children = []
    return [process, *map(int, children)]


class Memory(threading.Thread):
    """Watches a process and its children until it ends."""

    def __init__(self, process):
        super().__init__(daemon=True)
        self.process, self.together, self.largest = process, 0.0, 0.0

    def run(self):
        while resident_mib(self.process, "VmRSS"):
            members = family(self.process)
            self.together = max(self.together, sum(resident_mib(member, "VmRSS") for member in members))
            self.largest = max(self.largest, *(resident_mib(member, "VmHWM") for member in members))
            time.sleep(0.02)


def measure_lot(environment, lot, *options):
    arguments = [*OURS, "report", str(lot), "--no-page", *options]
    process = subprocess.Popen(arguments, stdout=subprocess.DEVNULL, cwd=ROOT, env=environment)
    memory = Memory(process.pid)
    memory.start()
    assert process.wait() in (0, 1)
    return memory


def main():
    print("reading one sweep")
    load("bench_reading").main()
    with tempfile.TemporaryDirectory() as folder:
        environment = compiled(Path(folder) / "modules")
        measure_help(environment)
        measure_lots(environment, Path(folder) / "lot", int(sys.argv[1]) if len(sys.argv) > 1 else 200)


def measure_help(environment):
    empty = [sys.executable, "-c", EMPTY, "--help"]
    times = []
    for _ in range(HELP_TURNS):
        ours = seconds(lambda: command(environment, *OURS, "--help"))
        times.append((ours, seconds(lambda: command(environment, *empty))))
    ours, other = (min(column) for column in zip(*times, strict=True))
    print(
        f"\nbenchtool --help against an empty typer program: {ours:.3f} s and {other:.3f} s; ratio {ours / other:.2f}"
    )


def measure_lots(environment, lot, devices):
    files = load("lot_maker").make_lot(lot, devices)

    def read():
        for file in files:
            skrf.Network(str(file))

    turns, memory = [], None
    read()
    for _ in range(TURNS):
        # Reading before and after, so that a machine that slows down for a while slows both.
        before, start = seconds(read), time.perf_counter()
        memory = measure_lot(environment, lot, "--again")
        taken = time.perf_counter() - start
        turns.append((taken, 0.5 * (before + seconds(read))))
    ratios = sorted(taken / beside for taken, beside in turns)
    best, reading = (min(column) for column in zip(*turns, strict=True))
    unchanged = min(seconds(lambda: measure_lot(environment, lot)) for _ in range(TURNS))
    cores = len(os.sched_getaffinity(0))
    print(f"\nlot of {devices} devices x 3 sweeps of 401 points, default trials, numbers only, {cores} processors")
    print(f"  {best:.2f} s; scikit-rf only reading the {len(files)} files {reading:.2f} s; ratio {best / reading:.1f}")
    print(f"  ratio turn by turn {ratios[0]:.1f} to {ratios[-1]:.1f}, in the middle {ratios[len(ratios) // 2]:.1f}")
    print(f"  {1e3 * best * cores / devices:.0f} ms of processor for each device, starting included")
    print(f"  again, nothing changed: {unchanged:.2f} s; ratio {unchanged / reading:.2f}")
    print(f"  peak memory: {memory.largest:.0f} MiB the largest process, {memory.together:.0f} MiB all together")


if __name__ == "__main__":
    main()
