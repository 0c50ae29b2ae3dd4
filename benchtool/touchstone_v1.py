"""The text of a version 1 file in, its table of numbers out.

A sound file is read at once. Everything else goes line by line: what is legal but uneven (a noise block, a second
option line), what is bent and has one reading, and the first fault.

Format: Touchstone File Format Specification, Rev. 1.1, EIA/IBIS Open Forum, 2002, for two ports.
"""

from __future__ import annotations

import re
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchtool.errors import SweepFileError
from benchtool.model import FloatArray
from benchtool.touchstone_habits import mend_habits
from benchtool.touchstone_option import EXAMPLE, parse_option_line, repeats_option_line
from benchtool.touchstone_order import PlacedRows, check_noise_rises, in_hertz, in_rising_order
from benchtool.touchstone_rows import (
    DELETE_ROW,
    UnevenRows,
    is_cut,
    line_finder,
    lines_of,
    rows_at_once,
    rows_by_line,
)
from benchtool.touchstone_table import (
    NOISE_COLUMNS,
    NUMBER,
    ROW_COLUMNS,
    OptionLine,
    Reading,
    SweepTable,
    count_of,
    quoted,
)
from benchtool.touchstone_text import Line, data_lines, first_data_line, line_number, words_of

__all__ = ["noise_rows", "read_version_1", "sound_rows"]

_MOST_OPTION_LINES: Final = 100
_EXPORT: Final = "export a two-port sweep (.s2p) with S11, S21, S12 and S22"
_SAVE_ALL: Final = "sweep again and save all of the file"
_OPTION_WORDS: Final = re.compile(r"#[ \t]*(?:[kmg]?hz|[syzgh]|db|ma|ri|r)\b", re.IGNORECASE)


def read_version_1(text: str, first: re.Match[str], reading: Reading) -> SweepTable:
    """Return the table of a file whose first line with content is `first`.

    Raises
    ------
    SweepFileError : the first fault in the file.
    """
    number = line_number(text, first.start(1))
    option_line = " ".join(next(data_lines(text, first.start(1), first.end(), reading)).words)
    if not option_line.startswith("#"):
        raise _no_option_line(text, option_line, number, reading)
    option = parse_option_line(option_line, number, reading)
    if option.kind != "S" and len(set(option.reference_ohm)) > 1:
        found = f"{option.kind} parameters normalised to two reference impedances, which has no one reading"
        raise reading.fault(found, "export S parameters, or version 2", line=number)
    start = first.end()
    if first_data_line(text, start) is None:
        raise reading.fault("no data rows after the option line", _SAVE_ALL)
    rows = sound_rows(text, start, len(text), ROW_COLUMNS, option.unit_hz)
    if rows is not None and not is_cut(text):
        line = line_finder(text, start, len(text), reading)
        return SweepTable(option, True, rows[:, 0], rows[:, 1:], np.empty((0, NOISE_COLUMNS)), line)
    return _read_uneven(text, start, option, reading)


def sound_rows(text: str, start: int, stop: int, columns: int, unit_hz: float) -> FloatArray | None:
    """Return rows with frequency in Hz, read at once; None where there is anything to mend or to explain."""
    rows = rows_at_once(text, start, stop, columns)
    if rows is None or not len(rows) or not np.isfinite(rows).all():
        return None
    with np.errstate(over="ignore"):
        rows[:, 0] *= unit_hz
    frequency_hz = rows[:, 0]
    sound = frequency_hz[0] >= 0 and np.isfinite(frequency_hz[-1]) and (frequency_hz[1:] > frequency_hz[:-1]).all()
    return rows if sound else None


def _no_option_line(text: str, line: str, number: int, reading: Reading) -> SweepFileError:
    """Return the fault of a file whose first line is no option line, in words that fit what stands there."""
    word = words_of(line)[0]
    if NUMBER.fullmatch(word):
        found = "data before any option line, so the frequency unit and the format are unknown"
        remedy = f"write an option line such as {EXAMPLE} above the data, as the analyzer was set"
        if later := _OPTION_WORDS.search(text):
            place = line_number(text, later.start())
            remedy = f"if the option line in line {place} is of this sweep, move it above the data"
        return reading.fault(found, remedy, line=number)
    found = f"{quoted(word)} is neither a comment, an option line nor a number"
    remedy = f"begin the file with an option line such as {EXAMPLE}, and comments with '!'"
    return reading.fault(found, remedy, line=number)


def _read_uneven(text: str, start: int, option: OptionLine, reading: Reading) -> SweepTable:
    text = mend_habits(text, start, len(text), reading)
    columns, others = {ROW_COLUMNS, NOISE_COLUMNS}, _OtherLines(option, reading)
    rows = rows_by_line(text, start, len(text), reading, columns=columns, other=others.take)
    others.tell()
    counts = np.array(rows.counts)
    if not len(counts):
        raise rows.fault or reading.fault("no data rows after the option line", _SAVE_ALL)
    missing: frozenset[str] = frozenset()
    if _is_one_path(rows, counts, option):
        found, done = f"{NOISE_COLUMNS} numbers in every row", "they were read as frequency, S11 and S21"
        reading.mend(found, done, _EXPORT, lines=[rows.lines[0]], severity="note")
        values = np.pad(rows.take(0, len(counts), NOISE_COLUMNS), ((0, 0), (0, ROW_COLUMNS - NOISE_COLUMNS)))
        missing, end = frozenset({"S12", "S22"}), len(counts)
    else:
        end = _network_end(rows, counts, reading)
        values = rows.take(0, end, ROW_COLUMNS)
        if rows.fault:
            raise rows.fault
        if rows.marks:
            missing = _without_placeholders(values, rows, option.kind, text, reading)
    lines = np.array(rows.lines)
    network = in_hertz(PlacedRows(values, lines[:end]), option.unit_hz, text, reading)
    network = in_rising_order(network, text, reading)
    noise = noise_rows(rows, end, option, text, reading)
    noise[:, 4] *= option.reference_ohm[0]
    frequency_hz, pairs = network.values[:, 0], network.values[:, 1:]
    return SweepTable(option, True, frequency_hz, pairs, noise, lines_of(network.lines), missing)


class _OtherLines:
    """Lines among the rows that are none: later option lines, which the standard says to ignore, and keywords."""

    def __init__(self, option: OptionLine, reading: Reading) -> None:
        self._option = option
        self._reading = reading
        self._contradicting: list[int] = []

    def take(self, line: Line) -> bool:
        """Return whether a line is a later option line; one that says the same as the first needs no word."""
        first = line.words[0][0]
        if first == "[":
            found = f"the keyword {quoted(' '.join(line.words))} in a file that does not begin with [Version]"
            remedy = "begin the file with '[Version] 2.0' if it is of version 2; else delete the line"
            raise self._reading.fault(found, remedy, line=line.number)
        if first == "#" and not repeats_option_line(line.words, self._option):
            self._contradicting.append(line.number)
            if len(self._contradicting) > _MOST_OPTION_LINES:
                found = f"more than {_MOST_OPTION_LINES} option lines"
                raise self._reading.fault(found, "split the file into one sweep each", line=line.number)
        return first == "#"

    def tell(self) -> None:
        """Say which later option lines contradict the first."""
        if self._contradicting:
            found, done = "a second option line that differs from the first", "it was ignored, as the standard says"
            remedy = "if two files were joined here, split them; else delete the line"
            self._reading.mend(found, done, remedy, lines=self._contradicting)


def _is_one_path(rows: UnevenRows, counts: NDArray[np.int64], option: OptionLine) -> bool:
    """Return whether every row is frequency, S11 and S21 of an analyzer with one path.

    Five numbers are also a noise row; only numbers that no noise block can have tell the two apart.
    """
    if (counts != NOISE_COLUMNS).any() or len(counts) < 2 or rows.fault or rows.marks or option.kind != "S":
        return False
    _, noise_figure_db, gamma, _, resistance = rows.take(0, len(counts), NOISE_COLUMNS).T
    return bool(((noise_figure_db < 0) | (gamma < 0) | (gamma > 1) | (resistance < 0)).any())


def _network_end(rows: UnevenRows, counts: NDArray[np.int64], reading: Reading) -> int:
    """Return how many rows there are before the noise block, all of a two-port."""
    uneven = np.flatnonzero(counts != ROW_COLUMNS)
    if not len(uneven):
        return len(counts)
    end = int(uneven[0])
    if end and counts[end] == NOISE_COLUMNS:
        noise_start = rows.values[end * ROW_COLUMNS]
        if not noise_start > rows.take(0, end, ROW_COLUMNS)[:, 0].max():
            return end
    raise _count_fault(rows, end, reading)


def _count_fault(rows: UnevenRows, index: int, reading: Reading) -> SweepFileError:
    """Return the fault of a row that has not nine numbers, in words that fit what the file may be."""
    count = rows.counts[index]
    after = rows.counts[index + 1] if index + 1 < len(rows.counts) else 0
    found = f"{count_of(count, 'number')} in the row, where a two-port row has {ROW_COLUMNS}"
    remedy = DELETE_ROW
    if index == 0 and count == 3:
        found, remedy = f"{found}: a one-port file", _EXPORT
    elif index == 0 and count == 5 and after == 5:
        found, remedy = f"{found}: two parameters, or a noise block alone", _EXPORT
    elif index == 0 and count == 7 and after == 6:
        found, remedy = f"{found}: a three-port file", _EXPORT
    elif index == 1 and count == 8 and after == 8:
        found, remedy = f"{found}: a four-port file", _EXPORT
    elif count + after == ROW_COLUMNS:
        found, remedy = f"{found}: it goes on in the next line", "write each row on one line"
    return reading.fault(found, remedy, line=rows.lines[index])


def _without_placeholders(
    values: FloatArray, rows: UnevenRows, kind: str, text: str, reading: Reading
) -> frozenset[str]:
    """Return the parameters that have a mark for no number in every row, and set them to zero in `values`.

    Raises
    ------
    SweepFileError : a mark stands elsewhere; that number is lost, and nothing can take its place.
    """
    blank = np.all(np.isnan(values), axis=0)
    missing = set()
    for parameter, column in (("S12", 5), ("S22", 7)):
        if kind == "S" and bool(np.any(blank[column : column + 2])):
            values[:, column : column + 2] = 0.0
            missing.add(parameter)
    for place in rows.marks:
        if place >= values.size or np.isnan(values.ravel()[place]):
            raise rows.fault_of_mark(place, text, reading)
    found = f"{' and '.join(sorted(missing))} with no number in any row"
    done, remedy = "taken as not measured", "turn the device round and sweep it again if you need them"
    reading.mend(found, done, remedy, lines=[rows.lines[0]], severity="note")
    return frozenset(missing)


def noise_rows(rows: UnevenRows, first: int, option: OptionLine, text: str, reading: Reading) -> FloatArray:
    """Return (m, 5) rows from `first` on with frequency in Hz, Rn as it stands in the file.

    Raises
    ------
    SweepFileError : a row has not five numbers, a mark stands in it, or the frequency does not rise.
    """
    for index in range(first, len(rows.counts)):
        if rows.counts[index] != NOISE_COLUMNS:
            found = f"{count_of(rows.counts[index], 'number')} in a row of the noise block, which has {NOISE_COLUMNS}"
            remedy = "put all network rows above the noise block, or delete the row"
            raise reading.fault(found, remedy, line=rows.lines[index])
    if first == len(rows.counts):
        return np.empty((0, NOISE_COLUMNS))
    lines = np.array(rows.lines[first:])
    noise = in_hertz(
        PlacedRows(rows.take(first, len(rows.counts), NOISE_COLUMNS), lines), option.unit_hz, text, reading
    )
    check_noise_rises(noise, text, reading)
    return noise.values
