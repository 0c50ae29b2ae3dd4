"""A device in; how each of its sweeps is drawn out, the same in the list of sweeps and in every diagram.

The reference sweep is heavy, black and unbroken; a compressed sweep is dashed; every sweep carries its number.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from benchtool.model import CompressionPoint, DeviceResult, SweepResult
from benchtool.page_paper import BLUE, GREEN, INK, ORANGE, PURPLE, SKY, VERMILLION, Dash

__all__ = ["Trace", "traces"]

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

    @property
    def compressed(self) -> bool:
        """Whether the sweep was found compressed against the reference."""
        return self.point is not None and self.point.compressed


def traces(device: DeviceResult) -> tuple[Trace, ...]:
    """Return the look of every sweep: the reference first, then by rising drive as the list has them."""
    points = {point.file: point for point in device.compression.points} if device.compression else {}
    unknown = float("inf")
    ordered = sorted(
        device.sweeps,
        key=lambda s: (s.file != device.reference_sweep, unknown if s.drive_dbm is None else s.drive_dbm),
    )
    looks: list[Trace] = []
    for index, sweep in enumerate(ordered):
        reference = index == 0
        point = points.get(sweep.file)
        dashes = _COMPRESSED if point is not None and point.compressed else _STRAIGHT
        dash = "-" if reference else dashes[(index - 1) % len(dashes)]
        color = INK if reference else _COLOURS[(index - 1) % len(_COLOURS)]
        looks.append(Trace(index + 1, sweep, reference, point, color, 1.5 if reference else 0.9, dash))
    return tuple(looks)
