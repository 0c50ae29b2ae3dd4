"""A stretch of a file's text in, its rows of numbers out: at once where they are even, line by line where they are not.

:func:`rows_at_once` reads what a sound file holds and gives None for everything else, so that whatever needs a
decision or an explanation goes to :func:`rows_by_line`.
"""

from __future__ import annotations

import io
import math
import re
import struct
from array import array
from collections.abc import Callable, Container
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from pydantic_core import from_json

from benchtool.errors import SweepFileError
from benchtool.model import FloatArray
from benchtool.touchstone_table import NOISE_COLUMNS, NUMBER, Reading, quoted
from benchtool.touchstone_text import Line, data_lines, line_of_text, words_of

__all__ = ["DELETE_ROW", "UnevenRows", "is_cut", "line_finder", "lines_of", "rows_at_once", "rows_by_line"]

DELETE_ROW: Final = "sweep again, or delete the row"

_CHUNK: Final = 1 << 17
"""Characters read at a time: the numbers of a chunk are Python objects, and those of a large file would fill memory."""
_COMMENT: Final = re.compile(r"![^\n]*")
_BLANK_LINES: Final = re.compile(rb"\n[\n ]*\n")
_LEADING_COMMA: Final = re.compile(rb"\n *,")
_BLANK, _TAB = ord(" "), ord("\t")
_AS_JSON: Final = bytes(
    code if chr(code) in "0123456789+-.eE\n" else ord(",") if code in (_BLANK, _TAB) else ord("x")
    for code in range(256)
)
"""Blanks become commas; what is part of no number becomes a letter that no number can hold."""
_TAKEN_BY_JSON: Final = (b",", b"\t", b"\r", b"t", b"f", b"n", b"N", b"I")
"""Bytes of what a JSON parser takes, and packing as numbers too, and is none between blanks: true, false, null, NaN,
Infinity, a comma, a blank of another kind. Text, lists and objects do not pass for numbers."""
_MARK: Final = re.compile(r"[+-]?(?:nan|inf|infinity)|[1-]\.#(?:inf|ind|qnan)\w*|-+|\*+|ovl|ovld|overload|n/?a", re.I)
"""What stands where an analyzer has no number to give."""
_NOT_FINITE: Final = re.compile(r"[+-]?(?:nan|inf|infinity)", re.IGNORECASE)
_FORTRAN: Final = re.compile(r"[+-]?[0-9.]+[dD][+-]?[0-9]+")
_CUT_NUMBER: Final = re.compile(r"[+-]?[0-9]*\.?[0-9]*(?:[eE][+-]?)?")
_TAIL: Final = 4096
_ROWS_ALIKE: Final = 4
_FIXED: Final = re.compile(r"[+-]?[0-9]+(\.[0-9]*)?([eE][+-]?[0-9]+)?")


def rows_at_once(text: str, start: int, stop: int, columns: int) -> FloatArray | None:
    """Return (n, columns) numbers of the lines between two offsets, None where they are not all rows of `columns`."""
    chunks = []
    while start < stop:
        end = stop if stop - start <= _CHUNK else text.rfind("\n", start, start + _CHUNK) + 1
        rows = _parse_chunk(text[start:end], columns) if end > start else None
        if rows is None:
            return None
        chunks.append(rows)
        start = end
    return np.concatenate(chunks) if chunks else None


def _parse_chunk(chunk: str, columns: int) -> FloatArray | None:
    """Return the rows of one chunk of whole lines.

    A JSON parser reads numbers as exactly as NumPy does in a half to a third of the time. What only NumPy takes (a
    leading plus sign, a bare point) goes there.
    """
    if "!" in chunk:
        chunk = _COMMENT.sub("", chunk)
    data = chunk.encode("ascii", "replace")
    if not any(taken in data for taken in _TAKEN_BY_JSON):
        rows = _parse_json(data.replace(b" ", b",").strip(b",\n"), columns)
        if rows is not None:
            return rows
    data = data.translate(_AS_JSON)
    rows = _parse_json(data.strip(b",\n"), columns)
    if rows is None and b"x" not in data:
        data = _squeeze(data)
        if not data:
            return np.empty((0, columns))
        rows = _parse_json(data, columns)
    if rows is None and b"x" not in data:
        rows = _parse_numpy(data.replace(b",", b" ").decode(), columns)
    return rows


def _parse_json(data: bytes, columns: int) -> FloatArray | None:
    """Return the rows of lines with one comma between numbers.

    A null takes the place of each line end, so that one flat list shows whether every line has its count.
    """
    try:
        numbers = from_json(b"[" + data.replace(b"\n", b",null,") + b"]")
        line_ends = numbers[columns :: columns + 1]
        if line_ends.count(None) != len(line_ends):
            return None
        del numbers[columns :: columns + 1]
        # Packed, a list of numbers becomes an array in half the time that NumPy takes.
        return np.frombuffer(struct.pack(f"{len(numbers)}d", *numbers)).reshape(-1, columns)
    except (ValueError, OverflowError, struct.error):  # no JSON, a whole number past all floats, a null within a line
        return None


def _squeeze(data: bytes) -> bytes:
    """Return lines with one comma between numbers, none at their ends, and no empty lines.

    Of the commas in a row all but the last turn back into blanks, which JSON passes over.
    """
    codes = np.frombuffer(data, np.uint8).copy()
    comma = codes == ord(",")
    codes[:-1] -= (comma[:-1] & comma[1:]).view(np.uint8) * np.uint8(ord(",") - _BLANK)
    data = _LEADING_COMMA.sub(b"\n", codes.tobytes().replace(b",\n", b"\n"))
    return _BLANK_LINES.sub(b"\n", data).strip(b", \n")


def _parse_numpy(chunk: str, columns: int) -> FloatArray | None:
    try:
        rows = np.loadtxt(io.StringIO(chunk), comments=None, ndmin=2)
    except ValueError:
        return None
    return rows if rows.shape[1] == columns else None


@dataclass
class UnevenRows:
    """Rows of any length, one after the other, as far as they are numbers.

    Attributes
    ----------
    values : all numbers; one that the file has only a mark for is nan
    counts, lines : of each row, how many numbers it has and the line it stands in
    marks : the place in `values` of each mark
    fault : of the word that ended the reading, None where all lines are rows
    """

    values: array[float]
    counts: array[int]
    lines: array[int]
    marks: array[int]
    fault: SweepFileError | None = None

    def take(self, first: int, last: int, columns: int) -> FloatArray:
        """Return rows `first` up to `last`, which all have `columns` numbers."""
        begin = sum(self.counts[:first])
        end = begin + (last - first) * columns
        return np.array(np.frombuffer(self.values, np.float64)[begin:end]).reshape(-1, columns)

    def fault_of_mark(self, place: int, text: str, reading: Reading) -> SweepFileError:
        """Return the fault of the mark that stands at `place` in `values`."""
        row = int(np.searchsorted(np.cumsum(self.counts), place, side="right"))
        column = place - sum(self.counts[:row])
        line = self.lines[row]
        word = words_of(line_of_text(text, line))[column]
        return _not_a_number(word, line, column + 1, reading)


def rows_by_line(
    text: str,
    start: int,
    stop: int,
    reading: Reading,
    *,
    columns: Container[int],
    other: Callable[[Line], bool] | None = None,
) -> UnevenRows:
    """Return the rows between two offsets, up to the first word that is neither a number nor a mark for none.

    Behind a row that has not one of the counts in `columns` only the next is read, for what it tells of the file.
    `other` is asked first whether a line is something else than a row.
    """
    rows = UnevenRows(array("d"), array("q"), array("q"), array("q"))
    for line in data_lines(text, start, stop, reading):
        if other and other(line):
            continue
        try:
            _append_row(rows, line, reading)
        except SweepFileError as fault:
            rows.fault = fault
            break
        if len(rows.counts) > 1 and rows.counts[-2] not in columns:
            break
    if stop == len(text) and not text.endswith("\n") and rows.counts:
        _drop_cut_row(rows, text, reading)
    return rows


def _append_row(rows: UnevenRows, line: Line, reading: Reading) -> None:
    values = []
    marks = []
    for column, word in enumerate(line.words, 1):
        if NUMBER.fullmatch(word) and math.isfinite(value := float(word)):
            values.append(value)
            continue
        if not _MARK.fullmatch(word):
            raise _not_a_number(word, line.number, column, reading)
        marks.append(len(rows.values) + len(values))
        values.append(math.nan)
    rows.values.extend(values)
    rows.counts.append(len(values))
    rows.lines.append(line.number)
    rows.marks.extend(marks)


def _not_a_number(word: str, line: int, column: int, reading: Reading) -> SweepFileError:
    """Return the fault of a word that is no finite number, in words that fit what it is."""
    remedy = DELETE_ROW
    if NUMBER.fullmatch(word):
        found = f"{quoted(word)} is too large"
    elif "," in word:
        found, remedy = f"{quoted(word)} has a comma", "export with decimal points, and blanks between the numbers"
    elif _FORTRAN.fullmatch(word):
        found, remedy = f"{quoted(word)} has D for its exponent", "write E in place of D"
    elif _NOT_FINITE.fullmatch(word):
        found = f"{quoted(word)} is not a finite number"
    else:
        found = f"{quoted(word)} is not a number"
    return reading.fault(found, remedy, line=line, column=column)


def _drop_cut_row(rows: UnevenRows, text: str, reading: Reading) -> None:
    """Leave out the last row where the file breaks off in it: it has no line end, and lacks numbers or digits."""
    last_line = text.count("\n") + 1
    tail = text[text.rfind("\n") + 1 :]
    if "!" in tail:
        return  # whole up to its comment
    words = words_of(tail)
    if rows.fault and rows.fault.line == last_line:
        if rows.fault.column != len(words) or not _CUT_NUMBER.fullmatch(words[-1]):
            return
        rows.fault = None
    elif len(rows.counts) > 1 and rows.lines[-1] == last_line:
        sign_alone = words[-1] in ("+", "-") and len(rows.marks) == 1
        if not (sign_alone or _ends_short(rows) or is_cut(text)):
            return
        for _ in range(rows.counts.pop()):
            rows.values.pop()
        while rows.marks and rows.marks[-1] >= len(rows.values):
            rows.marks.pop()
        rows.lines.pop()
    else:
        return
    found, remedy = "the file breaks off in its last row", "copy or save the file again, or delete the row"
    reading.mend(found, "the row was left out", remedy, lines=[last_line])


def _ends_short(rows: UnevenRows) -> bool:
    """Return whether the last row has fewer numbers than the one above it, and does not begin a noise block."""
    before, last = rows.counts[-2:]
    begins_noise = last == NOISE_COLUMNS and rows.values[-last] <= rows.values[-last - before]
    return last < before and not begins_noise


def is_cut(text: str) -> bool:
    """Return whether the last number of a file without a last line end has fewer digits than all numbers above it.

    Only where a few rows above have as many decimals each, and an exponent or none alike, does that mean anything.
    """
    if text.endswith("\n") or "!" in text[text.rfind("\n") + 1 :]:
        return False
    *above, last = [words_of(line.partition("!")[0]) for line in text[-_TAIL:].split("\n")]
    rows = [words for words in above if words and NUMBER.fullmatch(words[0])]
    forms = {_form_of(words[-1]) for words in rows}
    if len(rows) < _ROWS_ALIKE or len(forms) > 1 or not last:
        return False
    form, usual = _form_of(last[-1]), forms.pop()
    return form is not None and usual is not None and (form[0] < usual[0] or form[1] < usual[1])


def _form_of(word: str) -> tuple[int, int] | None:
    """Return how many characters the decimals and the exponent of a number have, None for another word."""
    match = _FIXED.fullmatch(word)
    return (len(match[1] or ""), len((match[2] or "").lstrip("eE+-"))) if match else None


def line_finder(text: str, start: int, stop: int, reading: Reading) -> Callable[[int], int]:
    """Return what gives the line of a row, for rows that were read at once between two offsets."""

    def line(row: int) -> int:
        for index, found in enumerate(data_lines(text, start, stop, reading)):
            if index == row:
                return found.number
        raise IndexError(row)

    return line


def lines_of(lines: NDArray[np.int64]) -> Callable[[int], int]:
    """Return what gives the line of a row, for rows whose lines are known."""
    return lambda row: int(lines[row])
