"""Monte Carlo propagation against the worked examples of JCGM 101 and EA-4/02, by the code that serves the tool."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.propagation import (
    coverage_interval,
    mismatch_limits_db,
    mismatch_u_db,
    propagate,
    rectangular_u,
    run_blocks,
)


@pytest.mark.parametrize(("x1", "u", "low", "high"), [(0.010, 112e-6, 0.0, 366e-6), (0.050, 502e-6, 1596e-6, 3551e-6)])
def test_comparison_loss_of_jcgm_101(x1, u, low, high):
    # JCGM 101:2008, 9.4: Y = X1² + X2², u(x1) = u(x2) = 0.005, r = 0, x2 = 0; shortest 95 % intervals. Values
    # recomputed; interval ends wander by about 10e-6.
    def model(rng, count):
        return (x1 + 0.005 * rng.standard_normal(count)) ** 2 + (0.005 * rng.standard_normal(count)) ** 2

    found = propagate(model, 0.95, trials=400_000, seed=1, shortest=True)
    assert_allclose(found.standard_uncertainty, u, rtol=0.01, atol=0)
    assert_allclose([found.low, found.high], [low, high], rtol=0, atol=12e-6)


def test_attenuator_step_of_ea_4_02():
    # EA-4/02, example S7: a 30 dB step, 30.043 dB with standard uncertainty 0.0224 dB, mismatch 0.020 dB dominating.
    # The inputs below are values from memory; what they come to is what is printed.
    products = [0.03 * 0.05, 0.03 * 0.09, 0.03 * 0.01, 0.03 * 0.01, 0.03 * 0.03 * 1.0]
    mismatch = float(np.sqrt(sum(mismatch_u_db(product, 1.0) ** 2 for product in products)))
    assert_allclose(mismatch, 0.020, rtol=0, atol=1e-4)

    def model(rng, count):
        normal = [0.0090, 0.0003, 0.0019, 0.0020, 0.0020]
        rectangular = [0.0025, 0.0017, 0.0011]
        step = 30.040 + 0.003 + sum(u * rng.standard_normal(count) for u in normal)
        step = step + sum(np.sqrt(3.0) * u * rng.uniform(-1, 1, count) for u in rectangular)
        for product in products:
            step = step + 20 * np.log10(np.abs(1 + product * np.exp(2j * np.pi * rng.uniform(size=count))))
        return step

    found = propagate(model, 0.95, trials=200_000, seed=2)
    assert_allclose(found.standard_uncertainty, 0.0224, rtol=0, atol=2e-4)
    assert_allclose(0.5 * (found.low + found.high), 30.043, rtol=0, atol=1e-3)


@pytest.mark.parametrize(
    ("first", "second", "low", "high", "u"),
    [(1.5, 1.2, -0.1594, 0.1565, 0.1117), (1.2, 1.2, None, None, 0.0508), (2.0, 2.0, -1.023, 0.915, None)],
)
def test_mismatch_table(first, second, low, high, u):
    # Limits 20 log10(1 ± |Γ1 Γ2|) and u = 8.686 |Γ1 Γ2|/√2 for two VSWRs (closed form; EA-4/02, S7).
    one, two = ((vswr - 1) / (vswr + 1) for vswr in (first, second))
    if low is not None:
        assert_allclose(mismatch_limits_db(one, two), [low, high], rtol=0, atol=6e-4)
    if u is not None:
        assert_allclose(mismatch_u_db(one, two), u, rtol=0, atol=6e-5)


@pytest.mark.parametrize(("level", "z"), [(0.80, 0.84), (0.90, 1.28), (0.95, 1.64), (0.99, 2.33)])
def test_one_sided_guard_band(level, z):
    # JCGM 106:2012: a normal quantity z standard uncertainties inside a one-sided limit meets it with that probability.
    rng = np.random.default_rng(3)
    inside = np.mean(z + rng.standard_normal(400_000) >= 0.0)
    assert_allclose(inside, level, rtol=0, atol=0.003)


def test_rectangular():
    assert_allclose(rectangular_u(0.3), 0.173205, rtol=1e-5, atol=0)


def test_intervals_of_a_known_sample():
    values = np.arange(1000.0)
    assert coverage_interval(values, 0.95) == (25.0, 975.0)
    skewed = np.concatenate([np.zeros(960), np.arange(40.0)])
    assert coverage_interval(skewed, 0.95, shortest=True) == (0.0, 0.0)


def test_adaptive_trials_stop_when_the_ends_have_settled():
    calls = []

    def block(count):
        calls.append(count)
        return {"y": np.random.default_rng(len(calls)).standard_normal(count)}

    values = run_blocks(block, 0.95, trials=None, deciding=["y"], size=1000, most=1_000_000)
    assert 2000 < values["y"].size < 100_000
    assert run_blocks(block, 0.95, trials=130, deciding=["y"], size=50)["y"].size == 130


def test_a_quantity_that_is_lost_never_settles():
    values = run_blocks(lambda n: {"y": np.full(n, np.nan)}, 0.95, trials=None, deciding=["y"], size=10, most=2000)
    assert values["y"].size == 2000


def test_same_seed_same_interval():
    def model(rng, count):
        return rng.standard_normal(count)

    assert propagate(model, 0.9, seed=5) == propagate(model, 0.9, seed=5)
    assert propagate(model, 0.9, seed=5) != propagate(model, 0.9, seed=6)
