"""Highest level and crossings of a fitted curve against scipy's root finder on the same polynomials."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import signal
from scipy.optimize import brentq, minimize_scalar

from benchtool.fitting import fit_curve
from benchtool.level_search import LevelSearch
from benchtool.noise import NOISE_FREE, estimate_noise
from benchtool.units import HALF_POWER_DB

F = np.linspace(20.0e6, 22.8e6, 401)
F0, B = 21.4e6, 0.6e6


def butterworth(order, f0_hz=F0):
    zeros, poles, gain = signal.buttap(order)
    return 10.0 * signal.freqs_zpk(zeros, poles, gain, 2.0 * (F - f0_hz) / B)[1]


def level_of(curve, s21):
    return lambda f: float(curve.level_at(s21, np.array([f]))[0])


@pytest.fixture(params=["one fit", "several"])
def measured(request):
    s21 = butterworth(1)
    if request.param == "several":
        # Limited, a resonance is no polynomial any more.
        s21 = s21 / (1.0 + np.abs(s21 / 7.0) ** 4) ** 0.25
    curve = fit_curve(F, s21, F0 - 0.9e6, F0 + 0.9e6, NOISE_FREE)
    assert (len(curve.fits) == 1) == (request.param == "one fit")
    return curve, s21


def test_edges_are_the_roots_of_the_curve(measured):
    curve, s21 = measured
    levels = LevelSearch(curve, s21).levels(s21)
    at, top = levels.highest()
    lower, upper = levels.edges(top - HALF_POWER_DB)
    level = level_of(curve, s21)

    def short(f):
        return level(f) - float(top) + HALF_POWER_DB

    assert_allclose(lower, brentq(short, F0 - 0.9e6, F0, xtol=1e-6), rtol=0, atol=1e-6 * B)
    assert_allclose(upper, brentq(short, F0, F0 + 0.9e6, xtol=1e-6), rtol=0, atol=1e-6 * B)
    assert_allclose(level(float(at)), top, rtol=0, atol=1e-7)


def test_peak_is_the_highest_point_of_the_curve(measured):
    curve, s21 = measured
    _, top = LevelSearch(curve, s21).levels(s21).highest()
    level = level_of(curve, s21)
    dense = max(level(f) for f in np.linspace(F0 - 0.45e6, F0 + 0.45e6, 4001))
    assert_allclose(top, dense, rtol=0, atol=1e-6)


def test_edges_of_a_steep_filter_are_the_roots_too():
    zeros, poles, gain = signal.cheb1ap(7, 1.0)
    f = np.linspace(20.9e6, 21.9e6, 1601)
    s21 = signal.freqs_zpk(zeros, poles, gain, 2.0 * (f - F0) / B)[1]
    curve = fit_curve(f, s21, F0 - 0.36e6, F0 + 0.36e6, NOISE_FREE)
    _, upper = LevelSearch(curve, s21).levels(s21).edges(np.array(-HALF_POWER_DB))
    level = level_of(curve, s21)
    root = brentq(lambda at: level(at) + HALF_POWER_DB, F0 + 0.5 * B, F0 + 0.36e6, xtol=1e-6)
    assert_allclose(upper, root, rtol=0, atol=1e-6 * B)


def test_peak_of_a_resonance_between_the_nodes():
    s21 = butterworth(1, 21.4123e6)
    curve = fit_curve(F, s21, F0 - 0.45e6, F0 + 0.45e6, NOISE_FREE)
    at, top = LevelSearch(curve, s21).levels(s21).highest()
    assert_allclose(at, 21.4123e6, rtol=0, atol=1e-5 * B)
    assert_allclose(top, 20.0, rtol=0, atol=1e-7)


@pytest.mark.parametrize(("ripple_db", "points"), [(2.0, 51), (0.5, 51), (2.0, 801), (0.1, 201)])
def test_peak_of_a_rippled_top_is_its_highest_point(ripple_db, points):
    # Humps of nearly one height: a parabola through coarse nodes is far off, and the wrong hump may win by its luck.
    zeros, poles, gain = signal.cheb1ap(6, ripple_db)
    f = np.linspace(F0 - B, F0 + B, points)
    tilt = 1.0 + 0.004 * np.linspace(-1.0, 1.0, 9)[:, None] * (f - F0) / B
    copies = tilt * signal.freqs_zpk(zeros, poles, gain, 2.0 * (f - F0) / B)[1]
    curve = fit_curve(f, copies[4], F0 - 0.6 * B, F0 + 0.6 * B, NOISE_FREE)
    at, top = LevelSearch(curve, copies[4]).levels(copies).highest()
    along = np.linspace(curve.grid_hz[0], curve.grid_hz[-1], 8001)
    # Humps are told apart by their nodes, to a hundredth of a decibel; the height of the one that wins is exact.
    assert_allclose(top, np.max(curve.level_at(copies, along), axis=1), rtol=0, atol=0.01)
    here = [float(curve.level_at(copy, np.array([one]))[0]) for copy, one in zip(copies, at, strict=True)]
    assert_allclose(here, top, rtol=0, atol=1e-9)


def test_a_window_of_a_few_nodes_has_its_peak():
    s21 = butterworth(1)
    curve = fit_curve(F, s21, F0 - 0.45e6, F0 + 0.45e6, NOISE_FREE)
    at, top = LevelSearch(curve, s21, F0 - 6e3, F0 + 8e3).levels(s21).highest()
    assert_allclose(at, F0, rtol=0, atol=1e-5 * B)
    assert_allclose(top, 20.0, rtol=0, atol=1e-7)


def test_each_copy_has_its_own_places():
    rng = np.random.default_rng(3)
    f0 = F0 + rng.uniform(-0.05e6, 0.05e6, 50)
    copies = np.array([butterworth(1, each) for each in f0]) * rng.uniform(0.5, 2.0, (50, 1))
    curve = fit_curve(F, copies[0], F0 - 0.5e6, F0 + 0.5e6, NOISE_FREE)
    levels = LevelSearch(curve, copies[0]).levels(copies)
    at, top = levels.highest()
    lower, upper = levels.edges(top - HALF_POWER_DB)
    assert_allclose(at, f0, rtol=0, atol=1e-5 * B)
    assert_allclose([upper - lower, 0.5 * (upper + lower) - f0], [[B] * 50, [0.0] * 50], rtol=0, atol=1e-5 * B)


def test_a_peak_outside_the_limits_is_at_the_limit():
    s21 = butterworth(1)
    curve = fit_curve(F, s21, F0 - 0.45e6, F0 + 0.45e6, NOISE_FREE)
    search = LevelSearch(curve, s21, F0 + 0.1e6, F0 + 0.3e6)
    at, top = search.levels(s21).highest()
    assert at == search.low_hz
    assert_allclose(top, level_of(curve, s21)(search.low_hz), rtol=0, atol=1e-9)


def test_a_peak_just_inside_the_limits_is_found():
    s21 = butterworth(1)
    curve = fit_curve(F, s21, F0 - 0.45e6, F0 + 0.45e6, NOISE_FREE)
    search = LevelSearch(curve, s21, F0 - 0.004e6, F0 + 0.3e6)
    at, _ = search.levels(s21).highest()
    assert search.low_hz < at
    assert_allclose(at, F0, rtol=0, atol=1e-5 * B)


def test_an_edge_that_is_not_on_the_curve_is_nan():
    s21 = butterworth(1)
    curve = fit_curve(F, s21, F0 - 0.2e6, F0 + 0.45e6, NOISE_FREE)
    levels = LevelSearch(curve, s21).levels(s21)
    lower, upper = levels.edges(levels.highest()[1] - HALF_POWER_DB)
    assert np.isnan(lower)
    assert_allclose(upper, F0 + 0.5 * B, rtol=0, atol=1e-5 * B)


def test_falls_goes_from_one_end_to_the_other():
    s21 = butterworth(1)
    curve = fit_curve(F, s21, F0, F0 + 0.6e6, NOISE_FREE)
    levels = LevelSearch(curve, s21).levels(s21)
    assert_allclose(levels.falls(np.array(20.0 - HALF_POWER_DB), 1), F0 + 0.5 * B, rtol=0, atol=1e-5 * B)
    assert np.isnan(levels.falls(np.array(0.0), 1))
    # From the other end the level is below from the start: it is the first node that counts, and the fall is there.
    assert np.isfinite(levels.falls(np.array(20.0 - HALF_POWER_DB), -1))


@pytest.mark.parametrize("value", [0.5 + 0.2j, 1e-140, 0.0])
def test_a_trace_without_shape_has_its_level_everywhere(value):
    s21 = np.full(F.size, value, complex)
    curve = fit_curve(F, s21, F0 - 0.2e6, F0 + 0.2e6, NOISE_FREE)
    with np.errstate(divide="ignore"):
        expected = 20.0 * np.log10(np.abs(value)) if value else -np.inf
        at, top = LevelSearch(curve, s21).levels(s21).highest()
    assert curve.grid_hz[0] <= at <= curve.grid_hz[-1]
    assert top == expected or abs(top - expected) < 1e-9


def test_two_nodes_of_nothing_have_no_level_and_no_warning():
    nothing = np.zeros(F.size, complex)
    curve = fit_curve(F, nothing, F0, F0, NOISE_FREE)
    at, top = LevelSearch(curve, nothing).levels(nothing).highest()
    assert (float(at), float(top)) == (F0, -np.inf)


def test_noisy_copies_agree_with_a_minimiser():
    rng = np.random.default_rng(8)
    s21 = butterworth(2) + 0.02 * (rng.normal(size=F.size) + 1j * rng.normal(size=F.size))
    curve = fit_curve(F, s21, F0 - 0.3e6, F0 + 0.3e6, estimate_noise(F, s21))
    copies = s21 + 0.02 * (rng.normal(size=(20, F.size)) + 1j * rng.normal(size=(20, F.size)))
    at, top = LevelSearch(curve, copies[0]).levels(copies).highest()
    for copy, where, how_high in zip(copies, at, top, strict=True):
        level = level_of(curve, copy)
        found = minimize_scalar(
            lambda f, of=level: -of(f),
            bounds=(where - 0.02e6, where + 0.02e6),
            method="bounded",
            options={"xatol": 1.0},
        )
        assert_allclose(how_high, -found.fun, rtol=0, atol=1e-5)
