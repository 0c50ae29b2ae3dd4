"""Text with units in, SI numbers out, and back; decibels; the constants that are definitions.

Quantities are read by QuantiPhy, which knows the SI prefixes; what this module adds is the refusal of everything
that has two readings (a comma, a missing or foreign unit, ``mhz``).
"""

from __future__ import annotations

import math
import unicodedata
from typing import Final, overload

import numpy as np
from numpy.typing import NDArray
from quantiphy import QuantiPhyError, Quantity

__all__ = [
    "HALF_POWER_DB",
    "dbm_to_volts",
    "format_si",
    "from_db",
    "parse_quantity",
    "to_db",
    "volts_to_dbm",
    "wrap_degrees",
]

HALF_POWER_DB: Final = 10.0 * math.log10(2.0)
"""Half power in dB, 3.0103: a literal 3 would put 0.25 % into every loaded Q."""

_SPELLINGS: Final = {"Ω": "ohm", "Ohm": "ohm", "ohms": "ohm", "Ohms": "ohm"}
_DIMENSIONS: Final = {
    "Hz": "a frequency such as '21.4 MHz'",
    "s": "a time such as '95 ps'",
    "ohm": "an impedance such as '50 ohm'",
}


def parse_quantity(text: str | float, unit: str) -> float:
    """Return `text` as an SI number of `unit` ('Hz', 's' or 'ohm').

    A plain number is taken to be SI already. Text needs its unit: '21.4 MHz', '95 ps', '50 ohm'.

    Raises
    ------
    ValueError : the text has no single reading; the message says what was found and what is wanted.

    >>> parse_quantity("21.4 MHz", "Hz")
    21400000.0
    >>> parse_quantity(50, "ohm")
    50.0
    >>> parse_quantity("21,4 MHz", "Hz")
    Traceback (most recent call last):
    ValueError: '21,4 MHz' has a comma; write a decimal point: a frequency such as '21.4 MHz'
    """
    wanted = _DIMENSIONS[unit]
    if isinstance(text, bool):
        raise ValueError(f"{text} is not {wanted}")  # noqa: TRY004  pydantic turns ValueError into a fault
    if isinstance(text, int | float):
        value = float(text)
    else:
        if "," in text or "_" in text:
            mark = "a comma" if "," in text else "an underscore"
            raise ValueError(f"{text!r} has {mark}; write a decimal point: {wanted}")
        try:
            quantity = Quantity(unicodedata.normalize("NFKC", text))
        except QuantiPhyError:
            raise ValueError(f"{text!r} is not {wanted}") from None
        found = _SPELLINGS.get(quantity.units, quantity.units)
        if found != unit:
            have = f"has the unit {quantity.units!r}" if quantity.units else "has no unit"
            raise ValueError(f"{text!r} {have}; write {wanted}")
        value = float(quantity)
    if not math.isfinite(value):
        raise ValueError(f"{text!r} is not finite; write {wanted}")
    return value


def format_si(value: float, unit: str, digits: int = 4) -> str:
    """Return `value` with an SI prefix and at most `digits` significant digits: 21.4 MHz, 1.49 µs.

    >>> format_si(21.4e6, "Hz"), format_si(1.48743e-6, "s")
    ('21.4 MHz', '1.487 µs')
    """
    text: str = Quantity(value, units=unit).render(prec=digits - 1)
    return text.replace(" u", " µ")


@overload
def to_db(ratio: float | complex) -> float: ...
@overload
def to_db(ratio: NDArray[np.generic]) -> NDArray[np.float64]: ...
def to_db(ratio: float | complex | NDArray[np.generic]) -> float | NDArray[np.float64]:
    """Return 20 log10 of the magnitude of an amplitude ratio, in dB; minus infinity for zero."""
    with np.errstate(divide="ignore"):
        decibels: float | NDArray[np.float64] = 20.0 * np.log10(np.abs(ratio))
    return decibels


@overload
def from_db(decibels: float) -> float: ...
@overload
def from_db(decibels: NDArray[np.float64]) -> NDArray[np.float64]: ...
def from_db(decibels: float | NDArray[np.float64]) -> float | NDArray[np.float64]:
    """Return the amplitude ratio of `decibels`."""
    ratio: float | NDArray[np.float64] = 10.0 ** (decibels / 20.0)
    return ratio


def dbm_to_volts(level_dbm: float, impedance_ohm: float = 50.0) -> float:
    """Return the rms voltage across `impedance_ohm` that takes `level_dbm` of power.

    >>> round(dbm_to_volts(0.0) * 1e3, 3)
    223.607
    """
    return math.sqrt(10.0 ** (level_dbm / 10.0) * 1e-3 * impedance_ohm)


def volts_to_dbm(volts_rms: float, impedance_ohm: float = 50.0) -> float:
    """Return the power in dBm that `volts_rms` puts into `impedance_ohm`."""
    return 10.0 * math.log10(volts_rms**2 / impedance_ohm / 1e-3)


@overload
def wrap_degrees(angle: float) -> float: ...
@overload
def wrap_degrees(angle: NDArray[np.float64]) -> NDArray[np.float64]: ...
def wrap_degrees(angle: float | NDArray[np.float64]) -> float | NDArray[np.float64]:
    """Return the angle in degrees brought into (−180, 180]."""
    wrapped: float | NDArray[np.float64] = 180.0 - np.mod(180.0 - angle, 360.0)
    return wrapped
