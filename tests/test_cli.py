"""The commands as a user types them: files written, exit status, one line for a fault, nothing half-written."""

import csv
import json
import os
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import skrf
from numpy.testing import assert_allclose

from benchtool.cli import main
from benchtool.touchstone import read_sweep

ROOT = Path(__file__).parents[1]
SAMPLE = ROOT / "sample_data" / "telemetry"
FAULTS = Path(__file__).parent / "faults"
REAL = Path(os.environ.get("BENCHTOOL_REAL", ROOT.parent / "shared" / "real"))


def run(*arguments, cwd=None, **environment):
    """Run benchtool in a process of its own, as a shell would."""
    return subprocess.run(
        [sys.executable, "-c", "from benchtool.cli import main; main()", *map(str, arguments)],
        capture_output=True,
        text=True,
        encoding="utf-8",
        cwd=cwd,
        env={**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8", **environment},
        check=False,
    )


@pytest.fixture(scope="module")
def report(tmp_path_factory):
    out = tmp_path_factory.mktemp("report")
    done = run("report", SAMPLE, "--out", out, SOURCE_DATE_EPOCH="1790000000")
    return done, out


def test_report_writes_a_page_for_every_device_and_the_numbers(report):
    done, out = report
    assert done.returncode == 1, done.stderr  # the sample has targets missed and undecided
    assert done.stderr == ""
    names = {path.name for path in out.iterdir()}
    devices = ["first IF stage", "limiter stage", "detector driver", "post-mixer filter", "discriminator network"]
    assert names == {"results.json", "results.csv"} | {f"{name}.{kind}" for name in devices for kind in ("pdf", "png")}
    assert all((out / f"{name}.pdf").read_bytes().startswith(b"%PDF-") for name in devices)
    assert "detector driver: undecided" in done.stdout
    assert "\x1b[" not in done.stdout


def test_results_json_keeps_its_contract(report):
    _, out = report
    tree = json.loads((out / "results.json").read_text(encoding="utf-8"))
    assert tree["format"] == "benchtool-results/1"
    assert tree["made"]["at"] == "2026-09-21T14:13:20Z"
    device = tree["devices"][0]
    assert {"name", "verdict", "reference_sweep", "sweeps", "figures", "targets", "compression", "findings"} <= set(
        device
    )
    assert {"file", "sha256", "points", "start_hz", "stop_hz", "measured", "drive_dbm"} <= set(device["sweeps"][0])
    assert {"input_correction_db", "output_correction_db"} <= set(device["sweeps"][0])
    gain = device["figures"]["gain"]
    assert {"value", "unit", "low", "high", "confidence", "bound"} <= set(gain)
    assert gain["low"] < gain["value"] < gain["high"]
    assert gain["confidence"] == 0.95
    assert {"figure", "min", "max", "verdict", "probability"} <= set(device["targets"][0])
    assert {"at_hz", "points"} <= set(device["compression"])
    point = device["compression"]["points"][0]
    assert {"file", "drive_dbm", "gain_db", "compression_db", "phase_change_deg"} <= set(point)
    assert {"code", "severity", "sweep", "message", "advice"} == set(device["findings"][0])


def test_csv_has_the_numbers_of_the_json(report):
    _, out = report
    tree = json.loads((out / "results.json").read_text(encoding="utf-8"))
    with (out / "results.csv").open(newline="", encoding="utf-8") as stream:
        rows = list(csv.DictReader(stream))
    for device in tree["devices"]:
        for key, figure in device["figures"].items():
            row = next(r for r in rows if (r["device"], r["figure"]) == (device["name"], key))
            assert (float(row["value"]) if row["value"] else None) == figure["value"]


def test_same_inputs_make_the_same_bytes(report, tmp_path):
    _, out = report
    again = tmp_path / "again"
    run("report", SAMPLE, "--out", again, SOURCE_DATE_EPOCH="1790000000")
    for path in out.iterdir():
        assert (again / path.name).read_bytes() == path.read_bytes(), path.name


def test_no_page_writes_the_numbers_only(tmp_path):
    done = run("report", SAMPLE, "--out", tmp_path / "new" / "folder", "--no-page", "--trials", "100")
    assert done.returncode == 1
    assert {path.name for path in (tmp_path / "new" / "folder").iterdir()} == {"results.json", "results.csv"}


def test_quick_look_without_a_sheet(tmp_path):
    done = run(
        "report",
        SAMPLE / "first_low.s2p",
        SAMPLE / "first_high.s2p",
        "--design",
        "21.4 MHz",
        "--source",
        "-18",
        "--input-pad",
        "20",
        "--input-pad",
        "0",
        "--out",
        tmp_path,
        "--no-page",
    )
    assert done.returncode == 0, done.stderr
    device = json.loads((tmp_path / "results.json").read_text(encoding="utf-8"))["devices"][0]
    assert [sweep["drive_dbm"] for sweep in device["sweeps"]] == [-38.0, -18.0]
    assert_allclose(device["figures"]["gain"]["value"], 27.46, rtol=0, atol=0.02)


def test_correct_writes_sweeps_at_the_device(tmp_path):
    done = run("correct", SAMPLE, "--out", tmp_path)
    assert done.returncode == 0, done.stderr
    raw = skrf.Network(SAMPLE / "first_low.s2p")
    corrected = skrf.Network(tmp_path / "first_low_at_device.s2p")
    turn = 10 * np.exp(2j * np.pi * raw.f * 95e-12)
    assert_allclose(corrected.s[:, 1, 0], raw.s[:, 1, 0] * turn, rtol=1e-12, atol=0)
    assert len(list(tmp_path.iterdir())) == 8


def test_correct_writes_version_2_on_request(tmp_path):
    done = run("correct", SAMPLE, "--out", tmp_path, "--touchstone", "2")
    assert done.returncode == 0, done.stderr
    text = (tmp_path / "filter_at_device.s2p").read_text(encoding="utf-8")
    assert "[Version] 2" in text
    assert "[Two-Port Data Order] 21_12" in text
    first, second = (read_sweep(tmp_path / "filter_at_device.s2p"), skrf.Network(tmp_path / "filter_at_device.s2p"))
    assert_allclose(np.moveaxis(first.s, -1, 0), second.s, rtol=1e-12, atol=0)


def test_inspect_shows_what_is_in_a_file():
    done = run("inspect", SAMPLE / "first_low.s2p", SAMPLE / "filter.s2p")
    assert done.returncode == 0
    assert "401 frequencies" in done.stdout
    assert "measured: S11, S21\n" in done.stdout
    assert "measured: S11, S21, S12, S22\n" in done.stdout
    assert "one-path" in done.stdout


def test_draft_writes_a_sheet_that_loads_and_never_overwrites(tmp_path):
    for path in SAMPLE.glob("*.s2p"):
        (tmp_path / path.name).write_bytes(path.read_bytes())
    first = run("draft", tmp_path)
    assert first.returncode == 0, first.stderr
    sheet = (tmp_path / "bench.toml").read_bytes()
    second = run("draft", tmp_path)
    assert second.returncode == 2
    assert "already there" in second.stderr
    assert (tmp_path / "bench.toml").read_bytes() == sheet
    done = run("report", tmp_path, "--no-page", "--trials", "50", "--out", tmp_path / "out")
    assert done.returncode == 0, done.stderr


@pytest.mark.parametrize("broken", sorted(p.name for p in FAULTS.iterdir() if p.suffix in (".s2p", ".toml")))
def test_every_fault_is_one_clear_line_and_exit_2(broken, tmp_path, monkeypatch, capsys):
    if broken.startswith("good"):
        pytest.skip("a good file that the broken sheets refer to")
    out = tmp_path / "out"
    monkeypatch.setattr(sys, "argv", ["benchtool", "report", str(FAULTS / broken), "--out", str(out), "--strict"])
    with pytest.raises(SystemExit) as ended:
        main()
    said = capsys.readouterr()
    assert ended.value.code == 2
    assert said.out == ""
    lines = said.err.splitlines()
    assert len(lines) == 1 or broken == "several_faults.toml"
    # Place, what was found, and after the semicolon what to do.
    assert re.match(r"\S.*: .+; .+", lines[0])
    assert broken in lines[0]
    assert not out.exists()


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["report", "nowhere"], "nowhere"),
        (["report", "."], "benchtool draft"),
        (["inspect", "nowhere.s2p"], "nowhere.s2p"),
        (["report", "SWEEP", "--input-pad", "3", "--input-pad", "4"], "2 values .*1 file|input"),
        (["draft", "."], r"\.s2p"),
    ],
)
def test_requests_that_cannot_be_met(arguments, words, tmp_path):
    done = run(*[str(argument).replace("SWEEP", str(SAMPLE / "limiter.s2p")) for argument in arguments], cwd=tmp_path)
    assert done.returncode == 2
    assert re.search(words, done.stderr)
    assert "Traceback" not in done.stderr
    assert list(tmp_path.iterdir()) == []


def test_an_output_folder_that_cannot_be_made_is_one_line(tmp_path):
    (tmp_path / "taken").write_text("a file", encoding="utf-8")
    done = run("report", SAMPLE, "--out", tmp_path / "taken", "--no-page", "--trials", "20")
    assert done.returncode == 2
    assert len(done.stderr.splitlines()) == 1
    assert (tmp_path / "taken").read_text(encoding="utf-8") == "a file"


EVIL = r"Übertrager №2 $x_1^2$ <b>\frac{1}{2}</b> & 中間 % ~ sixty or more letters…"


def test_names_come_out_literally(tmp_path):
    sweep = "low $_<\u03bb>.s2p"
    (tmp_path / sweep).write_bytes((SAMPLE / "first_low.s2p").read_bytes())
    (tmp_path / "bench.toml").write_text(
        f"version = 1\ntitle = '{EVIL}'\n[[device]]\nname = '{EVIL}'\nkind = \"amplifier\"\n[[device.sweep]]\n"
        f"file = '{sweep}'\n",
        encoding="utf-8",
    )
    done = run("report", tmp_path, "--out", tmp_path / "out")
    assert done.returncode == 0, done.stderr
    assert EVIL in done.stdout
    device = json.loads((tmp_path / "out" / "results.json").read_text(encoding="utf-8"))["devices"][0]
    assert device["name"] == EVIL
    assert len(list((tmp_path / "out").glob("*.pdf"))) == 1


@pytest.mark.skipif(not REAL.is_dir(), reason="the measured sweeps are not at hand")
@pytest.mark.parametrize(("window", "quality"), [(("1.5 GHz", "2.5 GHz"), 72.5), (("3.5 GHz", "4.5 GHz"), 74.06)])
def test_real_resonator_goes_through_report(window, quality, tmp_path):
    # Independent: skrf.qfactor.Qfactor on the same resonance gives Q_L 72.5 and 74.06 (recomputed in test_response.py).
    (tmp_path / "resonator.s2p").write_bytes((REAL / "resonator_36mm.s2p").read_bytes())
    (tmp_path / "bench.toml").write_text(
        f'version = 1\n[[device]]\nname = "r"\nkind = "filter"\nwindow = ["{window[0]}", "{window[1]}"]\n'
        '[[device.sweep]]\nfile = "resonator.s2p"\n',
        encoding="utf-8",
    )
    done = run("report", tmp_path, "--out", tmp_path / "out")
    assert done.returncode == 0, done.stderr
    device = json.loads((tmp_path / "out" / "results.json").read_text(encoding="utf-8"))["devices"][0]
    assert_allclose(device["figures"]["loaded_q"]["value"], quality, rtol=0.02, atol=0)


@pytest.mark.skipif(not REAL.is_dir(), reason="the measured sweeps are not at hand")
def test_real_transistor_goes_through_report(tmp_path):
    done = run("report", REAL / "fet.s2p", "--design", "35 GHz", "--out", tmp_path)
    assert done.returncode == 0, done.stderr
    device = json.loads((tmp_path / "results.json").read_text(encoding="utf-8"))["devices"][0]
    network = skrf.Network(REAL / "fet.s2p")
    at = int(np.argmin(np.abs(network.f - 35e9)))
    assert_allclose(device["figures"]["gain"]["value"], network.s_db[at, 1, 0], rtol=0, atol=0.03)
    # One drive alone: the gain is a bound. Its edges lie outside the sweep, and compression would only widen the band:
    # of the bandwidth nothing is left.
    assert device["figures"]["gain"]["bound"] == "at least"
    assert device["figures"]["bandwidth"]["value"] is None
    assert {"edge-outside-sweep", "drive-unproven"} <= {finding["code"] for finding in device["findings"]}


def test_next_says_when_it_has_nothing_to_propose_with():
    done = run("next", SAMPLE / "first_low.s2p", "--design", "21.4 MHz", "--source", "-8")
    assert done.returncode == 0, done.stderr
    assert "nothing proves the reference small-signal, and no pad of the sheet would: add one to [pads]" in done.stdout


def test_corrected_file_says_which_reflection_is_of_no_use(tmp_path):
    assert run("correct", SAMPLE, "--out", tmp_path).returncode == 0
    buried = (tmp_path / "first_low_at_device.s2p").read_text(encoding="utf-8")
    assert "! S11 was read through added pads twice and is of no use: +-4.7, where 1 is full reflection\n" in buried
    assert "of no use" not in (tmp_path / "first_high_at_device.s2p").read_text(encoding="utf-8")


def test_quick_look_leaves_the_results_of_a_bench_alone(tmp_path):
    sweep = tmp_path / "one.s2p"
    sweep.write_bytes((SAMPLE / "first_low.s2p").read_bytes())
    (tmp_path / "report").mkdir()
    (tmp_path / "report" / "results.json").write_text("of a bench", encoding="utf-8")
    assert run("report", sweep, "--no-page", "--trials", "20").returncode in (0, 1)
    assert (tmp_path / "report" / "results.json").read_text(encoding="utf-8") == "of a bench"
    assert (tmp_path / "quick-look" / "results.json").is_file()
