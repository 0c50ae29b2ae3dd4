"""Advice and plan say the same; findings stand in the order in which they explain one another."""

from dataclasses import replace
from types import MappingProxyType

import numpy as np
import pytest

from benchtool.advice import agreed, onset_advice, sweep_words
from benchtool.causes import CauseVerdict
from benchtool.drive_results import Estimate, NextSweep, Onset, PadEstimate, ReferenceProof
from benchtool.findings import in_order
from benchtool.model import Finding

SWEEP = NextSweep(
    ("b10", "a20"), ("c10",), -8.0, -38.0, -10.0, -20.0, 17.0, "which cause it is", (), "separate-causes", True
)
PAD = PadEstimate("a20", 20.0, 18.0, 17.9, 18.1, 0.5)
KNOWN = Estimate(0.0, 0.0, 0.0)


def onset(proven=False):
    proof = ReferenceProof("low.s2p", proven, KNOWN)
    return Onset(
        21.4e6, 0.95, 2, "bound", KNOWN, KNOWN, KNOWN, KNOWN, proof, (), np.zeros(0), np.zeros((3, 0))
    )  # fmt: skip


def advised(code, *purposes, proven=False, pads=(PAD,)):
    """The advice of a cause's finding whose own is 'as it was', with sweeps planned for `purposes`."""
    verdict = CauseVerdict(code, 0.93, MappingProxyType({}), pads, None, ())
    planned = [replace(SWEEP, purpose=purpose, settles=f"({purpose})") for purpose in purposes]
    findings = [Finding(code, "caution", "m", "as it was"), Finding("p1db-unknown", "note", "m", "untouched")]
    first, second = agreed(findings, verdict, onset(proven), planned)
    assert second.advice == "untouched"
    return first.advice


LINE = "b10, a20 at the input and c10 at the output (−38.0 dBm drive)"


@pytest.mark.parametrize(
    ("code", "purposes", "said"),
    [
        (
            "input-limited-or-pad",
            ["separate-causes", "prove-reference"],
            f"sweep with {LINE}: it shows (separate-causes)",
        ),
        ("cause-unclear", ["relieve-receiver", "separate-causes"], f"sweep with {LINE}: it shows (relieve-receiver)"),
        ("receiver-overload", ["relieve-receiver"], f"sweep with {LINE}: it shows (relieve-receiver)"),
        ("pad-value-suspect", ["measure-pad", "bracket-onset"], "as it was"),
        ("pad-value-suspect", ["separate-causes"], f"as it was; or sweep with {LINE}: it shows (separate-causes)"),
        (
            "reference-not-repeating",
            ["repeat"],
            "let the bench warm up, tighten connectors, look for oscillation, then sweep low.s2p again, its line "
            "unchanged, twice in a row",
        ),
        (
            "noise-limited",
            ["lift-signal"],
            "narrow the measuring bandwidth, average, or sweep with b10, a20 at the input (−38.0 dBm drive) for what "
            "the noise hides",
        ),
        (
            "input-limited",
            ["prove-reference"],
            "as it was; to prove low.s2p small-signal, sweep with b10, a20 at the input (−38.0 dBm drive)",
        ),
        ("output-limited", ["bracket-onset"], f"as it was; sweep with {LINE}: it shows (bracket-onset)"),
        *[
            (code, [], "as it was")
            for code in ("input-limited-or-pad", "cause-unclear", "receiver-overload", "noise-limited", "input-limited")
        ],
    ],
)
def test_advice_names_the_sweep_that_is_planned(code, purposes, said):
    assert advised(code, *purposes) == said


def test_a_proven_reference_needs_no_lower_drive():
    assert advised("output-limited", "prove-reference", proven=True) == "as it was"


def test_the_onset_is_told_by_the_sweep_that_brackets_it():
    assert onset_advice([SWEEP]) == ""
    near = replace(SWEEP, purpose="bracket-onset", settles="the 1 dB point")
    assert onset_advice([SWEEP, near]) == f"sweep with {LINE}: it shows the 1 dB point"


def test_a_line_without_pads_or_level_is_said_so():
    assert sweep_words(replace(SWEEP, input_pads=(), drive_dbm=None)) == "no pad at the input and c10 at the output"


def test_a_cause_comes_before_what_it_explains():
    cautions = ["compressed-sweep", "receiver-near-limit", "edge-outside-sweep", "drive-unproven", "receiver-overload"]
    findings = [Finding("one-path", "note", "m", "a"), *(Finding(code, "caution", "m", "a") for code in cautions)]
    fault = Finding("receiver-near-limit", "fault", "m", "a")
    assert [f.code for f in in_order([*findings, fault])] == [
        "receiver-near-limit",  # what may break the analyzer comes before any reason
        "receiver-overload",
        "edge-outside-sweep",
        "drive-unproven",
        "compressed-sweep",
        "receiver-near-limit",
        "one-path",
    ]


def test_output_pads_are_named_where_they_change():
    kept, changed = SWEEP, replace(SWEEP, keeps_output=False)
    assert sweep_words(kept, brief=True) == "b10, a20 at the input (−38.0 dBm drive)"
    assert sweep_words(changed, brief=True) == "b10, a20 at the input and c10 at the output (−38.0 dBm drive)"
    assert sweep_words(replace(changed, output_pads=()), brief=True).endswith("no pad at the output (−38.0 dBm drive)")
