"""A device in; how each of its sweeps is drawn out, the same in the list of sweeps and in every diagram.

The reference sweep is heavy, black and unbroken, and lies under the others, which are thin, so that a sweep that agrees
with it is seen along its middle; a compressed sweep is dashed; every sweep carries its number.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from benchtool.model import CompressionPoint, DeviceResult, SweepResult
from benchtool.page_paper import BLUE, GREEN, INK, ORANGE, PURPLE, SKY, VERMILLION, Dash

__all__ = ["Trace", "down_word", "traces"]

_REFERENCE_PT, _ALONE_PT, _OTHER_PT = 2.0, 1.4, 0.9
_COLOURS: Final = (BLUE, VERMILLION, GREEN, PURPLE, ORANGE, SKY)
_COMPRESSED: Final[tuple[Dash, ...]] = ((0.0, (4.0, 1.6)), (0.0, (7.0, 1.8)), (0.0, (2.4, 1.2)))
_STRAIGHT: Final[tuple[Dash, ...]] = ("-", (0.0, (6.0, 1.2, 1.0, 1.2)), (0.0, (1.0, 0.9)))
"""Dash and dot for sweeps that are not compressed, so that grey print tells them apart too."""


@dataclass(frozen=True, eq=False)
class Trace:
    """One sweep and its look."""

    number: int
    sweep: SweepResult
    reference: bool
    point: CompressionPoint | None
    color: str
    width: float
    dash: Dash
    aside: str
    """Why its gain is not the device's, in a word or two, where that is another thing than compression; else empty."""

    @property
    def compressed(self) -> bool:
        """Whether the sweep is down on the reference as a compressed one is."""
        return self.point is not None and self.point.compressed and not self.aside

    @property
    def height(self) -> float:
        """How far above the others it is drawn: the reference lowest, then unbroken lines, then broken ones."""
        return 2.0 if self.reference else 2.2 if self.dash == "-" else 2.4


def down_word(device: DeviceResult) -> str:
    """Return what to call a sweep whose gain is down: 'compressed', unless nobody can tell that it is."""
    unknown = device.drive is not None and device.drive.cause in ("input-limited-or-pad", "cause-unclear")
    return "over 1 dB down" if unknown else "compressed"


def traces(device: DeviceResult) -> tuple[Trace, ...]:
    """Return the look of every sweep: the reference first, then by rising drive as the list has them."""
    points = {point.file: point for point in device.compression.points} if device.compression else {}
    aside = device.drive.set_aside if device.drive is not None else {}
    unknown = float("inf")
    ordered = sorted(
        device.sweeps,
        key=lambda s: (s.file != device.reference_sweep, unknown if s.drive_dbm is None else s.drive_dbm),
    )
    width = _REFERENCE_PT if len(ordered) > 1 else _ALONE_PT
    looks: list[Trace] = []
    for index, sweep in enumerate(ordered):
        reference = index == 0
        point = points.get(sweep.file)
        why = aside.get(sweep.file, "")
        dashes = _COMPRESSED if point is not None and point.compressed and not why else _STRAIGHT
        dash = "-" if reference else dashes[(index - 1) % len(dashes)]
        color = INK if reference else _COLOURS[(index - 1) % len(_COLOURS)]
        looks.append(Trace(index + 1, sweep, reference, point, color, width if reference else _OTHER_PT, dash, why))
    return tuple(looks)
