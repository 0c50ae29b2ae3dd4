"""Peak, edges, bandwidth, loaded Q and gain against closed forms, scipy's prototypes and scikit-rf's Q-factor fit."""

import os
from pathlib import Path

import numpy as np
import pytest
import skrf
from numpy.testing import assert_allclose
from scipy import signal

from benchtool.noise import NOISE_FREE, estimate_noise
from benchtool.response import plan_level_width, plan_passband
from benchtool.units import HALF_POWER_DB

REAL = Path(os.environ.get("BENCHTOOL_REAL", Path(__file__).parents[2] / "shared" / "real"))


def single_tuned(frequency_hz, f0_hz, q, gain=1.0):
    """A single-tuned circuit, closed form: 1/(1 + jQ(f/f0 - f0/f))."""
    return gain / (1 + 1j * q * (frequency_hz / f0_hz - f0_hz / frequency_hz))


def band_pass(frequency_hz, f0_hz, bandwidth_hz, prototype):
    """A band-pass response from a low-pass prototype (zeros, poles, gain) by the narrow-band substitution."""
    zeros, poles, gain = prototype
    x = 2 * (frequency_hz - f0_hz) / bandwidth_hz
    return signal.freqs_zpk(zeros, poles, gain, x)[1]


def measure(f, s21, window=None, noise=NOISE_FREE):
    band = plan_passband(f, s21, window, noise)
    return band, band.figures(s21)


@pytest.mark.parametrize("inside", [10, 13, 40, 150])
@pytest.mark.parametrize("offset", [0.0, 0.31, 0.77])
def test_single_tuned_closed_form(inside, offset):
    # Closed form: B = f0/Q, f1 f2 = f0², delay at the peak 2Q/ω0 = 1/(πB). Limits are those promised to users.
    f0, q, gain = 10.7e6, 50.0, 100.0
    b = f0 / q
    f = f0 + (np.arange(401) - 200 + offset) * b / inside
    f = f[f > 0]
    s21 = single_tuned(f, f0, q, gain)
    band, found = measure(f, s21, noise=estimate_noise(f, s21))
    assert band.points_inside in (inside, inside + 1)
    assert_allclose(found.peak_frequency, f0, rtol=0, atol=1e-3 * b)
    assert_allclose(found.bandwidth, b, rtol=1e-3, atol=0)
    assert_allclose(found.loaded_q, q, rtol=1e-3, atol=0)
    assert_allclose(found.centre_frequency, f0, rtol=1e-6, atol=0)
    assert_allclose(found.delay_at_peak, 1 / (np.pi * b), rtol=5e-3, atol=0)
    assert_allclose(found.peak_gain, 40.0, rtol=0, atol=0.002)
    assert_allclose([found.delay_q, found.phase_q], q, rtol=1e-3, atol=0)


def test_printed_edges_of_a_10_7_mhz_circuit():
    # Closed form, printed values: f0 10.7 MHz, Q 50: B 214 kHz, edges 10.593535 and 10.807535 MHz, τ 1.48743 µs.
    f = np.linspace(10e6, 11.4e6, 401)
    _, found = measure(f, single_tuned(f, 10.7e6, 50))
    assert_allclose([found.lower_edge, found.upper_edge], [10.593535e6, 10.807535e6], rtol=1e-7, atol=0)
    assert_allclose(found.delay_at_peak, 1.48743e-6, rtol=1e-5, atol=0)


@pytest.mark.parametrize("offset", np.linspace(0, 1, 7))
def test_four_points_inside(offset):
    f0, q = 10.7e6, 50.0
    f = f0 + (np.arange(401) - 200 + offset) * f0 / q / 4
    f = f[f > 0]
    band, found = measure(f, single_tuned(f, f0, q))
    assert band.points_inside in (4, 5)
    assert_allclose(found.bandwidth, f0 / q, rtol=0.02, atol=0)


@pytest.mark.parametrize("order", [1, 2, 3, 5])
@pytest.mark.parametrize("name", ["butterworth", "chebyshev", "bessel"])
def test_prototypes_of_scipy(order, name):
    # Independent route: scipy.signal prototypes; half-power point of each found on its own response by brentq.
    from scipy.optimize import brentq

    prototype = {
        "butterworth": lambda: signal.buttap(order),
        "chebyshev": lambda: signal.cheb1ap(order, 0.5),
        "bessel": lambda: signal.besselap(order, norm="delay"),
    }[name]()
    x = np.linspace(0.0, 8.0, 16001)
    level = 20 * np.log10(np.abs(signal.freqs_zpk(*prototype, x)[1]))

    def above(at):
        at_db = 20 * np.log10(np.abs(signal.freqs_zpk(*prototype, np.array([at]))[1][0]))
        return float(at_db - level.max() + HALF_POWER_DB)

    edge = brentq(above, x[np.argmax(level < level.max() - HALF_POWER_DB) - 1], 8.0)
    f = np.linspace(60e6, 80e6, 401)
    s21 = band_pass(f, 70e6, 4e6, prototype)
    _, found = measure(f, s21)
    assert_allclose(found.bandwidth, 4e6 * edge, rtol=1e-3, atol=0)
    assert_allclose(found.peak_gain, level.max(), rtol=0, atol=0.003)


@pytest.mark.parametrize(("order", "edge"), [(2, 1.38974), (3, 1.16749), (4, 1.09310), (5, 1.05926)])
def test_half_decibel_chebyshev_half_power_points(order, edge):
    # Handbook values of ω3dB for 0.5 dB ripple (A. I. Zverev, Handbook of Filter Synthesis, 1967, value from memory).
    f = np.linspace(65e6, 75e6, 801)
    _, found = measure(f, band_pass(f, 70e6, 4e6, signal.cheb1ap(order, 0.5)))
    assert_allclose(found.bandwidth / 4e6, edge, rtol=3e-5, atol=0)


@pytest.mark.parametrize(("order", "edge"), [(2, 1.361654), (3, 1.755672), (4, 2.113918), (5, 2.427411), (6, 2.703395)])
def test_bessel_half_power_points(order, edge):
    # Tabulated ω3dB of unit-delay Bessel low-passes (Zverev 1967, from memory; recomputed with scipy.signal.besselap).
    f = np.linspace(55e6, 85e6, 801)
    _, found = measure(f, band_pass(f, 70e6, 4e6, signal.besselap(order, norm="delay")))
    assert_allclose(found.bandwidth / 4e6, edge, rtol=3e-5, atol=0)


@pytest.mark.parametrize(("order", "shrink"), [(1, 1), (2, 0.643594), (3, 0.509825), (4, 0.434979), (5, 0.385614)])
def test_equal_circuits_shrink_the_band(order, shrink):
    # Closed form sqrt(2^(1/n) - 1) for n equal synchronous circuits.
    f = np.linspace(9.9e6, 11.5e6, 801)
    _, found = measure(f, single_tuned(f, 10.7e6, 40) ** order)
    assert_allclose(found.bandwidth / (10.7e6 / 40), shrink, rtol=1e-5, atol=0)


@pytest.mark.parametrize(
    ("order", "sixty", "thirty"), [(2, 31.62, 5.622), (3, 10.0, 3.162), (4, 5.623, 2.371), (5, 3.981, 1.995)]
)
def test_butterworth_shape_factors(order, sixty, thirty):
    # Shape factor 60/3 and 30/3 dB, closed form (10^(A/10) - 1)^(1/2n); the 3 dB point is the half-power point.
    f = np.linspace(10e6, 190e6, 4001)
    s21 = band_pass(f, 100e6, 2.5e6, signal.buttap(order))
    band, found = measure(f, s21)
    for depth, expected in ((60.0, sixty), (30.0, thirty)):
        plan = plan_level_width(f, s21, band, depth, NOISE_FREE)
        assert_allclose(plan.width(s21, found.peak_gain) / found.bandwidth, expected, rtol=3e-4, atol=0)


def test_common_practice_q_of_a_wide_if():
    # Common practice, no source: 10.7 MHz with a 400 kHz band is a Q of about 27.
    f = np.linspace(9e6, 12.4e6, 401)
    _, found = measure(f, single_tuned(f, 10.7e6, 10.7e6 / 400e3))
    assert round(float(found.loaded_q)) == 27


def test_copies_go_through_in_one_call():
    f = np.linspace(10e6, 11.4e6, 201)
    one = single_tuned(f, 10.7e6, 50)
    band, alone = measure(f, one)
    copies = np.stack([one, 2 * one, one * 1j]).reshape(3, 1, -1)
    together = band.figures(copies)
    assert together.bandwidth.shape == (3, 1)
    assert_allclose(together.bandwidth[:, 0], alone.bandwidth, rtol=1e-12, atol=0)
    assert_allclose(together.peak_gain[:, 0] - alone.peak_gain, [0, 20 * np.log10(2), 0], rtol=0, atol=1e-9)


def test_window_chooses_the_resonance():
    f = np.linspace(1e6, 9e6, 1601)
    s21 = single_tuned(f, 3e6, 60) + 2 * single_tuned(f, 7e6, 60)
    _, whole = measure(f, s21)
    _, low = measure(f, s21, (2e6, 4e6))
    assert_allclose(whole.peak_frequency, 7e6, rtol=1e-3, atol=0)
    assert_allclose(low.peak_frequency, 3e6, rtol=1e-3, atol=0)
    with pytest.raises(ValueError, match="no sample"):
        plan_passband(f, s21, (20e6, 30e6))


def test_edge_outside_the_sweep_is_not_found():
    f = np.linspace(10.65e6, 11.4e6, 401)
    s21 = single_tuned(f, 10.7e6, 50)
    band, found = measure(f, s21)
    assert (band.lower_inside, band.upper_inside) == (False, True)
    assert np.isnan(found.lower_edge)
    assert_allclose(found.upper_edge, 10.807535e6, rtol=1e-6, atol=0)


def test_peak_at_the_end_of_the_sweep_is_said_to_be():
    f = np.linspace(10.75e6, 11.4e6, 401)
    band, _ = measure(f, single_tuned(f, 10.7e6, 50))
    assert not band.peak_inside


def test_double_hump_less_than_half_power_deep_is_one_band():
    # 1.5 dB Chebyshev, order 2: two humps, a 1.5 dB dip between them; half-power band from cosh(acosh(1/ε')/n).
    f = np.linspace(60e6, 80e6, 801)
    s21 = band_pass(f, 70e6, 4e6, signal.cheb1ap(2, 1.5))
    band, found = measure(f, s21)
    ripple = np.sqrt(10**0.15 - 1)
    # Two-pole Chebyshev of even order peaks at 0 dB; half power below it lies where ε²T² = 1.
    edge = np.cosh(np.arccosh(1 / ripple) / 2)
    assert_allclose(found.bandwidth, 4e6 * edge, rtol=1e-3, atol=0)
    assert band.other_humps == ()


def test_dip_deeper_than_half_power_ends_the_band_and_is_reported():
    f = np.linspace(60e6, 80e6, 801)
    s21 = band_pass(f, 70e6, 4e6, signal.cheb1ap(2, 6.0))
    band, found = measure(f, s21)
    assert len(band.other_humps) == 1
    assert float(found.bandwidth) < 2.5e6


def test_scaling_frequency_leaves_q_alone():
    f = np.linspace(9e6, 12e6, 301)
    s21 = single_tuned(f, 10.5e6, 31.7)
    _, plain = measure(f, s21)
    _, scaled = measure(f * 1e3, s21)
    assert_allclose(scaled.loaded_q, plain.loaded_q, rtol=1e-9, atol=0)


@pytest.mark.parametrize(("snr_db", "points"), [(30, 201), (50, 801)])
def test_noise_estimate_agrees_with_the_noise_put_in(snr_db, points):
    rng = np.random.default_rng(5)
    f = np.linspace(9.9e6, 11.5e6, points)
    sigma = 10 ** (-snr_db / 20)
    found = []
    for _ in range(20):
        noise = sigma / np.sqrt(2) * (rng.standard_normal(points) + 1j * rng.standard_normal(points))
        s21 = single_tuned(f, 10.7e6, 50) + noise
        found.append(estimate_noise(f, s21).sigma(np.array(1.0)))
    assert_allclose(np.mean(found), sigma, rtol=0.1, atol=0)


@pytest.mark.parametrize("level", [1e-4, 1e-2, 1e3])
def test_noise_is_told_apart_alike_at_every_level(level):
    # A trace a thousand times as small has a floor a thousand times as small, and the same share of trace noise.
    rng = np.random.default_rng(6)
    f = np.linspace(9.9e6, 11.5e6, 801)
    clean = single_tuned(f, 10.7e6, 50)
    hiss = rng.standard_normal((2, f.size)) + 1j * rng.standard_normal((2, f.size))
    s21 = clean * (1.0 + 5e-3 * hiss[0]) + 1e-4 * hiss[1]
    one, scaled = estimate_noise(f, s21), estimate_noise(f, level * s21)
    assert one.proportional > 3e-3
    assert_allclose([scaled.additive / level, scaled.proportional], [one.additive, one.proportional], rtol=1e-6, atol=0)


@pytest.mark.skipif(not REAL.is_dir(), reason="the measured resonator is not at hand")
@pytest.mark.parametrize("window", [(1.5e9, 2.5e9), (3.5e9, 4.5e9)])
def test_measured_resonator_against_scikit_rf(window):
    # Independent: skrf.qfactor.Qfactor (A. P. Gregory, NPL Report MAT 58, 2021) on a measured stripline resonator.
    network = skrf.Network(REAL / "resonator_36mm.s2p")
    s21 = network.s[:, 1, 0]
    _, found = measure(network.f, s21, window, estimate_noise(network.f, s21))
    near = np.abs(network.f - float(found.peak_frequency)) < 0.03 * float(found.peak_frequency)
    fit = skrf.qfactor.Qfactor(network[near].s21, "transmission").fit()
    assert_allclose(found.loaded_q, fit.Q_L, rtol=0.02, atol=0)


def test_one_sample_of_exactly_nothing_spoils_no_fit():
    f = np.linspace(20e6, 22.8e6, 401)
    rng = np.random.default_rng(4)
    s21 = single_tuned(f, 21.4e6, 35.0, 10.0) + 0.01 * (rng.normal(size=401) + 1j * rng.normal(size=401))
    lost = s21.copy()
    lost[205] = 0.0
    _, whole = measure(f, s21, noise=estimate_noise(f, s21))
    _, found = measure(f, lost, noise=estimate_noise(f, lost))
    assert_allclose(found.bandwidth, whole.bandwidth, rtol=0.2, atol=0)
    assert_allclose(found.peak_gain, whole.peak_gain, rtol=0, atol=1.0)
