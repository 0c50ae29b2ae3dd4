"""What every front end of the reader gives: the table of numbers in a file, and what was said on the way.

A file is read by one :class:`Reading`, which knows how the user calls it and whether it is read strictly. Each
departure from the standard goes through :meth:`Reading.mend`: a finding when reading tolerantly, a fault when strictly,
in the same words.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Final

from benchtool.errors import SweepFileError
from benchtool.model import Finding, FloatArray, Severity

__all__ = [
    "NOISE_COLUMNS",
    "NUMBER",
    "ROW_COLUMNS",
    "OptionLine",
    "Reading",
    "SweepTable",
    "count_of",
    "quoted",
    "shown",
]

ROW_COLUMNS: Final = 9
"""A two-port row: frequency, then N11 N21 N12 N22 as two numbers each."""
NOISE_COLUMNS: Final = 5
"""A noise row: frequency, minimum noise figure in dB, magnitude and angle of the optimum Γ, noise resistance."""
NUMBER: Final = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")
"""A number as both versions of the standard write it, in ASCII digits with a decimal point."""
_LONGEST_SHOWN: Final = 24
_LINES_SHOWN: Final = 3


@dataclass(frozen=True)
class OptionLine:
    """What the option line says, defaults filled in; `unit_hz` is the frequency unit in Hz."""

    unit_hz: float = 1e9
    kind: str = "S"
    format: str = "MA"
    reference_ohm: tuple[float, float] = (50.0, 50.0)


@dataclass(frozen=True, eq=False)
class SweepTable:
    """The numbers of a sweep file before they mean anything.

    Attributes
    ----------
    option : the option line; its reference impedances are those of the file, wherever the file states them
    normalised : whether Y, Z, G and H are normalised to the reference, as in version 1
    frequency_hz : (n,) strictly rising, none negative
    pairs : (n, 8) N11 N21 N12 N22, two numbers each in the format of the option line, all finite
    noise : (m, 5) frequency in Hz, minimum noise figure in dB, magnitude and angle of the optimum Γ, Rn in ohm
    line : gives the line of the file, from 1, that holds a row, from 0
    missing : parameters that the file has no numbers for; they stand as zeros in `pairs`
    """

    option: OptionLine
    normalised: bool
    frequency_hz: FloatArray
    pairs: FloatArray
    noise: FloatArray
    line: Callable[[int], int] = field(repr=False)
    missing: frozenset[str] = frozenset()


class Reading:
    """One reading of one file: how faults name it, whether it is strict, and what was mended so far."""

    def __init__(self, place: str, name: str, *, strict: bool = False) -> None:
        self.place = place
        self.name = name
        self.strict = strict
        self.findings: list[Finding] = []

    def fault(self, found: str, remedy: str, *, line: int | None = None, column: int | None = None) -> SweepFileError:
        """Return the fault to raise."""
        return SweepFileError(self.place, found, remedy, line=line, column=column)

    def mend(
        self,
        found: str,
        done: str,
        remedy: str,
        *,
        lines: Sequence[int] = (),
        column: int | None = None,
        severity: Severity = "caution",
    ) -> None:
        """Note that `found` had one reading, which is `done`; `lines` are where.

        Raises
        ------
        SweepFileError : the file is read strictly.
        """
        if self.strict:
            raise self.fault(found, remedy, line=lines[0] if lines else None, column=column)
        where = f"{_listed_lines(lines)}: " if lines else ""
        self.findings.append(
            Finding("file-mended", severity, f"{self.name}: {where}{found}; {done}", remedy, self.name)
        )


def _listed_lines(lines: Sequence[int]) -> str:
    """Return 'line 4', 'lines 4 and 7' or 'lines 4, 7, 9 and 12 more'."""
    if len(lines) == 1:
        return f"line {lines[0]}"
    named = [str(line) for line in lines[:_LINES_SHOWN]]
    rest = len(lines) - len(named)
    last = f"{rest} more" if rest else named.pop()
    return f"lines {', '.join(named)} and {last}"


def count_of(count: int, what: str) -> str:
    """Return a count in words: '1 number', '8 numbers'."""
    return f"{count} {what}" if count == 1 else f"{count} {what}s"


def shown(text: str) -> str:
    """Return text from the file, short enough to stand in a line."""
    return text if len(text) <= _LONGEST_SHOWN else f"{text[:_LONGEST_SHOWN]}…"


def quoted(text: str) -> str:
    """Return text from the file in quotation marks, short enough to stand in a line."""
    return f"'{shown(text)}'"
