"""What the sweeps of a device left open in; the two or three sweeps most worth taking next, with pads and levels, out.

Lines come from :mod:`benchtool.pad_stock`, which holds the limits. What a sweep would settle is the probability of two
rivals times how far apart they say it will read, in units of its doubt (one less the overlap of two normal densities).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations
from typing import Final

import numpy as np

from benchtool.causes import STILL_POSSIBLE
from benchtool.compression_study import CompressionStudy
from benchtool.digits import level_text, quantity
from benchtool.doubts import pad_doubt_db
from benchtool.drive_results import NextSweep, Purpose
from benchtool.drive_table import DriveTable
from benchtool.limiting import Law
from benchtool.model import FloatArray
from benchtool.onset import SAFE_DROP_DB
from benchtool.pad_stock import IN_EFFECT_DB, STEP_UP_DB, Line, in_effect_taken, port2_limit_dbm, possible_lines
from benchtool.pads import PadBank, change_of_line
from benchtool.propagation import rectangular_u
from benchtool.rivals import Rival
from benchtool.sheet import BenchSheet, SweepEntry

__all__ = ["NextSweep", "plan_next"]

_MOST: Final = 3
_NEW_DRIVE_DB: Final = 1.5
"""A drive that is no further from one already swept shows nothing new."""
_SURE: Final = 0.95
"""Probability of a cause from which no sweep is spent on telling it from its rivals."""
_WORTH: Final = 0.02
_WIDE_DB: Final = 2.0
_PROOF_STEP_DB: Final = 10.0
_RELIEF_DB: Final = 10.0
"""How much less level at port 2 puts it out of the receiver's reach."""
_RELIEVED_DB: Final = 3.0
_LIFT_DB: Final = 10.0
_READABLE_DB: Final = 30.0
_GUESS: Final = Law("rapp", 2.0)
"""The law by which a gain not yet measured is foretold."""


@dataclass(frozen=True, eq=False)
class _Bench:
    """What planning needs to know, gathered once."""

    sheet: BenchSheet
    bank: PadBank
    study: CompressionStudy
    entries: tuple[SweepEntry, ...]
    """In the order of the drive table."""
    signal_to_noise_db: float | None
    candidates: tuple[Line, ...]

    @property
    def table(self) -> DriveTable:
        return self.study.table

    @cached_property
    def drives(self) -> FloatArray:
        """Drive of each sweep as its nodes have it on average, dBm, (k,)."""
        return np.asarray(np.mean(self.table.drive_dbm, axis=1))


def plan_next(
    sheet: BenchSheet,
    bank: PadBank,
    entries: Sequence[SweepEntry],
    study: CompressionStudy,
    signal_to_noise_db: float | None = None,
) -> tuple[NextSweep, ...]:
    """Return the sweeps most worth taking next, at most three, the most telling first; none where all is settled.

    Parameters
    ----------
    entries : the device's sweeps in the sheet
    study : what is known of them
    signal_to_noise_db : of the reference sweep at its peak, to foretell whether a lower drive can be read
    """
    by_name = {entry.name: entry for entry in entries}
    ordered = tuple(by_name[file] for file in study.table.files)
    low = study.onset.reference.reads_low_db.high
    found = tuple(possible_lines(sheet, bank, ordered, study.table, float("inf") if low is None else max(low, 0.0)))
    bench = _Bench(sheet, bank, study, ordered, signal_to_noise_db, found)
    if (again := _repeat(bench)) is not None:
        # Nothing else is worth a sweep until the bench repeats.
        return (again,)
    planned: list[NextSweep] = []
    lines: set[tuple[tuple[str, ...], tuple[str, ...]]] = set()
    for propose in (_measure_pad, _lift_signal, _relieve_receiver, _separate, _prove_reference, _bracket):
        proposal = propose(bench)
        if proposal is None or (proposal.input_pads, proposal.output_pads) in lines:
            continue
        lines.add((proposal.input_pads, proposal.output_pads))
        planned.append(proposal)
    return tuple(planned[:_MOST])


def _as_proposal(bench: _Bench, line: Line, purpose: Purpose, settles: str, *more_cautions: str) -> NextSweep:
    known = bench.table.levels_known
    limit = port2_limit_dbm(bench.sheet)
    cautions = list(more_cautions)
    if line.drive > float(np.max(bench.table.drive_dbm)) + 0.5:
        cautions.append("this is more drive than any sweep so far: check what the device and its load stand first")
    if not known:
        cautions.append("the source level is not known: check the level at port 2 before power is applied")
    elif limit is None:
        cautions.append("the sheet states no limit of port 2: check the level there before power is applied")
    cautions.append("check the power rating of the pads, and that biased ports are DC-blocked")
    return NextSweep(
        line.input_pads,
        line.output_pads,
        bench.entries[0].source_at(bench.table.at_hz),
        line.drive if known else None,
        line.output if known else None,
        line.port2 if known else None,
        None if limit is None or not known else limit - line.port2 - line.doubt_db,
        settles,
        tuple(cautions),
        purpose,
        line.output_pads == _reference_entry(bench).output_pads,
    )


def _reference_entry(bench: _Bench) -> SweepEntry:
    return next(entry for entry in bench.entries if entry.name == bench.study.onset.reference.file)


def _output_kept(bench: _Bench, lines: Sequence[Line]) -> list[Line]:
    """Return those of the lines whose output pads are the reference's; where there is none, those with more loss."""
    own = _reference_entry(bench).output_pads
    same = [line for line in lines if line.output_pads == own]
    return same or [line for line in lines if _loss_db(bench, line.output_pads) > _loss_db(bench, own)]


def _best(lines: Sequence[Line], cost: Callable[[Line], float]) -> Line | None:
    """Return the line of least cost; of equal ones the one with fewest pads."""
    return min(lines, key=lambda line: (round(cost(line), 3), line.pads), default=None)


def _taken(bench: _Bench, line: Line) -> bool:
    return in_effect_taken(line, bench.entries, bench.bank, bench.table.at_hz)


def _loss_db(bench: _Bench, pads: Sequence[str]) -> float:
    return sum(bench.bank.loss_db(pad, bench.table.at_hz) for pad in pads)


def _repeat(bench: _Bench) -> NextSweep | None:
    """Propose the reference once more, where the sweeps did not repeat."""
    verdict = bench.study.verdict
    if verdict is None or verdict.code != "reference-not-repeating":
        return None
    reference, entry = bench.study.onset.reference.file, _reference_entry(bench)
    same = [c for c in bench.candidates if (c.input_pads, c.output_pads) == (entry.input_pads, entry.output_pads)]
    if not same:
        return None
    return _as_proposal(
        bench,
        same[0],
        "repeat",
        f"{reference} again, twice in a row: whether the device has settled, or still drifts or oscillates",
    )


def _measure_pad(bench: _Bench) -> NextSweep | None:
    """Propose to measure a pad that is surely not what the sheet says: by itself, in the place of the device."""
    verdict, cal = bench.study.verdict, bench.sheet.calibration
    if verdict is None or verdict.code != "pad-value-suspect" or verdict.confidence < _SURE or not verdict.pads:
        return None
    pad = verdict.pads[0].name
    if pad in (*cal.input_pads, *cal.output_pads):
        return None
    drive = (bench.entries[0].source_at(bench.table.at_hz) or 0.0) - _loss_db(bench, cal.input_pads)
    output, doubt = drive - _loss_db(bench, [pad]), bench.table.source_half_width_db
    line = Line(cal.input_pads, cal.output_pads, drive, output, output - _loss_db(bench, cal.output_pads), doubt)
    if (limit := port2_limit_dbm(bench.sheet)) is not None and line.port2 + doubt > limit:
        return None
    return _as_proposal(
        bench,
        line,
        "measure-pad",
        f"what {pad} truly loses: measure pad {pad} as a .s2p file, in the device's place, and enter it in the sheet",
    )


def _lift_signal(bench: _Bench) -> NextSweep | None:
    """Propose the drive nearest 10 dB above the noisy sweep that is still safe, where noise hides what it shows."""
    verdict, table = bench.study.verdict, bench.table
    if verdict is None or verdict.code != "noise-limited":
        return None
    noisy = int(np.argmax(table.buried))
    safe = bench.study.onset.safe_drive_dbm.low
    drives = bench.drives
    lines = [
        line
        for line in bench.candidates
        if line.drive > drives[noisy] + _NEW_DRIVE_DB
        and (safe is None or line.drive <= safe)
        and float(np.min(np.abs(line.drive - drives))) > _NEW_DRIVE_DB
    ]
    best = _best(_output_kept(bench, lines), lambda line: abs(line.drive - drives[noisy] - _LIFT_DB))
    if best is None:
        return None
    return _as_proposal(
        bench,
        best,
        "lift-signal",
        f"what {table.files[noisy]} hides in its noise, at a drive that is still safe for figures",
    )


def _relieve_receiver(bench: _Bench) -> NextSweep | None:
    """Propose the strongest sweep with more output pad, where the receiver is or may be overloaded."""
    verdict, table = bench.study.verdict, bench.table
    if verdict is None or verdict.probabilities["receiver-overload"] < 0.1:
        return None
    level = np.max(table.drive_dbm + table.gain_db, axis=1) - table.output_loss_db
    worst = int(np.argmax(level))
    relieved = (np.abs(bench.drives - bench.drives[worst]) <= IN_EFFECT_DB) & (level <= level[worst] - _RELIEVED_DB)
    if verdict.code == "receiver-overload" and verdict.confidence >= _SURE and np.any(relieved):
        return None
    strongest = bench.entries[worst]
    lines = [
        line
        for line in bench.candidates
        if line.input_pads == strongest.input_pads and line.port2 <= float(np.max(level)) - _RELIEVED_DB
    ]
    best = _best(
        [line for line in lines if not _taken(bench, line)],
        lambda line: abs(line.port2 - float(np.max(level)) + _RELIEF_DB),
    )
    if best is None:
        return None
    return _as_proposal(
        bench,
        best,
        "relieve-receiver",
        f"whether {strongest.name} was compressed by the device or by the receiver: with less level at port 2 and the "
        "same drive, gain comes back only if it was the receiver",
    )


def _separate(bench: _Bench) -> NextSweep | None:
    """Propose the sweep on whose gain the rivals that are left disagree most."""
    verdict = bench.study.verdict
    if verdict is None or verdict.code not in ("input-limited-or-pad", "cause-unclear", "pad-value-suspect"):
        return None
    if verdict.confidence >= _SURE:
        return None
    likely = [rival for rival in verdict.rivals if rival.probability >= STILL_POSSIBLE]
    if verdict.code == "pad-value-suspect":
        likely = likely[:1] + [rival for rival in verdict.rivals if rival.cause == "clean"]
    lines = [line for line in bench.candidates if line.drive <= float(np.max(bench.table.drive_dbm)) + 0.5]

    def cost(line: Line) -> float:
        # What two sweeps tell differs by less than can be known; then the one at a drive that was swept is surer.
        step = float(np.min(np.abs(bench.drives - line.drive)))
        return 0.001 * min(10.0, step) - round(_worth(bench, line, likely), 2)

    best = _best([line for line in lines if not _taken(bench, line)], cost)
    if best is None or _worth(bench, best, likely) < _WORTH * sum(rival.probability for rival in likely):
        return None
    foremost = {rival.cause: rival for rival in reversed(likely)}
    shown = "; ".join(
        f"{quantity(_foretold(bench, best, rival)[0], 'dB')} if {_named(rival)}" for rival in foremost.values()
    )
    return _as_proposal(bench, best, "separate-causes", f"which cause it is, by the gain it reads: {shown}")


def _named(rival: Rival) -> str:
    return {
        "clean": "nothing is wrong",
        "output-limited": "the device limits at its output",
        "input-limited": "the device limits at its input",
        "receiver-overload": "the receiver compresses",
        "pad-value": f"pad {rival.about} is off",
        "not-repeating": f"{rival.about or 'the set-up'} did not repeat",
    }[rival.cause]


def _added(bench: _Bench, line: Line) -> dict[str, int]:
    """Return the pads that a line adds (1) to those of the calibration, or takes away (-1)."""
    cal = bench.sheet.calibration
    return {
        **change_of_line(line.input_pads, cal.input_pads).weights(),
        **change_of_line(line.output_pads, cal.output_pads).weights(),
    }


def _worth(bench: _Bench, line: Line, likely: Sequence[Rival]) -> float:
    """Return how much a sweep would separate the rivals: probability of each pair times how far it parts them."""
    weights = _added(bench, line)
    variance = 2.0 * float(np.mean(np.diag(bench.table.design_covariance_db2)))
    for pad in weights:
        width, is_limit = pad_doubt_db(pad, bench.bank)
        variance += (rectangular_u(width) if is_limit else width) ** 2
    floor, worth = 0.1, 0.0
    foretold = [(max(rival.probability, floor), *_foretold(bench, line, rival)) for rival in likely]
    for (one, gain, u), (other, other_gain, other_u) in combinations(foretold, 2):
        doubt = variance + u**2 + other_u**2
        worth += one * other * (1.0 - float(np.exp(-((gain - other_gain) ** 2) / (8.0 * doubt))))
    return worth


def _foretold(bench: _Bench, line: Line, rival: Rival) -> tuple[float, float]:
    """Return the corrected gain at the design frequency that a rival expects of a line, dB, and its uncertainty.

    That is for the 1 dB point, or the pad, not being known better.
    """
    table, read = bench.table, bench.table.design_gain_db
    value, u = rival.value or 0.0, rival.u or 0.0
    if rival.cause == "clean":
        return float(np.mean(read)), 0.0
    if rival.cause == "not-repeating":
        kept = [k for k, file in enumerate(table.files) if file != rival.about]
        return float(np.mean(read[kept])), 0.0
    if rival.cause == "pad-value":
        pad = next(pad for pad in table.pads if pad.name == rival.about)
        through = float(np.mean(pad.reads)) + _added(bench, line).get(pad.name, 0)
        return float(np.mean(read)) - through * value, abs(through) * u
    lost = np.append(table.output_loss_db, line.output - line.port2) * (rival.cause == "receiver-overload")
    lift = 0.0 if rival.cause == "input-limited" else read[0]
    level = np.append(bench.drives, line.drive) + lift - lost
    # The sweep whose level is nearest stands for the gain there, so that only the step from it follows the guessed law.
    nearest = int(np.argmin(np.abs(level[:-1] - level[-1])))
    drop = _GUESS.drop_past_p1db(level[[nearest, -1]] - np.array([[value], [value - u], [value + u]]))
    gain, low, high = read[nearest] + drop[:, 0] - drop[:, 1]
    return float(gain), abs(float(high - low)) / 2.0


def _reference_drive(bench: _Bench) -> float:
    k = bench.table.files.index(bench.study.onset.reference.file)
    return float(bench.drives[k])


def _prove_reference(bench: _Bench) -> NextSweep | None:
    """Propose a lower drive, where nothing shows that the reference was small-signal."""
    onset = bench.study.onset
    if onset.reference.proven:
        return None
    now = _reference_drive(bench)
    aim = now - _PROOF_STEP_DB
    if onset.safe_drive_dbm.low is not None:
        aim = min(aim, onset.safe_drive_dbm.low)
    lines = [line for line in bench.candidates if line.drive <= now - _NEW_DRIVE_DB and not _taken(bench, line)]
    best = _best(_output_kept(bench, lines), lambda line: abs(line.drive - aim))
    if best is None:
        return None
    cautions = []
    ratio = bench.signal_to_noise_db
    if ratio is not None and ratio - (now - best.drive) < _READABLE_DB:
        cautions.append("noise will outweigh the compression looked for: average, or narrow the measuring bandwidth")
    return _as_proposal(
        bench,
        best,
        "prove-reference",
        f"whether {onset.reference.file} is small-signal: if the gain agrees within {SAFE_DROP_DB} dB, it is",
        *cautions,
    )


def _bracket(bench: _Bench) -> NextSweep | None:
    """Propose a drive near the 1 dB point, where it is known only widely or as a bound."""
    onset = bench.study.onset
    p1db = onset.input_p1db_dbm
    drives = bench.drives
    if p1db.value is None:
        return None
    if p1db.bound is None and p1db.low is not None and p1db.high is not None:
        if p1db.high - p1db.low <= _WIDE_DB + 2.0 * bench.table.source_half_width_db:
            return None
        aim, what = (
            p1db.value,
            f"the 1 dB point, now {level_text(p1db.low)} to {level_text(p1db.high)}, far more closely",
        )
    elif p1db.bound == "at least":
        aim, what = float(np.max(drives)) + STEP_UP_DB, f"where it compresses: so far at least {level_text(p1db.value)}"
    else:
        aim, what = float(np.min(drives)) - STEP_UP_DB, f"where it compresses: so far at most {level_text(p1db.value)}"
    lines = [
        line
        for line in bench.candidates
        if float(np.min(np.abs(line.drive - drives))) > _NEW_DRIVE_DB and abs(line.drive - aim) < STEP_UP_DB
    ]
    best = _best(lines, lambda line: abs(line.drive - aim))
    return None if best is None else _as_proposal(bench, best, "bracket-onset", what)
