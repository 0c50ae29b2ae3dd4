"""Target tables of one device in; targets with their limits in SI units out, or faults.

A target is written as limits, ``gain = { min = 38 }``, or as ``{ nominal = …, tolerance = … }``. A figure with
parameters takes them in the same table, and several tables in a list: ``rejection = [{ at = "10.7 MHz", min = 30 }]``.
"""

from __future__ import annotations

from types import MappingProxyType
from typing import Any, Final

from pydantic_core import PydanticCustomError

from benchtool.model import Kind
from benchtool.sheet_faults import FaultLog, Key, Table, fault, shown, suggestion
from benchtool.sheet_values import Reader, decibels, frequency, number, pair, time
from benchtool.units import HALF_POWER_DB

__all__ = ["FIGURE_PARAMETERS", "FIGURE_UNITS", "TargetSpec", "read_targets"]

FIGURE_UNITS: Final = MappingProxyType(
    {
        "gain": "dB",
        "insertion_loss": "dB",
        "peak_gain": "dB",
        "peak_frequency": "Hz",
        "lower_edge": "Hz",
        "upper_edge": "Hz",
        "bandwidth": "Hz",
        "centre_frequency": "Hz",
        "loaded_q": "",
        "group_delay": "s",
        "phase": "deg",
        "input_return_loss": "dB",
        "output_return_loss": "dB",
        "reverse_isolation": "dB",
        "stability_k": "",
        "stability_mu": "",
        "ripple": "dB",
        "shape_factor": "",
        "rejection": "dB",
        "delay_variation": "s",
        "phase_linearity": "deg",
        "input_p1db": "dBm",
        "output_p1db": "dBm",
    }
)
"""Every figure that a target may name, and its unit."""

FIGURE_PARAMETERS: Final = MappingProxyType(
    {
        "rejection": "at",
        "ripple": "over",
        "delay_variation": "over",
        "phase_linearity": "over",
        "shape_factor": "between",
    }
)
"""Figures that need a parameter, and its key."""

_EXAMPLES: Final = {"at": 'at = "10.7 MHz"', "over": 'over = ["21.3 MHz", "21.5 MHz"]', "between": "between = [60, 3]"}
_LIMIT_READERS: Final[dict[str, Reader]] = {
    "dB": decibels(-300.0, 300.0),
    "dBm": decibels(-200.0, 100.0, "dBm"),
    "Hz": frequency,
    "s": time,
    "deg": number,
    "": number,
}
_LIMITS: Final = ("min", "max", "nominal", "tolerance")


class TargetSpec(Table):
    """What a figure should be: limits in the figure's unit, and the parameter it was asked for with."""

    figure: str
    min: float | None = None
    max: float | None = None
    at_hz: float | None = None
    over_hz: tuple[float, float] | None = None
    between_db: tuple[float, float] | None = None
    """Levels below the peak, the deeper one first; 3 stands for the half-power points."""


def read_targets(log: FaultLog, targets: dict[str, Any], at: Key, kind: Kind | None) -> tuple[TargetSpec, ...]:
    """Return the targets of a device of some kind, in the order they are written; notes every fault."""
    found: list[TargetSpec] = []
    for figure, written in targets.items():
        if not _known(log, figure, (*at, figure), kind):
            continue
        for place, table in _places(figure, written, (*at, figure)):
            target = _read_target(log, figure, table, place)
            if target is None:
                continue
            if any(_asks_for(other) == _asks_for(target) for other in found):
                log.add(place, "the same figure is asked for twice", "put both limits into one table")
            found.append(target)
    return tuple(found)


def _places(figure: str, written: object, key: Key) -> list[tuple[Key, object]]:
    """Return each target table of a figure with its place; only a figure with a parameter may have a list of them."""
    if isinstance(written, list) and figure in FIGURE_PARAMETERS:
        return [((*key, place), table) for place, table in enumerate(written)]
    return [(key, written)]


def _asks_for(target: TargetSpec) -> tuple[object, ...]:
    return target.figure, target.at_hz, target.over_hz, target.between_db


def _known(log: FaultLog, figure: str, key: Key, kind: Kind | None) -> bool:
    """Whether there is such a figure for such a device; notes a fault where there is not."""
    wrong = "gain" if kind == "filter" else "insertion_loss"
    if figure not in FIGURE_UNITS:
        log.add(key, "unknown figure", suggestion(figure, FIGURE_UNITS, f"the figures are {', '.join(FIGURE_UNITS)}"))
    elif kind is not None and figure == wrong:
        article = "an" if kind == "amplifier" else "a"
        if kind == "filter":
            log.add(key, "a filter has no gain", "write insertion_loss, as a positive number of dB")
        else:
            log.add(key, f"{article} {kind} has no insertion_loss", "write gain, negative where there is loss")
    else:
        return True
    return False


def _read_target(log: FaultLog, figure: str, table: object, at: Key) -> TargetSpec | None:
    parameter = FIGURE_PARAMETERS.get(figure)
    inside = f"{_EXAMPLES[parameter]}, min = …" if parameter else "min = …"
    if not isinstance(table, dict):
        log.add(
            at, f"{shown(table)} is not a table", f"write {figure} = {{ {inside} }}, or max, or nominal and tolerance"
        )
        return None
    before = len(log.faults)
    values = _read_values(log, figure, table, at)
    if parameter and parameter not in table:
        log.add((*at, parameter), "missing", f"{figure} needs it: {_EXAMPLES[parameter]}")
    low, high = _limits(log, table, values, at) if len(log.faults) == before else (None, None)
    if len(log.faults) > before:
        return None
    return TargetSpec(
        figure=figure,
        min=low,
        max=high,
        at_hz=values.get("at"),
        over_hz=values.get("over"),
        between_db=values.get("between"),
    )


def _read_values(log: FaultLog, figure: str, table: dict[str, Any], at: Key) -> dict[str, Any]:
    """Return every value of a target's table in SI units; notes faults and unknown keys."""
    parameter = FIGURE_PARAMETERS.get(figure)
    limit = _LIMIT_READERS[FIGURE_UNITS[figure]]
    readers = dict.fromkeys(_LIMITS, limit) | ({parameter: _PARAMETER_READERS[parameter]} if parameter else {})
    values = {}
    for name, written in table.items():
        if name in readers:
            try:
                values[name] = readers[name](written)
            except PydanticCustomError as error:
                context = error.context or {}
                log.add((*at, name), str(context["found"]), str(context["remedy"]))
        elif name in _EXAMPLES:
            log.add((*at, name), f"{figure} takes no '{name}'", "delete it")
        else:
            log.add((*at, name), "unknown key", suggestion(name, readers, f"the keys here are {', '.join(readers)}"))
    return values


def _limits(log: FaultLog, table: dict[str, Any], values: dict[str, Any], at: Key) -> tuple[float | None, float | None]:
    """Return the lower and the upper limit of a target whose values are sound; notes what does not fit together."""
    bounds = [name for name in ("min", "max") if name in values]
    around = [name for name in ("nominal", "tolerance") if name in values]
    if bounds and around:
        log.add(at, f"{around[0]} beside {bounds[0]}", "write either min and max, or nominal and tolerance")
    elif len(around) == 1:
        other = "tolerance" if around == ["nominal"] else "nominal"
        log.add((*at, other), "missing", f"write it beside {around[0]}, or write min and max instead")
    elif around:
        if values["tolerance"] <= 0.0:
            log.add((*at, "tolerance"), f"{shown(table['tolerance'])} leaves no room", "write a tolerance above zero")
        return values["nominal"] - values["tolerance"], values["nominal"] + values["tolerance"]
    elif not bounds:
        log.add(at, "no limit", "write min, max, or nominal and tolerance")
    elif len(bounds) == 2 and values["min"] > values["max"]:
        limits = f"min {shown(table['min'])} is above max {shown(table['max'])}"
        log.add(at, limits, "exchange them, or correct one")
    return values.get("min"), values.get("max")


def _span(value: object) -> tuple[float, float]:
    low, high = pair(frequency, '["21.3 MHz", "21.5 MHz"]')(value)
    if low >= high:
        raise fault("the lower frequency does not come first", 'write the lower one first: ["21.3 MHz", "21.5 MHz"]')
    return float(low), float(high)


def _depths(value: object) -> tuple[float, float]:
    deep, shallow = pair(decibels(0.0, 200.0), "[60, 3]")(value)
    if deep <= max(shallow, HALF_POWER_DB) or shallow <= 0.0:
        raise fault(f"{deep:g} and {shallow:g} dB make no shape", "write the deeper level first, such as [60, 3]")
    return float(deep), float(shallow)


_PARAMETER_READERS: Final[dict[str, Reader]] = {"at": frequency, "over": _span, "between": _depths}
