"""Single values of a bench sheet in; checked numbers, frequencies, levels, names and dates out.

Decibel quantities are plain numbers. Frequencies and times are text with a unit, or plain SI numbers. The limits are
those of any bench: a value beyond them is a slip of the pen. Each reader raises a fault with its remedy.
"""

from __future__ import annotations

import datetime
import re
from collections.abc import Callable
from itertools import pairwise
from pathlib import Path
from typing import Any, Final, TypeAlias, get_args

import numpy as np

from benchtool.model import Kind
from benchtool.sheet_faults import fault, finite, shown
from benchtool.units import format_si, parse_quantity

__all__ = [
    "Level",
    "Reader",
    "decibels",
    "device_kind",
    "file_name",
    "filled_text",
    "frequency",
    "iso_date",
    "level",
    "level_at",
    "loss",
    "names",
    "number",
    "optional",
    "pad_delay",
    "pair",
    "share",
    "sheet_version",
    "text",
    "time",
]

Level: TypeAlias = float | tuple[tuple[float, float], ...]
"""One value in dB or dBm, or pairs of frequency in Hz and value, frequency rising."""
Reader: TypeAlias = Callable[[Any], Any]

_DECIBEL_TEXT: Final = re.compile(r"\s*([-+]?\d+(?:\.\d+)?)\s*dB\w?\s*")
_HIGHEST_HZ: Final = 1e12
_LONGEST_S: Final = 1.0
_LONGEST_DELAY_S: Final = 1e-6
_KINDS: Final = ("Hz", "a frequency", "'21.4 MHz'"), ("s", "a time", "'95 ps'")


def optional(reader: Reader) -> Reader:
    """Return a reader that lets None pass, for models built in Python (TOML has no None)."""
    return lambda value: None if value is None else reader(value)


def number(value: object) -> float:
    """Return a plain, finite number."""
    found = finite(value)
    if found is None:
        inner = _DECIBEL_TEXT.fullmatch(value) if isinstance(value, str) else None
        remedy = f"decibels are plain numbers: write {inner[1]}" if inner else "write a finite number, without quotes"
        raise fault(f"{shown(value)} is not a number", remedy)
    return found


def decibels(low: float, high: float, unit: str = "dB") -> Reader:
    """Return a reader of plain numbers in dB or dBm from `low` to `high`."""

    def read(value: object) -> float:
        found = number(value)
        if not low <= found <= high:
            raise fault(f"{found:g} {unit} is beyond reason", f"write a value from {low:g} to {high:g} {unit}")
        return found

    return read


def loss(value: object) -> float:
    """Return the loss of a pad in dB: 0 or more, below 120."""
    found = number(value)
    if found < 0.0:
        raise fault(f"a loss of {found:g} dB would be gain", f"write the loss as a positive number, here {-found:g}")
    if found >= 120.0:
        raise fault(f"a loss of {found:g} dB is beyond reason", "write a loss below 120 dB")
    return found


def share(value: object) -> float:
    """Return a level of confidence, between 0.5 and 1."""
    found = number(value)
    if not 0.5 < found < 1.0:
        raise fault(f"{found:g} is not a level of confidence", "write a value above 0.5 and below 1, such as 0.95")
    return found


def _quantity(value: object, unit: str) -> float:
    _, what, example = next(kind for kind in _KINDS if kind[0] == unit)
    advice = f"write {what} such as {example}, or a plain number in {unit}"
    if isinstance(value, str):
        try:
            return parse_quantity(value, unit)
        except ValueError as error:
            found, semicolon, remedy = str(error).rpartition("; write ")
            if semicolon:
                raise fault(found, f"write {remedy}") from None
            raise fault(remedy.removesuffix(f" such as {example}"), advice) from None
    found_number = finite(value)
    if found_number is None:
        raise fault(f"{shown(value)} is not {what}", advice)
    return found_number


def frequency(value: object) -> float:
    """Return a frequency in Hz, above zero."""
    found = _quantity(value, "Hz")
    if not 0.0 < found <= _HIGHEST_HZ:
        raise fault(f"{shown(value)} is not a frequency that can be swept", "write one above zero, up to 1 THz")
    return found


def time(value: object) -> float:
    """Return a time in s; it may be negative, as a group delay may."""
    found = _quantity(value, "s")
    if abs(found) > _LONGEST_S:
        raise fault(f"{shown(value)} is {found:g} seconds, beyond reason", "write a time such as '95 ps'")
    return found


def pad_delay(value: object) -> float:
    """Return the delay of a pad in s, from 0 to a microsecond: 200 m of line."""
    found = time(value)
    if not 0.0 <= found <= _LONGEST_DELAY_S:
        raise fault(f"{shown(value)} is no delay of a pad", "write a time from 0 to 1 µs, such as '95 ps'")
    return found


def pair(reader: Reader, example: str) -> Reader:
    """Return a reader of two values in brackets."""

    def read(value: object) -> tuple[float, float]:
        if not isinstance(value, list | tuple) or len(value) != 2:
            raise fault(f"{shown(value)} is not a pair", f"write two values in brackets, such as {example}")
        return reader(value[0]), reader(value[1])

    return read


def level(reader: Reader) -> Reader:
    """Return a reader of one value, or of pairs of frequency and value with rising frequency."""

    def read(value: object) -> Level:
        if not isinstance(value, list | tuple):
            return float(reader(value))
        example = '[["1 MHz", 20.1], ["30 MHz", 20.4]]'
        rows: list[tuple[float, float]] = []
        for row in value:
            if not isinstance(row, list | tuple) or len(row) != 2:
                raise fault(f"row {len(rows) + 1} is not a pair of frequency and value", f"write pairs: {example}")
            rows.append((frequency(row[0]), float(reader(row[1]))))
        if not rows:
            raise fault("an empty list", f"write a number, or pairs: {example}")
        for (earlier, _), (later, _) in pairwise(rows):
            if later <= earlier:
                order = f"{format_si(later, 'Hz')} after {format_si(earlier, 'Hz')}"
                raise fault(order, "put the pairs in order of rising frequency, each frequency once")
        return tuple(rows)

    return read


def level_at(value: Level, hz: float) -> float:
    """Return a level at one frequency: linear in dB between the pairs of a table, held beyond its ends."""
    if not isinstance(value, tuple):
        return value
    at, levels = zip(*value, strict=True)
    return float(np.interp(hz, at, levels))


def text(value: object) -> str:
    """Return free text."""
    if not isinstance(value, str):
        raise fault(f"{shown(value)} is not text", "put it in quotes")
    return value


def filled_text(value: object) -> str:
    """Return text that says something."""
    found = text(value)
    if not found.strip():
        raise fault("it is empty", "write a name in the quotes")
    return found


def file_name(value: object) -> Path:
    """Return a file name as it is written."""
    return value if isinstance(value, Path) else Path(filled_text(value))


def names(value: object) -> tuple[str, ...]:
    """Return a list of pad names."""
    if isinstance(value, str):
        raise fault(f"{shown(value)} is not a list", f'put it in brackets: ["{value}"]')
    if not isinstance(value, list | tuple):
        raise fault(f"{shown(value)} is not a list of pads", 'write pad names in brackets, such as ["b30", "a20"]')
    for member in value:
        if not isinstance(member, str):
            raise fault(f"{shown(member)} is not the name of a pad", "write the NAME of a [pads.NAME] in quotes")
    return tuple(value)


def device_kind(value: object) -> Kind:
    """Return the kind of a device."""
    kinds: tuple[Kind, ...] = get_args(Kind)
    for kind in kinds:
        if value == kind:
            return kind
    raise fault(f"{shown(value)} is no kind of device", 'write "amplifier", "filter" or "network"')


def sheet_version(value: object) -> int:
    """Return the version of the sheet's layout, which is 1."""
    if isinstance(value, bool) or not isinstance(value, int) or value != 1:
        raise fault(f"{shown(value)} is not a version this release reads", "write version = 1")
    return value


def iso_date(value: object) -> str:
    """Return a date, or a date with its time, as ISO text."""
    if isinstance(value, datetime.date):
        return value.isoformat()
    if isinstance(value, str):
        if not value.strip():
            return ""
        for kind in (datetime.date, datetime.datetime):
            try:
                return kind.fromisoformat(value.strip()).isoformat()
            except ValueError:
                continue
    raise fault(f"{shown(value)} is not a date", "write year-month-day without quotes, such as 2026-11-28")
