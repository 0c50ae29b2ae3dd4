"""A figure and its target in; met, missed or undecided out, and what a reader must know first.

A figure that is only a bound decides what it can: at least 1.2 MHz meets a minimum of 1 MHz and misses a maximum of
1.1 MHz, and leaves everything else undecided. A figure that cannot be known leaves its target undecided.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from benchtool.figures import phase_toward
from benchtool.model import Figure, Finding, Summary, TargetResult, Verdict
from benchtool.sheet import TargetSpec
from benchtool.units import format_si

__all__ = ["format_figure", "judge", "overall", "summarise"]


def judge(figure: Figure, target: TargetSpec) -> TargetResult:
    """Return how a figure stands against its target."""
    verdict = _by_value(figure, target.min, target.max)
    return TargetResult(figure.key, figure.id, figure.unit, target.min, target.max, verdict)


def _by_value(figure: Figure, low: float | None, high: float | None) -> Verdict:
    value = figure.value
    if value is None:
        return "undecided"
    if figure.id == "phase":
        value = phase_toward(value, low, high)
    # What the bound leaves possible: the figure lies somewhere in [at_least, at_most].
    at_least = float("-inf") if figure.bound == "at most" else value
    at_most = float("inf") if figure.bound == "at least" else value
    wanted_low = float("-inf") if low is None else low
    wanted_high = float("inf") if high is None else high
    if at_most < wanted_low or at_least > wanted_high:
        return "missed"
    if wanted_low <= at_least and at_most <= wanted_high:
        return "met"
    return "undecided"


def overall(verdicts: Sequence[Verdict]) -> Verdict:
    """Return the verdict of a device: missed if any target is, else undecided if any is, else met."""
    order: tuple[Verdict, ...] = ("missed", "undecided", "met")
    return next((verdict for verdict in order if verdict in verdicts), "none")


def format_figure(value: float, unit: str, digits: int = 4) -> str:
    """Return a value with its unit for people: SI prefixes for Hz, s and ohm, two decimals for the rest.

    >>> format_figure(21.4e6, "Hz"), format_figure(38.214, "dB"), format_figure(-179.96, "deg"), format_figure(50.1, "")
    ('21.4 MHz', '38.21 dB', '-180.0°', '50.1')
    """
    if unit in ("Hz", "s", "ohm"):
        return format_si(value, unit, digits)
    if unit == "deg":
        return f"{value:.1f}°"
    if unit == "":
        return f"{value:.{digits}g}"
    return f"{value:.2f} {unit}"


def _against(target: TargetResult, figure: Figure) -> str:
    """Return one clause that says how far a figure is from its target."""
    name = target.figure.replace("_", " ")
    if figure.value is None:
        return f"{name} cannot be known from these sweeps"
    shown = format_figure(figure.value, figure.unit)
    if figure.bound is not None:
        shown = f"{figure.bound} {shown}"
    limits = [
        f"{word} {format_figure(limit, figure.unit)}"
        for word, limit in (("at least", target.min), ("at most", target.max))
        if limit is not None
    ]
    return f"{name} is {shown}, wanted {' and '.join(limits)}"


def summarise(targets: Sequence[TargetResult], figures: Mapping[str, Figure], findings: Sequence[Finding]) -> Summary:
    """Return the verdict of a device, the reason in one sentence, and the next step in one sentence.

    `findings` are sorted worst first; the worst that is more than a note gives the next step.
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
    if verdict == "undecided" and advised:
        step = advised[0]
    elif doubts:
        step = doubts[0].advice
    elif verdict == "missed":
        step = "the set-up raises no doubt: change the device, then sweep again"
    elif verdict == "none":
        step = "set targets in the sheet to have them judged"
    else:
        step = "nothing: file this page"
    return Summary(verdict, reason, f"{step[0].upper()}{step[1:]}.")
