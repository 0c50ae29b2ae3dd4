"""Gains, stability and renormalisation against Pozar's worked examples and scikit-rf; return loss through pads."""

import numpy as np
import pytest
import skrf
from numpy.testing import assert_allclose

from benchtool.match import buried_uncertainty, renormalise, stability, transducer_gain


def polar(magnitude, angle_deg):
    return magnitude * np.exp(1j * np.radians(angle_deg))


def two_port(s11, s12, s21, s22):
    """One frequency of a two-port from (magnitude, degrees) in the order Pozar prints them."""
    return np.array([[polar(*s11), polar(*s12)], [polar(*s21), polar(*s22)]])[:, :, None]


# D. M. Pozar, Microwave Engineering, 4th ed., Examples 12.1, 12.2, 12.3 (K and Δ printed; µ recomputed).
EXAMPLE_12_1 = two_port((0.38, -158), (0.11, 54), (3.50, 80), (0.40, -43))
EXAMPLE_12_2 = two_port((0.869, -159), (0.031, -9), (4.250, 61), (0.507, -117))
EXAMPLE_12_3 = {
    3: two_port((0.80, -89), (0.03, 56), (2.86, 99), (0.76, -41)),
    4: two_port((0.72, -116), (0.03, 57), (2.60, 76), (0.73, -54)),
    5: two_port((0.66, -142), (0.03, 62), (2.39, 54), (0.72, -68)),
}


def gamma(ohm):
    return (ohm - 50) / (ohm + 50)


def test_transducer_gain_of_example_12_1():
    assert_allclose(transducer_gain(EXAMPLE_12_1, gamma(25), gamma(40)), 12.604, rtol=1e-4, atol=0)


@pytest.mark.parametrize(
    ("source", "load", "gain_db"), [(50, 300, 9.5617), (75, 300, 8.5188), (300, 300, 3.6834), (25, 40, 11.0051)]
)
def test_gain_between_other_impedances(source, load, gain_db):
    # Example 12.1's device, |S21|² renormalised, in dB; recomputed with scikit-rf (25/40 ohm is the printed G_T).
    s = renormalise(EXAMPLE_12_1, (50, 50), (source, load))
    assert_allclose(20 * np.log10(np.abs(s[1, 0])), gain_db, rtol=0, atol=1e-4)
    assert_allclose(np.abs(s[1, 0]) ** 2, transducer_gain(EXAMPLE_12_1, gamma(source), gamma(load)), rtol=1e-12, atol=0)


def test_renormalise_agrees_with_scikit_rf():
    network = skrf.Network(f=[1], s=np.moveaxis(EXAMPLE_12_1, -1, 0), z0=50)
    network.renormalize([75, 300])
    assert_allclose(renormalise(EXAMPLE_12_1, (50, 50), (75, 300)), np.moveaxis(network.s, 0, -1), rtol=1e-12, atol=0)


def test_lossless_through_between_50_and_300_ohm():
    # Closed form: -3.09985 dB, reflection ±.714286 (K. Kurokawa, IEEE Trans. MTT 13(2), 1965).
    through = np.array([[0, 1], [1, 0]], complex)[:, :, None]
    s = renormalise(through, (50, 50), (50, 300))
    assert_allclose(20 * np.log10(np.abs(s[1, 0])), -3.09985, rtol=0, atol=1e-5)
    assert_allclose([s[0, 0, 0].real, s[1, 1, 0].real], [0.714286, -0.714286], rtol=0, atol=1e-6)


def test_ten_db_pad_seen_in_75_ohm():
    # Closed form: a matched 50 ohm 10 dB pad seen in 75 ohm: -10.3198 dB, |S11| .180723.
    k = 10**-0.5
    s = renormalise(np.array([[0, k], [k, 0]], complex)[:, :, None], (50, 50), (75, 75))
    assert_allclose(20 * np.log10(np.abs(s[1, 0])), -10.3198, rtol=0, atol=1e-4)
    assert_allclose(np.abs(s[0, 0]), 0.180723, rtol=0, atol=1e-6)


def test_stability_of_example_12_2():
    found = stability(EXAMPLE_12_2)
    assert_allclose([found.delta[0], found.k[0], found.mu[0]], [0.336, 0.383, 0.678], rtol=0, atol=6e-4)


@pytest.mark.parametrize(
    ("ghz", "k", "delta", "mu"), [(3, 0.7717, 0.592, 0.936), (4, 1.1948, 0.487, 1.040), (5, 1.5374, 0.418, 1.089)]
)
def test_stability_of_example_12_3(ghz, k, delta, mu):
    # Printed: K .77, 1.19, 1.53 (cut off, not rounded; given here as scikit-rf recomputes it); |Δ| .592, .487, .418.
    found = stability(EXAMPLE_12_3[ghz])
    network = skrf.Network(f=[1], s=np.moveaxis(EXAMPLE_12_3[ghz], -1, 0), z0=50)
    assert_allclose(found.k, network.stability, rtol=1e-12, atol=0)
    assert_allclose(found.k, k, rtol=0, atol=6e-5)
    assert_allclose([found.delta[0], found.mu[0]], [delta, mu], rtol=0, atol=6e-4)


def test_stability_works_on_copies():
    copies = np.stack([EXAMPLE_12_3[4], EXAMPLE_12_3[5]])
    assert_allclose(stability(copies).mu[:, 0], [1.040, 1.089], rtol=0, atol=6e-4)


def test_reflection_through_a_pad_loses_twice_its_loss():
    # A 20 dB pad and 36 dB directivity: 10^((40 - 36)/20) = 1.585: nothing can be said of the reflection.
    assert_allclose(buried_uncertainty(20.0, 36.0), 1.58489, rtol=1e-5, atol=0)
    assert_allclose(buried_uncertainty(3.0, 36.0), 0.031623, rtol=1e-4, atol=0)
