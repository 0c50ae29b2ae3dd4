"""Figures of a sweep that may be compressed carry that doubt: bounds, or a wider interval, or nothing at all."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.drive_results import Estimate, ReferenceProof
from benchtool.model import Figure
from benchtool.small_signal import carry_drive_doubt

NORMAL = np.random.default_rng(1).standard_normal(20_000)


def figures():
    return {
        "gain": Figure("gain", 30.0, "dB", 29.6, 30.4, 0.95, None, 0.2),
        "bandwidth": Figure("bandwidth", 1e6, "Hz", 0.99e6, 1.01e6, 0.95, None, 5e3),
        "loaded_q": Figure("loaded_q", 21.4, "", 21.2, 21.6, 0.95, None, 0.1),
        "group_delay": Figure("group_delay", 3e-7, "s", 2.9e-7, 3.1e-7, 0.95, None, 5e-9),
        "lower_edge": Figure("lower_edge", 20.9e6, "Hz", 20.8e6, 21.0e6, 0.95, None, 5e4),
    }


def values():
    return {"gain": 30.0 + 0.2 * NORMAL, "bandwidth": 1e6 + 5e3 * NORMAL}


def proof(proven, *reads_low):
    return ReferenceProof("low.s2p", proven, Estimate(*reads_low) if reads_low else Estimate(None))


def test_a_proven_reference_changes_nothing():
    kept, moved = carry_drive_doubt(figures(), values(), proof(True, 0.01, 0.0, 0.03))
    assert kept == figures()
    assert_allclose(moved["gain"], values()["gain"], rtol=0, atol=0)


def test_an_unproven_reference_gives_bounds():
    kept, _ = carry_drive_doubt(figures(), values(), proof(False))
    assert {key: figure.bound for key, figure in kept.items()} == {
        "gain": "at least",
        "bandwidth": "at most",
        "loaded_q": "at least",
        "group_delay": None,
        "lower_edge": "at least",
    }


def test_a_little_doubt_widens_the_gain_upward_only():
    kept, moved = carry_drive_doubt(figures(), values(), proof(False, 0.2, 0.0, 0.4))
    # A normal of 0.2 dB and a uniform 0 to 0.4 dB: mean 30.2, standard deviation sqrt(0.04 + 0.16/12).
    assert_allclose(np.mean(moved["gain"]), 30.2, rtol=0, atol=0.01)
    assert_allclose(kept["gain"].standard_uncertainty, np.sqrt(0.04 + 0.16 / 12), rtol=0.02, atol=0)
    assert kept["gain"].high > 30.5
    assert kept["gain"].bound is None
    assert kept["bandwidth"] == figures()["bandwidth"]


@pytest.mark.parametrize("high", [0.6, 3.0])
def test_much_doubt_gives_bounds(high):
    kept, _ = carry_drive_doubt(figures(), values(), proof(False, 0.3, 0.0, high))
    assert kept["gain"].bound == "at least"


def test_doubts_from_both_sides_leave_nothing():
    given = figures()
    given["lower_edge"] = Figure("lower_edge", 20.0e6, "Hz", bound="at most")
    kept, _ = carry_drive_doubt(given, values(), proof(False))
    assert kept["lower_edge"].value is None
    assert kept["lower_edge"].bound is None


def test_between_two_bounds_no_centre_is_known():
    centre = {"centre_frequency": Figure("centre_frequency", 21.5e6, "Hz", 21.4e6, 21.6e6, 0.95, None, 5e4)}
    kept, _ = carry_drive_doubt(centre, {}, proof(False))
    assert (kept["centre_frequency"].value, kept["centre_frequency"].low) == (None, None)
    assert carry_drive_doubt(centre, {}, proof(True, 0.0, 0.0, 0.0))[0] == centre
