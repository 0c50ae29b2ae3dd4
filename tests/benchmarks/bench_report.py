"""What a report costs, side by side in one run: against a plain script, and trials against drawing the page.

* The whole `report` of one device with three 401-point sweeps (reading, pads, figures, trials, page as PDF and PNG,
  json, csv) against a plain script that reads the same three files with scikit-rf and draws one page of three plots and
  a table with matplotlib, also as PDF and PNG: as commands, from start to end, and again inside one warm process.
* The default trials against the drawing of the page.
* Peak memory of the trials for one 10,001-point sweep.

Each ratio is the best of several turns taken alternately, since other work disturbs the clock.
Run: python tests/benchmarks/bench_report.py
"""

from __future__ import annotations

import io
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import skrf
from matplotlib.figure import Figure

SAMPLE = Path(__file__).parents[2] / "sample_data" / "telemetry"
TURNS = 5


def three_sweep_bench(folder):
    """The first device of the sample alone."""
    text = (SAMPLE / "bench.toml").read_text(encoding="utf-8")
    (folder / "bench.toml").write_text("[[device]]".join(text.split("[[device]]")[:2]), encoding="utf-8")
    for name in ("first_low.s2p", "first_mid.s2p", "first_high.s2p"):
        shutil.copy(SAMPLE / name, folder / name)
    shutil.copytree(SAMPLE / "pads", folder / "pads")


def ours(folder):
    from benchtool.analysis import analyse
    from benchtool.export import results_csv, results_json, write_whole
    from benchtool.page import render_page
    from benchtool.sheet import load_sheet

    sheet = load_sheet(folder)
    result = analyse(sheet)
    pdf, png = render_page(result, result.devices[0])
    for name, data in (
        ("d.pdf", pdf),
        ("d.png", png),
        ("results.json", results_json(result)),
        ("results.csv", results_csv(result)),
    ):
        write_whole(folder / name, data)


def plain(folder):
    networks = [skrf.Network(folder / name) for name in ("first_low.s2p", "first_mid.s2p", "first_high.s2p")]
    figure = Figure(figsize=(8.27, 11.69))
    axes = [figure.add_subplot(4, 1, place) for place in (1, 2, 3, 4)]
    for network in networks:
        f = network.f / 1e6
        axes[0].plot(f, network.s_db[:, 1, 0], label=network.name)
        axes[1].plot(f, network.s_deg[:, 1, 0])
        axes[2].plot(f, network.s_db[:, 0, 0])
    axes[0].legend()
    axes[3].axis("off")
    rows = [
        [n.name, f"{n.s_db[:, 1, 0].max():.2f} dB", f"{n.f[n.s_db[:, 1, 0].argmax()] / 1e6:.3f} MHz"] for n in networks
    ]
    axes[3].table(rows, colLabels=["sweep", "peak gain", "at"], loc="center")
    figure.savefig(folder / "plain.pdf")
    figure.savefig(folder / "plain.png", dpi=150)


def quietly(command):
    """Run a command to its end; the sample ends with status 0 or 1."""
    done = subprocess.run(command, capture_output=True, check=False)
    assert done.returncode in (0, 1), done.stderr


def alternately(*jobs):
    """Best time of each job, all taken in turn."""
    best = [float("inf")] * len(jobs)
    for _ in range(TURNS):
        for place, job in enumerate(jobs):
            start = time.perf_counter()
            job()
            best[place] = min(best[place], time.perf_counter() - start)
    return best


_MEMORY = """
import sys
from pathlib import Path
from benchtool.sheet import load_sheet
from benchtool.analysis import analyse
def peak():
    text = Path("/proc/self/status").read_text()
    return int(text.split("VmHWM:")[1].split()[0]) / 1024
before = peak()
analyse(load_sheet(Path(sys.argv[1])))
print(peak(), before)
"""


def memory(folder):
    """Peak resident memory in MiB of a process that analyses one 10,001-point sweep in both directions."""
    f = np.linspace(15e6, 28e6, 10_001)
    rng = np.random.default_rng(1)
    noise = 1e-3 * (rng.standard_normal((4, f.size)) + 1j * rng.standard_normal((4, f.size)))
    s21 = 10 / (1 + 25j * (f / 21.4e6 - 21.4e6 / f)) + noise[0]
    columns = [0.1 + noise[1], s21, 1e-3 + noise[2], 0.2 + noise[3]]
    rows = np.stack([f] + [part for c in columns for part in (c.real, c.imag)], axis=1)
    stream = io.StringIO()
    np.savetxt(stream, rows, header="# HZ S RI R 50", comments="")
    (folder / "long.s2p").write_text(stream.getvalue(), encoding="utf-8")
    (folder / "bench.toml").write_text(
        'version = 1\n[[device]]\nname = "d"\nkind = "amplifier"\n[[device.sweep]]\nfile = "long.s2p"\n',
        encoding="utf-8",
    )
    done = subprocess.run([sys.executable, "-c", _MEMORY, str(folder)], capture_output=True, text=True, check=True)
    return [float(word) for word in done.stdout.split()]


def main():
    from benchtool.analysis import analyse
    from benchtool.page import render_page
    from benchtool.sheet import load_sheet

    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        three_sweep_bench(folder)
        here = Path(__file__).resolve()
        command = [sys.executable, "-c", "from benchtool.cli import main; main()", "report", str(folder)]
        script = [sys.executable, str(here), "--plain", str(folder)]
        with_us, with_script = alternately(lambda: quietly(command), lambda: quietly(script))
        print("report of three sweeps of 401 points against a plain script")
        print(f"  as commands:        {with_us:.3f} s and {with_script:.3f} s; ratio {with_us / with_script:.2f}")
        whole, bare = alternately(lambda: ours(folder), lambda: plain(folder))
        print(f"  in a warm process:  {whole:.3f} s and {bare:.3f} s; ratio {whole / bare:.2f}")
        sheet = load_sheet(folder)
        result = analyse(sheet)
        few, many, page = alternately(
            lambda: analyse(sheet, trials=20), lambda: analyse(sheet), lambda: render_page(result, result.devices[0])
        )
        print(f"default trials ({result.devices[0].trials}) against drawing the page")
        print(f"  {many - few:.3f} s and {page:.3f} s; ratio {(many - few) / page:.2f}")
    with tempfile.TemporaryDirectory() as name:
        peak, before = memory(Path(name))
        print(f"10,001 points, default trials: peak memory {peak:.0f} MiB, {before:.0f} MiB of it before the analysis")


if __name__ == "__main__":
    if sys.argv[1:2] == ["--plain"]:
        plain(Path(sys.argv[2]))
    else:
        main()
