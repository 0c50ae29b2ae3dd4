"""A drive table in; why the gain changed between its sweeps, how sure that is, and what to do about it, out.

The decision rests on the rivals of :mod:`benchtool.rivals`: a cause is named when its probability reaches 0.9, nothing
is alarmed while a clean bench is the more likely half, and otherwise the rivals that are left are named together.
Probabilities are conditional on the sheet, on the widths of its doubts, and on one cause being at work.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from statistics import NormalDist
from types import MappingProxyType
from typing import Final, Literal, TypeAlias

import numpy as np
from scipy.special import gammaincc

from benchtool.digits import level_text
from benchtool.drive_results import PadEstimate
from benchtool.drive_table import DriveTable
from benchtool.model import Finding, FloatArray
from benchtool.onset_belief import Allowances
from benchtool.rivals import Cause, Rival, rivals

__all__ = ["CauseCode", "CauseVerdict", "PadEstimate", "allowances", "cause_finding", "find_cause"]

CauseCode: TypeAlias = Literal[
    "clean",
    "output-limited",
    "input-limited",
    "receiver-overload",
    "pad-value-suspect",
    "reference-not-repeating",
    "noise-limited",
    "input-limited-or-pad",
    "cause-unclear",
]

_NAMED: Final = 0.9
"""Probability from which a cause is named."""
_CLEAN: Final = 0.5
"""Probability of a clean bench from which nothing is alarmed."""
_STILL_POSSIBLE: Final = 0.02
_MISFIT: Final = 1e-6
"""Chance of a misfit as large as the best rival's below which no rival is believed."""
_BURIED_SHARE: Final = 0.2
"""Share of a sweep's span under its noise from which the noise is worth a word."""
_DOUBTED_PAD_DB: Final = 6.0
"""Standard uncertainty of a pad that may be another pad altogether."""
_UNSPOILED_DB: Final = 0.2
"""A sweep that may have lost less than this in the receiver can still bear on the device."""
_MORE_PAD_DB: Final = 1.0
_SAME_DRIVE_DB: Final = 0.5
_UNSTEADY_DB: Final = 1.0
"""Standard uncertainty of each sweep of a device that does not repeat."""
_CODE: Final[Mapping[Cause, CauseCode]] = {
    "clean": "clean",
    "output-limited": "output-limited",
    "input-limited": "input-limited",
    "receiver-overload": "receiver-overload",
    "pad-value": "pad-value-suspect",
    "not-repeating": "reference-not-repeating",
}
_WORDS: Final[Mapping[Cause, str]] = {
    "clean": "nothing is wrong",
    "output-limited": "the device limits at its output",
    "input-limited": "the device limits at its input",
    "receiver-overload": "the receiver at port 2 compresses",
    "pad-value": "a pad is not what the sheet says",
    "not-repeating": "the device or set-up changed between sweeps",
}


@dataclass(frozen=True)
class CauseVerdict:
    """Why gain changed between sweeps: the code, its probability, and every rival's."""

    code: CauseCode
    confidence: float
    probabilities: Mapping[Cause, float]
    pads: tuple[PadEstimate, ...]
    """Pads that may be off, most likely first."""
    odd_sweep: str | None
    """The sweep that did not repeat, where one stands out."""
    rivals: tuple[Rival, ...]

    @property
    def device_compresses(self) -> bool:
        """Whether the device itself was named as what limits."""
        return self.code in ("output-limited", "input-limited")


def find_cause(table: DriveTable, confidence: float = 0.95) -> CauseVerdict | None:
    """Return why gain changed between the sweeps of a table; None where there is only one sweep."""
    if table.sweeps < 2:
        return None
    found = rivals(table)
    share: dict[Cause, float] = dict.fromkeys(_CODE, 0.0)
    for rival in found:
        share[rival.cause] += rival.probability
    code, sure = _decide(table, share, found[0])
    odd = [rival for rival in found if rival.cause == "not-repeating" and rival.about]
    return CauseVerdict(
        code,
        sure,
        MappingProxyType(share),
        _pads(table, found, confidence),
        odd[0].about if odd and table.sweeps > 2 else None,
        found,
    )


def _decide(table: DriveTable, share: Mapping[Cause, float], best: Rival) -> tuple[CauseCode, float]:
    noisy = float(np.max(table.buried)) >= _BURIED_SHARE
    top = max(share, key=lambda cause: share[cause])
    flat = share["input-limited"] + share["pad-value"] + share["not-repeating"]
    if float(gammaincc(best.freedom / 2.0, best.chi2 / 2.0)) < _MISFIT:
        # Whatever else is at work, sweeps of one line that disagree did not repeat.
        return ("cause-unclear", 0.0) if table.repeats() else ("reference-not-repeating", share["not-repeating"])
    if share["clean"] >= _CLEAN:
        return ("noise-limited" if noisy else "clean"), share["clean"]
    if share[top] >= _NAMED:
        return _CODE[top], share[top]
    if flat >= _NAMED and min(share["input-limited"], share["pad-value"]) >= _STILL_POSSIBLE:
        return "input-limited-or-pad", share["input-limited"] + share["pad-value"]
    if noisy and share["clean"] == share[top]:
        return "noise-limited", share["clean"]
    return "cause-unclear", share[top]


def _pads(table: DriveTable, found: tuple[Rival, ...], confidence: float) -> tuple[PadEstimate, ...]:
    reach = NormalDist().inv_cdf(0.5 + confidence / 2.0)
    stated = {pad.name: pad.loss_db for pad in table.pads}
    estimates = []
    for rival in found:
        if rival.cause == "pad-value" and rival.value is not None and rival.u is not None:
            value = stated[rival.about] + rival.value
            low, high = value - reach * rival.u, value + reach * rival.u
            estimates.append(PadEstimate(rival.about, stated[rival.about], value, low, high, rival.probability))
    return tuple(estimates)


def allowances(table: DriveTable, verdict: CauseVerdict) -> Allowances:
    """Return what an onset of compression must allow for, the cause being what it is.

    Sweeps that the receiver, or a change of the set-up, may have spoiled are left out. A pad that may be off keeps no
    value of its own, and sweeps that did not repeat little, so that an onset rests on what they show for all that.
    """
    p = verdict.probabilities
    if verdict.device_compresses:
        return Allowances(at_output=_level_at_output(verdict))
    doubtful = verdict.code in ("pad-value-suspect", "input-limited-or-pad", "cause-unclear")
    likely = [pad for pad in verdict.pads if pad.probability >= _STILL_POSSIBLE]
    doubted = {pad.name: _DOUBTED_PAD_DB for pad in likely} if doubtful else {}
    spoiled: set[str] = set()
    unsteady = _UNSTEADY_DB if verdict.code == "reference-not-repeating" else 0.0
    if verdict.odd_sweep is not None and p["not-repeating"] >= _STILL_POSSIBLE:
        spoiled.add(verdict.odd_sweep)
    if p["receiver-overload"] >= _STILL_POSSIBLE:
        lost = _receiver_drop(table, verdict)
        spoiled |= {file for file, drop in zip(table.files, lost, strict=True) if drop >= _UNSPOILED_DB}
        unsteady = max(unsteady, _UNSPOILED_DB)
    return Allowances(MappingProxyType(doubted), frozenset(spoiled), unsteady)


def _level_at_output(verdict: CauseVerdict) -> tuple[float, float] | None:
    """Return the level at the output of the 1 dB point that the whole sweep shows, dBm, and its standard uncertainty.

    None unless the device was found to limit at its output.
    """
    if verdict.code != "output-limited":
        return None
    rival = next(rival for rival in verdict.rivals if rival.cause == "output-limited")
    return None if rival.value is None or rival.u is None else (rival.value, rival.u)


def _receiver_drop(table: DriveTable, verdict: CauseVerdict) -> FloatArray:
    """Return how much of its gain each sweep may have lost in the receiver at its worst node, dB, (k,)."""
    receiver = next(rival for rival in verdict.rivals if rival.cause == "receiver-overload")
    if receiver.value is None:
        return np.zeros(table.sweeps)
    level = table.drive_dbm + table.gain_db - table.output_loss_db[:, None] - receiver.value
    # Rapp with p = 1, soft enough that a sweep kept is a sweep unspoiled.
    return np.asarray(10.0 * np.log10(1.0 + 0.2589 * 10.0 ** (np.max(level, axis=1) / 10.0)))


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
        _receiver_advice(table, verdict, table.files.index(seen.high)),
        seen.high,
    )


def _receiver_advice(table: DriveTable, verdict: CauseVerdict, worst: int) -> str:
    """Return which sweep with more output pad to trust instead of the worst, or what to sweep where there is none."""
    more_db = table.output_loss_db - table.output_loss_db[worst]
    padded = [k for k in range(table.sweeps) if more_db[k] > _MORE_PAD_DB]
    lost = _receiver_drop(table, verdict)
    sound = [k for k in padded if lost[k] < _UNSPOILED_DB]
    if sound:
        drive = np.mean(table.drive_dbm, axis=1)
        best = min(sound, key=lambda k: abs(float(drive[k] - drive[worst])))
        alike = "at the same drive" if abs(drive[best] - drive[worst]) < _SAME_DRIVE_DB else "at another drive"
        return f"trust {table.files[best]}, swept with {more_db[best]:.0f} dB more output pad {alike}"
    than = f" than {table.files[max(padded, key=lambda k: more_db[k])]} had" if padded else ""
    return f"sweep again with 10 dB more output pad{than} and enter it in the sheet; more input pad would only hide it"


def _pad_text(pad: PadEstimate) -> str:
    return f"{pad.name} loses {pad.value_db:.2f} dB ({pad.low_db:.2f} to {pad.high_db:.2f}), not {pad.stated_db:g} dB"


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
        f"sweep again at the drive of {seen.low} with other pads: if gain agrees the device limits, else a pad is off",
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
    return Finding(
        "reference-not-repeating",
        "caution",
        f"sweeps do not repeat ({_sure(verdict)}): {why}" + (f"; {odd} stands apart most" if odd else ""),
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
        "`benchtool next` names the sweeps that would settle it",
    )


def _rivals_left(verdict: CauseVerdict) -> str:
    """Return the causes that are left with their probabilities, or why even the best of them is not believed."""
    left = sorted(verdict.probabilities.items(), key=lambda item: -item[1])
    if verdict.confidence > 0.0:
        return "possible: " + ", ".join(f"{_WORDS[cause]} ({p:.2f})" for cause, p in left if p >= _STILL_POSSIBLE)
    cause, p = left[0]
    best = next(rival for rival in verdict.rivals if rival.cause == cause)
    misfit = f"(χ² {best.chi2:.0f} over {best.freedom} readings)"
    leads = f"that {_WORDS[cause]} is by far the likeliest ({p:.2f}), but " if p > _NAMED else ""
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
