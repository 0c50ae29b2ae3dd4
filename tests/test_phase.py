"""Group delay, phase linearity and delay variation against closed forms."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import signal

from benchtool.fitting import fit_curve
from benchtool.noise import NOISE_FREE, line_delay
from benchtool.phase import (
    ambiguous_steps,
    delay_variation,
    group_delay_curve,
    phase_linearity,
    unwrapped_phase,
)

F0, Q = 10.7e6, 50.0
B = F0 / Q


def single_tuned(f):
    return 1 / (1 + 1j * Q * (f / F0 - F0 / f))


@pytest.mark.parametrize(("x", "error"), [(0.1, -0.0033), (0.2, -0.0130), (0.25, -0.0201), (0.5, -0.0727)])
def test_aperture_of_a_single_tuned_peak(x, error):
    # Closed form: an aperture of x·B reads atan(x)/x of the true delay 1/(πB).
    f = F0 + np.arange(-2000, 2001) * B / 2000
    delay = group_delay_curve(f, single_tuned(f), x * B)[2000]
    assert_allclose(delay * np.pi * B - 1, error, rtol=0, atol=6e-5)
    assert_allclose(delay * np.pi * B, np.arctan(x) / x, rtol=2e-5, atol=0)


def test_phase_slope_of_a_single_tuned_circuit():
    # Closed form, printed: f0 10.7 MHz, Q 50: .53547 degrees per kHz at the centre.
    f = F0 + np.array([-50.0, 0.0, 50.0])
    phase = unwrapped_phase(f, single_tuned(f))
    assert_allclose((phase[0] - phase[2]) / 0.1, 0.53547, rtol=1e-5, atol=0)


@pytest.mark.parametrize(("order", "delay"), [(2, 2.2508e-6), (3, 3.1831e-6)])
def test_butterworth_centre_delay(order, delay):
    # Closed form [1/sin(π/2n)]/(πB) for a band-pass of B = 200 kHz.
    f = np.linspace(9.7e6, 11.7e6, 801)
    s21 = signal.freqs_zpk(*signal.buttap(order), 2 * (f - F0) / 200e3)[1]
    curve = fit_curve(f, s21, F0 - 120e3, F0 + 120e3, NOISE_FREE)
    assert_allclose(curve.at(s21, F0)[1], delay, rtol=1e-4, atol=0)


@pytest.mark.parametrize("delay_s", [0.0, 95e-12, 40e-9, 3e-6])
def test_a_pure_line_returns_its_delay(delay_s):
    f = np.linspace(15e6, 28e6, 401)
    s21 = 0.9 * np.exp(-2j * np.pi * f * delay_s)
    assert_allclose(group_delay_curve(f, s21, 100e3), delay_s, rtol=1e-6, atol=1e-16)
    assert_allclose(line_delay(f, s21), delay_s, rtol=1e-9, atol=1e-18)
    curve = fit_curve(f, s21, 18e6, 25e6, NOISE_FREE)
    assert_allclose(delay_variation(curve, s21), 0.0, rtol=0, atol=1e-13)
    assert_allclose(phase_linearity(curve, s21), 0.0, rtol=0, atol=1e-6)


def test_phase_linearity_of_a_known_bend():
    # φ = a u³ over |u| ≤ 1 less its least-squares line 3/5 a u: the largest departure is at the ends, 2/5 a.
    f = np.linspace(20e6, 22e6, 401)
    u = (f - 21e6) / 1e6
    s21 = np.exp(1j * np.radians(10.0 * u**3) - 2j * np.pi * f * 70e-9)
    curve = fit_curve(f, s21, 20e6, 22e6, NOISE_FREE)
    assert_allclose(phase_linearity(curve, s21), 4.0, rtol=2e-3, atol=0)


def test_delay_variation_of_a_known_bend():
    # φ = a u³ gives τ = -3 a u²/(360 du): it varies by 3 a/(360 MHz) between the centre and the ends.
    f = np.linspace(20e6, 22e6, 401)
    u = (f - 21e6) / 1e6
    s21 = np.exp(1j * np.radians(10.0 * u**3) - 2j * np.pi * f * 70e-9)
    curve = fit_curve(f, s21, 20e6, 22e6, NOISE_FREE)
    assert_allclose(delay_variation(curve, s21), 30.0 / 360e6, rtol=1e-4, atol=0)


def test_steps_too_large_to_unwrap_are_counted():
    f = np.linspace(1e6, 2e6, 11)
    safe = np.exp(-2j * np.pi * f * 4e-6)  # 144° a step
    unsafe = np.exp(-2j * np.pi * f * 4.4e-6)  # 158° a step
    assert ambiguous_steps(safe) == 0
    assert ambiguous_steps(unsafe) == 10
    assert ambiguous_steps(1e-3 * unsafe, magnitude_floor=0.1) == 0


def test_copies_keep_their_shape():
    f = np.linspace(10e6, 11.4e6, 101)
    copies = np.stack([single_tuned(f), 2j * single_tuned(f)])[:, None, :]
    assert group_delay_curve(f, copies, 50e3).shape == (2, 1, 101)
