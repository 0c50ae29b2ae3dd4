"""The frozen results about drive and compression that travel between modules and to the page."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal, TypeAlias

from benchtool.aliases import Bound, FloatArray

__all__ = [
    "Basis",
    "CompressionMap",
    "DrivePoint",
    "DriveStudy",
    "Estimate",
    "NextSweep",
    "Onset",
    "PadEstimate",
    "Purpose",
    "ReferenceProof",
]

Basis: TypeAlias = Literal["interpolated", "fitted", "extrapolated", "bound", "none"]
"""What a 1 dB point rests on."""
Purpose: TypeAlias = Literal[
    "repeat", "measure-pad", "lift-signal", "relieve-receiver", "separate-causes", "prove-reference", "bracket-onset"
]
"""What a sweep is planned for."""


@dataclass(frozen=True)
class Estimate:
    """A value with its interval; `bound` says that the value is only a limit. None: cannot be known."""

    value: float | None
    low: float | None = None
    high: float | None = None
    bound: Bound | None = None


@dataclass(frozen=True)
class DrivePoint:
    """One sweep on the drive panel, at the design frequency."""

    file: str
    drive_dbm: float
    gain_db: Estimate
    compression_db: Estimate
    """Below the small-signal gain that all sweeps together point to."""
    uncompressed_gain_db: float
    """What this sweep would have shown without compression."""
    phase_change_deg: Estimate
    """Against the lowest drive."""
    phase_deg_per_db: float | None
    """Phase change for each dB of drive since the drive below; None for the lowest."""
    spoiled: bool
    """Whether the receiver or a change of the set-up may have spoiled it, so that the fit leaves it out."""


@dataclass(frozen=True)
class ReferenceProof:
    """Whether the reference is small-signal, and by how much its gain may read low."""

    file: str
    proven: bool
    reads_low_db: Estimate


@dataclass(frozen=True, eq=False)
class Onset:
    """Where compression sets in at the design frequency, and what it rests on."""

    at_hz: float
    confidence: float
    drives: int
    basis: Basis
    input_p1db_dbm: Estimate
    output_p1db_dbm: Estimate
    safe_drive_dbm: Estimate
    """`value` is where the drop is 0.1 dB; `low` is the highest drive that is safe at the stated confidence."""
    small_signal_gain_db: Estimate
    reference: ReferenceProof
    points: tuple[DrivePoint, ...]
    curve_drive_dbm: FloatArray
    curve_gain_db: FloatArray
    """(3, m): low, middle and high of the gain that the fit allows."""


@dataclass(frozen=True, eq=False)
class CompressionMap:
    """Compression over frequency and drive: `compression_db` (k, j), below the lowest drive's gain."""

    frequency_hz: FloatArray
    drive_dbm: FloatArray
    files: tuple[str, ...]
    compression_db: FloatArray


@dataclass(frozen=True)
class PadEstimate:
    """What a suspect pad would truly lose, in dB, with its interval, if the pad alone explains the sweeps."""

    name: str
    stated_db: float
    value_db: float
    low_db: float
    high_db: float
    probability: float
    """That this pad, and nothing else, is the cause."""


@dataclass(frozen=True)
class NextSweep:
    """One sweep worth taking: the whole line on each side, analyzer outwards, expected levels, what it settles.

    Levels are nominal, at the highest gain seen, in dBm; None where the source level is not known. `headroom_db` is
    what is left at port 2 below the limit, doubts taken off; None where no limit is stated.
    """

    input_pads: tuple[str, ...]
    output_pads: tuple[str, ...]
    source_dbm: float | None
    drive_dbm: float | None
    device_output_dbm: float | None
    port2_dbm: float | None
    headroom_db: float | None
    settles: str
    cautions: tuple[str, ...]
    purpose: Purpose
    keeps_output: bool = False
    """Whether its output pads are those of the reference sweep."""


@dataclass(frozen=True, eq=False)
class DriveStudy:
    """What the sweeps of one device say about drive: the cause of gain changes, the onset, and what to sweep next."""

    cause: str | None
    """Code of the cause, or None where there is nothing to explain."""
    confidence: float
    """Probability of that cause among its rivals."""
    probabilities: Mapping[str, float]
    pads: tuple[PadEstimate, ...]
    odd_sweep: str | None
    """The sweep that did not repeat, where one stands out."""
    onset: Onset
    map: CompressionMap | None
    next_sweeps: tuple[NextSweep, ...]
    set_aside: Mapping[str, str] = field(default_factory=dict)
    """Sweeps whose gain the cause, and not compression of the device, explains: file, and why in a word or two."""
