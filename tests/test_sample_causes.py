"""The session with one device for each cause of a gain change: true by a second route, and what the tool says of it.

The second route is that of the other session's tests, chain matrices and scikit-rf cascades, with the limiting node and
the receiver at port 2 worked out again here.
"""

from __future__ import annotations

import importlib
import importlib.util
import json
import re
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from functools import reduce
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.testing import assert_allclose
from numpy.typing import NDArray

from benchtool.analysis import analyse
from benchtool.model import BenchResult, DeviceResult
from benchtool.sheet import load_sheet

HERE = Path(__file__).resolve().parent
SAMPLE_DATA = HERE.parent / "sample_data"
CAUSES = SAMPLE_DATA / "causes"
SHEET: dict[str, Any] = tomllib.loads((CAUSES / "bench.toml").read_text(encoding="utf-8"))
TRUTH: dict[str, Any] = json.loads((CAUSES / "truth.json").read_text(encoding="utf-8"))
SWEEPS = [(device["name"], entry) for device in SHEET["device"] for entry in device["sweep"]]
DESIGN_HZ = 21.4e6
MAKERS = ("analyzer", "circuits", "sessions", "truth", "make_sweeps")

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


def forget_makers() -> None:
    for name in MAKERS:
        sys.modules.pop(name, None)


@pytest.fixture(scope="module")
def maker() -> Iterator[Any]:
    """The maker as a module, with its neighbours importable meanwhile."""
    forget_makers()
    sys.path.insert(0, str(SAMPLE_DATA))
    try:
        yield importlib.import_module("make_sweeps")
    finally:
        sys.path.remove(str(SAMPLE_DATA))
        forget_makers()


@pytest.fixture(scope="module")
def route() -> Any:
    """The chain matrices and cascades that check the other session."""
    spec = importlib.util.spec_from_file_location("sample_route", HERE / "test_sample_data.py")
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def result() -> BenchResult:
    return analyse(load_sheet(CAUSES))


def device_of(result: BenchResult, name: str) -> DeviceResult:
    return next(device for device in result.devices if device.name == name)


def read(file: str) -> tuple[Real, Complex]:
    """Frequency in Hz, S11 and S21 (2, n), of a sweep of this session: all are written in MHz, magnitude and angle."""
    lines = (CAUSES / file).read_text(encoding="ascii").splitlines()
    assert lines[3] == "# MHz S MA R 50"
    rows = np.array([[float(word) for word in line.split()] for line in lines[4:]])
    assert not rows[:, 5::2].any()
    return rows[:, 0] * 1e6, (rows[:, 1:5:2] * np.exp(1j * np.radians(rows[:, 2:5:2]))).T


# --- the sweeps -------------------------------------------------------------------------------------------------------


def test_maker_writes_the_committed_bytes(tmp_path: Path) -> None:
    command = [sys.executable, "-B", str(SAMPLE_DATA / "make_sweeps.py"), "causes", "--out", str(tmp_path / "again")]
    subprocess.run(command, check=True, cwd=tmp_path, capture_output=True)
    again = {path.name: path.read_bytes() for path in (tmp_path / "again").iterdir()}
    assert set(again) == {"bench.toml", "truth.json", *(entry["file"] for _, entry in SWEEPS)}
    assert {name for name in again if again[name] != (CAUSES / name).read_bytes()} == set()


def limiting_volts(route: Any, circuit: Any, frequency_hz: Real, incident_volts: Real) -> Real:
    """Voltage that the limiting node would have in the linear circuit."""
    if circuit.limiter.node == "collector":
        return np.asarray(route.collector_volts(circuit, frequency_hz, incident_volts))
    # At the input v = 1 + S11 and i = (1 - S11)/50 for an incident wave of 1 V; the coupling capacitor takes its share.
    (coupling,) = [part for part in circuit.elements if (part.a, part.b) == ("in", "base")]
    s11 = route.model(circuit, frequency_hz)[0, 0]
    drop = (1.0 - s11) / 50.0 * route.impedance(coupling, 2.0 * np.pi * frequency_hz)
    return np.asarray(np.abs(1.0 + s11 - drop) * incident_volts)


def rapp_drop_db(relative: Real, p: float) -> Real:
    """Drop of gain by Rapp's law at a level relative to saturation (C. Rapp, 1991; formula from memory)."""
    return np.asarray(10.0 / p * np.log10(1.0 + relative ** (2.0 * p)))


def expected(maker: Any, route: Any, name: str, entry: dict[str, Any], frequency_hz: Real) -> dict[str, Any]:
    """S11 and S21 at the calibration planes without the analyzer's errors, and the true levels at each point."""
    session = maker.SESSIONS["causes"]
    circuit = maker.CIRCUITS[session.swept_as.get(entry["file"], name)]
    drawn = maker.draw_pads(SHEET, session.off_label_db)
    pads = {key: route.network(frequency_hz, pad.scattering(frequency_hz)) for key, pad in drawn.items()}
    into, out = entry.get("input_pads", ["b10"]), entry.get("output_pads", ["c10"])
    s = route.model(circuit, frequency_hz)
    line = reduce(lambda left, right: left**right, [pads[key] for key in into])
    source_dbm = maker.draw_source_dbm(SHEET)
    drive_dbm = source_dbm + 20.0 * np.log10(np.abs(line.s[:, 1, 0] / (1.0 - line.s[:, 1, 1] * s[0, 0])))
    volts = limiting_volts(route, circuit, frequency_hz, np.sqrt(0.05 * 10.0 ** (drive_dbm / 10.0)))
    drop_db = rapp_drop_db(volts / circuit.limiter.saturation_volts, circuit.limiter.smoothness)
    s[1, 0] *= 10.0 ** (-drop_db / 20.0)
    device = route.network(frequency_hz, s)
    seen = reduce(lambda left, right: left**right, [pads[key] for key in into[1:]] + [device])
    seen = reduce(lambda left, right: left**right, [seen] + [pads[key] for key in out[:0:-1]])
    whole = pads["b10"] ** seen ** pads["c10"]
    port2_dbm = source_dbm + 20.0 * np.log10(np.abs(whole.s[:, 1, 0]))
    receiver = session.receiver
    saturation_db = -10.0 / (2.0 * receiver.smoothness) * np.log10(10.0 ** (receiver.smoothness / 10.0) - 1.0) * 2.0
    read_low_db = rapp_drop_db(10.0 ** ((port2_dbm - receiver.p1db_dbm - saturation_db) / 20.0), receiver.smoothness)
    return {
        "s11": seen.s[:, 0, 0],
        "s21": seen.s[:, 1, 0] * 10.0 ** (-read_low_db / 20.0),
        "drive_dbm": drive_dbm,
        "compression_db": drop_db,
        "port2_dbm": port2_dbm,
        "receiver_compression_db": read_low_db,
        "behind_db": (drawn["b10"].loss_db, drawn["c10"].loss_db),
    }


@pytest.mark.parametrize(("name", "entry"), SWEEPS, ids=[entry["file"] for _, entry in SWEEPS])
def test_sweep_carries_the_model_within_its_noise(maker: Any, route: Any, name: str, entry: dict[str, Any]) -> None:
    """201 points, two components each: the mean square of the residual is known to 7 %; 25 % is allowed."""
    analyzer = importlib.import_module("analyzer")
    frequency_hz, shown = read(entry["file"])
    assert frequency_hz.size == 201
    true = expected(maker, route, name, entry, frequency_hz)
    trace = true["s21"]
    floor_variance = 0.5 * 10.0 ** ((analyzer.RECEIVER_FLOOR_DB + sum(true["behind_db"])) / 10.0)
    sigma = np.sqrt(floor_variance + np.abs(trace * analyzer.TRACE_NOISE_DB * np.log(10.0) / 20.0) ** 2)
    weights = np.abs(trace) ** 2 / sigma**2
    drift = np.average((shown[1] / trace).real, weights=weights)
    own_noise_db = 20.0 / np.log(10.0) / np.sqrt(np.sum(weights))
    assert abs(20.0 * np.log10(drift)) < 4.0 * np.hypot(analyzer.DRIFT_DB, own_noise_db)
    residual = shown[1] - drift * trace
    assert_allclose(0.5 * np.mean(np.abs(residual / sigma) ** 2), 1.0, rtol=0, atol=0.25)
    written = TRUTH["devices"][name]["sweeps"][entry["file"]]
    for key in ("drive_dbm", "compression_db", "port2_dbm", "receiver_compression_db"):
        assert_allclose(written[key], np.interp(DESIGN_HZ, frequency_hz, true[key]), rtol=0, atol=2e-6, err_msg=key)


def test_receiver_is_one_decibel_down_at_its_one_decibel_point(maker: Any) -> None:
    receiver = maker.SESSIONS["causes"].receiver
    levels_dbm = np.array([-90.0, receiver.p1db_dbm])
    assert_allclose(-20.0 * np.log10(receiver.limiting(levels_dbm)), [0.0, 1.0], rtol=0, atol=1e-9)
    # What a sheet can say is where compression starts, a little below the 1 dB point.
    assert 0.0 < receiver.p1db_dbm - SHEET["analyzer"]["port2_compression_dbm"] < 2.0


@pytest.mark.parametrize("name", [device["name"] for device in SHEET["device"]])
def test_true_one_decibel_points_are_one_decibel_down(maker: Any, route: Any, name: str) -> None:
    true, circuit = TRUTH["devices"][name]["figures"], maker.CIRCUITS[name]
    incident_volts = np.sqrt(0.05 * 10.0 ** (np.array([true["input_p1db_dbm"]]) / 10.0))
    volts = limiting_volts(route, circuit, np.array([DESIGN_HZ]), incident_volts)
    drop_db = rapp_drop_db(volts / circuit.limiter.saturation_volts, circuit.limiter.smoothness)
    assert_allclose(drop_db, 1.0, rtol=0, atol=1e-5)


# --- what each device is meant to show --------------------------------------------------------------------------------


def sweeps_of(name: str) -> dict[str, dict[str, float]]:
    found: dict[str, dict[str, float]] = TRUTH["devices"][name]["sweeps"]
    return found


def test_every_cause_has_its_device() -> None:
    causes = [device["cause"] for device in TRUTH["devices"].values()]
    assert set(causes) == {
        "clean",
        "output-limited",
        "input-limited",
        "pad-value-suspect",
        "receiver-overload",
        "noise-limited",
        "reference-not-repeating",
    }


def test_only_one_pad_is_not_what_its_label_says_and_only_one_device_was_swept_through_it() -> None:
    off = {
        name: TRUTH["pads"][name]["loss_db"] - pad["loss_db"]
        for name, pad in SHEET["pads"].items()
        if abs(TRUTH["pads"][name]["loss_db"] - pad["loss_db"]) > pad["tolerance_db"]
    }
    assert set(off) == {"f20"} and 0.5 < off["f20"] < 3.0
    assert {name for name, entry in SWEEPS if "f20" in entry.get("input_pads", [])} == {"oscillator buffer"}


def test_devices_compress_only_where_that_is_the_cause() -> None:
    for name, device in TRUTH["devices"].items():
        deepest = max(sweep["compression_db"] for sweep in device["sweeps"].values())
        limited = device["cause"] in ("output-limited", "input-limited")
        assert deepest > 1.0 if limited else deepest < 0.05, name


def test_receiver_compresses_in_one_sweep_and_more_output_pad_cures_it() -> None:
    lost = {file: sweep["receiver_compression_db"] for _, entry in SWEEPS for file, sweep in [_of(entry)]}
    assert {file for file, db in lost.items() if db > 0.2} == {"third_high.s2p"}
    assert lost["third_high.s2p"] > 1.0
    third = sweeps_of("third IF stage")
    assert_allclose(third["third_padded.s2p"]["drive_dbm"], third["third_high.s2p"]["drive_dbm"], rtol=0, atol=1e-6)


def _of(entry: dict[str, Any]) -> tuple[str, dict[str, float]]:
    name = next(name for name, other in SWEEPS if other is entry)
    return entry["file"], sweeps_of(name)[entry["file"]]


def test_input_limit_is_the_same_over_the_sweep_and_output_limit_is_not() -> None:
    def drop_db(low: str, high: str) -> Real:
        change = np.abs(read(low)[1][1] / read(high)[1][1])
        return np.asarray(20.0 * np.log10(change) + TRUTH["pads"]["a20"]["loss_db"])

    # 0.4 dB is five times the noise of one sample on the skirts of the low sweep.
    assert np.ptp(drop_db("pre_low.s2p", "pre_full.s2p")) < 0.4
    assert np.ptp(drop_db("second_low.s2p", "second_high.s2p")) > 3.0


def test_skirts_of_the_lowest_narrow_sweep_lie_near_its_noise(maker: Any) -> None:
    analyzer = importlib.import_module("analyzer")
    behind_db = TRUTH["pads"]["b10"]["loss_db"] + TRUTH["pads"]["c10"]["loss_db"]
    for file, near in (("narrow_low.s2p", True), ("narrow_mid.s2p", False)):
        skirts = np.abs(read(file)[1][1][[*range(20), *range(-20, 0)]])
        over_noise_db = 20.0 * np.log10(skirts).mean() - analyzer.RECEIVER_FLOOR_DB - behind_db
        assert bool(over_noise_db < 10.0) is near


def test_the_same_line_swept_twice_disagrees_by_more_than_drift() -> None:
    first, again = (np.abs(read(f"converter_{which}.s2p")[1][1]) for which in ("first", "again"))
    assert 0.5 < float(np.max(20.0 * np.log10(again / first))) < 2.0


# --- what the tool says -----------------------------------------------------------------------------------------------

TOLD = {
    "buffer amplifier": "clean",
    "second IF stage": "output-limited",
    "preamplifier": "input-limited",
    "mixer amplifier": "input-limited-or-pad",  # two sweeps, one pad: nobody could tell
    "oscillator buffer": "pad-value-suspect",
    "third IF stage": "receiver-overload",
    "narrow stage": "noise-limited",
    "converter stage": "reference-not-repeating",
}


@pytest.mark.parametrize(("name", "code"), TOLD.items())
def test_the_cause_is_named(result: BenchResult, name: str, code: str) -> None:
    device = device_of(result, name)
    assert device.drive is not None
    assert device.drive.cause == code
    named = {finding.code for finding in device.findings} & ({*TOLD.values(), "cause-unclear"} - {"clean"})
    assert named == {code} - {"clean"}
    # Two causes that explain it equally well share a probability that need not reach that of a named one.
    assert device.drive.confidence > (0.5 if code == "input-limited-or-pad" else 0.9)


def codes(result: BenchResult, name: str) -> list[str]:
    return [finding.code for finding in device_of(result, name).findings]


@pytest.mark.parametrize(
    ("name", "code"), [(n, c) for n, c in TOLD.items() if n not in ("buffer amplifier", "second IF stage")]
)
def test_the_cause_comes_first_and_gives_the_next_step(result: BenchResult, name: str, code: str) -> None:
    device = device_of(result, name)
    first = device.findings[0]
    assert (first.code, first.severity) == (code, "caution")
    assert device.summary.next_step.lower() == f"{first.advice}.".lower()


@pytest.mark.parametrize("name", TOLD)
def test_the_next_step_is_the_first_sweep_that_is_planned(result: BenchResult, name: str) -> None:
    device = device_of(result, name)
    assert device.drive is not None
    step, planned = device.summary.next_step, device.drive.next_sweeps
    if not planned:
        assert "sweep with" not in step.lower() and "more" not in step.replace("10 dB more output pad at", "")
        return
    first = planned[0]
    if first.purpose == "repeat":
        assert first.settles.split(" again")[0] in step and "twice in a row" in step
    elif first.purpose == "measure-pad":
        assert device.drive.pads[0].name in step and step.startswith("Measure pad")
    else:
        assert f"{', '.join(first.input_pads)} at the input" in step
        assert first.drive_dbm is not None and f"(−{-first.drive_dbm:.1f} dBm drive)" in step


@pytest.mark.parametrize(
    ("name", "aside"),
    [
        ("converter stage", {"converter_first.s2p": "did not repeat"}),
        ("oscillator buffer", dict.fromkeys(("oscillator_lowest.s2p", "oscillator_low.s2p"), "pad f20 suspect")),
    ],
)
def test_what_the_cause_explains_is_not_called_compressed(
    result: BenchResult, name: str, aside: dict[str, str]
) -> None:
    device = device_of(result, name)
    assert device.drive is not None and device.compression is not None
    assert dict(device.drive.set_aside) == aside
    down = {point.file for point in device.compression.points if point.compressed}
    assert down and down <= set(aside)
    assert "compressed-sweep" not in codes(result, name)


def test_a_compressed_sweep_points_to_the_sweep_that_has_the_pad_already(result: BenchResult) -> None:
    found = {f.sweep: f.advice for f in device_of(result, "preamplifier").findings if f.code == "compressed-sweep"}
    assert found == {
        "pre_high.s2p": "take figures from pre_low.s2p, swept with 17 dB more input pad",
        "pre_full.s2p": "take figures from pre_low.s2p, swept with 20 dB more input pad",
    }
    (open_yet,) = (f for f in device_of(result, "mixer amplifier").findings if f.code == "compressed-sweep")
    assert open_yet.advice.startswith("if the device limits, take figures from mixer_low.s2p")


def test_input_or_pad_advises_what_is_planned(result: BenchResult) -> None:
    # With a20 behind the device it limits as before, and a pad of another loss shows on the other side.
    device = device_of(result, "mixer amplifier")
    step = device.summary.next_step
    assert step.startswith("Sweep with b10 at the input and c10, a20 at the output (−18.0 dBm drive): it shows which")
    # At the drive of mixer_high.s2p a limiting device reads the same, a pad that is off gives the other gain.
    assert device.compression is not None
    gain = {point.file: point.gain_db for point in device.compression.points}
    limits = re.search(r"([\d.]+) dB if the device limits at its input", step)
    off = re.search(r"([\d.]+) dB if pad a20 is off", step)
    assert limits is not None and off is not None
    assert_allclose(float(limits[1]), gain["mixer_high.s2p"], rtol=0, atol=0.05)
    assert_allclose(float(off[1]), gain["mixer_low.s2p"], rtol=0, atol=0.05)


def test_no_message_has_a_hyphen_for_a_minus(result: BenchResult) -> None:
    for device in result.devices:
        planned = device.drive.next_sweeps if device.drive is not None else ()
        said = [f"{f.message} {f.advice}" for f in device.findings] + [sweep.settles for sweep in planned]
        assert not [text for text in [*said, device.summary.next_step] if re.search(r"(^|[\s(±])-\d", text)]
    assert "at 21.4 MHz and −18.0 dBm drive" in next(
        f.message
        for f in device_of(result, "preamplifier").findings
        if f.sweep == "pre_full.s2p" and "drive" in f.message and f.code == "compressed-sweep"
    )


def test_the_receiver_is_the_likeliest_cause_whatever_is_concluded(result: BenchResult) -> None:
    drive = device_of(result, "third IF stage").drive
    assert drive is not None and drive.probabilities["receiver-overload"] > 0.9
    # third_padded.s2p is what more output pad would show, and the cause says the rest.
    assert dict(drive.set_aside) == {"third_high.s2p": "receiver overloaded"}
    assert not {"receiver-near-limit", "compressed-sweep"} & set(codes(result, "third IF stage"))


def test_the_pad_interval_holds_what_the_pad_truly_loses(result: BenchResult) -> None:
    drive = device_of(result, "oscillator buffer").drive
    assert drive is not None
    suspect = drive.pads[0]
    assert (suspect.name, suspect.stated_db) == ("f20", 20.0)
    assert suspect.low_db < TRUTH["pads"]["f20"]["loss_db"] < suspect.high_db
    assert suspect.high_db - suspect.low_db < 1.0 and suspect.low_db > 20.5


@pytest.mark.parametrize("name", TOLD)
@pytest.mark.parametrize("figure", ["input_p1db", "output_p1db"])
def test_the_one_decibel_point_is_held(result: BenchResult, name: str, figure: str) -> None:
    found, true = device_of(result, name).figures[figure], TRUTH["devices"][name]["figures"][f"{figure}_dbm"]
    assert found.value is not None and found.low is not None
    assert found.low < true
    if TOLD[name] in ("output-limited", "input-limited"):
        assert found.bound is None and found.high is not None and true < found.high
        assert found.high - found.low < 6.0
    else:
        assert found.bound == "at least"


@pytest.mark.parametrize("name", TOLD)
@pytest.mark.parametrize("figure", ["gain", "bandwidth"])
def test_small_signal_figures_are_held_whatever_the_cause(result: BenchResult, name: str, figure: str) -> None:
    found = device_of(result, name).figures[figure]
    true = TRUTH["devices"][name]["figures"][figure + ("_db" if figure == "gain" else "_hz")]
    assert found.low is not None and found.high is not None
    assert found.low < true < found.high
