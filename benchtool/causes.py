"""A drive table in; why the gain changed between its sweeps, and how sure that is, out.

The decision rests on the rivals of :mod:`benchtool.rivals`: a cause is named when its probability reaches 0.9, nothing
is alarmed while a clean bench is the more likely half, and otherwise the rivals that are left are named together.
Probabilities are conditional on the sheet, on the widths of its doubts, and on one cause being at work.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from statistics import NormalDist
from types import MappingProxyType
from typing import Final, Literal, TypeAlias

import numpy as np

from benchtool.compression import COMPRESSED_DB
from benchtool.drive_results import PadEstimate
from benchtool.drive_table import DriveTable
from benchtool.model import FloatArray
from benchtool.onset_belief import Allowances
from benchtool.rivals import Cause, Rival, log_evidence, rivals

__all__ = [
    "NAMED",
    "STILL_POSSIBLE",
    "UNSPOILED_DB",
    "CauseCode",
    "CauseVerdict",
    "PadEstimate",
    "allowances",
    "find_cause",
    "receiver_drop",
    "set_aside",
]

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

NAMED: Final = 0.9
"""Probability from which a cause is named."""
_CLEAN: Final = 0.5
"""Probability of a clean bench from which nothing is alarmed."""
STILL_POSSIBLE: Final = 0.02
"""Probability below which a cause is no longer allowed for."""
_MISFIT: Final = 1e-6
"""Chance of a misfit as large as the best rival's below which no rival is believed."""
_BURIED_SHARE: Final = 0.2
"""Share of a sweep's span under its noise from which the noise is worth a word."""
_DOUBTED_PAD_DB: Final = 6.0
"""Standard uncertainty of a pad that may be another pad altogether."""
UNSPOILED_DB: Final = 0.2
"""A sweep that may have lost less than this in the receiver can still bear on the device."""
_CLEARLY_ODD: Final = float(np.log(20.0))
"""Logarithm of how much better the rest must be explained without one sweep than without another."""
_UNSTEADY_DB: Final = 1.0
_UNCLEAR_DB: Final = 2.0
"""Standard uncertainty of each sweep of a device that does not repeat, and of one whose sweeps nothing explains: that
of a pad taken for another (common practice, no source)."""
_CODE: Final[Mapping[Cause, CauseCode]] = {
    "clean": "clean",
    "output-limited": "output-limited",
    "input-limited": "input-limited",
    "receiver-overload": "receiver-overload",
    "pad-value": "pad-value-suspect",
    "not-repeating": "reference-not-repeating",
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
    odd = _odd_sweep(table, found) if table.sweeps > 2 else None
    return CauseVerdict(code, sure, MappingProxyType(share), _pads(table, found, confidence), odd, found)


def _odd_sweep(table: DriveTable, found: tuple[Rival, ...]) -> str | None:
    """Return the sweep that stands apart most; None where two that should agree are as likely to be the odd one.

    Where sweeps of one line disagree, the others are the witness: the odd one is that without which the rest is
    explained best.
    """
    apart = {k for pair in table.disagreeing() for k in pair}
    if not apart:
        return next((rival.about for rival in found if rival.cause == "not-repeating" and rival.about), None)
    rest = {k: log_evidence(table.only([i for i in range(table.sweeps) if i != k])) for k in apart}
    first, second = sorted(rest, key=lambda k: -rest[k])[:2]
    return table.files[first] if rest[first] - rest[second] > _CLEARLY_ODD else None


def _misfits(best: Rival) -> bool:
    """Whether the readings lie further from a model than chance allows, by the tail of chi squared."""
    if best.chi2 <= best.freedom + 3.0 * np.sqrt(2.0 * best.freedom):
        return False  # three standard deviations: far more likely than that
    # Seldom needed, and longer to load than a bench to measure.
    from scipy.special import gammaincc

    return float(gammaincc(best.freedom / 2.0, best.chi2 / 2.0)) < _MISFIT


def _decide(table: DriveTable, share: Mapping[Cause, float], best: Rival) -> tuple[CauseCode, float]:
    noisy = float(np.max(table.buried)) >= _BURIED_SHARE
    top = max(share, key=lambda cause: share[cause])
    flat = share["input-limited"] + share["pad-value"] + share["not-repeating"]
    if _misfits(best):
        # Whatever else is at work, sweeps of one line that disagree did not repeat.
        return ("cause-unclear", 0.0) if table.repeats() else ("reference-not-repeating", share["not-repeating"])
    if share["clean"] >= _CLEAN:
        return ("noise-limited" if noisy else "clean"), share["clean"]
    if share[top] >= NAMED:
        return _CODE[top], share[top]
    if flat >= NAMED and min(share["input-limited"], share["pad-value"]) >= STILL_POSSIBLE:
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
    likely = [pad for pad in verdict.pads if pad.probability >= STILL_POSSIBLE]
    doubted = {pad.name: _DOUBTED_PAD_DB for pad in likely} if doubtful else {}
    spoiled: set[str] = set()
    named = verdict.code == "reference-not-repeating"
    # No explanation fits: any pad or sweep may be off, and the onset must not be the surer for it.
    nothing_fits = verdict.code == "cause-unclear" and verdict.confidence == 0.0
    unsteady = _UNSTEADY_DB if named else _UNCLEAR_DB if nothing_fits else 0.0
    if verdict.odd_sweep is not None and (named or p["not-repeating"] >= STILL_POSSIBLE):
        spoiled.add(verdict.odd_sweep)
    if p["receiver-overload"] >= STILL_POSSIBLE:
        lost = receiver_drop(table, verdict)
        spoiled |= {file for file, drop in zip(table.files, lost, strict=True) if drop >= UNSPOILED_DB}
        unsteady = max(unsteady, UNSPOILED_DB)
    return Allowances(MappingProxyType(doubted), frozenset(spoiled), unsteady)


def _level_at_output(verdict: CauseVerdict) -> tuple[float, float] | None:
    """Return the level at the output of the 1 dB point that the whole sweep shows, dBm, and its standard uncertainty.

    None unless the device was found to limit at its output.
    """
    if verdict.code != "output-limited":
        return None
    rival = next(rival for rival in verdict.rivals if rival.cause == "output-limited")
    return None if rival.value is None or rival.u is None else (rival.value, rival.u)


def receiver_drop(table: DriveTable, verdict: CauseVerdict) -> FloatArray:
    """Return how much of its gain each sweep may have lost in the receiver at its worst node, dB, (k,)."""
    receiver = next(rival for rival in verdict.rivals if rival.cause == "receiver-overload")
    if receiver.value is None:
        return np.zeros(table.sweeps)
    level = table.drive_dbm + table.gain_db - table.output_loss_db[:, None] - receiver.value
    # Rapp with p = 1, soft enough that a sweep kept is a sweep unspoiled.
    return np.asarray(10.0 * np.log10(1.0 + 0.2589 * 10.0 ** (np.max(level, axis=1) / 10.0)))


def set_aside(table: DriveTable, verdict: CauseVerdict, reference: str) -> Mapping[str, str]:
    """Return the sweeps whose gain the named cause explains without the device compressing: file, and why.

    With a pad that is off these are the sweeps through it, but for any that reads lower than the pad can account for.
    """
    if verdict.code == "reference-not-repeating":
        odd = [verdict.odd_sweep] if verdict.odd_sweep else [file for file in table.files if file != reference]
        return dict.fromkeys(odd, "did not repeat")
    if verdict.code == "receiver-overload":
        lost = receiver_drop(table, verdict)
        return {
            file: "receiver overloaded" for file, drop in zip(table.files, lost, strict=True) if drop >= UNSPOILED_DB
        }
    if verdict.code == "pad-value-suspect" and verdict.pads:
        suspect = verdict.pads[0]
        reads = next(pad.reads for pad in table.pads if pad.name == suspect.name)
        base = table.files.index(reference)
        drop = np.max(table.gain_db[base] - table.gain_db, axis=1)
        drop += (reads - reads[base]) * (suspect.value_db - suspect.stated_db)
        through = (reads != 0.0) & (drop <= COMPRESSED_DB)
        return {file: f"pad {suspect.name} suspect" for file, is_so in zip(table.files, through, strict=True) if is_so}
    return {}
