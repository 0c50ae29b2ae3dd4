"""The pads of a sheet and its limits in; every line that may be proposed for a next sweep out.

Each pad is used once; pads of the calibration that every sweep kept stay in line. No line is offered whose level at
port 2, taken at the top of its doubts, passes a stated limit: the level from which the receiver compresses, and 10 dB
below damage. Where no limit is stated, none passes the highest level of the session. A device that was compressed in
every sweep has more gain than they show, up to what its output has given.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import combinations
from typing import Final

import numpy as np

from benchtool.doubts import pad_doubt_db
from benchtool.drive_table import DriveTable
from benchtool.pads import PadBank
from benchtool.sheet import BenchSheet, SweepEntry

__all__ = ["IN_EFFECT_DB", "STEP_UP_DB", "Line", "in_effect_taken", "port2_limit_dbm", "possible_lines"]

STEP_UP_DB: Final = 10.0
"""How far past the highest drive so far a device may be driven to find where it compresses."""
IN_EFFECT_DB: Final = 0.5
"""Lines whose total pads differ by no more than this, on either side, are one line in effect."""
_MOST_ADDED: Final = 2
"""Pads added to a side; more joints would cost more than they settle."""
_BELOW_DAMAGE_DB: Final = 10.0


@dataclass(frozen=True)
class Line:
    """One line from source to port 2, pads from the analyzer outwards, with the levels along it in dBm."""

    input_pads: tuple[str, ...]
    output_pads: tuple[str, ...]
    drive: float
    output: float
    port2: float
    doubt_db: float
    """How much higher the level may be, with every doubt at its limit."""

    @property
    def pads(self) -> int:
        """How many pads it takes."""
        return len(self.input_pads) + len(self.output_pads)


def port2_limit_dbm(sheet: BenchSheet) -> float | None:
    """Return the level at port 2 that no proposal may pass; None where the sheet states none."""
    analyzer = sheet.analyzer
    limits = [analyzer.port2_compression_dbm]
    if analyzer.port2_damage_dbm is not None:
        limits.append(analyzer.port2_damage_dbm - _BELOW_DAMAGE_DB)
    stated = [limit for limit in limits if limit is not None]
    return min(stated) if stated else None


def possible_lines(
    sheet: BenchSheet, bank: PadBank, entries: Sequence[SweepEntry], table: DriveTable, reads_low_db: float
) -> Iterator[Line]:
    """Yield every line that the stock of pads and the limits allow.

    `reads_low_db` is by how much the gain seen may read low by compression; infinite where nothing is known of it.
    """
    cal = sheet.calibration
    stays_in = tuple(pad for pad in cal.input_pads if all(pad in entry.input_pads for entry in entries))
    stays_out = tuple(pad for pad in cal.output_pads if all(pad in entry.output_pads for entry in entries))
    free = [pad for pad in sheet.pads if pad not in (*stays_in, *stays_out)]
    loss = {pad: bank.loss_db(pad, table.at_hz) for pad in sheet.pads}
    most = {pad: _half_width(pad, bank) for pad in sheet.pads}
    source = entries[0].source_at(table.at_hz) or 0.0
    gain = float(np.max(table.gain_db))
    highest_drive = float(np.max(table.drive_dbm))
    highest_output = float(np.max(table.drive_dbm + table.gain_db))
    highest_port2 = float(np.max(table.drive_dbm + table.gain_db - table.output_loss_db[:, None]))
    stated = port2_limit_dbm(sheet)
    sides = [names for count in range(_MOST_ADDED + 1) for names in combinations(free, count)]
    for into in sides:
        for out in sides:
            if set(into) & set(out):
                continue
            pads_in, pads_out = (*stays_in, *_long_first(into, loss)), (*stays_out, *_long_first(out, loss))
            drive = source - sum(loss[pad] for pad in pads_in)
            port2 = drive + gain - sum(loss[pad] for pad in pads_out)
            # At no more drive than was swept no device gives more than it gave; beyond, no more than drive was added.
            could_give = highest_output + max(0.0, drive - highest_drive)
            more_gain = min(reads_low_db, max(0.0, could_give - (drive + gain)))
            doubt = table.source_half_width_db + sum(most[pad] for pad in (*pads_in, *pads_out)) + more_gain
            too_high = port2 + doubt > stated if stated is not None and table.levels_known else port2 > highest_port2
            if too_high or drive > highest_drive + (STEP_UP_DB if table.levels_known else 0.0):
                continue
            yield Line(pads_in, pads_out, drive, drive + gain, port2, doubt)


def in_effect_taken(line: Line, entries: Sequence[SweepEntry], bank: PadBank, at_hz: float) -> bool:
    """Return whether a sweep has been taken with the total pads of a line on both sides, and with the same source."""

    def loss_db(pads: Sequence[str]) -> float:
        return sum(bank.loss_db(pad, at_hz) for pad in pads)

    source = entries[0].source_at(at_hz)
    return any(
        abs(loss_db(entry.input_pads) - loss_db(line.input_pads)) <= IN_EFFECT_DB
        and abs(loss_db(entry.output_pads) - loss_db(line.output_pads)) <= IN_EFFECT_DB
        and entry.source_at(at_hz) == source
        for entry in entries
    )


def _half_width(pad: str, bank: PadBank) -> float:
    width, is_limit = pad_doubt_db(pad, bank)
    return width if is_limit else 2.0 * width


def _long_first(pads: Sequence[str], loss: dict[str, float]) -> tuple[str, ...]:
    return tuple(sorted(pads, key=lambda pad: -loss[pad]))
