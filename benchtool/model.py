"""The frozen results that travel between modules: what was read, what was worked out, what is doubted.

Arrays are copied in and set read-only. Frequencies are in Hz, times in s, levels in dBm, angles in degrees,
impedances in ohm. The last axis of every array is frequency.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal, TypeAlias, cast

import numpy as np

from benchtool.aliases import Bound, ComplexArray, FloatArray
from benchtool.drive_results import DriveStudy
from benchtool.units import format_si

__all__ = [
    "PARAMETERS",
    "BenchResult",
    "Bound",
    "ComplexArray",
    "Compression",
    "CompressionPoint",
    "DeviceResult",
    "Figure",
    "Finding",
    "FloatArray",
    "Kind",
    "NoiseBlock",
    "PadInLine",
    "Severity",
    "SignalPath",
    "Summary",
    "Sweep",
    "SweepResult",
    "TargetResult",
    "Verdict",
    "readonly",
]

Kind: TypeAlias = Literal["amplifier", "filter", "network"]
Severity: TypeAlias = Literal["note", "caution", "fault"]
Verdict: TypeAlias = Literal["met", "missed", "undecided", "none"]

PARAMETERS = ("S11", "S21", "S12", "S22")
"""The four scattering parameters in the order a two-port Touchstone row has them."""


def readonly(array: Any, dtype: Any) -> Any:
    """Return a read-only copy of `array`."""
    copy = np.array(array, dtype=dtype)
    copy.setflags(write=False)
    return copy


@dataclass(frozen=True)
class Finding:
    """Something the user should know about the data, always with what to do about it."""

    code: str
    severity: Severity
    message: str
    advice: str
    sweep: str | None = None


@dataclass(frozen=True, eq=False)
class NoiseBlock:
    """Noise parameters of a Touchstone file: n frequencies, minimum noise figure in dB, optimum Γ, Rn in ohm."""

    frequency_hz: FloatArray
    nf_min_db: FloatArray
    gamma_opt: ComplexArray
    rn_ohm: FloatArray

    def __post_init__(self) -> None:
        for name in ("frequency_hz", "nf_min_db", "rn_ohm"):
            object.__setattr__(self, name, readonly(getattr(self, name), np.float64))
        object.__setattr__(self, "gamma_opt", readonly(self.gamma_opt, np.complex128))


@dataclass(frozen=True, eq=False)
class Sweep:
    """One pass of the analyzer: scattering parameters of a two-port over frequency.

    Attributes
    ----------
    name : file name as the user knows it
    frequency_hz : (n,) rising
    s : (2, 2, n); ``s[i - 1, j - 1]`` is Sij. Parameters that were not measured hold zeros
    measured : which of S11, S21, S12, S22 the file really measured
    reference_ohm : reference impedance of port 1 and port 2
    sha256 : of the file's bytes, empty for a sweep that was not read from a file
    findings : what reading it showed
    noise : the noise block of the file, where there is one
    """

    name: str
    frequency_hz: FloatArray
    s: ComplexArray
    measured: tuple[str, ...] = PARAMETERS
    reference_ohm: tuple[float, float] = (50.0, 50.0)
    path: Path | None = None
    sha256: str = ""
    findings: tuple[Finding, ...] = ()
    noise: NoiseBlock | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "frequency_hz", readonly(self.frequency_hz, np.float64))
        object.__setattr__(self, "s", readonly(self.s, np.complex128))

    @property
    def s11(self) -> ComplexArray:
        """S11, (n,)."""
        return cast(ComplexArray, self.s[0, 0])

    @property
    def s21(self) -> ComplexArray:
        """S21, (n,)."""
        return cast(ComplexArray, self.s[1, 0])

    @property
    def s12(self) -> ComplexArray:
        """S12, (n,)."""
        return cast(ComplexArray, self.s[0, 1])

    @property
    def s22(self) -> ComplexArray:
        """S22, (n,)."""
        return cast(ComplexArray, self.s[1, 1])

    @property
    def full(self) -> bool:
        """Whether all four parameters were measured."""
        return len(self.measured) == len(PARAMETERS)


@dataclass(frozen=True)
class PadInLine:
    """One pad of a signal path; `loss_db` is at the frequency the path is worked out for."""

    name: str
    loss_db: float
    calibrated: bool
    measured: bool = False
    tolerance_db: float | None = None


@dataclass(frozen=True)
class SignalPath:
    """The line of one sweep, with the level at each joint at `at_hz`.

    `input_pads` run from port 1 to the device, `output_pads` from port 2 to the device.
    A pad with ``calibrated=True`` was in line at calibration: it stands on the analyzer's side of the calibration
    plane. `removed` pads were in line at calibration and are not now.
    """

    at_hz: float
    source_dbm: float | None
    input_pads: tuple[PadInLine, ...]
    output_pads: tuple[PadInLine, ...]
    input_removed: tuple[PadInLine, ...]
    output_removed: tuple[PadInLine, ...]
    drive_dbm: float | None
    device_output_dbm: float | None
    port2_dbm: float | None
    port2_compression_dbm: float | None = None
    port2_damage_dbm: float | None = None


@dataclass(frozen=True, eq=False)
class SweepResult:
    """One sweep of a device: as read (`raw`), at the device's own ports (`sweep`), and the line it went through."""

    file: str
    raw: Sweep
    sweep: Sweep
    path: SignalPath
    input_correction_db: float
    output_correction_db: float
    noise_db: float | None = None
    """Noise below the peak of S21, in dB (a positive number; None where it cannot be told)."""

    @property
    def drive_dbm(self) -> float | None:
        """Power at the device input at the design frequency."""
        return self.path.drive_dbm


@dataclass(frozen=True)
class Figure:
    """One extracted number with its unit and interval.

    `value` is None where the figure cannot be known; a finding then says why. `bound` says that `value` is only a
    limit. `low`, `high`, `confidence` and `standard_uncertainty` are None until uncertainty has been worked out.
    """

    id: str
    value: float | None
    unit: str
    low: float | None = None
    high: float | None = None
    confidence: float | None = None
    bound: Bound | None = None
    standard_uncertainty: float | None = None
    budget: Mapping[str, float] = field(default_factory=dict)
    """Share of each source of doubt in the variance; the shares sum to one."""
    parameters: Mapping[str, float | tuple[float, float]] = field(default_factory=dict)
    """What the figure was asked for (`at_hz`, `over_hz`, `between_db`) or extracted with (`aperture_hz`)."""

    @property
    def key(self) -> str:
        """Name of the figure among a device's figures: its id, and its parameter where the target gave one."""
        if "at_hz" in self.parameters and self.id == "rejection":
            return f"{self.id} at {format_si(float(self.parameters['at_hz']), 'Hz', 6)}"  # type: ignore[arg-type]
        for name, unit in (("over_hz", "Hz"), ("between_db", "dB")):
            pair = self.parameters.get(name)
            if isinstance(pair, tuple):
                low, high = (format_si(v, unit, 6) if unit == "Hz" else f"{v:g} dB" for v in pair)
                word = "over" if name == "over_hz" else "between"
                return f"{self.id} {word} {low} to {high}"
        return self.id


@dataclass(frozen=True)
class TargetResult:
    """A target and how the figure stands against it; `probability` is None until uncertainty is in."""

    figure: str
    id: str
    unit: str
    min: float | None
    max: float | None
    verdict: Verdict
    probability: float | None = None
    advice: str | None = None


@dataclass(frozen=True)
class CompressionPoint:
    """One sweep against the reference sweep; compression is reference gain less this gain, pads already out."""

    file: str
    drive_dbm: float | None
    output_dbm: float | None
    gain_db: float
    compression_db: float
    phase_change_deg: float
    compression_at_peak_db: float
    worst_db: float
    worst_at_hz: float
    compressed: bool


@dataclass(frozen=True)
class Compression:
    """All sweeps of a device by drive, lowest first, against the reference sweep."""

    at_hz: float
    peak_hz: float
    reference: str
    reason: str
    points: tuple[CompressionPoint, ...]


@dataclass(frozen=True)
class Summary:
    """What a reader must find first: the verdict, why, and what to do next; one sentence each."""

    verdict: Verdict
    reason: str
    next_step: str


@dataclass(frozen=True, eq=False)
class DeviceResult:
    """Everything worked out for one device."""

    name: str
    kind: Kind
    design_hz: float
    design_stated: bool
    window_hz: tuple[float, float] | None
    reference_sweep: str
    sweeps: tuple[SweepResult, ...]
    figures: Mapping[str, Figure]
    targets: tuple[TargetResult, ...]
    compression: Compression | None
    findings: tuple[Finding, ...]
    summary: Summary
    drive: DriveStudy | None = None
    """What the sweeps say about drive; None where they have no span in common, or the device is passive."""
    assumptions: tuple[str, ...] = ()
    """Widths of doubts that the sheet does not state and that were assumed, a phrase for each."""
    trials: int = 0
    """Trials behind the intervals; 0 where there are none."""

    @property
    def verdict(self) -> Verdict:
        """The worst verdict of the device's targets; 'none' where it has none."""
        return self.summary.verdict

    @property
    def reference(self) -> SweepResult:
        """The sweep that figures were taken from."""
        return next(sweep for sweep in self.sweeps if sweep.file == self.reference_sweep)


@dataclass(frozen=True, eq=False)
class BenchResult:
    """A whole bench session."""

    title: str
    operator: str
    date: str
    sheet: Path | None
    sheet_sha256: str
    version: str
    made_at: str
    devices: tuple[DeviceResult, ...]
