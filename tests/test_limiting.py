"""Laws of limiting against closed forms and tabulated values."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from benchtool.limiting import (
    LAWS,
    Law,
    cubic_drop_db,
    cubic_level_db,
    rapp_drop_db,
    rapp_level_db,
    tanh_drop_db,
    tanh_level_db,
)


@pytest.mark.parametrize(("p", "level"), [(1.0, -5.868), (2.0, -1.165), (3.0, -0.007), (5.0, 0.670)])
def test_rapp_one_db_point(p, level):
    # C. Rapp 1991, formula from memory; levels relative to Vs/g recomputed from it.
    assert_allclose(rapp_level_db(1.0, p), level, rtol=0, atol=6e-4)


@pytest.mark.parametrize("p", [0.7, 1.0, 2.5, 5.0])
def test_rapp_drop_at_the_knee(p):
    assert_allclose(rapp_drop_db(np.array(0.0), p), 10 * np.log10(2) / p, rtol=1e-12, atol=0)


@pytest.mark.parametrize(
    ("drop", "peak"), [(0.1, 0.4313), (0.5, 0.9833), (1.0, 1.4254), (2.0, 2.1216), (3.0, 2.7411), (6.0, 4.6188)]
)
def test_tanh_fundamental(drop, peak):
    # Differential pair tanh(v/2VT), peak in VT; numbers recomputed by quadrature elsewhere.
    assert_allclose(10 ** (tanh_level_db(drop) / 20), peak, rtol=0, atol=5e-5)  # as printed, VT


def test_tanh_fundamental_agrees_with_adaptive_quadrature():
    from scipy.integrate import quad

    for over_vt in (0.1, 1.0, 5.0, 40.0):
        area, _ = quad(lambda t, a=over_vt: np.tanh(a / 2 * np.cos(t)) * np.cos(t), 0, np.pi / 2, epsabs=1e-13)
        exact = -20 * np.log10(4 / np.pi * area / (over_vt / 2))
        assert_allclose(tanh_drop_db(np.array(20 * np.log10(over_vt))), exact, rtol=0, atol=1e-3)


@pytest.mark.parametrize(
    ("drop", "level"), [(0.1, -19.413), (0.5, -12.523), (1.0, -9.6357), (2.0, -6.868), (3.0, -5.345)]
)
def test_cubic_levels_below_the_intercept(drop, level):
    # 1 dB stands 9.6357 dB below the input third-order intercept; textbook cubic law, closed form.
    assert_allclose(cubic_level_db(drop), level, rtol=0, atol=6e-4)


def test_cubic_output_never_falls_with_drive():
    level = np.linspace(-30, 20, 501)
    assert np.all(np.diff(level - cubic_drop_db(level)) >= -1e-12)


@pytest.mark.parametrize("law", LAWS)
def test_drop_and_level_are_inverse(law):
    drop = np.array([0.01, 0.1, 1.0, 3.0, 9.0])
    assert_allclose(law.drop_db(law.level_db(drop)), drop, rtol=1e-6, atol=0)
    assert_allclose(law.drop_past_p1db(np.array(0.0)), 1.0, rtol=1e-9, atol=0)
    assert_allclose(law.excess_over_p1db(1.0), 0.0, rtol=0, atol=1e-9)


@pytest.mark.parametrize("law", LAWS)
def test_fast_drop_and_its_slope_are_those_of_the_closed_form(law):
    excess = np.linspace(-70.0, 45.0, 1151)
    step = 1e-3
    exact = [law.drop_db(law.level_db(1.0) + excess + way * step) for way in (-1, 0, 1)]
    drop, slope = law.drop_and_slope_past_p1db(excess)
    assert_allclose(drop, exact[1], rtol=0, atol=2e-6)
    assert_allclose(law.drop_past_p1db(excess), drop, rtol=0, atol=1e-12)
    assert_allclose(slope, (exact[2] - exact[0]) / (2 * step), rtol=0, atol=5e-4)


def test_shares_of_laws_sum_to_one():
    assert_allclose(sum(law.share for law in LAWS), 1.0, rtol=1e-12, atol=0)


@given(st.floats(-60, 40), st.floats(0.01, 10), st.sampled_from(LAWS))
def test_more_level_never_gives_more_gain_nor_less_output(level, step, law):
    before, after = law.drop_db(np.array([level, level + step]))
    assert after >= before - 1e-9
    assert after - before <= step + 1e-3


def test_laws_work_on_any_leading_axes():
    level = np.linspace(-20, 20, 24).reshape(2, 3, 4)
    for law in (Law("rapp", 1.3), Law("tanh"), Law("cubic")):
        whole = law.drop_past_p1db(level)
        assert whole.shape == level.shape
        assert_allclose(whole[1, 2], law.drop_past_p1db(level[1, 2]), rtol=1e-13, atol=0)
