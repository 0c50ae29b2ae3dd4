"""The option line of a file in, what it says out, with the standard's defaults for what it leaves unsaid."""

from __future__ import annotations

import itertools
import math
import re
from typing import Final

from benchtool.errors import SweepFileError
from benchtool.touchstone_table import NUMBER, OptionLine, Reading, count_of, quoted, shown
from benchtool.touchstone_text import words_of

__all__ = ["EXAMPLE", "parse_option_line", "repeats_option_line"]

EXAMPLE: Final = "'# MHz S RI R 50'"
_UNITS_HZ: Final = {"HZ": 1.0, "KHZ": 1e3, "MHZ": 1e6, "GHZ": 1e9}
_KINDS: Final = ("S", "Y", "Z", "G", "H")
_FORMATS: Final = ("DB", "MA", "RI")
_UNIT, _KIND, _FORMAT, _REFERENCE = "frequency unit", "kind of parameter", "number format", "reference impedance"
_GLUED_R: Final = re.compile(r"[rR](?=[0-9]+\.?[0-9]*$)")
_WRITE_R: Final = "write the reference impedance: 'R 50'"
_PORTS: Final = 2


def parse_option_line(line: str, number: int, reading: Reading) -> OptionLine:
    """Return the option line read; its words may stand in any order, and each that is missing has its default.

    Raises
    ------
    SweepFileError : a word is strange, or says again what another has said.
    """
    words = _words(line, number, reading)
    said: dict[str, str] = {}
    references: tuple[float, ...] = ()
    while words:
        word = words.pop(0)
        what = _meaning(word.upper())
        if what is None:
            if len(said) == len((_UNIT, _KIND, _FORMAT, _REFERENCE)) and not NUMBER.fullmatch(word):
                found, done = f"{quoted(word)} and what follows are no words of the option line", "they were ignored"
                reading.mend(found, done, f"write an option line such as {EXAMPLE}", lines=[number])
                break
            found = f"{quoted(word)} is not a word of the option line"
            raise reading.fault(found, f"write an option line such as {EXAMPLE}", line=number)
        if what in said:
            found = f"the option line gives the {what} twice"
            raise reading.fault(found, "keep the one that the analyzer was set to", line=number)
        said[what] = word.upper()
        if what == _REFERENCE:
            references = _references(words, number, reading)
            del words[: len(references)]
    return OptionLine(
        _UNITS_HZ[said.get(_UNIT, "GHZ")],
        said.get(_KIND, OptionLine.kind),
        said.get(_FORMAT, OptionLine.format),
        (references[0], references[-1]) if references else OptionLine.reference_ohm,
    )


def repeats_option_line(words: list[str], option: OptionLine) -> bool:
    """Return whether a later option line says the same as the one that holds."""
    try:
        return parse_option_line(" ".join(words), 0, Reading("", "", strict=True)) == option
    except SweepFileError:
        return False


def _words(line: str, number: int, reading: Reading) -> list[str]:
    """Return the words of the option line, with a blank between R and its value and none of a table's separators."""
    text = line.partition("!")[0].strip(" \t").removeprefix("#")
    if "," in text or ";" in text:
        found, done = "commas or semicolons in the option line", "they were read as blanks"
        reading.mend(found, done, f"write an option line such as {EXAMPLE}", lines=[number], severity="note")
        text = text.replace(",", " ").replace(";", " ")
    words = []
    for word in words_of(text):
        if _GLUED_R.match(word):
            found = f"{quoted(word)} has no blank after R"
            reading.mend(found, "it was read as two words", _WRITE_R, lines=[number], severity="note")
            words += [word[0], word[1:]]
        else:
            words.append(word)
    return words


def _meaning(word: str) -> str | None:
    """Return what a word of the option line stands for, None for a stranger."""
    if word == "R":
        return _REFERENCE
    if word in _UNITS_HZ:
        return _UNIT
    if word in _KINDS:
        return _KIND
    return _FORMAT if word in _FORMATS else None


def _references(words: list[str], number: int, reading: Reading) -> tuple[float, ...]:
    """Return the impedances in ohm at the head of the words after R: one for all ports, or one for each."""
    if not words:
        raise reading.fault("R has no value after it", _WRITE_R, line=number)
    numbers = list(itertools.takewhile(NUMBER.fullmatch, words)) or words[:1]
    if len(numbers) > _PORTS:
        found = f"{count_of(len(numbers), 'number')} after R, where a two-port has one or {_PORTS}"
        raise reading.fault(found, "write the option line on a line of its own", line=number)
    for word in numbers:
        value = float(word) if NUMBER.fullmatch(word) else math.nan
        if not 0.0 < value < math.inf:
            found = f"the reference impedance R {shown(word)} is not a positive number of ohms"
            raise reading.fault(found, _WRITE_R, line=number)
    return tuple(map(float, numbers))
