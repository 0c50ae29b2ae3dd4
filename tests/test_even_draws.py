"""Even draws: uniform alone, even together, independent between segments, and right where the answer is known."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from benchtool.even_draws import VECTOR, EvenDraws
from benchtool.propagation import BATCH, coverage_interval

FOUR_RECTANGULAR = 2.0 * np.sqrt(3.0) * (2.0 - 0.6**0.25)
"""JCGM 101:2008, 9.2: 95 % interval of a sum of four rectangular quantities of unit variance, ± 3.88, closed form."""


def draws(seed=1, counts=(BATCH,) * 8):
    return EvenDraws(np.random.default_rng(seed), counts)


def ends_of_four(uniform):
    total = 2.0 * np.sqrt(3.0) * (uniform.sum(axis=0) - 2.0)
    return np.array(coverage_interval(total, 0.95))


def test_closed_form_of_the_standard_and_printed_value():
    assert_allclose(FOUR_RECTANGULAR, 3.88, rtol=0, atol=0.005)
    found = [ends_of_four(np.array([some.uniform() for _ in range(4)])) for some in map(draws, range(20))]
    assert_allclose(np.mean(found, axis=0), [-FOUR_RECTANGULAR, FOUR_RECTANGULAR], rtol=0, atol=0.03)


def test_ends_wander_less_than_those_of_as_many_independent_draws():
    even = [ends_of_four(np.array([some.uniform() for _ in range(4)])) for some in map(draws, range(40))]
    plain = [ends_of_four(np.random.default_rng(seed).uniform(size=(4, 8 * BATCH))) for seed in range(40)]
    # Twice as many independent draws would only gain the root of two.
    assert np.std(np.abs(even)) < np.std(np.abs(plain)) / np.sqrt(2.0)


@pytest.mark.parametrize("count", [1, 7, 256, 1000])
@pytest.mark.parametrize("dimension", [0, 1, 17, len(VECTOR) - 1, len(VECTOR), len(VECTOR) + 3])
def test_every_dimension_is_uniform(count, dimension):
    some = draws(5, [count])
    for _ in range(dimension):
        some.uniform()
    found = np.sort(some.uniform())
    assert found.size == count
    assert found[0] >= 0.0
    assert found[-1] < 1.0
    if count & (count - 1) == 0:
        # One in each of as many equal strata.
        assert_allclose(np.diff(found), 1.0 / count, rtol=0, atol=1e-12)
    elif count > 100:
        assert stats.kstest(found, "uniform").statistic < 0.5 / np.sqrt(count)


def test_components_are_odd_so_that_any_power_of_two_is_covered_evenly():
    assert all(component % 2 == 1 for component in VECTOR)
    assert len(set(VECTOR)) == len(VECTOR)


@pytest.mark.parametrize("count", [BATCH, 4096])
def test_no_two_dimensions_are_the_same_or_mirrored(count):
    some = draws(3, [count])
    every = np.array([some.uniform() for _ in range(len(VECTOR) + 3)])
    for far in (1, 2):
        # Neither the difference nor the sum of two dimensions may be stuck, nor twice it: they run through the circle.
        for other in (1.0, -1.0):
            turned = np.exp(2j * np.pi * far * (every[:, None] + other * every[None]))
            stuck = np.abs(np.mean(turned, axis=2))
            np.fill_diagonal(stuck, 0.0)
            # The dimensions beyond the vector are independent: a mean of so many directions is seldom above 4/√n.
            assert np.max(stuck) < 4.0 / np.sqrt(count)


def test_segments_are_independent():
    first, second = draws(2).uniform().reshape(8, BATCH)[:2]
    assert np.max(np.abs(first - second)) > 0.05
    means = [draws(seed).phasors([1.0] * 8).reshape(8, BATCH)[:, 0] for seed in range(200)]
    # The first point of each segment has its shift alone: 1,600 independent directions.
    assert abs(np.mean(means)) < 4.0 / np.sqrt(1600)


def test_normal_draws_are_normal_and_stand_still_where_they_are_told_to():
    found = draws(4, [4096, 16]).normal([2.0, 0.0])
    assert not np.any(found[4096:])
    for part in (found[:4096].real, found[:4096].imag):
        assert_allclose(np.std(part), 2.0, rtol=0.005)
        assert stats.kstest(part / 2.0, "norm").statistic < 0.01
    assert abs(np.corrcoef(found[:4096].real, found[:4096].imag)[0, 1]) < 0.02


def test_phasors_are_of_unit_length_and_even():
    found = draws(6, [256]).phasors([1.0])
    assert_allclose(np.abs(found), 1.0, rtol=1e-12)
    assert_allclose(np.mean(found), 0.0, rtol=0, atol=1e-12)
