"""Written tables of a bench sheet in; the bench as it stood out: analyzer, pads, devices and the line of each sweep.

Models ending in ``Keys`` hold what is written, under the keys of the sheet. The others are what the rest of the tool
works with: file names found, pads settled for every sweep, everything in SI units, dB and dBm.
"""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any, Self

from pydantic import Field, PlainValidator, model_validator

from benchtool.model import Kind
from benchtool.sheet_faults import Table, fault
from benchtool.sheet_targets import TargetSpec
from benchtool.sheet_values import (
    Level,
    decibels,
    device_kind,
    file_name,
    filled_text,
    frequency,
    iso_date,
    level,
    level_at,
    loss,
    names,
    optional,
    pad_delay,
    pair,
    share,
    sheet_version,
    text,
)

__all__ = [
    "Analyzer",
    "BenchSheet",
    "Calibration",
    "Decision",
    "Device",
    "DeviceKeys",
    "Pad",
    "PadKeys",
    "SheetKeys",
    "SweepEntry",
    "SweepKeys",
]

_Names = Annotated[tuple[str, ...], PlainValidator(names)]
_Pair = Annotated[tuple[float, float] | None, PlainValidator(optional(pair(frequency, '["15 MHz", "28 MHz"]')))]
_Source = Annotated[Level | None, PlainValidator(optional(level(decibels(-150.0, 30.0, "dBm"))))]
_Port2Level = Annotated[float | None, PlainValidator(optional(decibels(-100.0, 60.0, "dBm")))]
_ReturnLoss = Annotated[float | None, PlainValidator(optional(decibels(0.1, 100.0)))]
_Doubt = Annotated[float | None, PlainValidator(optional(decibels(0.0, 20.0)))]


class Analyzer(Table):
    """The analyzer: source level leaving port 1, what port 2 stands, and how good its readings are."""

    source_dbm: _Source = None
    source_tolerance_db: _Doubt = None
    """± limits of the source level."""
    port2_compression_dbm: _Port2Level = None
    port2_damage_dbm: _Port2Level = None
    directivity_db: _ReturnLoss = None
    """Effective, after calibration."""
    port_match_db: _ReturnLoss = None
    """Effective match of the ports, as a return loss."""
    reading_db: _Doubt = None
    """Standard uncertainty of one corrected ratio."""

    @model_validator(mode="after")
    def _damage_above_compression(self) -> Self:
        low, high = self.port2_compression_dbm, self.port2_damage_dbm
        if low is not None and high is not None and low >= high:
            raise fault(
                f"port2_compression_dbm {low:g} is not below port2_damage_dbm {high:g}",
                "a receiver compresses before it is damaged: correct one of them",
            )
        return self

    def source_at(self, hz: float) -> float | None:
        """Return the source level in dBm at a frequency; None where it is not known."""
        return None if self.source_dbm is None else level_at(self.source_dbm, hz)


class _PadValues(Table):
    """What the pad as written and the pad as used have in common."""

    loss_db: Annotated[Level | None, PlainValidator(optional(level(loss)))] = None
    tolerance_db: _Doubt = None
    """± limits of the loss."""
    return_loss_db: _ReturnLoss = None
    uncertainty_db: _Doubt = None
    """Standard uncertainty of a measured pad's loss."""

    @model_validator(mode="after")
    def _one_kind_of_pad(self) -> Self:
        measured = getattr(self, "file", None) is not None
        if measured == (self.loss_db is not None):
            found = "both loss_db and file" if measured else "neither loss_db nor file"
            raise fault(found, "write loss_db for a pad of known loss, or file for a measured one")
        if self.uncertainty_db is not None and not measured:
            raise fault("uncertainty_db without a file", "write tolerance_db, the ± limits, for a pad of known loss")
        delayed = any(getattr(self, name, 0.0) > 0.0 for name in ("delay", "delay_s"))
        given = {"tolerance_db": self.tolerance_db is not None, "return_loss_db": self.return_loss_db is not None}
        doubled = [key for key, stands in {**given, "delay": delayed}.items() if stands and measured]
        if doubled:
            raise fault(
                f"{doubled[0]} beside a file",
                "the file has it already: delete it (doubt about a measured pad goes in uncertainty_db)",
            )
        return self


class PadKeys(_PadValues):
    """``[pads.NAME]`` as written."""

    delay: Annotated[float, PlainValidator(pad_delay)] = 0.0
    file: Annotated[Path | None, PlainValidator(optional(file_name))] = None


class Pad(_PadValues):
    """A fixed attenuator: of known loss, matched but for its return loss, or measured, with a file."""

    delay_s: Annotated[float, PlainValidator(pad_delay)] = 0.0
    file: Path | None = None

    @property
    def has_table(self) -> bool:
        """Whether the loss is given over frequency."""
        return isinstance(self.loss_db, tuple)

    def loss_at(self, hz: float) -> float:
        """Return the loss in dB at a frequency.

        Raises
        ------
        ValueError : the pad is a measured one; its loss is in its file.
        """
        if self.loss_db is None:
            raise ValueError(f"the loss of this pad is in {self.file}")
        return level_at(self.loss_db, hz)


class Calibration(Table):
    """The pads in line when the analyzer was calibrated, from the analyzer outwards."""

    input_pads: _Names = ()
    output_pads: _Names = ()


class Decision(Table):
    """How sure a verdict has to be."""

    confidence: Annotated[float, PlainValidator(share)] = 0.95


class SweepKeys(Table):
    """``[[device.sweep]]`` as written; what is left out is as at calibration, or as the analyzer's."""

    file: Annotated[Path, PlainValidator(file_name)]
    input_pads: Annotated[tuple[str, ...] | None, PlainValidator(optional(names))] = None
    output_pads: Annotated[tuple[str, ...] | None, PlainValidator(optional(names))] = None
    source_dbm: _Source = None
    reversed: Annotated[Path | None, PlainValidator(optional(file_name))] = None


class SweepEntry(Table):
    """One sweep of a device and the line it went through, pads from the analyzer outwards on either side."""

    file: Path
    """Absolute."""
    name: str
    """As written in the sheet."""
    input_pads: tuple[str, ...] = ()
    output_pads: tuple[str, ...] = ()
    source_dbm: _Source = None
    reversed: Path | None = None
    """Sweep of the device turned end for end in the same line, absolute; it brings S12 and S22."""

    def source_at(self, hz: float) -> float | None:
        """Return the level leaving port 1 in dBm at a frequency; None where it is not known."""
        return None if self.source_dbm is None else level_at(self.source_dbm, hz)


class DeviceKeys(Table):
    """``[[device]]`` as written; its targets and sweeps are read each on its own."""

    name: Annotated[str, PlainValidator(filled_text)]
    kind: Annotated[Kind, PlainValidator(device_kind)]
    design_frequency: Annotated[float | None, PlainValidator(optional(frequency))] = None
    window: _Pair = None
    targets: Any = Field(default_factory=dict)
    sweep: Any = Field(default_factory=list)


class Device(Table):
    """A device under test, what is asked of it, and its sweeps."""

    name: str
    kind: Kind = "amplifier"
    design_hz: float | None = None
    window_hz: tuple[float, float] | None = None
    """Where to look for the peak; None is the whole sweep."""
    targets: tuple[TargetSpec, ...] = ()
    sweeps: tuple[SweepEntry, ...]


class SheetKeys(Table):
    """The sheet as written; its tables are read each on its own."""

    version: Annotated[int, PlainValidator(sheet_version)]
    title: Annotated[str, PlainValidator(text)] = ""
    operator: Annotated[str, PlainValidator(text)] = ""
    date: Annotated[str, PlainValidator(iso_date)] = ""
    analyzer: Any = Field(default_factory=dict)
    pads: Any = Field(default_factory=dict)
    calibration: Any = Field(default_factory=dict)
    decision: Any = Field(default_factory=dict)
    device: Any = Field(default_factory=list)


class BenchSheet(Table):
    """A bench session: what was on the bench, and what is asked of each device."""

    path: Path | None = None
    """The sheet as the user named it; None for a quick look without one."""
    folder: Path
    sha256: str = ""
    version: int = 1
    title: str = ""
    operator: str = ""
    date: str = ""
    analyzer: Analyzer = Analyzer()
    pads: dict[str, Pad] = Field(default_factory=dict)
    calibration: Calibration = Calibration()
    devices: tuple[Device, ...]
    decision: Decision = Decision()
