"""Tables of a bench sheet and the models they must fit in; checked tables, or faults in the user's words, out.

A sheet is read table by table, and every fault is noted on the way, so that a user sees all of them at once. Nothing
that the validation library says reaches the user: each fault is a place, what was found, and what to do.
"""

from __future__ import annotations

import datetime
import difflib
import json
import math
import re
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any, Final, TypeAlias, TypeVar

from pydantic import BaseModel, ConfigDict, ValidationError
from pydantic_core import ErrorDetails, PydanticCustomError

from benchtool.errors import BenchtoolError, FaultsError, SheetError

__all__ = ["FaultLog", "Key", "Table", "fault", "finite", "key_path", "shown", "suggestion"]

Key: TypeAlias = tuple[str | int, ...]
"""Place of a value in the sheet: names of tables and keys, and 0-based positions in lists."""

_BARE: Final = re.compile(r"[A-Za-z0-9_-]+")
_LONGEST: Final = 40
_MISSING: Final = {
    "version": "write version = 1 as the first line",
    "name": 'add one, such as name = "second stage"',
    "kind": 'add kind = "amplifier", "filter" or "network"',
    "file": 'add one, such as file = "stage2_low.s2p"',
}


class Table(BaseModel):
    """A table of the sheet: frozen, strict about types, without unknown keys."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


AnyTable = TypeVar("AnyTable", bound=Table)


def fault(found: str, remedy: str) -> PydanticCustomError:
    """Return the error that a validator raises: what was found, and what to do about it."""
    return PydanticCustomError("fault", "{found}; {remedy}", {"found": found, "remedy": remedy})


def shown(value: object) -> str:
    """Return a value of the sheet as a fault shows it.

    >>> shown("20 dB"), shown(True), shown([1, 2]), shown(20.0)
    ("'20 dB'", 'true', 'a list', '20')
    """
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return repr(value if len(value) <= _LONGEST else value[: _LONGEST - 1] + "…")
    if isinstance(value, float):
        return f"{value:g}"
    if isinstance(value, int):
        return f"{value}" if abs(value) < 10**15 else "a very large number"
    if isinstance(value, list | tuple):
        return "a list"
    if isinstance(value, Mapping):
        return "a table"
    return value.isoformat() if isinstance(value, datetime.date | datetime.time) else repr(value)


def key_path(key: Key) -> str:
    """Return a place as the user would write it, lists counted from 1.

    >>> key_path(("device", 0, "targets", "gain", "min")), key_path(("pads", "a 20", "loss_db"))
    ('device[1].targets.gain.min', 'pads."a 20".loss_db')
    """
    path = ""
    for step in key:
        if isinstance(step, int):
            path += f"[{step + 1}]"
        else:
            name = step if _BARE.fullmatch(step) else json.dumps(step, ensure_ascii=False)
            path += f".{name}" if path else name
    return path


def suggestion(wrong: str, right: Iterable[str], otherwise: str) -> str:
    """Return 'did you mean …?' with the name nearest to a wrong one, or another remedy where none is near."""
    near = difflib.get_close_matches(wrong, list(right), n=1, cutoff=0.6)
    return f"did you mean {near[0]}?" if near else otherwise


class FaultLog:
    """Collects the faults of one sheet while it is being read."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.faults: list[BenchtoolError] = []

    def add(self, key: Key, found: str, remedy: str) -> None:
        """Note a fault."""
        self.faults.append(SheetError(self.path, key_path(key) or None, found, remedy))

    def read(self, model: type[AnyTable], table: object, at: Key, *, heading: str) -> AnyTable | None:
        """Return a table as its model, or None after noting its faults; `heading` is how the table is written."""
        if not isinstance(table, dict):
            self.add(at, f"{shown(table)} is not a table", f"write {heading}, and its keys below it")
            return None
        try:
            return model.model_validate(table)
        except ValidationError as error:
            for details in error.errors(include_url=False):
                self._translate(model, details, at)
            return None

    def tables(self, value: object, at: Key, *, heading: str) -> list[object]:
        """Return the members of a list of tables; notes a fault where it is not one."""
        if isinstance(value, list):
            return value
        found = "single brackets" if isinstance(value, dict) else f"{shown(value)} is not a list of tables"
        self.add(at, found, f"write {heading} in double brackets, once for each")
        return []

    def named(self, value: object, at: Key, *, heading: str) -> dict[str, Any]:
        """Return a table of named members; notes a fault where it is not one."""
        if isinstance(value, dict):
            return value
        self.add(at, f"{shown(value)} is not a table", f"write {heading}")
        return {}

    def raise_if_any(self) -> None:
        """Raise what was noted: one fault as a SheetError, several together as a FaultsError."""
        if len(self.faults) == 1:
            raise self.faults[0]
        if self.faults:
            raise FaultsError(self.faults)

    def _translate(self, model: type[Table], details: ErrorDetails, at: Key) -> None:
        key = (*at, *details["loc"])
        last = str(key[-1]) if key else ""
        match details["type"]:
            case "fault":
                self.add(key, details["ctx"]["found"], details["ctx"]["remedy"])
            case "missing":
                self.add(key, "missing", _MISSING.get(last, f"add {last}"))
            case "extra_forbidden":
                known = list(model.model_fields)
                remedy = suggestion(last, known, f"the keys here are {', '.join(known)}")
                if "targets" in known and isinstance(details["input"], dict):
                    remedy = "a target stands below the line [device.targets]"
                self.add(key, "unknown key", remedy)
            case _:  # every field has a reader of its own; a new field without one still gets a plain line
                self.add(key, f"{shown(details['input'])} cannot stand here", "compare it with the README's sheet")


def finite(value: object) -> float | None:
    """Return a number of the sheet as a float; None for anything else: true, text, nan, inf."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        return None
    try:
        number = float(value)
    except OverflowError:  # TOML whole numbers have no upper end
        return None
    return number if math.isfinite(number) else None
