"""The error tree: every fault a user can cause, with its place, what was found and what to do.

BenchtoolError                 catch this one; ``str(error)`` is the line to show
├── SweepFileError             a Touchstone file that cannot be read      (path, line, column, found, remedy)
├── SheetError                 a bench sheet that cannot be used          (path, key, found, remedy)
├── RequestError               a command or call that cannot be carried out  (found, remedy)
└── OutputError                a result that could not be written         (path, found, remedy)

Several faults of one sheet travel together in :class:`FaultsError`, which is a BenchtoolError too.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

__all__ = ["BenchtoolError", "FaultsError", "OutputError", "RequestError", "SheetError", "SweepFileError"]


def _printable(text: str) -> str:
    """Return text on one line: control characters are shown as escapes, so a fault cannot restyle a terminal."""
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text)


class BenchtoolError(Exception):
    """Any fault of the input or the request. ``str(error)`` is one line: place, what was found, what to do."""

    place: str = ""

    def __init__(self, found: str, remedy: str) -> None:
        self.found = found
        self.remedy = remedy
        super().__init__(found, remedy)

    def lines(self) -> list[str]:
        """Return the message as lines, one for each fault."""
        head = f"{self.place}: " if self.place else ""
        return [_printable(f"{head}{self.found}; {self.remedy}")]

    def __str__(self) -> str:
        return "\n".join(self.lines())


class SweepFileError(BenchtoolError):
    """A Touchstone file that cannot be read.

    Parameters
    ----------
    path : file as the user named it
    found : what stands there, in the user's terms
    remedy : what to do about it
    line, column : 1-based place in the file, where there is one; column counts data columns
    """

    def __init__(
        self, path: Path | str, found: str, remedy: str, *, line: int | None = None, column: int | None = None
    ) -> None:
        super().__init__(found, remedy)
        self.path = Path(path)
        self.line = line
        self.column = column
        place = str(path)
        if line is not None:
            place += f":{line}"
        if column is not None:
            place += f" (column {column})"
        self.place = place


class SheetError(BenchtoolError):
    """A bench sheet that cannot be used; `key` is the path of the key, such as ``device[2].targets.gain``."""

    def __init__(self, path: Path | str, key: str | None, found: str, remedy: str) -> None:
        super().__init__(found, remedy)
        self.path = Path(path)
        self.key = key
        self.place = f"{path}: {key}" if key else str(path)


class RequestError(BenchtoolError):
    """A command, option or call that cannot be carried out as asked."""


class OutputError(BenchtoolError):
    """A result that could not be written; nothing half-written is left behind."""

    def __init__(self, path: Path | str, found: str, remedy: str) -> None:
        super().__init__(found, remedy)
        self.path = Path(path)
        self.place = str(path)


class FaultsError(BenchtoolError):
    """Several faults found together, each shown on its own line."""

    def __init__(self, faults: Sequence[BenchtoolError]) -> None:
        self.faults = tuple(faults)
        super().__init__(f"{len(self.faults)} faults", "mend each of them")

    def lines(self) -> list[str]:
        """Return one line for each fault."""
        return [line for fault in self.faults for line in fault.lines()]
