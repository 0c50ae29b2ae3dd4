"""The sample session: made again to the byte, true by a second route, and carried by its sweeps within their noise.

The second route shares only the table of parts with the maker: chain (ABCD) matrices instead of nodal analysis, splines
on a dense grid instead of root finding (Pozar, *Microwave Engineering*, 4th ed., sec. 4.4), scikit-rf for the cascades.
"""

from __future__ import annotations

import importlib
import json
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from functools import cache, reduce
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import skrf
from numpy.testing import assert_allclose, assert_array_equal
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

SAMPLE_DATA = Path(__file__).resolve().parents[1] / "sample_data"
TELEMETRY = SAMPLE_DATA / "telemetry"
SHEET: dict[str, Any] = tomllib.loads((TELEMETRY / "bench.toml").read_text(encoding="utf-8"))
TRUTH: dict[str, Any] = json.loads((TELEMETRY / "truth.json").read_text(encoding="utf-8"))
DEVICES: dict[str, Any] = {device["name"]: device for device in SHEET["device"]}
SWEEPS = [(name, entry) for name, device in DEVICES.items() for entry in device["sweep"]]
HALF_POWER_DB = 10.0 * np.log10(2.0)
DESIGN_HZ = 21.4e6
UNITS_HZ = {"HZ": 1.0, "KHZ": 1e3, "MHZ": 1e6, "GHZ": 1e9}

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


@pytest.fixture(scope="module")
def maker() -> Iterator[Any]:
    """The maker as a module, with its neighbours importable meanwhile."""
    names = ("analyzer", "circuits", "sessions", "truth", "make_sweeps")
    sys.path.insert(0, str(SAMPLE_DATA))
    try:
        yield importlib.import_module("make_sweeps")
    finally:
        sys.path.remove(str(SAMPLE_DATA))
        for name in names:
            sys.modules.pop(name, None)


def files_of(folder: Path) -> dict[str, bytes]:
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


@cache
def read(file: str) -> tuple[Real, Complex]:
    """Frequency in Hz, and S (2, 2, n), of a good version 1 file."""
    lines = (TELEMETRY / file).read_text(encoding="ascii").splitlines()
    option = next(line for line in lines if line.startswith("#")).upper().lstrip("#").split()
    unit = next((word for word in option if word in UNITS_HZ), "GHZ")
    pairs = next((word for word in option if word in {"RI", "MA", "DB"}), "MA")
    rows = np.array([[float(word) for word in line.split()] for line in lines if line[0] not in "!#"])
    first, second = rows[:, 1::2].T, rows[:, 2::2].T
    if pairs == "RI":
        s = first + 1j * second
    else:
        s = (10.0 ** (first / 20.0) if pairs == "DB" else first) * np.exp(1j * np.radians(second))
    return rows[:, 0] * UNITS_HZ[unit], s.reshape(2, 2, -1).swapaxes(0, 1)


def impedance(part: Any, omega: Real) -> Complex:
    if part.kind == "R":
        return np.full(omega.size, part.value, dtype=np.complex128)
    if part.kind == "C":
        return np.asarray(1.0 / (1j * omega * part.value))
    return np.asarray(part.value * (2.0 * np.pi * DESIGN_HZ / part.unloaded_q + 1j * omega))


def chains(circuit: Any, frequency_hz: Real) -> list[tuple[str, Complex]]:
    """The ladder from port 1 to port 2 as chain matrices (n, 2, 2), each with the node it ends at."""
    path = [circuit.nodes[0], *circuit.nodes[2:], circuit.nodes[1]]
    omega = 2.0 * np.pi * frequency_hz
    links = []
    for position, node in enumerate(path):
        shunt, series, gm = np.zeros(omega.size, complex), None, None
        for part in circuit.elements:
            if part.kind == "G":
                gm = part.value if part.a == node else gm
                continue
            ohm = impedance(part, omega)
            if (part.a, part.b) == (node, "0"):
                shunt = shunt + 1.0 / ohm
            elif position + 1 < len(path) and (part.a, part.b) == (node, path[position + 1]):
                series = ohm
        matrix = np.tile(np.eye(2, dtype=complex), (omega.size, 1, 1))
        matrix[:, 1, 0] = shunt
        links.append((node, matrix))
        if gm is not None:
            links.append((path[position + 1], np.tile([[0.0, -1.0 / gm], [0.0, 0.0]], (omega.size, 1, 1))))
        elif series is not None:
            matrix = np.tile(np.eye(2, dtype=complex), (omega.size, 1, 1))
            matrix[:, 0, 1] = series
            links.append((path[position + 1], matrix))
    return links


def model(circuit: Any, frequency_hz: Real) -> Complex:
    """Small-signal S in 50 Ω from the chain matrix of the whole ladder, (2, 2, n)."""
    links = [matrix for _, matrix in chains(circuit, frequency_hz)]
    total = reduce(np.matmul, links)
    # Factor by factor the determinant is exactly 1, or 0 past a transistor; of the product it would drown in rounding.
    determinant = np.prod([link[:, 0, 0] * link[:, 1, 1] - link[:, 0, 1] * link[:, 1, 0] for link in links], axis=0)
    a, b, c, d = total[:, 0, 0], total[:, 0, 1] / 50.0, total[:, 1, 0] * 50.0, total[:, 1, 1]
    s = np.array([[a + b - c - d, 2.0 * determinant], [np.full_like(a, 2.0), b + d - a - c]])
    return s / (a + b + c + d)


def collector_volts(circuit: Any, frequency_hz: Real, incident_volts: Real) -> Real:
    """Collector voltage of the linear circuit, from the output voltage back through what follows the collector."""
    links = chains(circuit, frequency_hz)
    last = max(i for i, (node, _) in enumerate(links) if node == "collector")
    onwards = reduce(np.matmul, [matrix for _, matrix in links[last:]])
    out_volts = np.abs(model(circuit, frequency_hz)[1, 0]) * incident_volts
    return np.asarray(np.abs(onwards[:, 0, 0] + onwards[:, 0, 1] / 50.0) * out_volts)


def network(frequency_hz: Real, s: Complex) -> skrf.Network:
    return skrf.Network(f=frequency_hz, f_unit="Hz", s=np.moveaxis(s, -1, 0), z0=50.0)


def expected_sweep(maker: Any, name: str, entry: dict[str, Any], frequency_hz: Real) -> tuple[Complex, Real, Real]:
    """S at the calibration planes without the analyzer's errors, drive in dBm and compression in dB at each point."""
    circuit = maker.CIRCUITS[name]
    pads = {key: network(frequency_hz, pad.scattering(frequency_hz)) for key, pad in maker.draw_pads(SHEET).items()}
    input_names = entry.get("input_pads", ["b10"])
    output_names = entry.get("output_pads", ["c10"])
    s = model(circuit, frequency_hz)
    line = reduce(lambda left, right: left**right, [pads[key] for key in input_names])
    wave = np.abs(line.s[:, 1, 0] / (1.0 - line.s[:, 1, 1] * s[0, 0]))
    drive_dbm = maker.draw_source_dbm(SHEET) + 20.0 * np.log10(wave)
    fall = np.ones(frequency_hz.size)
    if circuit.limiter is not None:
        volts = collector_volts(circuit, frequency_hz, np.sqrt(0.05 * 10.0 ** (drive_dbm / 10.0)))
        power = 2.0 * circuit.limiter.smoothness
        fall = (1.0 + (volts / circuit.limiter.saturation_volts) ** power) ** (-1.0 / power)
    s[1, 0] *= fall
    seen = network(frequency_hz, s)
    for key in input_names[1:][::-1]:
        seen = pads[key] ** seen
    for key in output_names[1:][::-1]:
        seen = seen ** pads[key]
    return np.moveaxis(seen.s, 0, -1), drive_dbm, -20.0 * np.log10(fall)


def hz(text: str) -> float:
    assert text.endswith(" MHz")
    return float(text.removesuffix(" MHz")) * 1e6


# --- made again ---------------------------------------------------------------------------------------------------


def test_maker_run_from_elsewhere_writes_the_committed_bytes(tmp_path: Path) -> None:
    out = tmp_path / "again"
    command = [sys.executable, "-B", str(SAMPLE_DATA / "make_sweeps.py"), "--out", str(out)]
    subprocess.run(command, check=True, cwd=tmp_path, capture_output=True)
    again, committed = files_of(out), files_of(TELEMETRY)
    assert set(again) == {"bench.toml", "truth.json", "pads/m6.s2p", *(entry["file"] for _, entry in SWEEPS)}
    assert {name for name in again if again[name] != committed.get(name)} == set()


def test_another_seed_makes_other_sweeps(maker: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(maker, "SEED", maker.SEED + 1)
    maker.make(tmp_path)
    other, committed = files_of(tmp_path), files_of(TELEMETRY)
    assert {name for name in other if other[name] == committed[name]} == {"bench.toml"}


# --- the truth, by the second route ---------------------------------------------------------------------------------


@pytest.mark.parametrize("name", DEVICES)
def test_nodal_analysis_and_chain_matrices_agree(maker: Any, name: str) -> None:
    frequency_hz = np.linspace(13e6, 30e6, 301)
    found = importlib.import_module("circuits").scattering(maker.CIRCUITS[name], frequency_hz)
    expected = model(maker.CIRCUITS[name], frequency_hz)
    scale = np.abs(expected).max(axis=-1, keepdims=True)
    scale[scale == 0.0] = 1.0
    assert_allclose(found / scale, expected / scale, rtol=0, atol=1e-11)


@pytest.mark.parametrize("name", DEVICES)
def test_true_figures_agree_with_splines_on_a_dense_grid(maker: Any, name: str) -> None:
    true = TRUTH["devices"][name]["figures"]
    frequency_hz = np.arange(18e6, 26e6, 500.0)
    s = model(maker.CIRCUITS[name], frequency_hz)
    s21 = s[1, 0]
    u = (frequency_hz - DESIGN_HZ) / 1e6
    gain = CubicSpline(u, 20.0 * np.log10(np.abs(s21)))
    peaks = gain.derivative().roots(extrapolate=False)
    peak = peaks[np.argmax(gain(peaks))]
    edges = gain.solve(gain(peak) - HALF_POWER_DB, extrapolate=False)
    lower, upper = edges[edges < peak].max(), edges[edges > peak].min()
    phase = CubicSpline(u, np.unwrap(np.angle(s21)))
    delay_s = -phase.derivative()(u) / (2e6 * np.pi)

    assert_allclose(true["gain_db"], gain(0.0), rtol=0, atol=2e-6)
    assert_allclose(true["peak_gain_db"], gain(peak), rtol=0, atol=2e-6)
    assert_allclose(true["peak_frequency_hz"], DESIGN_HZ + 1e6 * peak, rtol=0, atol=2.0)
    assert_allclose(true["lower_edge_hz"], DESIGN_HZ + 1e6 * lower, rtol=0, atol=1.0)
    assert_allclose(true["upper_edge_hz"], DESIGN_HZ + 1e6 * upper, rtol=0, atol=1.0)
    assert_allclose(true["bandwidth_hz"], 1e6 * (upper - lower), rtol=0, atol=1.0)
    centre_hz = np.sqrt((DESIGN_HZ + 1e6 * lower) * (DESIGN_HZ + 1e6 * upper))
    assert_allclose(true["centre_frequency_hz"], centre_hz, rtol=0, atol=1.0)
    assert_allclose(true["loaded_q"], centre_hz / (1e6 * (upper - lower)), rtol=2e-6, atol=0)
    at_design = np.argmin(np.abs(u))
    assert_allclose(true["group_delay_s"], delay_s[at_design], rtol=1e-5, atol=0)
    assert_allclose(true["phase_deg"], np.degrees(np.angle(s21[at_design])), rtol=0, atol=2e-6)
    in_band = (u >= lower) & (u <= upper)
    for key, parameter in (("input_return_loss_db", s[0, 0]), ("output_return_loss_db", s[1, 1])):
        assert_allclose(true[key], -20.0 * np.log10(np.abs(parameter[in_band]).max()), rtol=0, atol=0.02)
    for point in true.get("rejection", []):
        expected_db = gain(peak) - gain((point["at_hz"] - DESIGN_HZ) / 1e6)
        assert_allclose(point["rejection_db"], expected_db, rtol=0, atol=2e-6)
    if "reverse_isolation_db" in true:
        assert_allclose(true["reverse_isolation_db"], -gain(0.0), rtol=0, atol=2e-6)
    if "delay_variation_s" in true:
        low, high = (hz(edge) for edge in DEVICES[name]["targets"]["delay_variation"]["over"])
        band = (frequency_hz >= low) & (frequency_hz <= high)
        assert_allclose(true["delay_variation_s"], np.ptp(delay_s[band]), rtol=1e-3, atol=0)
        phase_deg = np.degrees(phase(u[band]))
        departure = phase_deg - np.polyval(np.polyfit(u[band], phase_deg, 1), u[band])
        assert_allclose(true["phase_linearity_deg"], np.abs(departure).max(), rtol=5e-3, atol=0)


@pytest.mark.parametrize("name", [name for name, device in DEVICES.items() if device["kind"] == "amplifier"])
def test_true_compression_points_are_one_decibel_down(maker: Any, name: str) -> None:
    true, limiter = TRUTH["devices"][name]["figures"], maker.CIRCUITS[name].limiter
    incident_volts = np.sqrt(0.05 * 10.0 ** (np.array([true["input_p1db_dbm"]]) / 10.0))
    swing = collector_volts(maker.CIRCUITS[name], np.array([DESIGN_HZ]), incident_volts) / limiter.saturation_volts
    power = 2.0 * limiter.smoothness
    assert_allclose(20.0 / power * np.log10(1.0 + swing**power), 1.0, rtol=0, atol=1e-5)
    assert_allclose(true["output_p1db_dbm"], true["input_p1db_dbm"] + true["gain_db"] - 1.0, rtol=0, atol=2e-6)


@pytest.mark.parametrize("name", ["first IF stage", "detector driver"])
def test_a_single_tuned_stage_obeys_its_closed_form(name: str) -> None:
    # B = f0/Q and τ(f0) = 2Q/ω0 = 1/(πB) for a single tuned circuit (closed form); the tap and the coupling capacitor
    # of a real stage bend it by about one part in Q squared.
    true = TRUTH["devices"][name]["figures"]
    q_of_delay = np.pi * true["peak_frequency_hz"] * true["group_delay_s"]
    assert_allclose(q_of_delay, true["loaded_q"], rtol=0.03, atol=0)


def test_filter_loss_is_that_of_its_unloaded_q(maker: Any) -> None:
    # Dissipation adds 4.343 (f0/B) Σg/Qu dB to a Butterworth filter, g = 1, 2, 1 (S. B. Cohn, Proc. IRE 47, 1959,
    # 1342-1348; formula from memory), to first order in the dissipation.
    true = TRUTH["devices"]["post-mixer filter"]["figures"]
    (unloaded_q,) = {e.unloaded_q for e in maker.CIRCUITS["post-mixer filter"].elements if e.kind == "L"}
    expected_db = 4.343 * true["loaded_q"] * 4.0 / unloaded_q
    assert_allclose(true["gain_db"], -expected_db, rtol=0.1, atol=0)


# --- what the sweeps carry --------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("name", "entry"), SWEEPS, ids=[entry["file"] for _, entry in SWEEPS])
def test_sweep_carries_the_model_within_its_noise(maker: Any, name: str, entry: dict[str, Any]) -> None:
    """401 points, two components each: the mean square of the residual is known to 5 %; 18 % is allowed."""
    analyzer = importlib.import_module("analyzer")
    frequency_hz, shown = read(entry["file"])
    assert frequency_hz.size == 401
    expected, drive_dbm, compression_db = expected_sweep(maker, name, entry, frequency_hz)
    behind_db = [maker.draw_pads(SHEET)[key].loss_db for key in ("b10", "c10")]
    measured = [(0, 0), (1, 0), (0, 1), (1, 1)] if entry["file"] == "filter.s2p" else [(0, 0), (1, 0)]
    for i, j in measured:
        trace = expected[i, j]
        floor_variance = 0.5 * 10.0 ** ((analyzer.RECEIVER_FLOOR_DB + behind_db[i] + behind_db[j]) / 10.0)
        sigma = np.sqrt(floor_variance + np.abs(trace * analyzer.TRACE_NOISE_DB * np.log(10.0) / 20.0) ** 2)
        if i == j:
            turn = np.exp(2j * np.pi * frequency_hz * analyzer.DIRECTIVITY_DELAY_S)
            directivity = np.average((shown[i, j] - trace) * turn, weights=1.0 / sigma**2)
            assert_allclose(20.0 * np.log10(abs(directivity)), analyzer.DIRECTIVITY_DB, rtol=0, atol=0.3)
            residual = shown[i, j] - trace - directivity / turn
        else:
            weights = np.abs(trace) ** 2 / sigma**2
            drift = np.average((shown[i, j] / trace).real, weights=weights)
            assert abs(20.0 * np.log10(drift)) < 4.0 * analyzer.DRIFT_DB
            residual = shown[i, j] - drift * trace
        assert_allclose(0.5 * np.mean(np.abs(residual / sigma) ** 2), 1.0, rtol=0, atol=0.18)
    true = TRUTH["devices"][name]["sweeps"][entry["file"]]
    assert_allclose(true["drive_dbm"], np.interp(DESIGN_HZ, frequency_hz, drive_dbm), rtol=0, atol=2e-6)
    assert_allclose(true["compression_db"], np.interp(DESIGN_HZ, frequency_hz, compression_db), rtol=0, atol=2e-6)
    gain_db = TRUTH["devices"][name]["figures"]["gain_db"] - true["compression_db"]
    assert_allclose(true["gain_db"], gain_db, rtol=0, atol=2e-6)


def test_columns_that_were_not_measured() -> None:
    for _, entry in SWEEPS:
        _, s = read(entry["file"])
        if entry["file"] == "discriminator.s2p":
            assert_array_equal(s[0, 1], s[1, 0])
            assert_array_equal(s[1, 1], s[0, 0])
        elif entry["file"] == "filter.s2p":
            passband = np.abs(s[1, 0]) > 0.1
            assert_allclose(s[0, 1][passband], s[1, 0][passband], rtol=0.05, atol=0)
            assert not np.array_equal(s[0, 1], s[1, 0])
        else:
            assert not s[:, 1].any()


def test_one_file_ends_its_lines_with_crlf() -> None:
    with_crlf = {name for name, data in files_of(TELEMETRY).items() if b"\r\n" in data}
    assert with_crlf == {"first_high.s2p"}


def test_pads_keep_their_labels_and_the_measured_one_its_file() -> None:
    for name, pad in SHEET["pads"].items():
        true = TRUTH["pads"][name]
        if "file" not in pad:
            assert abs(true["loss_db"] - pad["loss_db"]) < pad["tolerance_db"]
            continue
        frequency_hz, s = read(pad["file"])
        assert_allclose(-20.0 * np.log10(np.abs(s[1, 0])).mean(), true["loss_db"], rtol=0, atol=1e-3)
        turn = np.polyfit(frequency_hz - frequency_hz.mean(), np.unwrap(np.angle(s[1, 0])), 1)[0]
        assert_allclose(-turn / (2.0 * np.pi), true["delay_s"], rtol=0, atol=1e-12)


# --- what the session is meant to show --------------------------------------------------------------------------------


def gain_curve_db(file: str, added_pad: str | None = None) -> tuple[Real, Real]:
    """Frequency, and gain with the added pad out as it really was."""
    frequency_hz, s = read(file)
    loss_db = TRUTH["pads"][added_pad]["loss_db"] if added_pad else 0.0
    return frequency_hz, 20.0 * np.log10(np.abs(s[1, 0])) + loss_db


def test_first_stage_loses_its_peak_and_keeps_its_skirts() -> None:
    compression = {file: v["compression_db"] for file, v in TRUTH["devices"]["first IF stage"]["sweeps"].items()}
    assert compression["first_low.s2p"] < 0.05
    assert 0.3 < compression["first_mid.s2p"] < 0.8
    assert 4.0 < compression["first_high.s2p"] < 8.0
    frequency_hz, low = gain_curve_db("first_low.s2p", "a20")
    _, high = gain_curve_db("first_high.s2p")
    fall = low - high
    at_design = np.abs(frequency_hz - DESIGN_HZ) < 50e3
    assert_allclose(fall[at_design].mean(), compression["first_high.s2p"], rtol=0, atol=0.15)
    assert_allclose(fall[:20].mean(), 0.0, rtol=0, atol=0.15)
    assert_allclose(fall[-20:].mean(), 0.0, rtol=0, atol=0.25)


def test_limiter_shows_a_flat_top_wider_than_its_band() -> None:
    frequency_hz, gain_db = gain_curve_db("limiter.s2p")
    within = frequency_hz[gain_db > gain_db.max() - HALF_POWER_DB]
    assert np.ptp(within) > 3.0 * TRUTH["devices"]["limiter stage"]["figures"]["bandwidth_hz"]
    flat = frequency_hz[gain_db > gain_db.max() - 0.2]
    assert np.ptp(flat) > TRUTH["devices"]["limiter stage"]["figures"]["bandwidth_hz"]


def limits_of(target: dict[str, Any]) -> tuple[float, float]:
    def number(value: float | str) -> float:
        if not isinstance(value, str):
            return float(value)
        size, unit = value.split()
        return float(size) * {"MHz": 1e6, "kHz": 1e3, "ns": 1e-9}[unit]

    if "nominal" in target:
        nominal, tolerance = number(target["nominal"]), number(target["tolerance"])
        return nominal - tolerance, nominal + tolerance
    return number(target.get("min", -np.inf)), number(target.get("max", np.inf))


def targets_against_the_truth() -> dict[str, tuple[float, float, float]]:
    """Every target of the session by name: lower limit, true figure, upper limit."""
    found = {}
    for name, device in DEVICES.items():
        true = TRUTH["devices"][name]["figures"]
        for figure, asked in device["targets"].items():
            for i, target in enumerate(asked if isinstance(asked, list) else [asked]):
                if figure == "rejection":
                    value, label = true["rejection"][i]["rejection_db"], f"{figure} at {target['at']}"
                elif figure == "insertion_loss":
                    value, label = -true["gain_db"], figure
                else:
                    value = next(
                        true[figure + unit] for unit in ("", "_db", "_hz", "_s", "_deg") if figure + unit in true
                    )
                    label = figure
                low, high = limits_of(target)
                found[f"{name}: {label}"] = (low, value, high)
    return found


def test_one_target_is_truly_missed() -> None:
    missed = {what for what, (low, value, high) in targets_against_the_truth().items() if not low <= value <= high}
    assert missed == {"post-mixer filter: rejection at 22.4 MHz"}


def test_one_gain_lies_within_a_pad_tolerance_of_its_limit_and_no_other_decibel_figure_does() -> None:
    close = {}
    for what, (low, value, high) in targets_against_the_truth().items():
        if any(word in what for word in ("gain", "loss", "rejection")):
            margin = min(abs(value - low), abs(high - value))
            if margin < 1.0:
                close[what] = value - low
    assert set(close) == {"detector driver: gain"}
    assert_allclose(close["detector driver: gain"], 0.1, rtol=0, atol=0.02)


def test_readings_with_the_label_of_the_pad_fall_on_the_side_that_the_session_is_meant_to_show() -> None:
    def reading_db(file: str, label_db: float) -> float:
        frequency_hz, gain_db = gain_curve_db(file)
        return float(gain_db[np.abs(frequency_hz - DESIGN_HZ) < 100e3].mean() + label_db)

    assert reading_db("driver_low.s2p", 20.0) > DEVICES["detector driver"]["targets"]["gain"]["min"] + 0.05
    assert reading_db("limiter.s2p", 0.0) < DEVICES["limiter stage"]["targets"]["gain"]["min"] - 5.0
