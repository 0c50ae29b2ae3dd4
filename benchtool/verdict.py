"""A figure and its target in; met, missed or undecided out, and what a reader must know first.

A target is met where the probability that the true value meets it is at least the confidence asked for, and missed
where it is at most one less that (JCGM 106:2012); else it is undecided, and comes with advice on what would decide it.
A figure that is only a bound decides what it can: at least 1.2 MHz meets a minimum of 1 MHz and misses a maximum of
1.1 MHz, and leaves everything else undecided. A figure that cannot be known leaves its target undecided.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from statistics import NormalDist
from typing import Final

import numpy as np

from benchtool.digits import figure_label, interval_text, limits_text, quantity, value_text
from benchtool.doubts import ASSUMED, pad_doubt_db
from benchtool.figures import phase_toward
from benchtool.model import Figure, Finding, FloatArray, Summary, TargetResult, Verdict
from benchtool.pads import PadBank
from benchtool.propagation import rectangular_u
from benchtool.sheet import TargetSpec

__all__ = ["judge", "overall", "remedy", "summarise"]


def judge(
    figure: Figure, target: TargetSpec, values: FloatArray | None = None, confidence: float = 0.95, remedy: str = ""
) -> TargetResult:
    """Return how a figure stands against its target.

    Parameters
    ----------
    figure, target : of the same id
    values : the values the figure may truly have, (trials,), infinite where it left the sweep; None judges by the
        interval, or by the value where there is none
    confidence : probability from which a target counts as met; at one less that much it counts as missed
    remedy : what would narrow the figure, for the advice that an undecided target comes with

    Source: JCGM 106:2012, clause 7: the conformance probability is the share of possible true values within limits.
    """
    low = -np.inf if target.min is None else target.min
    high = np.inf if target.max is None else target.max
    result = TargetResult(figure.key, figure.id, figure.unit, target.min, target.max, "undecided")
    name = figure_label(figure.key)
    if figure.value is None:
        return replace(result, advice=f"make {name} measurable: see the findings")
    possible = _spread(figure, confidence) if values is None else values
    if figure.id == "phase":
        possible = possible + phase_toward(figure.value, target.min, target.max) - figure.value
    # A bound leaves open how far the figure lies beyond it.
    least = np.full_like(possible, -np.inf) if figure.bound == "at most" else possible
    most = np.full_like(possible, np.inf) if figure.bound == "at least" else possible
    surely = float(np.mean((least >= low) & (most <= high)))
    perhaps = float(np.mean((most >= low) & (least <= high)))
    counted = possible.size > 1
    if surely >= confidence:
        return replace(result, verdict="met", probability=surely if counted else None)
    if perhaps <= 1.0 - confidence:
        return replace(result, verdict="missed", probability=perhaps if counted else None)
    if figure.bound is not None:
        return replace(result, advice=remedy or f"sweep wider, so that {name} is more than a bound")
    return replace(result, probability=surely, advice=remedy or None)


def _spread(figure: Figure, confidence: float) -> FloatArray:
    """Return possible values of a figure known by its interval alone: two half normals that meet at the value."""
    assert figure.value is not None
    if figure.low is None or figure.high is None:
        return np.array([figure.value])
    normal = NormalDist()
    edge = normal.inv_cdf(0.5 + 0.5 * confidence)
    z = np.array([normal.inv_cdf((i + 0.5) / _QUANTILES) for i in range(_QUANTILES)])
    side = np.where(z > 0.0, figure.high - figure.value, figure.value - figure.low)
    return np.asarray(figure.value + z * side / edge)


_QUANTILES: Final = 501
_CURES: Final = {
    "mismatch": (0.5, "fit better matched pads, or put a 6 dB pad inside the calibration on each port"),
    "reading": (0.5, "calibrate again and sweep at once, with tightened connectors"),
    "directivity": (0.1, "sweep the reflection once more without the added pad"),
    "noise": (0.32, "average ten sweeps, or take a measuring bandwidth ten times narrower"),
    "interpolation": (0.2, "sweep more points over a narrower span"),
}
"""What would shrink a source of doubt, and to what share of its standard uncertainty (common practice, no source)."""


def remedy(figure: Figure, bank: PadBank, *, port_match_stated: bool = True) -> str:
    """Return what would narrow a figure most, with what it would come to; empty where its budget is empty.

    Where the port match was only assumed, stating it comes before improving it.
    """
    if not figure.budget or not figure.standard_uncertainty or figure.low is None or figure.high is None:
        return ""
    source, share = max(figure.budget.items(), key=lambda item: item[1])
    if source.startswith("pad "):
        name = source.removeprefix("pad ")
        width, is_limit = pad_doubt_db(name, bank)
        was = rectangular_u(width) if is_limit else width
        left = min(ASSUMED["measured pad, standard uncertainty"] / was, 1.0) if was > 0.0 else 1.0
        action = f"measure pad {name} as a .s2p file"
    elif source == "mismatch" and not port_match_stated:
        left = 0.5
        action = f"find the port match and state analyzer.port_match_db ({ASSUMED['port match']:g} dB is assumed)"
    else:
        left, action = _CURES[source]
    half = 0.5 * (figure.high - figure.low)
    better = half * float(np.sqrt(1.0 - share + share * left**2))
    shown = [quantity(width, figure.unit, width / 2.0) for width in (half, better)]
    return f"{action}: interval of {figure_label(figure.key)} ±{shown[0]} → ±{shown[1]}"


def overall(verdicts: Sequence[Verdict]) -> Verdict:
    """Return the verdict of a device: missed if any target is, else undecided if any is, else met."""
    order: tuple[Verdict, ...] = ("missed", "undecided", "met")
    return next((verdict for verdict in order if verdict in verdicts), "none")


def _against(target: TargetResult, figure: Figure) -> str:
    """Return one clause that says how far a figure is from its target."""
    name = figure_label(target.figure)
    if figure.value is None:
        return f"{name} cannot be known from these sweeps"
    interval = f" ({interval_text(figure)})" if figure.low is not None else ""
    return f"{name} is {value_text(figure)}{interval}, wanted {limits_text(target)}"


_BEFORE_FIGURES: Final = (
    "reference-not-repeating",
    "pad-value-suspect",
    "input-limited-or-pad",
    "cause-unclear",
)
"""Findings to be settled before it is worth narrowing a figure."""


def summarise(
    targets: Sequence[TargetResult], figures: Mapping[str, Figure], findings: Sequence[Finding], planned: bool = False
) -> Summary:
    """Return the verdict of a device, the reason in one sentence, and the next step in one sentence.

    `findings` are sorted worst first; the worst that is more than a note gives the next step. For a target that is
    undecided what would decide it comes before that, unless the bench itself is in question. `planned` says that
    there are sweeps worth taking though nothing calls for them.
    """
    verdict = overall([target.verdict for target in targets])
    doubts = [finding for finding in findings if finding.severity != "note"]
    decisive = [target for target in targets if target.verdict == verdict] if verdict != "met" else []
    if verdict == "none":
        reason = "No target is set for this device."
    elif verdict == "met":
        count = f"all {len(targets)} targets are met" if len(targets) > 1 else "the one target is met"
        reason = f"{count[0].upper()}{count[1:]}{', with doubts' if doubts else ''}."
    else:
        shown = "; ".join(_against(target, figures[target.figure]) for target in decisive[:2])
        more = f"; and {len(decisive) - 2} more" if len(decisive) > 2 else ""
        reason = f"{shown[0].upper()}{shown[1:]}{more}."
    advised = [target.advice for target in decisive if target.advice]
    unsettled = bool(doubts) and doubts[0].code in _BEFORE_FIGURES
    if verdict == "undecided" and advised and not unsettled:
        step = advised[0]
    elif doubts:
        step = doubts[0].advice
    elif verdict == "missed":
        step = "the set-up raises no doubt: change the device, then sweep again"
    elif verdict == "none":
        step = "set targets in the sheet to have them judged"
    else:
        step = "nothing: file this page" + ("; `benchtool next` has what would tell more" if planned else "")
    return Summary(verdict, reason, f"{step[0].upper()}{step[1:]}.")
