"""The text of a version 2 file in, the same table of numbers out as from version 1.

Y, Z, G, H and the noise resistance are not normalised in version 2; each port may have its own reference impedance; the
two middle parameters stand in the order that the file says.

Format: Touchstone File Format Specification, Version 2.0, IBIS Open Forum, 2009, and Version 2.1, 2024, for two ports.
"""

from __future__ import annotations

import math
import re
from collections.abc import Container
from dataclasses import replace
from typing import Final, NamedTuple

import numpy as np

from benchtool.model import FloatArray
from benchtool.touchstone_habits import mend_habits
from benchtool.touchstone_option import EXAMPLE, parse_option_line
from benchtool.touchstone_order import PlacedRows, in_hertz, in_rising_order
from benchtool.touchstone_rows import is_cut, line_finder, lines_of, rows_by_line
from benchtool.touchstone_table import (
    NOISE_COLUMNS,
    NUMBER,
    ROW_COLUMNS,
    OptionLine,
    Reading,
    SweepTable,
    count_of,
    quoted,
    shown,
)
from benchtool.touchstone_text import data_lines, line_number, words_of
from benchtool.touchstone_v1 import noise_rows, sound_rows

__all__ = ["read_version_2"]

_KEYWORD: Final = re.compile(r"^[ \t]*\[([^\]\n]*)(\]?)([^!\n]*)[^\n]*", re.MULTILINE)
_END_INFORMATION: Final = re.compile(
    r"^[ \t]*\[([ \t]*end[ \t]+information[ \t]*)(\])([^!\n]*)[^\n]*", re.MULTILINE | re.IGNORECASE
)
_PORTS: Final = 2
_TRIANGLE_COLUMNS: Final = 7
"""Frequency, N11, N21, N22; N12 equals N21."""
_VERSIONS: Final = ("2.0", "2.1")
_KNOWN: Final = {
    "version",
    "number of ports",
    "two-port data order",
    "number of frequencies",
    "number of noise frequencies",
    "reference",
    "matrix format",
    "mixed-mode order",
    "begin information",
    "end information",
    "network data",
    "noise data",
    "end",
}
_BARE: Final = {"begin information", "end information", "network data", "noise data", "end"}
"""Keywords that nothing follows on their line."""
_COPY_AGAIN: Final = "copy or save the file again; if it is whole, correct the count"


class _Section(NamedTuple):
    """One keyword of the file: its argument, its line, and where the text that follows it begins and ends."""

    argument: str
    line: int
    start: int
    stop: int


def read_version_2(text: str, reading: Reading) -> SweepTable:
    """Return the table of a file that begins with the keyword [Version].

    Raises
    ------
    SweepFileError : the first fault in the file.
    """
    sections = _sections(text, reading)
    _check_version(sections["version"], reading)
    option = _option_line(text, sections, reading)
    _check_ports(sections, reading)
    if "network data" not in sections:
        raise reading.fault("no keyword [Network Data], so no rows", "sweep again and save all of the file")
    triangle = _is_triangle(sections, reading)
    reverse_first = _has_reverse_first(sections, triangle, reading)
    option = replace(option, reference_ohm=_references(text, sections, option, reading))
    columns = _TRIANGLE_COLUMNS if triangle else ROW_COLUMNS
    table = _network(text, sections["network data"], columns, option, reading)
    if "end" not in sections:
        found, done = "no keyword [End]", "the file was taken to end with its last row"
        reading.mend(found, done, "write [End] below the last row", severity="note")
    _check_count(sections, "number of frequencies", len(table.frequency_hz), reading)
    noise = _noise(text, sections, option, reading)
    pairs = table.pairs
    if triangle:
        pairs = pairs[:, [0, 1, 2, 3, 2, 3, 4, 5]]
    elif reverse_first:
        pairs = pairs[:, [0, 1, 4, 5, 2, 3, 6, 7]]
    return replace(table, pairs=pairs, noise=noise)


def _sections(text: str, reading: Reading) -> dict[str, _Section]:
    """Return the keywords of the file in lower case, each once, without what stands in an information block."""
    sections: dict[str, _Section] = {}
    last = ""
    match = _KEYWORD.search(text)
    while match:
        name = _checked_name(match, sections, text, reading)
        if last:
            sections[last] = sections[last]._replace(stop=match.start())
        line = line_number(text, match.start())
        sections[name] = _Section(match[3].strip(" \t"), line, match.end(), len(text))
        last = name
        if name == "begin information":
            match = _END_INFORMATION.search(text, match.end())
            if match is None:
                remedy = "write [End Information] below the block"
                raise reading.fault("[Begin Information] without an end", remedy, line=line)
        else:
            match = _KEYWORD.search(text, match.end())
    _check_strays(text, sections, reading)
    return sections


def _checked_name(match: re.Match[str], before: Container[str], text: str, reading: Reading) -> str:
    """Return the name of a keyword in lower case, once it is known to be whole, of the standard, and new."""
    word = f"[{match[1]}{match[2]}"
    name = " ".join(words_of(match[1].lower()))
    if not match[2]:
        found, remedy = f"{quoted(word)} has no closing bracket", "write keywords in square brackets"
    elif name not in _KNOWN:
        found = f"{quoted(word)} is no keyword of Touchstone version 2"
        remedy = "delete it, or export the sweep as Touchstone version 1"
    elif name in before:
        found = f"the keyword {quoted(word)} stands twice"
        remedy = "keep the one that is true; if two files were joined here, split them"
    elif name in _BARE and match[3].strip(" \t"):
        found, remedy = f"{quoted(match[3].strip())} on the line of {shown(word)}", "put it on the next line"
    else:
        if name != match[1].lower():
            found, remedy = f"odd blanks in the keyword {quoted(word)}", f"write '{_title(name)}'"
            line = line_number(text, match.start())
            reading.mend(found, "it was read without them", remedy, lines=[line], severity="note")
        return name
    raise reading.fault(found, remedy, line=line_number(text, match.start()))


def _check_strays(text: str, sections: dict[str, _Section], reading: Reading) -> None:
    """Refuse lines that belong to no keyword; an option line and the rest of [Reference] may stand between keywords."""
    for name, section in sections.items():
        if name in ("network data", "noise data", "begin information"):
            continue
        for line in data_lines(text, section.start, section.stop, reading):
            if name == "end":
                found, remedy = "text below [End]", "if two files were joined here, split them; else delete it"
                raise reading.fault(found, remedy, line=line.number)
            number = bool(NUMBER.fullmatch(line.words[0]))
            if not line.words[0].startswith("#") and not (name == "reference" and number):
                found = f"{quoted(line.words[0])} is neither a comment, an option line nor a keyword"
                remedy = "put rows below [Network Data], and begin comments with '!'"
                raise reading.fault(found, remedy, line=line.number)


def _check_version(section: _Section, reading: Reading) -> None:
    if section.argument not in _VERSIONS:
        found = f"{quoted(section.argument)} is no version of Touchstone that has keywords"
        raise reading.fault(found, f"write {' or '.join(_VERSIONS)}, as the file was written", line=section.line)


def _option_line(text: str, sections: dict[str, _Section], reading: Reading) -> OptionLine:
    """Return the option line, which stands among the keywords; a later one is ignored only where it says the same."""
    option = None
    for name, section in sections.items():
        if name in ("network data", "noise data", "begin information"):
            continue
        for line in data_lines(text, section.start, section.stop, reading):
            if not line.words[0].startswith("#"):
                continue
            this = parse_option_line(" ".join(line.words), line.number, reading)
            if option is None:
                option = this
            elif this != option:
                found, done = "a second option line that differs from the first", "it was ignored"
                reading.mend(found, done, "delete the one that is not true", lines=[line.number])
    if option is None:
        found = "no option line, so the frequency unit and the format are unknown"
        remedy = f"write an option line such as {EXAMPLE} below [Version], as the analyzer was set"
        raise reading.fault(found, remedy, line=sections["version"].line)
    return option


def _check_ports(sections: dict[str, _Section], reading: Reading) -> None:
    if "number of ports" not in sections:
        found, done = "no keyword [Number of Ports]", "the rows were read as those of a two-port"
        reading.mend(found, done, "write '[Number of Ports] 2' below the option line", severity="note")
        return
    section = sections["number of ports"]
    if _count(section, "[Number of Ports]", reading) != _PORTS:
        found = f"{quoted(section.argument)} ports, and only two-port sweeps can be used"
        raise reading.fault(found, "export a two-port sweep with S11, S21, S12 and S22", line=section.line)
    if "mixed-mode order" in sections:
        words = words_of(sections["mixed-mode order"].argument.upper())
        if words != ["S1", "S2"]:
            found = "[Mixed-Mode Order] with differential or common modes, which are not those of two ports"
            raise reading.fault(found, "export single-ended parameters", line=sections["mixed-mode order"].line)


def _is_triangle(sections: dict[str, _Section], reading: Reading) -> bool:
    if "matrix format" not in sections:
        return False
    section = sections["matrix format"]
    word = section.argument.lower()
    if word not in ("full", "lower", "upper"):
        found = f"{quoted(section.argument)} is no matrix format"
        raise reading.fault(found, "write Full, Lower or Upper, as the rows are", line=section.line)
    return word != "full"


def _has_reverse_first(sections: dict[str, _Section], triangle: bool, reading: Reading) -> bool:
    """Return whether S12 stands before S21."""
    section = sections.get("two-port data order")
    if section is None:
        if not triangle:
            found = "no keyword [Two-Port Data Order], so S21 and S12 cannot be told apart"
            remedy = "write '[Two-Port Data Order] 21_12' or '12_21', as the rows are"
            raise reading.fault(found, remedy, line=sections["network data"].line)
        found, done = "no keyword [Two-Port Data Order]", "the rows are triangles, where it has no part"
        reading.mend(found, done, "write '[Two-Port Data Order] 21_12'", severity="note")
        return False
    if section.argument not in ("21_12", "12_21"):
        found = f"{quoted(section.argument)} is no data order of two ports"
        raise reading.fault(found, "write 21_12 or 12_21, as the rows are", line=section.line)
    return section.argument == "12_21"


def _references(text: str, sections: dict[str, _Section], option: OptionLine, reading: Reading) -> tuple[float, float]:
    """Return the reference impedance of each port; the option line's where [Reference] does not say it."""
    section = sections.get("reference")
    if section is None:
        return option.reference_ohm
    words = words_of(section.argument)
    for line in data_lines(text, section.start, section.stop, reading):
        if not line.words[0].startswith("#"):
            words += line.words
    remedy = "write one impedance for each port: '[Reference] 50 50'"
    if len(words) != _PORTS:
        found = f"{count_of(len(words), 'value')} after [Reference], where a two-port has {_PORTS}"
        raise reading.fault(found, remedy, line=section.line)
    values = [float(word) if NUMBER.fullmatch(word) else math.nan for word in words]
    for word, value in zip(words, values, strict=True):
        if not 0.0 < value < math.inf:
            found = f"the reference impedance {quoted(word)} is not a positive number of ohms"
            raise reading.fault(found, remedy, line=section.line)
    return values[0], values[1]


def _network(text: str, section: _Section, columns: int, option: OptionLine, reading: Reading) -> SweepTable:
    """Return the table of the network rows, their pairs in the order of the file."""
    start, stop = section.start, section.stop
    none = np.empty((0, NOISE_COLUMNS))
    rows = sound_rows(text, start, stop, columns, option.unit_hz)
    if rows is not None and (stop < len(text) or not is_cut(text)):
        line = line_finder(text, start, stop, reading)
        return SweepTable(option, False, rows[:, 0], rows[:, 1:], none, line)
    text = mend_habits(text, start, stop, reading)
    uneven = rows_by_line(text, start, stop, reading, columns={columns})
    for count, number in zip(uneven.counts, uneven.lines, strict=True):
        if count != columns:
            found = f"{count_of(count, 'number')} in the row, where a row of this file has {columns}"
            raise reading.fault(found, "sweep again, or delete the row", line=number)
    if uneven.fault:
        raise uneven.fault
    if not uneven.counts:
        raise reading.fault("no rows below [Network Data]", "sweep again and save all of the file", line=section.line)
    values = uneven.take(0, len(uneven.counts), columns)
    if uneven.marks:
        raise uneven.fault_of_mark(uneven.marks[0], text, reading)
    network = in_hertz(PlacedRows(values, np.array(uneven.lines)), option.unit_hz, text, reading)
    network = in_rising_order(network, text, reading)
    frequency_hz, pairs = network.values[:, 0], network.values[:, 1:]
    return SweepTable(option, False, frequency_hz, pairs, none, lines_of(network.lines))


def _noise(text: str, sections: dict[str, _Section], option: OptionLine, reading: Reading) -> FloatArray:
    section = sections.get("noise data")
    if section is None:
        _check_count(sections, "number of noise frequencies", 0, reading, needed=False)
        return np.empty((0, NOISE_COLUMNS))
    text = mend_habits(text, section.start, section.stop, reading)
    rows = rows_by_line(text, section.start, section.stop, reading, columns={NOISE_COLUMNS})
    if rows.fault or rows.marks:
        raise rows.fault or rows.fault_of_mark(rows.marks[0], text, reading)
    noise = noise_rows(rows, 0, option, text, reading)
    _check_count(sections, "number of noise frequencies", len(noise), reading)
    return noise


def _check_count(sections: dict[str, _Section], name: str, rows: int, reading: Reading, *, needed: bool = True) -> None:
    """Compare the promised number of rows with those that stand in the file."""
    title = _title(name)
    if name not in sections:
        if needed:
            done, remedy = f"the {rows} in the file were read", f"write '{title} {rows}'"
            reading.mend(f"no keyword {title}", done, remedy, severity="note")
        return
    promised = _count(sections[name], title, reading)
    if promised != rows:
        found = f"{title} says {quoted(sections[name].argument)} where {rows} stand in the file"
        reading.mend(found, "those that stand there were read", _COPY_AGAIN, lines=[sections[name].line])


def _title(name: str) -> str:
    """Return a keyword as the standard writes it."""
    return f"[{name.title().replace(' Of ', ' of ')}]"


def _count(section: _Section, title: str, reading: Reading) -> int:
    if not (section.argument.isascii() and section.argument.isdecimal() and len(section.argument) < 20):
        found = f"{title} {quoted(section.argument)} is not a whole number"
        raise reading.fault(found, "write how many there are", line=section.line)
    return int(section.argument)
