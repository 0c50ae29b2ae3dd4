"""A bench sheet in; a BenchSheet out: what was on the bench and what is asked of each device.

The sheet is TOML. It is read table by table, so that all its faults come out together, each with its key. The sheet
says how the line stood at each sweep; what a sweep leaves out is as at calibration.
"""

from __future__ import annotations

import hashlib
import re
import shlex
import tomllib
from collections.abc import Sequence
from pathlib import Path
from typing import Any, Final

from benchtool.errors import RequestError, SheetError
from benchtool.model import Kind
from benchtool.sheet_faults import FaultLog, Key, suggestion
from benchtool.sheet_quick import sheet_from_files
from benchtool.sheet_tables import (
    Analyzer,
    BenchSheet,
    Calibration,
    Decision,
    Device,
    DeviceKeys,
    Pad,
    PadKeys,
    SheetKeys,
    SweepEntry,
    SweepKeys,
)
from benchtool.sheet_targets import FIGURE_PARAMETERS, FIGURE_UNITS, TargetSpec, read_targets
from benchtool.units import format_si

__all__ = [
    "FIGURE_PARAMETERS",
    "FIGURE_UNITS",
    "SHEET_NAME",
    "Analyzer",
    "BenchSheet",
    "Calibration",
    "Decision",
    "Device",
    "Pad",
    "SweepEntry",
    "TargetSpec",
    "load_sheet",
    "sheet_from_files",
]

SHEET_NAME: Final = "bench.toml"

_TOML_FAULT: Final = re.compile(r"(?P<what>.*) \(at (?:line (?P<line>\d+), column (?P<column>\d+)|end of document)\)")
_TOML_REMEDIES: Final = {
    "Invalid value": "put text in quotes; numbers have a decimal point and no unit",
    "Cannot overwrite a value": "the same key stands twice: delete one",
    "Cannot declare": "the same table stands twice: delete one",
    "Invalid date": "write a date of the calendar, such as 2026-11-28",
}
_SIDES: Final = ("input_pads", "output_pads")


def load_sheet(path: Path | str) -> BenchSheet:
    """Return the bench sheet at `path`, a sheet or a folder that holds bench.toml.

    Raises
    ------
    RequestError : there is no such folder or sheet.
    SheetError : the sheet has a fault.
    FaultsError : the sheet has several; all of them, in the order of the sheet's tables.
    """
    path = _find(Path(path))
    try:
        data = path.read_bytes()
    except OSError as error:
        raise SheetError(path, None, f"it cannot be read ({error.strerror})", "check its permissions") from None
    return _Reading(path, _parse(path, data)).sheet(hashlib.sha256(data).hexdigest())


def _find(path: Path) -> Path:
    """Return the sheet itself, for a sheet or the folder that holds it."""
    try:
        if path.is_dir():
            if not (path / SHEET_NAME).is_file():
                start = f"start one with: benchtool draft {shlex.quote(str(path))}"
                raise RequestError(f"{path} has no {SHEET_NAME}", start)
            return path / SHEET_NAME
        if path.exists():
            return path
    except OSError as error:  # such as a name that is too long
        raise RequestError(f"{path} cannot be opened ({error.strerror})", "check the name") from None
    raise RequestError(f"there is no folder or bench sheet {path}", "check the name")


def _parse(path: Path, data: bytes) -> dict[str, Any]:
    """Return the TOML document of a sheet's bytes."""
    try:
        return tomllib.loads(data.decode("utf-8-sig"))
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        found = f"byte 0x{data[error.start]:02x} is not UTF-8"
        raise SheetError(path, f"line {line}", found, "save the sheet as UTF-8 text") from None
    except tomllib.TOMLDecodeError as error:
        fault = _TOML_FAULT.fullmatch(str(error))
        what = fault["what"] if fault else str(error)
        place = f"line {fault['line']}, column {fault['column']}" if fault and fault["line"] else "at its end"
        remedy = next(
            (r for start, r in _TOML_REMEDIES.items() if what.startswith(start)),
            "write one key = value on a line, text in quotes",
        )
        raise SheetError(path, place, f"not TOML: {what[:1].lower()}{what[1:]}", remedy) from None
    except (ValueError, RecursionError):  # a number of thousands of digits, thousands of brackets
        raise SheetError(path, None, "no bench sheet can be read from it", "start again from a draft") from None


class _Reading:
    """One sheet while it is being read: its document, what is found in it, and the faults."""

    def __init__(self, path: Path, document: dict[str, Any]) -> None:
        self.path = path
        self.folder = path.parent
        self.document = document
        self.log = FaultLog(path)
        self.analyzer = Analyzer()
        self.pads: dict[str, Any] = {}
        self.calibration = Calibration()

    def sheet(self, sha256: str) -> BenchSheet:
        """Return the whole sheet, or raise its faults; a table with faults is read on as if it were empty."""
        log, tables = self.log, self.document
        head = log.read(SheetKeys, tables, (), heading="key = value") or SheetKeys(version=1)
        at: Key = ("analyzer",)
        self.analyzer = log.read(Analyzer, tables.get("analyzer", {}), at, heading="[analyzer]") or Analyzer()
        self.pads = log.named(tables.get("pads", {}), ("pads",), heading="[pads.NAME] for each pad")
        pads = self._read_pads()
        at = ("calibration",)
        self.calibration = (
            log.read(Calibration, tables.get("calibration", {}), at, heading="[calibration]") or Calibration()
        )
        self._check_line(at, self.calibration.input_pads, self.calibration.output_pads, written=_SIDES)
        at = ("decision",)
        decision = log.read(Decision, tables.get("decision", {}), at, heading="[decision]") or Decision()
        devices = self._read_devices(tables.get("device", []))
        log.raise_if_any()
        return BenchSheet(
            path=self.path,
            folder=self.folder,
            sha256=sha256,
            version=head.version,
            title=head.title,
            operator=head.operator,
            date=head.date,
            analyzer=self.analyzer,
            pads=pads,
            calibration=self.calibration,
            devices=devices,
            decision=decision,
        )

    def _read_pads(self) -> dict[str, Pad]:
        pads = {}
        for name, table in self.pads.items():
            at: Key = ("pads", name)
            keys = self.log.read(PadKeys, table, at, heading=f"[pads.{name}]")
            if keys is None:
                continue
            file = None if keys.file is None else self._existing(keys.file, (*at, "file"))
            if (file is None) == (keys.file is None):
                pads[name] = Pad(
                    loss_db=keys.loss_db,
                    tolerance_db=keys.tolerance_db,
                    return_loss_db=keys.return_loss_db,
                    uncertainty_db=keys.uncertainty_db,
                    file=file,
                    delay_s=keys.delay,
                )
        return pads

    def _read_devices(self, tables: object) -> tuple[Device, ...]:
        devices: list[Device] = []
        members = self.log.tables(tables, ("device",), heading="[[device]]")
        if isinstance(tables, list) and not members:
            self.log.add(("device",), "the sheet has no device", "add a [[device]] with its [[device.sweep]]")
        named: dict[object, int] = {}
        for number, table in enumerate(members):
            at: Key = ("device", number)
            keys = self.log.read(DeviceKeys, table, at, heading="[[device]]")
            if not isinstance(table, dict):
                continue
            name, kind = table.get("name"), keys.kind if keys else None
            if isinstance(name, str) and named.setdefault(name, number) != number:
                found = f"{name!r} is also the name of device[{named[name] + 1}]"
                self.log.add((*at, "name"), found, "give each device a name of its own")
            targets = self._read_targets(table.get("targets", {}), (*at, "targets"), kind)
            sweeps = self._read_sweeps(table.get("sweep", []), (*at, "sweep"))
            if keys is not None:
                self._check_window(keys, at)
                devices.append(
                    Device(
                        name=keys.name,
                        kind=keys.kind,
                        design_hz=keys.design_frequency,
                        window_hz=keys.window,
                        targets=targets,
                        sweeps=sweeps,
                    )
                )
        return tuple(devices)

    def _read_targets(self, tables: object, at: Key, kind: Kind | None) -> tuple[TargetSpec, ...]:
        return read_targets(self.log, self.log.named(tables, at, heading="[device.targets]"), at, kind)

    def _check_window(self, keys: DeviceKeys, at: Key) -> None:
        if keys.window is None:
            return
        low, high = keys.window
        shown = f"{format_si(low, 'Hz', 6)} to {format_si(high, 'Hz', 6)}"
        if low >= high:
            self.log.add((*at, "window"), f"{shown} is no window", "write the lower frequency first")
        elif keys.design_frequency is not None and not low <= keys.design_frequency <= high:
            found = f"{format_si(keys.design_frequency, 'Hz', 6)} is outside the window {shown}"
            self.log.add((*at, "design_frequency"), found, "widen the window, or correct the design frequency")

    def _read_sweeps(self, tables: object, at: Key) -> tuple[SweepEntry, ...]:
        members = self.log.tables(tables, at, heading="[[device.sweep]]")
        if isinstance(tables, list) and not members:
            self.log.add(at, "the device has no sweep", "add [[device.sweep]] with its file")
        found: dict[Path, int] = {}
        entries = []
        for number, table in enumerate(members):
            place: Key = (*at, number)
            keys = self.log.read(SweepKeys, table, place, heading="[[device.sweep]]")
            if keys is None or not isinstance(table, dict):
                continue
            inputs = self.calibration.input_pads if keys.input_pads is None else keys.input_pads
            outputs = self.calibration.output_pads if keys.output_pads is None else keys.output_pads
            self._check_line(place, inputs, outputs, written=[side for side in _SIDES if side in table])
            file = self._existing(keys.file, (*place, "file"))
            if file is None:
                continue
            if found.setdefault(file.resolve(), number) != number:
                earlier = f"{keys.file.name!r} is already sweep[{found[file.resolve()] + 1}] of this device"
                self.log.add((*place, "file"), earlier, "list each sweep once")
            turned = None
            if keys.reversed is not None:
                turned = self._existing(keys.reversed, (*place, "reversed"))
                if turned is not None and turned.resolve() == file.resolve():
                    remedy = "name the sweep of the device turned end for end"
                    self.log.add((*place, "reversed"), "the sweep is its own reverse", remedy)
            source = self.analyzer.source_dbm if keys.source_dbm is None else keys.source_dbm
            entries.append(
                SweepEntry(
                    file=file,
                    name=str(table["file"]),
                    input_pads=inputs,
                    output_pads=outputs,
                    source_dbm=source,
                    reversed=turned,
                )
            )
        return tuple(entries)

    def _check_line(self, at: Key, inputs: Sequence[str], outputs: Sequence[str], *, written: Sequence[str]) -> None:
        """Note unknown and repeated pads of one line; what is not `written` here was checked at calibration."""
        for side, line in zip(_SIDES, (inputs, outputs), strict=True):
            if side not in written:
                continue
            for name in dict.fromkeys(line):
                if name not in self.pads:
                    remedy = suggestion(name, self.pads, f"add [pads.{name}] to the sheet, or correct the name")
                    self.log.add((*at, side), f"there is no pad {name!r}", remedy)
                elif line.count(name) > 1:
                    remedy = "a pad can be in one place only: give the other one a name and a [pads.NAME] of its own"
                    self.log.add((*at, side), f"pad {name!r} stands twice", remedy)
        both = [name for name in inputs if name in outputs and name in self.pads]
        if both and written:
            other = next((side for side in _SIDES if side not in written), None)
            told = f" ({other} is left out, so as at calibration)" if other else ""
            remedy = f"write {other} of this sweep too" if other else "a pad can be in one place only: correct one side"
            self.log.add((*at, written[0]), f"pad {both[0]!r} is on both sides{told}", remedy)

    def _existing(self, name: Path, key: Key) -> Path | None:
        """Return the absolute path of a file named in the sheet; notes a fault where there is none."""
        file = (self.folder / name).absolute()
        try:
            if file.is_file():
                return file
            kind = "is a folder" if file.is_dir() else "is not there"
        except OSError as error:  # such as a name that is too long
            kind = f"cannot be opened ({error.strerror})"
        remedy = suggestion(file.name, _files_in(file.parent), "correct the name, relative to the sheet")
        self.log.add(key, f"the file {str(name)!r} {kind}", remedy)
        return None


def _files_in(folder: Path) -> list[str]:
    try:
        return [entry.name for entry in folder.iterdir() if entry.is_file()]
    except OSError:
        return []
