"""Gains with a pad in doubt: a mixture of two normal distributions, whose moments are closed forms."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.drive_results import PadEstimate
from benchtool.model import Figure
from benchtool.pad_belief import carry_pad_doubt

VALUES = 16.0 + 0.2 * np.random.default_rng(1).standard_normal(20_000)
GAIN = Figure(
    "gain",
    16.0,
    "dB",
    low=15.6,
    high=16.4,
    confidence=0.95,
    standard_uncertainty=0.2,
    budget={"pad a20": 0.7, "noise": 0.3},
)


def pad(probability, name="a20"):
    return PadEstimate(name, 20.0, 17.0, 17.0 - 0.196, 17.0 + 0.196, probability)


def carry(probability, weights, figure="gain", name="a20"):
    figures, values = {figure: GAIN}, {figure: VALUES}
    wider, moved = carry_pad_doubt(figures, values, [pad(probability, name)], weights, 0.95, seed=3)
    return wider[figure], moved[figure]


def test_mixture_has_the_moments_of_its_parts():
    # Mean and variance of a mixture: μ = (1 - p) μ1 + p μ2, σ² = (1 - p) σ1² + p σ2² + p (1 - p) (μ1 - μ2)².
    p = 0.4
    figure, moved = carry(p, {"a20": 1})
    assert_allclose(np.mean(moved), 16.0 - 3.0 * p, rtol=0, atol=0.01)
    variance = 0.2**2 + p * 0.1**2 + p * (1 - p) * 3.0**2
    assert_allclose(figure.standard_uncertainty**2, variance, rtol=0.01, atol=0)
    assert_allclose(sum(figure.budget.values()), 1.0, rtol=1e-9, atol=0)
    assert_allclose(figure.budget["noise"] * variance, 0.3 * 0.2**2, rtol=0.02, atol=0)
    assert figure.low < 13.0 < 16.0 < figure.high


@pytest.mark.parametrize("figure", ["peak_gain", "insertion_loss"])
def test_a_pad_taken_away_moves_a_gain_the_other_way_and_a_loss_once_more(figure):
    _, moved = carry(1.0, {"a20": -1}, figure)
    assert_allclose(np.mean(moved), 16.0 + (3.0 if figure == "peak_gain" else -3.0), rtol=0, atol=0.01)


@pytest.mark.parametrize(("probability", "weights"), [(0.04, {"a20": 1}), (0.9, {}), (0.9, {"a10": 1})])
def test_unlikely_pads_and_pads_elsewhere_change_nothing(probability, weights):
    figure, moved = carry(probability, weights)
    assert figure is GAIN
    assert moved is VALUES


def test_figures_that_no_pad_moves_stay():
    figure, _ = carry(0.9, {"a20": 1}, "bandwidth")
    assert figure is GAIN
