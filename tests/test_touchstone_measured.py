"""Which parameters a file really measured: placeholders and copies told from data, and what is said of them."""

import numpy as np
import pytest
from numpy.testing import assert_array_equal

from benchtool.model import PARAMETERS, Sweep
from benchtool.touchstone import format_sweep, parse_sweep

POINTS = 101
FREQUENCY_HZ = np.linspace(18e6, 25e6, POINTS)
DETUNING = 2 * 20 * (FREQUENCY_HZ - 21.4e6) / 21.4e6
RESONANCE = 1 / (1 + 1j * DETUNING)
ZERO = np.zeros(POINTS)
RNG = np.random.default_rng(2026)


def noise(level):
    return level * (RNG.normal(size=POINTS) + 1j * RNG.normal(size=POINTS))


MATCH_1, MATCH_2 = 0.4 - 0.3 * RESONANCE, 0.2j - 0.5 * RESONANCE


def read(s11, s21, s12, s22, digits=None) -> Sweep:
    s = np.array([[s11, s12], [s21, s22]], dtype=complex)
    if digits is not None:
        s = np.round(s.real, digits) + 1j * np.round(s.imag, digits)
    return parse_sweep(format_sweep(Sweep("x", FREQUENCY_HZ[: s.shape[2]], s)).encode(), name="x.s2p")


LOSSY = 0.6 * RESONANCE
GAIN = 40 * RESONANCE
NOISE = noise(1e-3)

CASES = {
    "all four": ((MATCH_1, GAIN, 0.01 * RESONANCE, MATCH_2), PARAMETERS, None),
    "zero reverse pair": ((MATCH_1, GAIN, ZERO, ZERO), ("S11", "S21"), "S12 and S22 are zero in every row"),
    "zero forward pair": ((ZERO, ZERO, LOSSY, MATCH_2), ("S12", "S22"), "S11 and S21 are zero in every row"),
    "zero S12 alone": ((MATCH_1, GAIN, ZERO, MATCH_2), ("S11", "S21", "S22"), "S12 is zero in every row"),
    "zero S22 alone": ((MATCH_1, GAIN, LOSSY, ZERO), ("S11", "S21", "S12"), "S22 is zero in every row"),
    "S21 alone": ((ZERO, GAIN, ZERO, ZERO), ("S21",), "S11, S12 and S22 are zero in every row"),
    "nothing": ((ZERO, ZERO, ZERO, ZERO), (), "S11, S21, S12 and S22 are zero in every row"),
    "reciprocal": ((MATCH_1, LOSSY, LOSSY, MATCH_2), PARAMETERS, None),
    "reciprocal with gain": (
        (MATCH_1, GAIN, GAIN, MATCH_2),
        ("S11", "S21", "S22"),
        "S12 is a copy of S21",
    ),
    "both copied, with gain": ((MATCH_1, GAIN, GAIN, MATCH_1), ("S11", "S21"), "S12 and S22 are copies of S11 and S21"),
    "S12 copied, S22 zero": (
        (MATCH_1, LOSSY, LOSSY, ZERO),
        ("S11", "S21"),
        "S22 is zero in every row and S12 is a copy of S21",
    ),
    "S12 zero, S22 copied": (
        (MATCH_1, LOSSY, ZERO, MATCH_1),
        ("S11", "S21"),
        "S12 is zero in every row and S22 is a copy of S11",
    ),
    "S12 at -200 dB": (
        (MATCH_1, GAIN, ZERO + 1e-10, ZERO + 0.3),
        ("S11", "S21"),
        "S12 and S22 are one number in every row",
    ),
    "S12 at -200 dB, S22 zero": (
        (MATCH_1, GAIN, ZERO + 1e-10, ZERO),
        ("S11", "S21"),
        "S22 is zero in every row and S12 is one number in every row",
    ),
    "S12 zero, S22 one": (
        (MATCH_1, GAIN, ZERO, ZERO + 1),
        ("S11", "S21"),
        "S12 is zero in every row and S22 is one number in every row",
    ),
    "both one": ((MATCH_1, GAIN, ZERO + 1, ZERO + 1), ("S11", "S21"), "S12 and S22 are one number in every row"),
    "both of one number that a device may have": ((MATCH_1, GAIN, ZERO + 0.01, ZERO + 0.3), PARAMETERS, None),
    "S12 of -110 dB": ((MATCH_1, GAIN, ZERO + 3e-6, ZERO + 0.3), PARAMETERS, None),
    "matched line with gain": (
        (ZERO, GAIN, GAIN, ZERO),
        ("S21",),
        "S11 and S22 are zero in every row and S12 is a copy of S21",
    ),
    "matched line with noise": (
        (ZERO, LOSSY + NOISE, LOSSY + NOISE, ZERO),
        ("S21",),
        "S11 and S22 are zero in every row and S12 is a copy of S21",
    ),
    "S22 copied": ((MATCH_1, GAIN, LOSSY, MATCH_1), ("S11", "S21", "S12"), "S22 is a copy of S11"),
}


@pytest.mark.parametrize("case", CASES)
def test_what_was_measured_and_what_is_said(case):
    given, measured, words = CASES[case]
    sweep = read(*given)
    assert sweep.measured == measured
    for parameter, column in zip(PARAMETERS, given, strict=True):
        kept = sweep.s[int(parameter[1]) - 1, int(parameter[2]) - 1]
        assert_array_equal(kept, column if parameter in measured else ZERO)
    if words is None:
        assert sweep.findings == ()
        return
    (finding,) = sweep.findings
    assert (finding.code, finding.severity, finding.sweep) == ("one-path", "note", "x.s2p")
    assert finding.message == f"x.s2p: {words}, so taken as not measured"
    assert finding.advice == "turn the device round and sweep it again if you need them"


@pytest.mark.parametrize("level", [2e-4, 1e-3, 1e-2])
def test_copies_with_the_same_noise_are_copies(level):
    s11, s21 = MATCH_1 + noise(level), LOSSY + noise(level)
    sweep = read(s11, s21, s21, s11, digits=7)
    assert sweep.measured == ("S11", "S21")
    assert [finding.code for finding in sweep.findings] == ["one-path"]
    assert read(s11, s21, s21 + noise(level), s11 + noise(level), digits=7).full


@pytest.mark.parametrize("digits", [5, 7, 12, None])
def test_a_calculated_symmetric_device_is_kept_with_a_word(digits):
    sweep = read(MATCH_1, LOSSY, LOSSY, MATCH_1, digits)
    assert sweep.full
    (finding,) = sweep.findings
    assert (finding.code, finding.severity) == ("symmetric-file", "note")


@pytest.mark.parametrize("degrees_a_row", [1, 40, 89, 120, 179])
def test_a_calculated_matched_line_of_any_length_is_kept(degrees_a_row):
    line = 0.99 * np.exp(-1j * np.deg2rad(degrees_a_row) * np.arange(POINTS))
    sweep = read(ZERO, line, line, ZERO, digits=8)
    assert sweep.full
    assert [finding.code for finding in sweep.findings] == ["symmetric-file"]


def test_a_calculated_symmetric_device_in_segments_is_kept():
    steps = np.concatenate([np.linspace(-9, -2, 30), np.linspace(-1.9, 1.9, 60), np.linspace(2, 9, 30)])
    curve = 1 / (1 + 1j * steps)
    s = np.array([[0.9 - curve, curve], [curve, 0.9 - curve]])
    text = format_sweep(Sweep("x", 1e6 * (100 + steps), s))
    assert parse_sweep(text.encode(), name="x.s2p").full


def test_one_row_cannot_show_a_copy_of_the_match():
    sweep = read(MATCH_1[:1], GAIN[:1], LOSSY[:1], MATCH_1[:1])
    assert sweep.full
