"""Network rows in the order of the file in, the same rows in rising frequency out.

A sweep written from the top down, or in segments that share no frequency range, has one reading and is sorted. A row
that stands twice to the last digit is one row. Stretches that overlap may be two sweeps, and are a fault.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from benchtool.errors import SweepFileError
from benchtool.model import FloatArray
from benchtool.touchstone_rows import DELETE_ROW
from benchtool.touchstone_table import Reading, quoted
from benchtool.touchstone_text import line_of_text, words_of

__all__ = ["PlacedRows", "check_noise_rises", "in_hertz", "in_rising_order"]

_SORT = "sort the rows by frequency, or split joined sweeps into one file each"


class PlacedRows(NamedTuple):
    """Rows with the lines they stand in; the first column is the frequency."""

    values: FloatArray
    lines: NDArray[np.int64]


def in_hertz(rows: PlacedRows, unit_hz: float, text: str, reading: Reading) -> PlacedRows:
    """Return the rows with their frequency in Hz.

    Raises
    ------
    SweepFileError : a frequency is negative, or beyond all numbers once in Hz.
    """
    values = rows.values.copy()
    with np.errstate(over="ignore"):
        values[:, 0] *= unit_hz
    for row in np.flatnonzero(~((values[:, 0] >= 0) & (values[:, 0] < math.inf)))[:1]:
        if values[row, 0] < 0:
            raise _fault(rows, row, "is negative", DELETE_ROW, text, reading)
        raise _fault(rows, row, "is too large", "check the unit in the option line", text, reading)
    return PlacedRows(values, rows.lines)


def in_rising_order(rows: PlacedRows, text: str, reading: Reading) -> PlacedRows:
    """Return the rows in strictly rising frequency.

    Raises
    ------
    SweepFileError : a frequency stands twice with other numbers, or stretches of the file overlap.
    """
    if (np.diff(rows.values[:, 0]) > 0).all():
        return rows
    rows = _without_repeats(rows, text, reading)
    frequency = rows.values[:, 0]
    falls = np.flatnonzero(np.diff(frequency) < 0) + 1
    if not len(falls):
        return rows
    _check_stretches(rows, falls, text, reading)
    falling = len(falls) == len(frequency) - 1
    found = "the frequency falls from row to row" if falling else "the frequency falls back to another segment"
    reading.mend(found, "the rows were sorted", _SORT, lines=[int(line) for line in rows.lines[falls[:1]]])
    order = np.argsort(frequency)
    return PlacedRows(rows.values[order], rows.lines[order])


def _without_repeats(rows: PlacedRows, text: str, reading: Reading) -> PlacedRows:
    """Return the rows without those that repeat an earlier one to the last digit."""
    order = np.argsort(rows.values[:, 0], kind="stable")
    same = np.flatnonzero(np.diff(rows.values[order, 0]) == 0)
    if not len(same):
        return rows
    first, again = order[same], order[same + 1]
    other = (rows.values[first] != rows.values[again]).any(axis=1)
    if other.any():
        at = int(np.argmin(np.where(other, again, len(order))))
        where = "the row above" if first[at] == again[at] - 1 else f"line {rows.lines[first[at]]}"
        repeats = f"repeats {where} with other numbers"
        raise _fault(rows, int(again[at]), repeats, "delete one of the two rows, or split joined sweeps", text, reading)
    again.sort()
    found = "a row repeats an earlier one to the last digit"
    lines = [int(line) for line in rows.lines[again]]
    reading.mend(found, "it was left out", "delete one of the two rows", lines=lines, severity="note")
    return PlacedRows(np.delete(rows.values, again, axis=0), np.delete(rows.lines, again))


def _check_stretches(rows: PlacedRows, falls: NDArray[np.int64], text: str, reading: Reading) -> None:
    """Refuse rising stretches, each beginning where the frequency falls, that share a range of frequency."""
    frequency = rows.values[:, 0]
    lowest = frequency[np.concatenate([[0], falls])]
    highest = frequency[np.concatenate([falls - 1, [len(frequency) - 1]])]
    order = np.argsort(lowest)
    if (highest[order][:-1] >= lowest[order][1:]).any():
        raise _fault(rows, int(falls[0]), "falls back, below the row above", _SORT, text, reading)


def check_noise_rises(noise: PlacedRows, text: str, reading: Reading) -> None:
    """Refuse a noise block whose frequencies do not rise from row to row."""
    for row in np.flatnonzero(np.diff(noise.values[:, 0]) <= 0)[:1] + 1:
        if noise.values[row, 0] == noise.values[row - 1, 0]:
            raise _fault(noise, row, "repeats the row above", "delete one of the two rows", text, reading)
        raise _fault(noise, row, "falls back, below the row above", _SORT, text, reading)


def _fault(rows: PlacedRows, row: int, what: str, remedy: str, text: str, reading: Reading) -> SweepFileError:
    line = int(rows.lines[row])
    word = words_of(line_of_text(text, line))[0]
    return reading.fault(f"the frequency {quoted(word)} {what}", remedy, line=line, column=1)
