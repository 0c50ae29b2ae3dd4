"""Verdicts by probability, of bounds, of what cannot be known; the sentences that a reader finds first."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.model import Figure, Finding, TargetResult
from benchtool.sheet import TargetSpec
from benchtool.verdict import judge, overall, summarise

RNG = np.random.default_rng(1)
NORMAL = RNG.standard_normal(200_000)


def gain(value=40.0, **more):
    return Figure("gain", value, "dB", **more)


@pytest.mark.parametrize(
    ("limits", "verdict", "probability"),
    [
        # JCGM 106:2012, one-sided limit: Φ((value - limit)/u) with u = 1 dB.
        ({"min": 38.0}, "met", 0.97725),
        ({"min": 39.0}, "undecided", 0.84134),
        ({"min": 42.0}, "missed", 0.02275),
        ({"max": 38.0}, "missed", 0.02275),
        ({"min": 39.0, "max": 41.0}, "undecided", 0.68269),
        ({"min": 37.0, "max": 43.0}, "met", 0.99730),
    ],
)
def test_probability_of_a_normal_quantity(limits, verdict, probability):
    result = judge(gain(), TargetSpec(figure="gain", **limits), 40.0 + NORMAL, 0.95)
    assert result.verdict == verdict
    assert_allclose(result.probability, probability, rtol=0, atol=0.003)


def test_confidence_moves_the_border():
    target = TargetSpec(figure="gain", min=39.0)
    assert judge(gain(), target, 40.0 + NORMAL, 0.80).verdict == "met"
    assert judge(gain(), target, 40.0 + NORMAL, 0.90).verdict == "undecided"


def test_without_trials_the_value_decides():
    assert judge(gain(), TargetSpec(figure="gain", min=39.0)).verdict == "met"
    assert judge(gain(), TargetSpec(figure="gain", min=41.0)).verdict == "missed"
    assert judge(gain(), TargetSpec(figure="gain", min=39.0)).probability is None


@pytest.mark.parametrize(
    ("bound", "limits", "verdict"),
    [
        ("at least", {"min": 1.0e6}, "met"),
        ("at least", {"max": 1.1e6}, "missed"),
        ("at least", {"max": 1.3e6}, "undecided"),
        ("at least", {"min": 1.3e6}, "undecided"),
        ("at most", {"max": 1.3e6}, "met"),
        ("at most", {"min": 1.3e6}, "missed"),
        ("at most", {"min": 1.0e6}, "undecided"),
    ],
)
def test_a_bound_decides_what_it_can(bound, limits, verdict):
    figure = Figure("bandwidth", 1.2e6, "Hz", bound=bound)
    result = judge(figure, TargetSpec(figure="bandwidth", **limits), 1.2e6 + 1e3 * NORMAL[:1000])
    assert result.verdict == verdict
    assert (result.advice is not None) == (verdict == "undecided")


def test_what_cannot_be_known_stays_open_with_advice():
    result = judge(Figure("input_return_loss", None, "dB"), TargetSpec(figure="input_return_loss", min=10.0))
    assert result.verdict == "undecided"
    assert "input return loss" in result.advice


def test_phase_is_held_against_its_target_round_the_circle():
    figure = Figure("phase", -179.0, "deg")
    assert judge(figure, TargetSpec(figure="phase", min=175.0, max=185.0), -179.0 + NORMAL).verdict == "met"
    assert judge(figure, TargetSpec(figure="phase", min=-5.0, max=5.0), -179.0 + NORMAL).verdict == "missed"


@pytest.mark.parametrize(
    ("verdicts", "whole"),
    [(["met", "met"], "met"), (["met", "undecided"], "undecided"), (["undecided", "missed"], "missed"), ([], "none")],
)
def test_the_worst_target_rules(verdicts, whole):
    assert overall(verdicts) == whole


def test_summary_names_the_figure_and_the_way_out():
    figure = gain(14.19, low=13.79, high=14.59, standard_uncertainty=0.21)
    target = TargetResult("gain", "gain", "dB", 14.0, None, "undecided", 0.8, "measure pad a20 as a .s2p file")
    finding = Finding("drive-unproven", "caution", "m", "sweep again")
    summary = summarise([target], {"gain": figure}, [finding])
    assert summary.reason == "Gain is 14.19 dB (13.79 to 14.59), wanted ≥ 14 dB."
    assert summary.next_step == "Measure pad a20 as a .s2p file."
    # Narrowing a figure is no use while the bench does not repeat.
    restless = Finding("reference-not-repeating", "caution", "m", "sweep it twice")
    assert summarise([target], {"gain": figure}, [restless]).next_step == "Sweep it twice."
    met = TargetResult("gain", "gain", "dB", 10.0, None, "met", 1.0)
    assert summarise([met], {"gain": figure}, [finding]).next_step == "Sweep again."
    assert summarise([met], {"gain": figure}, []).next_step == "Nothing: file this page."
    with_plan = summarise([met], {"gain": figure}, [], planned=True).next_step
    assert with_plan == "Nothing: file this page; `benchtool next` has what would tell more."
