"""A verdict on the gain changes of a drive table in; the finding that tells it, with its evidence in numbers, out.

What the advice cannot know yet are the sweeps that are planned: :mod:`benchtool.advice` puts those in.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np

from benchtool.causes import NAMED, STILL_POSSIBLE, UNSPOILED_DB, CauseCode, CauseVerdict, receiver_drop
from benchtool.digits import decibels, level_text, quantity
from benchtool.drive_results import PadEstimate
from benchtool.drive_table import DriveTable
from benchtool.model import Finding
from benchtool.rivals import Cause

__all__ = ["cause_finding"]

_MORE_PAD_DB: Final = 1.0
_SAME_DRIVE_DB: Final = 0.5
_WORDS: Final[Mapping[Cause, str]] = {
    "clean": "nothing is wrong",
    "output-limited": "the device limits at its output",
    "input-limited": "the device limits at its input",
    "receiver-overload": "the receiver at port 2 compresses",
    "pad-value": "a pad is not what the sheet says",
    "not-repeating": "the device or set-up changed between sweeps",
}


def cause_finding(table: DriveTable, verdict: CauseVerdict) -> Finding | None:
    """Return the verdict as a finding with its evidence in numbers; None for a clean bench."""
    if verdict.code == "clean":
        return None
    return _FINDINGS[verdict.code](table, verdict)


@dataclass(frozen=True)
class _Evidence:
    """The largest change between two drives: where it is largest and where it is least."""

    low: str
    high: str
    drop_db: float
    at_mhz: float
    least_db: float
    least_at_mhz: float


def _evidence(table: DriveTable) -> _Evidence:
    change = table.gain_db[0] - table.gain_db
    sweep = int(np.argmax(np.max(np.abs(change), axis=1)))
    f = table.frequency_hz / 1e6
    most, least = int(np.argmax(np.abs(change[sweep]))), int(np.argmin(np.abs(change[sweep])))
    return _Evidence(
        table.files[0],
        table.files[sweep],
        float(change[sweep, most]),
        float(f[most]),
        float(change[sweep, least]),
        float(f[least]),
    )


def _lower(drop_db: float) -> str:
    return f"{abs(drop_db):.2f} dB {'lower' if drop_db >= 0.0 else 'higher'}"


def _shown(seen: _Evidence) -> str:
    return (
        f"{seen.high} reads {_lower(seen.drop_db)} than {seen.low} at {seen.at_mhz:.4g} MHz and "
        f"{_lower(seen.least_db)} at {seen.least_at_mhz:.4g} MHz"
    )


def _sure(verdict: CauseVerdict) -> str:
    return f"probability {min(verdict.confidence, 0.999):.3g}"


def _value(verdict: CauseVerdict, cause: Cause) -> str:
    """Return the 1 dB point as text: the level that is truly reached there, 1 dB below what the gain would make it."""
    rival = next(rival for rival in verdict.rivals if rival.cause == cause)
    if rival.value is None or rival.u is None:
        return "not known"
    reached = rival.value - (0.0 if cause == "input-limited" else 1.0)
    return f"{level_text(round(reached, 1))} ± {1.96 * rival.u:.1f} dB"


def _output_limited(table: DriveTable, verdict: CauseVerdict) -> Finding:
    seen = _evidence(table)
    where = f", 1 dB point near {_value(verdict, 'output-limited')} at the output" if table.levels_known else ""
    return Finding(
        "output-limited",
        "caution",
        f"the device limits at its output ({_sure(verdict)}): {_shown(seen)}, and the drop follows the level at its "
        f"output{where}",
        "take figures from a sweep below the safe drive; gain and bandwidth at higher drives are not the device's",
        seen.high,
    )


def _input_limited(table: DriveTable, verdict: CauseVerdict) -> Finding:
    seen = _evidence(table)
    where = f", 1 dB point near {_value(verdict, 'input-limited')}" if table.levels_known else ""
    return Finding(
        "input-limited",
        "caution",
        f"the device limits ahead of its selectivity ({_sure(verdict)}): {_shown(seen)}, alike over the sweep, and "
        f"the drop follows the drive{where}",
        "take figures from a sweep below the safe drive",
        seen.high,
    )


def _receiver(table: DriveTable, verdict: CauseVerdict) -> Finding:
    seen = _evidence(table)
    where = f" with its 1 dB point near {_value(verdict, 'receiver-overload')}" if table.levels_known else ""
    return Finding(
        "receiver-overload",
        "caution",
        f"the analyzer's receiver compresses ({_sure(verdict)}): {_shown(seen)}, and the drop follows the level at "
        f"port 2{where}",
        _receiver_advice(table, verdict),
        seen.high,
    )


def _receiver_advice(table: DriveTable, verdict: CauseVerdict) -> str:
    """Return which sweep with more output pad to trust instead of the worst, or what would help where there is none."""
    lost = receiver_drop(table, verdict)
    worst = int(np.argmax(lost))
    more_db = table.output_loss_db - table.output_loss_db[worst]
    padded = [k for k in range(table.sweeps) if more_db[k] > _MORE_PAD_DB]
    sound = [k for k in padded if lost[k] < UNSPOILED_DB]
    if sound:
        drive = np.mean(table.drive_dbm, axis=1)
        best = min(sound, key=lambda k: abs(float(drive[k] - drive[worst])))
        alike = "at the same drive" if abs(drive[best] - drive[worst]) < _SAME_DRIVE_DB else "at another drive"
        return f"trust {table.files[best]}, swept with {more_db[best]:.0f} dB more output pad {alike}"
    if padded:
        most = table.files[max(padded, key=lambda k: more_db[k])]
        return (
            f"take figures from a sweep with less level at port 2: {most} had not enough output pad to relieve the "
            "receiver, and more input pad would only hide it"
        )
    return "sweep again with 10 dB more output pad and enter it in the sheet; more input pad would only hide it"


def _pad_text(pad: PadEstimate) -> str:
    low, high = (quantity(end, "dB").removesuffix(" dB") for end in (pad.low_db, pad.high_db))
    return f"{pad.name} loses {quantity(pad.value_db, 'dB')} ({low} to {high}), not {decibels(pad.stated_db)}"


def _pad_value(table: DriveTable, verdict: CauseVerdict) -> Finding:
    total = verdict.probabilities["pad-value"]
    likely = [pad for pad in verdict.pads if pad.probability >= 0.05 * total]
    which = ("either " if len(likely) > 1 else "") + ", or ".join(_pad_text(pad) for pad in likely)
    return Finding(
        "pad-value-suspect",
        "caution",
        f"a pad is not what the sheet says ({_sure(verdict)}): {_shown(_evidence(table))}, alike over the "
        f"sweep; {which}",
        f"measure pad {' and pad '.join(pad.name for pad in likely)} as a .s2p file and enter it in the sheet",
    )


def _input_or_pad(table: DriveTable, verdict: CauseVerdict) -> Finding:
    seen = _evidence(table)
    p = verdict.probabilities
    pad = verdict.pads[0] if verdict.pads else None
    as_pad = f" or {_pad_text(pad)}" if pad else ""
    return Finding(
        "input-limited-or-pad",
        "caution",
        f"{_shown(seen)}, alike over the sweep: either the device limits ahead of its selectivity (probability "
        f"{p['input-limited']:.2f}){as_pad} (probability {p['pad-value']:.2f}); that a sweep did not repeat has "
        f"{p['not-repeating']:.2f}",
        f"measure pad {pad.name} as a .s2p file and enter it in the sheet: if it loses what the sheet says, the device "
        "limits"
        if pad
        else f"sweep again at the drive of {seen.high} with other pads",
        seen.high,
    )


def _not_repeating(table: DriveTable, verdict: CauseVerdict) -> Finding:
    again = table.taken_again()
    apart = [(float(np.max(np.abs(table.gain_db[a] - table.gain_db[b]))), a, b) for a, b in again]
    worst = max(apart, default=None)
    odd = verdict.odd_sweep
    if worst is not None and worst[0] > 0.2:
        why = (
            f"{table.files[worst[1]]} and {table.files[worst[2]]}, taken with the same pads and drive, differ by up to "
            f"{worst[0]:.2f} dB"
        )
    else:
        why = f"{_shown(_evidence(table))}, which no limiting and no single pad explains"
    # Where no explanation fits at all, sweeps of one line that disagree are still a fact.
    sure = f" ({_sure(verdict)})" if verdict.confidence >= NAMED else ""
    return Finding(
        "reference-not-repeating",
        "caution",
        f"sweeps do not repeat{sure}: {why}" + (f"; {odd} stands apart most" if odd else ""),
        "let the bench warm up, tighten connectors, look for oscillation, then sweep the line of "
        f"{odd or table.files[0]} again, twice in a row",
        odd,
    )


def _noise(table: DriveTable, verdict: CauseVerdict) -> Finding:
    worst = int(np.argmax(table.buried))
    return Finding(
        "noise-limited",
        "caution",
        f"{table.files[worst]}: {table.buried[worst]:.0%} of its span stands less than 10 dB above its noise; where "
        f"its signal is clear it agrees with the other sweeps (probability {verdict.confidence:.2f})",
        "narrow the measuring bandwidth, average, or take pads out where the levels allow",
        table.files[worst],
    )


def _unclear(table: DriveTable, verdict: CauseVerdict) -> Finding:
    return Finding(
        "cause-unclear",
        "caution",
        f"{_shown(_evidence(table))}; {_rivals_left(verdict)}",
        "let the bench warm up, check pads and connectors, then sweep every line of the device again",
    )


def _rivals_left(verdict: CauseVerdict) -> str:
    """Return the causes that are left with their probabilities, or why even the best of them is not believed."""
    left = sorted(verdict.probabilities.items(), key=lambda item: -item[1])
    if verdict.confidence > 0.0:
        return "possible: " + ", ".join(f"{_WORDS[cause]} ({p:.2f})" for cause, p in left if p >= STILL_POSSIBLE)
    cause, p = left[0]
    best = next(rival for rival in verdict.rivals if rival.cause == cause)
    misfit = f"(χ² {best.chi2:.0f} over {best.freedom} readings)"
    leads = f"that {_WORDS[cause]} is by far the likeliest ({p:.2f}), but " if p > NAMED else ""
    return (
        f"{leads}no single cause explains the sweeps to within their doubts {misfit}: two may be at work at once, or "
        "the device changed between sweeps"
    )


_FINDINGS: Final[Mapping[CauseCode, Callable[[DriveTable, CauseVerdict], Finding]]] = {
    "output-limited": _output_limited,
    "input-limited": _input_limited,
    "receiver-overload": _receiver,
    "pad-value-suspect": _pad_value,
    "reference-not-repeating": _not_repeating,
    "noise-limited": _noise,
    "input-limited-or-pad": _input_or_pad,
    "cause-unclear": _unclear,
}
