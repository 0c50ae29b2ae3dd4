"""Bytes of a Touchstone file in, its table of numbers out, or the one fault that stops it, with its line.

:func:`read_table` reads a good file in one pass with NumPy. Where that pass refuses, :func:`_walk_rows` goes line by
line: it finds the fault, or reads what is legal but uneven (a noise block, a second option line). Both give the same
:class:`SweepTable`; a reader of another version of the format has only to make one too, and is called from
:func:`read_table`, where that version is now refused.

Format: Touchstone File Format Specification, Rev. 1.1, EIA/IBIS Open Forum, 2002, for two ports.
"""

from __future__ import annotations

import io
import math
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Final, NamedTuple

import numpy as np
from pydantic_core import from_json

from benchtool.errors import SweepFileError
from benchtool.model import Finding, FloatArray

__all__ = ["NOISE_COLUMNS", "ROW_COLUMNS", "OptionLine", "SweepTable", "read_table"]

ROW_COLUMNS: Final = 9
"""A two-port row: frequency, then N11 N21 N12 N22 as two numbers each."""
NOISE_COLUMNS: Final = 5
"""A noise row: frequency, minimum noise figure in dB, magnitude and angle of the optimum Γ, Rn / R."""

_UNITS_HZ: Final = {"HZ": 1.0, "KHZ": 1e3, "MHZ": 1e6, "GHZ": 1e9}
_KINDS: Final = ("S", "Y", "Z", "G", "H")
_FORMATS: Final = ("DB", "MA", "RI")
_UNIT, _KIND, _FORMAT, _REFERENCE = "frequency unit", "kind of parameter", "number format", "reference impedance"
_EXAMPLE: Final = "'# MHz S RI R 50'"

_FIRST_LINE: Final = re.compile(r"^[^\S\n]*([^\s!][^\n]*)", re.MULTILINE)
"""The first line that is neither blank nor a comment."""
_NUMBER: Final = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")
_NOT_FINITE: Final = re.compile(r"[+-]?(?:nan|inf|infinity)", re.IGNORECASE)
_FORTRAN: Final = re.compile(r"[+-]?[0-9.]+[dD][+-]?[0-9]+")
_TEXT_BYTES: Final = bytes(range(32, 256)) + b"\t\n\v\f\r\x1a"
_PLAIN_BYTES: Final = b"0123456789+-.eE \n"
_LONG_NUMBER: Final = 17
"""Mean length, the blank included, from which the JSON parser is the faster."""
_LONGEST_SHOWN: Final = 24


@dataclass(frozen=True)
class OptionLine:
    """What the option line says, defaults filled in; `unit_hz` is the frequency unit in Hz."""

    unit_hz: float = 1e9
    kind: str = "S"
    format: str = "MA"
    reference_ohm: float = 50.0


@dataclass(frozen=True, eq=False)
class SweepTable:
    """The numbers of a sweep file before they mean anything.

    Attributes
    ----------
    option : the option line
    frequency_hz : (n,) strictly rising, none negative
    pairs : (n, 8) N11 N21 N12 N22, two numbers each in the format of the option line, all finite
    noise : (m, 5) rows of the noise block, frequency in Hz; m is 0 where there is none
    findings : what was mended on the way
    text : the file's text, to find the line of a row in
    """

    option: OptionLine
    frequency_hz: FloatArray
    pairs: FloatArray
    noise: FloatArray
    text: str = field(repr=False)
    findings: tuple[Finding, ...] = ()

    def line(self, row: int) -> int:
        """Return the line of the file that holds `row`; both count as their users do, lines from 1, rows from 0."""
        first = _FIRST_LINE.search(self.text)
        start = first.end() if first else 0
        lines = [line.number for line in _data_lines(self.text, start) if not line.tokens[0].startswith("#")]
        return lines[row]


def read_table(data: bytes, place: str, *, name: str, strict: bool = False) -> SweepTable:
    """Return the table of numbers in the bytes of a two-port Touchstone file, version 1.

    Parameters
    ----------
    place : the file as the user named it, for the fault
    name : the file's name, for the findings
    strict : refuse what would be mended

    Raises
    ------
    SweepFileError : the first fault in the file.
    """
    text = _decode(data, place)
    first = _FIRST_LINE.search(text)
    if first is None:
        raise SweepFileError(place, "nothing but comments and blank lines", "sweep again and save all of the file")
    number = text.count("\n", 0, first.start(1)) + 1
    _check_first_line(first[1], place, number)
    option = _parse_option_line(first[1], place, number)
    if _FIRST_LINE.search(text, first.end()) is None:
        raise SweepFileError(place, "no data rows after the option line", "sweep again and save all of the file")
    rows = _rows_at_once(text[first.end() :])
    if _is_sound(rows, option.unit_hz):
        return SweepTable(option, rows[:, 0] * option.unit_hz, rows[:, 1:], np.empty((0, NOISE_COLUMNS)), text)
    return _walk_rows(text, first.end(), option, place, name=name, strict=strict)


def _rows_at_once(body: str) -> FloatArray:
    """Return the rows of the lines below the option line, read in one call; (0, 0) where they are not even rows.

    NumPy takes two to three times longer over numbers of 16 digits and more than over short ones. A JSON parser does
    not, is as exact, and reads the rows once their blanks are commas, if no letter or sign of JSON's own is among them.
    """
    long = len(body) > _LONG_NUMBER * ROW_COLUMNS * body.count("\n")
    try:
        if long and not body.encode().translate(None, _PLAIN_BYTES):
            rows = body.strip().replace("\n", "],[").replace(" ", ",")
            return np.array(from_json(f"[[{rows}]]"), dtype=np.float64, ndmin=2)
    except (ValueError, OverflowError):
        pass  # such as two blanks in a row
    try:
        return np.loadtxt(io.StringIO(body), comments="!", ndmin=2)
    except ValueError:
        return np.empty((0, 0))


def _is_sound(rows: FloatArray, unit_hz: float) -> bool:
    """Return whether the one-pass reading is a whole two-port sweep, with nothing left to explain."""
    if rows.shape[1] != ROW_COLUMNS or not np.isfinite(rows).all():
        return False
    with np.errstate(over="ignore"):
        frequency_hz = rows[:, 0] * unit_hz
    return bool(frequency_hz[0] >= 0 and np.isfinite(frequency_hz[-1]) and (frequency_hz[1:] > frequency_hz[:-1]).all())


def _decode(data: bytes, place: str) -> str:
    """Return the text of the file with plain line ends; comments may be in any 8-bit encoding."""
    if not data:
        raise SweepFileError(place, "the file is empty (0 bytes)", "sweep again and save, or copy the file again")
    if data.startswith((b"\xff\xfe", b"\xfe\xff")) or _looks_like_utf16(data):
        raise SweepFileError(place, "the text is UTF-16", "save the file as plain text or UTF-8")
    start = data[:512]
    if b"\0" in data or len(start.translate(None, _TEXT_BYTES)) * 20 > len(start):
        raise SweepFileError(place, "the file is binary, not text", "export the sweep as a Touchstone .s2p file")
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = data.decode("latin-1")
    if "\r" in text:
        text = text.replace("\r\n", "\n").replace("\r", "\n")
    return text


def _looks_like_utf16(data: bytes) -> bool:
    """Return whether every second byte of the start is zero, as in western text of two bytes a letter."""
    start = data[:64]
    return len(start) >= 4 and (not any(start[0::2]) or not any(start[1::2])) and any(start)


def _check_first_line(line: str, place: str, number: int) -> None:
    """Refuse a file whose first line is not an option line, in words that fit what stands there."""
    if line.startswith("#"):
        return
    token = line.split()[0]
    if line.startswith("["):
        if line.lower().startswith("[version]"):
            version = line[len("[version]") :].partition("!")[0].strip() or "2"
            found = f"Touchstone version {_shown(version)}, and only version 1 can be read"
        else:
            found = f"the keyword {_quoted(line.partition(']')[0] + ']')} of a later Touchstone version"
        raise SweepFileError(place, found, "export the sweep as Touchstone version 1", line=number)
    if _NUMBER.fullmatch(token):
        raise SweepFileError(
            place,
            "data before any option line, so the frequency unit and the format are unknown",
            f"write an option line such as {_EXAMPLE} above the data, as the analyzer was set",
            line=number,
        )
    raise SweepFileError(
        place,
        f"{_quoted(token)} is neither a comment, an option line nor a number",
        f"begin the file with an option line such as {_EXAMPLE}, and comments with '!'",
        line=number,
    )


def _parse_option_line(line: str, place: str, number: int) -> OptionLine:
    """Return the option line read; its tokens may stand in any order, and each that is missing has its default."""
    tokens = iter(line.partition("!")[0].removeprefix("#").split())
    said: dict[str, str] = {}
    for token in tokens:
        what = _option_word(token.upper())
        if what is None:
            found = f"{_quoted(token)} is not a word of the option line"
            raise SweepFileError(place, found, f"write an option line such as {_EXAMPLE}", line=number)
        if what in said:
            found = f"the option line gives the {what} twice"
            raise SweepFileError(place, found, "keep the one that the analyzer was set to", line=number)
        said[what] = next(tokens, "") if what == _REFERENCE else token.upper()
    impedance = said.get(_REFERENCE)
    return OptionLine(
        _UNITS_HZ[said.get(_UNIT, "GHZ")],
        said.get(_KIND, OptionLine.kind),
        said.get(_FORMAT, OptionLine.format),
        OptionLine.reference_ohm if impedance is None else _parse_reference_ohm(impedance, place, number),
    )


def _option_word(word: str) -> str | None:
    """Return what a word of the option line stands for, None for a stranger."""
    if word == "R":
        return _REFERENCE
    if word in _UNITS_HZ:
        return _UNIT
    if word in _KINDS:
        return _KIND
    return _FORMAT if word in _FORMATS else None


def _parse_reference_ohm(text: str, place: str, number: int) -> float:
    """Return the number after R, in ohm."""
    if not text:
        raise SweepFileError(place, "R has no value after it", "write the reference impedance: 'R 50'", line=number)
    value = float(text) if _NUMBER.fullmatch(text) else math.nan
    if not 0.0 < value < math.inf:
        found = f"the reference impedance R {_shown(text)} is not a positive number of ohms"
        raise SweepFileError(place, found, "write the reference impedance: 'R 50'", line=number)
    return value


def _walk_rows(text: str, start: int, option: OptionLine, place: str, *, name: str, strict: bool) -> SweepTable:
    """Return the table of an uneven but legal file, read line by line, or raise its first fault."""
    findings: list[Finding] = []
    lines: list[_Line] = []
    for line in _data_lines(text, start):
        if line.tokens[0].startswith("#"):
            findings += _check_later_option_line(line, option, place, name, strict)
        else:
            lines.append(line)
    rows: list[list[float]] = []
    noise: list[list[float]] = []
    for index, line in enumerate(lines):
        values = [_parse_number(token, place, line.number, column) for column, token in enumerate(line.tokens, 1)]
        values[0] = _frequency_hz(line, values[0], option.unit_hz, place)
        if noise or (rows and len(values) == NOISE_COLUMNS and values[0] <= rows[-1][0]):
            _check_noise_row(line, values, noise, place)
            noise.append(values)
            continue
        if len(values) != ROW_COLUMNS:
            raise _count_fault(lines, index, place)
        if rows:
            _check_rising(line, values[0], rows[-1][0], place)
        rows.append(values)
    if not rows:
        raise SweepFileError(place, "no data rows after the option line", "sweep again and save all of the file")
    table = np.array(rows)
    noise_rows = np.array(noise).reshape(-1, NOISE_COLUMNS)
    return SweepTable(option, table[:, 0], table[:, 1:], noise_rows, text, tuple(findings))


class _Line(NamedTuple):
    """One line of the file that holds something: its number from 1, and its words without the comment."""

    number: int
    tokens: list[str]


def _data_lines(text: str, start: int) -> Iterator[_Line]:
    """Yield each line after `start`, the end of the option line, that is neither blank nor all comment."""
    first_number = text.count("\n", 0, start) + 1
    for number, line in enumerate(text[start:].split("\n"), first_number):
        if tokens := line.partition("!")[0].split():
            yield _Line(number, tokens)


def _check_later_option_line(
    line: _Line, option: OptionLine, place: str, name: str, strict: bool
) -> tuple[Finding, ...]:
    """Return a finding where a later option line, which the standard says to ignore, contradicts the first."""
    try:
        same = _parse_option_line(" ".join(line.tokens), place, line.number) == option
    except SweepFileError:
        same = False
    if same:
        return ()
    found = "a second option line that differs from the first"
    if strict:
        raise SweepFileError(place, found, "delete the one that is not true", line=line.number)
    message = f"{name}: line {line.number} is {found}; it was ignored, as the standard says"
    advice = "if two files were joined here, split them; else delete the line"
    return (Finding("file-mended", "caution", message, advice, name),)


def _parse_number(token: str, place: str, number: int, column: int) -> float:
    """Return the finite number that `token` is, or raise what it is instead."""
    remedy = "sweep again, or delete the row"
    if _NUMBER.fullmatch(token):
        if math.isfinite(value := float(token)):
            return value
        found = f"{_quoted(token)} is too large"
    elif token.startswith("["):
        found = f"{_quoted(token)} begins a keyword of a later Touchstone version"
        raise SweepFileError(place, found, "export the sweep as Touchstone version 1", line=number)
    elif "," in token:
        found, remedy = f"{_quoted(token)} has a comma", "export with decimal points, and blanks between the numbers"
    elif _NOT_FINITE.fullmatch(token):
        found = f"{_quoted(token)} is not a finite number"
    elif _FORTRAN.fullmatch(token):
        found, remedy = f"{_quoted(token)} has D for its exponent", "write E in place of D"
    else:
        found = f"{_quoted(token)} is not a number"
    raise SweepFileError(place, found, remedy, line=number, column=column)


def _frequency_hz(line: _Line, value: float, unit_hz: float, place: str) -> float:
    """Return the frequency of a row in Hz."""
    token = _quoted(line.tokens[0])
    if value < 0:
        raise SweepFileError(
            place, f"the frequency {token} is negative", "sweep again, or delete the row", line=line.number, column=1
        )
    if math.isinf(frequency_hz := value * unit_hz):
        raise SweepFileError(
            place,
            f"the frequency {token} is too large",
            "check the unit in the option line",
            line=line.number,
            column=1,
        )
    return frequency_hz


def _check_rising(line: _Line, now_hz: float, before_hz: float, place: str) -> None:
    """Refuse a network row whose frequency is not above the one before."""
    token = _quoted(line.tokens[0])
    if now_hz == before_hz:
        found, remedy = f"the frequency {token} repeats the row above", "delete one of the two rows"
    elif now_hz < before_hz:
        found = f"the frequency {token} falls back, below the row above"
        remedy = "sort the rows by frequency, or split joined sweeps into one file each"
    else:
        return
    raise SweepFileError(place, found, remedy, line=line.number, column=1)


def _check_noise_row(line: _Line, values: Sequence[float], before: Sequence[Sequence[float]], place: str) -> None:
    """Refuse a row of the noise block that has not five numbers, or does not rise in frequency."""
    if len(values) != NOISE_COLUMNS:
        found = f"{_numbers(len(values))} in a row of the noise block, which has {NOISE_COLUMNS}"
        remedy = "put all network rows above the noise block, or delete the row"
        raise SweepFileError(place, found, remedy, line=line.number)
    if before:
        _check_rising(line, values[0], before[-1][0], place)


def _count_fault(lines: Sequence[_Line], index: int, place: str) -> SweepFileError:
    """Return the fault of a row that has not nine numbers, in words that fit what the file may be."""
    count = len(lines[index].tokens)
    after = len(lines[index + 1].tokens) if index + 1 < len(lines) else 0
    found = f"{_numbers(count)} in the row, where a two-port row has {ROW_COLUMNS}"
    remedy = "sweep again, or delete the row"
    export = "export a two-port sweep (.s2p) with S11, S21, S12 and S22"
    if index == 0 and count == 3:
        found, remedy = f"{found}: a one-port file", export
    elif index == 0 and count == 5 and after == 5:
        found, remedy = f"{found}: only two parameters of the four", export
    elif index == 0 and count == 7 and after == 6:
        found, remedy = f"{found}: a three-port file", export
    elif index == 1 and count == 8 and after == 8:
        found, remedy = f"{found}: a four-port file", export
    elif count + after == ROW_COLUMNS:
        found, remedy = f"{found}: it goes on in the next line", "write each row on one line"
    elif index == len(lines) - 1 and count < ROW_COLUMNS:
        found = f"the last row breaks off after {_numbers(count)} of {ROW_COLUMNS}"
        remedy = "copy or save the file again, or delete the row"
    return SweepFileError(place, found, remedy, line=lines[index].number)


def _numbers(count: int) -> str:
    return f"{count} number" if count == 1 else f"{count} numbers"


def _shown(text: str) -> str:
    """Return text from the file, short enough to stand in a line."""
    return text if len(text) <= _LONGEST_SHOWN else f"{text[:_LONGEST_SHOWN]}…"


def _quoted(text: str) -> str:
    return f"'{_shown(text)}'"
