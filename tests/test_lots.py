"""A lot: every bench measured and judged, a bad one listed, unchanged ones left alone, nothing half-written."""

from __future__ import annotations

import csv
import importlib.util
import json
import os
import re
import resource
import shutil
import signal
import subprocess
import sys
import time
from itertools import combinations
from pathlib import Path

import matplotlib
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.text import Text

from benchtool import analysis, lots, sheet, whole_files
from benchtool.analysis import analyse
from benchtool.export import results_json
from benchtool.lot_page import draw_lot, render_lot
from benchtool.lots import Lot, LotBench, LotDevice, LotTarget, find_benches, lot_csv, lot_lines, measure_lot
from benchtool.page_paper import STYLE
from benchtool.page_text import MIN_SIZE_PT
from benchtool.processes import run_tasks
from benchtool.reporting import ReportOptions, measure
from benchtool.sheet import load_sheet

ROOT = Path(__file__).parents[1]
NUMBERS = ReportOptions(pages=False, trials=20)


def _maker():
    spec = importlib.util.spec_from_file_location("lot_maker", Path(__file__).parent / "benchmarks" / "lot_maker.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


make_lot = _maker().make_lot


def command(*arguments):
    return [sys.executable, "-c", "from benchtool.cli import main; main()", *map(str, arguments)]


def environment():
    return {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8"}


def run(*arguments, **options):
    done = subprocess.run(
        command(*arguments),
        capture_output=True,
        text=True,
        encoding="utf-8",
        env=environment(),
        check=False,
        **options,
    )
    assert "Traceback" not in done.stderr
    return done


def snapshot(folder):
    """Return bytes and time of change of every file, and the time of change of every folder."""
    return {
        path.relative_to(folder): (path.stat().st_mtime_ns, path.read_bytes() if path.is_file() else b"")
        for path in [folder, *folder.rglob("*")]
    }


@pytest.fixture
def lot(tmp_path):
    make_lot(tmp_path / "lot", 3)
    return tmp_path / "lot"


def break_bench(bench):
    path = bench / "mid.s2p"
    path.write_text(path.read_text(encoding="utf-8").replace("e+07", "OVL", 1), encoding="utf-8")


# --- finding the benches --------------------------------------------------------------------------------------------


def test_benches_are_found_at_any_depth_and_not_in_results_or_hidden_folders(tmp_path):
    for place in ("b", "a/deep/er", ".hidden", "report/x", "a/corrected/y", "b/inside", "c"):
        (tmp_path / place).mkdir(parents=True)
        if place != "c":
            (tmp_path / place / "bench.toml").write_text("", encoding="utf-8")
    benches, closed = find_benches(tmp_path)
    assert [bench.relative_to(tmp_path).as_posix() for bench in benches] == ["a/deep/er", "b"]
    assert closed == []


def test_a_folder_that_cannot_be_listed_is_told(tmp_path, monkeypatch):
    make_lot(tmp_path, 1)
    (tmp_path / "shut").mkdir()
    real = os.scandir

    def scandir(place):
        if Path(place).name == "shut":
            raise PermissionError(13, "Permission denied", str(place))
        return real(place)

    monkeypatch.setattr(os, "scandir", scandir)
    benches, closed = find_benches(tmp_path)
    assert [bench.name for bench in benches] == ["bench_001"]
    assert closed[0].name == "shut"
    assert closed[0].faults[0].endswith("cannot be listed (Permission denied); check its permissions")


def test_the_name_of_a_sheet_is_the_same_everywhere():
    assert sheet.SHEET_NAME == lots._SHEET_NAME


def test_a_folder_without_any_bench_is_told_how_to_start(tmp_path):
    done = run("report", tmp_path)
    assert done.returncode == 2
    assert "benchtool draft" in done.stderr


# --- the whole command ----------------------------------------------------------------------------------------------


def test_a_lot_goes_through_and_a_bad_bench_stops_no_other(lot):
    break_bench(lot / "bench_002")
    done = run("report", lot, "--jobs", "2", "--trials", "20")
    assert done.returncode == 2
    # One line: place, what was found, what to do; no bar, since standard error is no terminal.
    assert re.fullmatch(r"\S*bench_002\S*mid\.s2p:2.*'\S*OVL\S*'.*; .+\n", done.stderr), done.stderr
    assert {path.name for path in (lot / "report").iterdir()} == {"lot.pdf", "lot.png", "lot.csv"}
    for bench, number in (("bench_001", 1), ("bench_003", 3)):
        wanted = {"results.json", "results.csv", f"stage {number}.pdf", f"stage {number}.png"}
        assert {path.name for path in (lot / bench / "report").iterdir()} == wanted
    assert not (lot / "bench_002" / "report").exists()
    with (lot / "report" / "lot.csv").open(newline="", encoding="utf-8") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == 7
    assert [row["device_verdict"] for row in rows if row["bench"] == "bench_002"] == ["unusable"]
    for row in rows:
        if row["figure"]:
            results = lot / row["bench"] / "report" / "results.json"
            device = json.loads(results.read_text(encoding="utf-8"))["devices"][0]
            assert float(row["value"]) == device["figures"][row["figure"]]["value"]
            assert row["device_verdict"] == device["verdict"]
    assert "3 benches, 2 devices" in done.stdout
    assert "unusable   bench_002" in done.stdout


def test_a_bench_of_a_lot_has_the_results_of_the_bench_alone(lot):
    measure_lot(lot, find_benches(lot)[0], None, NUMBERS, jobs=1)
    alone = json.loads(results_json(analyse(load_sheet(lot / "bench_003"), trials=20)))
    together = json.loads((lot / "bench_003" / "report" / "results.json").read_text(encoding="utf-8"))
    assert together["devices"] == alone["devices"]


@pytest.mark.parametrize(("verdicts", "status"), [("mm", 0), ("mn", 0), ("mu", 1), ("mx", 1), ("m!", 2), ("x!", 2)])
def test_exit_status(verdicts, status):
    words = {"m": "met", "n": "none", "u": "undecided", "x": "missed"}
    benches = tuple(
        LotBench(str(k), faults=("f; g",))
        if letter == "!"
        else LotBench(str(k), (LotDevice(str(k), "d", words[letter], "", ()),))
        for k, letter in enumerate(verdicts)
    )
    assert Lot("t", benches).exit_status == status


def test_a_quick_look_option_with_a_lot_is_refused(lot):
    done = run("report", lot, "--source", "-8")
    assert done.returncode == 2
    assert "--source" in done.stderr


# --- measured again only where something changed --------------------------------------------------------------------


def changed(lot, before):
    """Return the benches whose results were written again."""
    after = snapshot(lot)
    return {path.parts[0] for path in after if path.name == "results.json" and after[path] != before.get(path)}


def test_only_what_changed_is_measured_again(lot):
    benches, _ = find_benches(lot)

    def again(options=NUMBERS, **more):
        before = snapshot(lot)
        result = measure_lot(lot, benches, None, options, jobs=1, **more)
        done = changed(lot, before)
        assert {bench.name for bench in result.benches if not bench.reused} == done
        return done

    every = {"bench_001", "bench_002", "bench_003"}
    assert again() == every
    assert again() == set()
    path = lot / "bench_002" / "high.s2p"
    path.write_bytes(path.read_bytes() + b"! looked at\n")
    assert again() == {"bench_002"}
    path = lot / "bench_003" / "bench.toml"
    path.write_bytes(path.read_bytes() + b"# checked\n")
    assert again() == {"bench_003"}
    (lot / "bench_001" / "report" / "results.csv").write_bytes(b"torn")
    assert again() == {"bench_001"}
    assert again(ReportOptions(pages=False, trials=30)) == every
    assert again(ReportOptions(pages=False, trials=30), again=True) == every


def test_another_version_measures_again(lot, monkeypatch):
    benches, _ = find_benches(lot)
    measure_lot(lot, benches, None, NUMBERS, jobs=1)
    monkeypatch.setattr("benchtool.reporting.__version__", "0.0.0")
    assert not any(bench.reused for bench in measure_lot(lot, benches, None, NUMBERS, jobs=1).benches)


@pytest.mark.parametrize("text", ["", "[]", "{}", '{"made": 1}', '{"made": {"version": "x"}}', "\xff", "[" * 100_000])
def test_results_that_nobody_can_read_are_made_again(lot, text):
    benches, _ = find_benches(lot)
    measure_lot(lot, benches[:1], None, NUMBERS, jobs=1)
    (lot / "bench_001" / "report" / "results.json").write_text(text, encoding="latin-1")
    assert not measure_lot(lot, benches[:1], None, NUMBERS, jobs=1).benches[0].reused


def test_a_pad_file_is_an_input_and_names_hold_no_place_of_this_machine(tmp_path):
    sample = tmp_path / "telemetry"
    shutil.copytree(ROOT / "sample_data" / "telemetry", sample, ignore=shutil.ignore_patterns("report"))
    measure_lot(tmp_path, [sample], None, NUMBERS, jobs=1)
    made = json.loads((sample / "report" / "results.json").read_text(encoding="utf-8"))["made"]
    assert {"bench.toml", "pads/m6.s2p", "first_low.s2p"} <= set(made["inputs"])
    assert str(tmp_path) not in json.dumps(made)
    (sample / "pads" / "m6.s2p").write_bytes((sample / "pads" / "m6.s2p").read_bytes() + b"! again\n")
    assert not measure_lot(tmp_path, [sample], None, NUMBERS, jobs=1).benches[0].reused


def test_the_same_results_make_the_same_summary(lot):
    benches, _ = find_benches(lot)
    first = measure_lot(lot, benches, None, NUMBERS, jobs=1)
    second = measure_lot(lot, benches, None, NUMBERS, jobs=1)
    assert lot_csv(first) == lot_csv(second)
    assert render_lot(first) == render_lot(second)


# --- one sheet with many devices ------------------------------------------------------------------------------------


def many_devices(folder, count=6):
    make_lot(folder, 1)
    bench = folder / "bench_001"
    head, device = (bench / "bench.toml").read_text(encoding="utf-8").split("[[device]]", 1)
    devices = [device.replace('"stage 1"', f'"stage {k}"') for k in range(1, count + 1)]
    (bench / "bench.toml").write_text("[[device]]".join([head, *devices]), encoding="utf-8")
    return bench


def test_devices_in_processes_have_the_results_of_one_after_the_other(tmp_path):
    bench = many_devices(tmp_path)
    names = []
    shared = measure(load_sheet(bench), NUMBERS, 2, names.append)
    plain = analyse(load_sheet(bench), trials=20)
    trees = [json.loads(results_json(result)) for result in (shared.result, plain)]
    assert trees[0]["devices"] == trees[1]["devices"]
    assert sorted(names) == [device.name for device in plain.devices]


def test_the_fault_of_a_device_in_a_process_is_one_line(tmp_path):
    bench = many_devices(tmp_path)
    text = (bench / "bench.toml").read_text(encoding="utf-8")
    before, after = text.split('name = "stage 4"')
    after = after.replace('"21.4 MHz"', '"21.405 MHz"\nwindow = ["21.402 MHz", "21.408 MHz"]', 1)
    (bench / "bench.toml").write_text(f'{before}name = "stage 4"{after}', encoding="utf-8")
    done = run("report", bench, "--jobs", "2", "--no-page", "--trials", "20")
    assert done.returncode == 2
    assert re.fullmatch(r".*bench\.toml: device\[4\]\.window: .+; .+\n", done.stderr), done.stderr
    assert not (bench / "report").exists()


# --- what can go wrong ----------------------------------------------------------------------------------------------


def _die(number):
    if number == 1:
        os._exit(9)
    return number * number


def test_a_process_that_dies_loses_only_its_own_item():
    assert dict(run_tasks(_die, [0, 1, 2, 3], 2)) == {0: 0, 1: None, 2: 4, 3: 9}


def test_a_read_only_lot_works_with_out_and_stays_as_it_was(lot, tmp_path):
    folders = [lot, *(path for path in lot.rglob("*") if path.is_dir())]
    for path in folders:
        path.chmod(0o555)
    try:
        before = snapshot(lot)
        done = run("report", lot, "--out", tmp_path / "out", "--no-page", "--trials", "20")
        assert snapshot(lot) == before
    finally:
        for path in folders:
            path.chmod(0o755)
    assert done.returncode in (0, 1), done.stderr
    assert (tmp_path / "out" / "lot.csv").is_file()
    assert (tmp_path / "out" / "bench_002" / "results.json").is_file()


def test_a_full_disk_is_one_line_and_leaves_no_part_of_a_file(lot, tmp_path):
    # Files may not grow past 2 kB: a real failure of write(2), as on a full disk.
    def no_room():
        resource.setrlimit(resource.RLIMIT_FSIZE, (2048, 2048))

    out = tmp_path / "out"
    arguments = ("report", lot / "bench_001", "--out", out, "--no-page", "--trials", "20")
    done = run(*arguments, preexec_fn=no_room)
    assert done.returncode == 2
    assert re.fullmatch(r".*cannot be written \(File too large\); free the disk, .*\n", done.stderr), done.stderr
    assert all(path.stat().st_size <= 2048 and not path.name.startswith(".") for path in out.iterdir())
    assert not (out / "results.json").exists()


def test_a_full_disk_in_a_lot_is_one_line_for_each_bench(lot, monkeypatch):
    real = whole_files.write_whole

    def full(path, data):
        if "bench_002" in path.parts:
            raise whole_files.OutputError(path, "cannot be written (No space left on device)", "free the disk")
        real(path, data)

    monkeypatch.setattr("benchtool.reporting.write_whole", full)
    result = measure_lot(lot, find_benches(lot)[0], None, NUMBERS, jobs=1)
    assert [bench.name for bench in result.unusable] == ["bench_002"]
    assert result.unusable[0].faults[0].endswith("(No space left on device); free the disk")
    assert result.exit_status == 2


def test_an_output_folder_that_cannot_be_made_is_told_before_the_work(lot, tmp_path):
    (tmp_path / "taken").write_text("a file", encoding="utf-8")
    done = run("report", lot, "--out", tmp_path / "taken", "--no-page")
    assert done.returncode == 2
    assert re.fullmatch(r".*taken: cannot be made .*; choose another folder with --out\n", done.stderr)
    assert not any(path.name == "results.json" for path in lot.rglob("*"))


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_a_folder_that_may_not_be_written_is_one_line(lot):
    bench = lot / "bench_001"
    bench.chmod(0o555)
    try:
        done = run("report", bench, "--no-page", "--trials", "20")
    finally:
        bench.chmod(0o755)
    assert done.returncode == 2
    assert re.fullmatch(r".*report: cannot be made \(Permission denied\); .*--out\n", done.stderr)


@pytest.mark.parametrize("lost", ["mid.s2p", "bench.toml"])
def test_a_file_that_vanishes_between_listing_and_reading_is_one_line(lot, lost, monkeypatch):
    benches, _ = find_benches(lot)
    if lost == "bench.toml":
        (lot / "bench_002" / lost).unlink()
    else:
        real = analysis.read_all

        def late(read, strict):
            if read.folder.name == "bench_002":
                (read.folder / lost).unlink()
            return real(read, strict)

        monkeypatch.setattr(analysis, "read_all", late)
    result = measure_lot(lot, benches, None, NUMBERS, jobs=1)
    assert [bench.name for bench in result.unusable] == ["bench_002"]
    (fault,) = result.unusable[0].faults
    assert "bench_002" in fault
    assert re.fullmatch(r".+; .+", fault)
    assert "the program failed" not in fault
    assert result.exit_status == 2


def test_a_fault_of_the_program_at_one_bench_loses_no_other(lot, monkeypatch):
    real = analysis.analyse

    def failing(read, *rest, **more):
        if read.folder.name == "bench_001":
            raise ZeroDivisionError("two\nlines")
        return real(read, *rest, **more)

    monkeypatch.setattr(analysis, "analyse", failing)
    result = measure_lot(lot, find_benches(lot)[0], None, NUMBERS, jobs=1)
    (fault,) = result.unusable[0].faults
    assert "ZeroDivisionError: two lines" in fault
    assert len(result.devices) == 2


def gone(group):
    """Whether a group of processes has ended; its last one may take a moment."""
    end = time.monotonic() + 10
    while time.monotonic() < end:
        try:
            os.killpg(group, 0)
        except ProcessLookupError:
            return True
        time.sleep(0.02)
    return False


@pytest.mark.skipif(sys.platform == "win32", reason="no such signal there")
def test_an_interrupt_stops_the_workers_and_leaves_whole_files_only(tmp_path):
    lot = tmp_path / "lot"
    make_lot(lot, 30)
    # A shell starts what it puts in the background deaf to interrupts, and a command would inherit that.
    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    try:
        process = subprocess.Popen(
            command("report", lot, "--jobs", "2"),
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
            env=environment(),
            start_new_session=True,
        )
    finally:
        signal.signal(signal.SIGINT, before)
    end = time.monotonic() + 60
    while not list(lot.glob("*/report/results.json")) and time.monotonic() < end:
        time.sleep(0.02)
    os.killpg(process.pid, signal.SIGINT)  # as a terminal does
    _, said = process.communicate(timeout=30)
    assert process.returncode == 130, said
    assert said == "stopped; files already written are whole\n"
    assert gone(process.pid)  # with every worker in its group
    results = list(lot.glob("*/report/results.json"))
    assert 0 < len(results) < 30
    for path in lot.rglob("report/*"):
        assert not path.name.startswith("."), path
        data = path.read_bytes()
        if path.suffix == ".json":
            json.loads(data)
        elif path.suffix == ".pdf":
            assert data.rstrip().endswith(b"%%EOF")
        elif path.suffix == ".png":
            assert data.endswith(b"IEND\xaeB`\x82")
    assert not (lot / "report" / "lot.csv").exists()


# --- the page and the csv -------------------------------------------------------------------------------------------

NAMES = (
    r"$\frac{a}{b}$ $x_1^2$ 100% \textbf{no}",
    "second intermediate-frequency stage, balloon receiver, rev C",
    "中間周波増幅器 усилитель <b>x</b>",
    "a\x07b\x1b[31mred",
    "=1+1",
)


def target(figure, unit, value, low, high, verdict, probability):
    return LotTarget(figure, unit, value, value, value, 0.95, None, low, high, verdict, probability)


def crowded(devices, unusable=3):
    benches = []
    verdicts = ("met", "missed", "undecided", "none")
    for k in range(devices):
        verdict = verdicts[k % 4]
        targets = (
            target("gain", "dB", 20.0 + k % 7, 21.0, None, verdict, 0.5),
            target("bandwidth", "Hz", 8e5 + 1e4 * (k % 11), 8.2e5, 8.8e5, "met", 0.99),
            target("phase_linearity over 21.25 MHz to 21.55 MHz", "deg", None, None, 2.0, "undecided", None),
            *(
                target(f"rejection at {20 + j / 7:.6g} MHz", "dB", 30.0 + k % 3, 31.0, None, "met", 1.0)
                for j in range(12)
            ),
        )
        name = NAMES[k % len(NAMES)]
        reason = "Gain is 20.123 dB (19.90 to 20.40), wanted ≥ 21 dB. " * (1 + k % 3)
        shown = targets if verdict != "none" else ()
        benches.append(LotBench(f"day {k}/{name}", (LotDevice(f"day {k}/{name}", name, verdict, reason, shown),)))
    faults = (f"{'long/' * 30}x.s2p:214: 'OVL' is not a number (column 3); sweep again, or delete the row", "y; z")
    benches += [LotBench(f"bad/{NAMES[k % 5]} {k}", faults=faults) for k in range(unusable)]
    return Lot(NAMES[1], tuple(benches))


PAGES = {"crowded": (200, 20), "few": (3, 1), "one": (1, 0), "nothing": (0, 2), "exactly": (40, 0)}


@pytest.mark.parametrize("case", PAGES)
def test_no_text_is_small_clipped_or_over_another(case):
    canvas = draw_lot(crowded(*PAGES[case]))
    with matplotlib.rc_context(STYLE):
        FigureCanvasAgg(canvas).draw()
    renderer = canvas.canvas.get_renderer()
    width, height = canvas.get_size_inches() * canvas.dpi
    boxes = []
    for text in canvas.findobj(Text):
        if text.get_visible() and text.get_text().strip():
            assert text.get_fontsize() >= MIN_SIZE_PT, text.get_text()
            assert not text.get_parse_math()
            box = text.get_window_extent(renderer)
            assert box.x0 > 30 and box.y0 > 30 and box.x1 < width - 30 and box.y1 < height - 30, text.get_text()
            boxes.append((text.get_text(), box))
    assert len(boxes) > 8
    for (one, a), (other, b) in combinations(boxes, 2):
        wide, tall = min(a.x1, b.x1) - max(a.x0, b.x0), min(a.y1, b.y1) - max(a.y0, b.y0)
        # The empty top and bottom of two lines may touch; their letters may not.
        assert wide < 1.0 or tall < 0.4 * min(a.height, b.height), (one, other)


def words(lot):
    return [text.get_text() for text in draw_lot(lot).findobj(Text) if text.get_text()]


def test_the_worst_devices_come_first_and_the_rest_are_counted():
    lot = crowded(200)
    verdicts = [device.verdict for device in lot.devices]
    assert verdicts == sorted(verdicts, key=["missed", "undecided", "met", "none"].index)
    said = words(lot)
    rows = [word for word in said if word in ("missed", "undecided", "met", "no target")]
    assert rows[4:].index("missed") == 0  # after the four counts at the head
    left = next(int(word.split()[0]) for word in said if word.endswith("in lot.csv, none worse than these"))
    assert len(rows) - 4 + left == 200


def test_names_are_literal_on_the_page():
    said = "".join("".join(words(crowded(5))).split())
    assert r"$\frac{a}{b}$$x_1^2$100%\textbf{no}" in said
    assert r"a\x07b\x1b[31mred" in said


def test_the_strip_stands_where_the_values_are():
    values = [18.0, 21.0, 24.0]
    verdicts = ["missed", "met", "met"]
    devices = tuple(
        LotDevice("b", str(k), verdict, "", (target("gain", "dB", value, 20.0, None, verdict, 0.5),))
        for k, (value, verdict) in enumerate(zip(values, verdicts, strict=True))
    )
    canvas = draw_lot(Lot("t", (LotBench("b", devices),)))
    said = [text.get_text() for text in canvas.findobj(Text)]
    assert {"1 missed", "2 met", "median 21.00 dB"} <= set(said)


def test_csv_has_a_row_for_each_device_and_target():
    lot = crowded(8, 1)
    rows = list(csv.reader(lot_csv(lot).decode().splitlines()))
    assert len(rows) == 1 + 6 * 15 + 2 + 1
    assert all(len(row) == len(rows[0]) for row in rows)
    assert "'=1+1" in {row[1] for row in rows}


def test_lines_count_every_verdict():
    assert lot_lines(crowded(8, 1))[0] == (
        "9 benches, 8 devices: 2 missed, 2 undecided, 2 met, 2 without a target; 1 bench unusable"
    )
