"""What the sweeps of a device show, and the sweeps that are planned for it; advice that agrees with the plan out.

A finding about drive that advises a sweep names the one that `benchtool next` proposes, with its pads and its drive.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from typing import Final

from benchtool.causes import CauseCode, CauseVerdict
from benchtool.digits import level_text
from benchtool.drive_results import Estimate, NextSweep, Onset, Purpose
from benchtool.model import Finding, Severity
from benchtool.onset import SAFE_DROP_DB

__all__ = ["agreed", "onset_advice", "reference_finding", "sweep_words"]

_MATTERS_DB: Final = 0.2
"""A reference that cannot read lower than this by compression needs no caution."""
_LEAST_SHOWN_DB: Final = 0.01

_Plan = Mapping[Purpose, NextSweep]


def sweep_words(sweep: NextSweep, *, brief: bool = False) -> str:
    """Return a planned sweep's line: 'b10 at the input and c10, d10 at the output (−18.0 dBm drive)'.

    A `brief` one leaves out the output where it is that of the reference sweep.
    """
    sides = [f"{', '.join(sweep.input_pads) or 'no pad'} at the input"]
    if not (brief and sweep.keeps_output):
        sides.append(f"{', '.join(sweep.output_pads) or 'no pad'} at the output")
    drive = f" ({level_text(sweep.drive_dbm)} drive)" if sweep.drive_dbm is not None else ""
    return f"{' and '.join(sides)}{drive}"


def _told(sweep: NextSweep) -> str:
    return f"sweep with {sweep_words(sweep)}: it shows {sweep.settles}"


def agreed(
    findings: Sequence[Finding], verdict: CauseVerdict | None, onset: Onset, planned: Sequence[NextSweep]
) -> tuple[Finding, ...]:
    """Return the findings of a study of drive, the advice of the cause's finding made to agree with the plan."""
    if verdict is None or (advise := _ADVICE.get(verdict.code)) is None:
        return tuple(findings)
    plan: dict[Purpose, NextSweep] = {sweep.purpose: sweep for sweep in reversed(planned)}
    return tuple(
        replace(finding, advice=advise(finding.advice, verdict, onset, plan))
        if finding.code == verdict.code
        else finding
        for finding in findings
    )


def _repeat(advice: str, verdict: CauseVerdict, onset: Onset, plan: _Plan) -> str:
    if "repeat" not in plan:
        return advice
    return (
        "let the bench warm up, tighten connectors, look for oscillation, then sweep "
        f"{onset.reference.file} again, its line unchanged, twice in a row"
    )


def _measure_pad(advice: str, verdict: CauseVerdict, onset: Onset, plan: _Plan) -> str:
    if "measure-pad" in plan or "separate-causes" not in plan:
        return advice
    return f"{advice}; or {_told(plan['separate-causes'])}"


def _relieve(advice: str, verdict: CauseVerdict, onset: Onset, plan: _Plan) -> str:
    return _told(plan["relieve-receiver"]) if "relieve-receiver" in plan else advice


def _lift(advice: str, verdict: CauseVerdict, onset: Onset, plan: _Plan) -> str:
    if "lift-signal" not in plan:
        return advice
    return (
        "narrow the measuring bandwidth, average, or sweep with "
        f"{sweep_words(plan['lift-signal'], brief=True)} for what the noise hides"
    )


def _separate(advice: str, verdict: CauseVerdict, onset: Onset, plan: _Plan) -> str:
    """Return the sweep that parts the causes that are left, the receiver from the others first as the plan has it."""
    settling = next((plan[p] for p in ("relieve-receiver", "separate-causes") if p in plan), None)
    return advice if settling is None else _told(settling)


def _keep_below(advice: str, verdict: CauseVerdict, onset: Onset, plan: _Plan) -> str:
    """Return what to do about a device that limits: figures from a safe drive, and how to know it better."""
    if not onset.reference.proven and "prove-reference" in plan:
        lower = sweep_words(plan["prove-reference"], brief=True)
        return f"{advice}; to prove {onset.reference.file} small-signal, sweep with {lower}"
    return f"{advice}; {_told(plan['bracket-onset'])}" if "bracket-onset" in plan else advice


_ADVICE: Final[Mapping[CauseCode, Callable[[str, CauseVerdict, Onset, _Plan], str]]] = {
    "output-limited": _keep_below,
    "input-limited": _keep_below,
    "receiver-overload": _relieve,
    "pad-value-suspect": _measure_pad,
    "reference-not-repeating": _repeat,
    "noise-limited": _lift,
    "input-limited-or-pad": _separate,
    "cause-unclear": _separate,
}


def onset_advice(planned: Sequence[NextSweep]) -> str:
    """Return the planned sweep that would tell the 1 dB point better, as advice; empty where none is planned."""
    return next((_told(sweep) for sweep in planned if sweep.purpose == "bracket-onset"), "")


def reference_finding(onset: Onset, verdict: CauseVerdict | None, planned: Sequence[NextSweep]) -> Finding:
    """Return whether the reference is small-signal, by how much it may read low, and what to sweep to know."""
    proof, low = onset.reference, onset.reference.reads_low_db
    if proof.proven:
        return Finding(
            "drive-proven", "note", f"{proof.file} is small-signal: {_reads_low(low)}", "nothing to do", proof.file
        )
    how = "sweep again with 10 dB more input pad; if the gain agrees, it stands"
    lower = [sweep for sweep in planned if sweep.purpose == "prove-reference"]
    if lower:
        how = f"sweep again with {sweep_words(lower[0], brief=True)}; if the gain agrees, it stands"
    if verdict is not None and verdict.code == "noise-limited":
        how = f"noise outweighs the compression looked for: average first; then {how}"
    if verdict is not None and verdict.code == "reference-not-repeating":
        how = f"sweep {proof.file} again, its line unchanged, until two sweeps agree; then {how}"
    severity: Severity = "note" if low.high is not None and low.high < _MATTERS_DB else "caution"
    return Finding("drive-unproven", severity, f"{proof.file}: {_reads_low(low)}", how, proof.file)


def _reads_low(low: Estimate) -> str:
    if low.high is None:
        return "nothing shows that it is not compressed: there is no second drive to compare it with"
    if low.high < _LEAST_SHOWN_DB:
        return f"its gain reads low by less than {_LEAST_SHOWN_DB} dB"
    if low.low is None or low.high <= SAFE_DROP_DB:
        return f"its gain reads low by no more than {low.high:.2f} dB"
    if low.low < _LEAST_SHOWN_DB:
        return f"its gain may read low by up to {low.high:.2f} dB"
    return f"its gain may read low by {low.low:.2f} to {low.high:.2f} dB"
