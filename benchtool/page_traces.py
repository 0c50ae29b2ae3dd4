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
_COMPRESSED: Final[Dash] = (0.0, (4.0, 1.6))
_UNPROVEN: Final[Dash] = (0.0, (1.2, 1.0))


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
    looks = []
    for index, sweep in enumerate(ordered):
        reference = index == 0
        point = points.get(sweep.file)
        dash: Dash = "-"
        if point is not None and point.compressed:
            dash = _COMPRESSED
        elif not reference and index > len(_COLOURS):
            dash = _UNPROVEN
        color = INK if reference else _COLOURS[(index - 1) % len(_COLOURS)]
        looks.append(Trace(index + 1, sweep, reference, point, color, 1.5 if reference else 0.9, dash))
    return tuple(looks)
