"""Sweeps that no designer had in mind, through the whole analysis: each ends in a result or in one clear fault.

Invented data; nothing is checked against a source but that numbers are finite or missing, and intervals in order.
"""

import warnings

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from benchtool.analysis import analyse
from benchtool.errors import BenchtoolError
from benchtool.sheet import load_sheet

SHEET = """version = 1
[analyzer]
source_dbm = -10
[pads.a10]
loss_db = 10
[[device]]
name = "odd one"
kind = "{kind}"
{design}
[device.targets]
{targets}
[[device.sweep]]
file = "low.s2p"
input_pads = ["a10"]
[[device.sweep]]
file = "high.s2p"
"""
TARGETS = {
    "amplifier": "gain = { min = 10 }\nbandwidth = { max = '2 MHz' }",
    "filter": "insertion_loss = { max = 3 }\nloaded_q = { min = 5 }",
    "network": "phase = { nominal = -90, tolerance = 5 }\nripple = { max = 3, over = ['20 MHz', '22 MHz'] }",
}
DESIGNS = ("", 'design_frequency = "21 MHz"', 'design_frequency = "1 GHz"', 'window = ["20 MHz", "22 MHz"]')
SHAPES = ("flat", "step", "spike", "alternating", "zeros but one", "noise", "line", "ripple", "edge", "huge", "tiny")
"""Traces of magnitude near one, before they are scaled."""


def trace(shape, points, rng):
    """One trace, (points,)."""
    x = np.linspace(-1.0, 1.0, points)
    made = {
        "flat": np.ones(points),
        "step": np.where(x < 0.1, 1.0, 1e-3),
        "spike": 1e-4 + (np.arange(points) == points // 3),
        "alternating": np.where(np.arange(points) % 2, 1.0, -1.0),
        "zeros but one": 1.0 * (np.arange(points) == points // 2),
        "noise": rng.normal(size=points) + 1j * rng.normal(size=points),
        "line": np.exp(40j * x),
        "ripple": 1.0 + 0.4 * np.cos(9 * x),
        "edge": 1.0 / (1.0 + 30j * (x - 1.0)),
        "huge": 1e4 / (1.0 + 8j * x),
        "tiny": 1e-9 / (1.0 + 8j * x),
    }
    return np.asarray(made[shape], np.complex128)


def sweep_text(through, match, first_hz, step_hz):
    rows = ["# Hz S RI R 50"]
    for n, (s21, s11) in enumerate(zip(through, match, strict=True)):
        rows.append(f"{first_hz + n * step_hz:.0f} {s11.real:.9g} {s11.imag:.9g} {s21.real:.9g} {s21.imag:.9g} 0 0 0 0")
    return "\n".join(rows) + "\n"


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    kind=st.sampled_from(sorted(TARGETS)),
    low=st.sampled_from(SHAPES),
    high=st.sampled_from(SHAPES),
    match=st.sampled_from(SHAPES),
    points=st.sampled_from((3, 4, 5, 7, 9, 12, 33, 101)),
    design=st.sampled_from(DESIGNS),
    scale=st.sampled_from((1.0, 30.0, 1e-4)),
    noise=st.sampled_from((0.0, 1e-4, 0.1)),
    seed=st.integers(0, 99),
)
def test_any_sweep_ends_in_a_result_or_one_fault(tmp_path, kind, low, high, match, points, design, scale, noise, seed):
    rng = np.random.default_rng(seed)
    hiss = noise * (rng.normal(size=(2, points)) + 1j * rng.normal(size=(2, points)))
    for name, shape, own in (("low", low, hiss[0]), ("high", high, hiss[1])):
        through, reflected = scale * (trace(shape, points, rng) + own), 0.3 * trace(match, points, rng)
        (tmp_path / f"{name}.s2p").write_text(sweep_text(through, reflected, 18e6, 6e6 / (points - 1)))
    (tmp_path / "bench.toml").write_text(SHEET.format(kind=kind, design=design, targets=TARGETS[kind]))
    fault, result = None, None
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            result = analyse(load_sheet(tmp_path), trials=60)
    except BenchtoolError as raised:
        fault = raised
    if result is None:
        assert all("; " in line for line in fault.lines())
        return
    (device,) = result.devices
    for figure in device.figures.values():
        numbers = [n for n in (figure.low, figure.value, figure.high) if n is not None]
        assert np.all(np.isfinite(numbers)), figure
        assert numbers == sorted(numbers), figure
    assert device.verdict in ("met", "missed", "undecided", "none")


@pytest.mark.parametrize("shape", SHAPES)
def test_every_shape_alone_is_seen_through(tmp_path, shape):
    rng = np.random.default_rng(1)
    for name in ("low", "high"):
        text = sweep_text(trace(shape, 51, rng), 0.2 * trace("flat", 51, rng), 18e6, 120e3)
        (tmp_path / f"{name}.s2p").write_text(text)
    (tmp_path / "bench.toml").write_text(SHEET.format(kind="amplifier", design="", targets=TARGETS["amplifier"]))
    (device,) = analyse(load_sheet(tmp_path), trials=60).devices
    assert "gain" in device.figures


@pytest.mark.parametrize("kind", sorted(TARGETS))
def test_sheets_of_these_tests_are_sound(tmp_path, kind):
    # Else the tests above would be content with the fault of a sheet.
    flat = trace("flat", 9, np.random.default_rng(0))
    for name in ("low", "high"):
        (tmp_path / f"{name}.s2p").write_text(sweep_text(flat, 0.1 * flat, 18e6, 750e3))
    for design in DESIGNS:
        (tmp_path / "bench.toml").write_text(SHEET.format(kind=kind, design=design, targets=TARGETS[kind]))
        assert len(load_sheet(tmp_path).devices) == 1
