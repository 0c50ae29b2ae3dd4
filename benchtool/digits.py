"""Figures and targets in; the words and numbers that stand for them wherever they are shown out.

A figure is printed to two digits of its own standard uncertainty where that is known, else to the digits that a
careful bench measurement can carry.
"""

from __future__ import annotations

import math
import re
from typing import Final

from benchtool.model import Figure, TargetResult

__all__ = [
    "budget_text",
    "decibels",
    "figure_label",
    "interval_text",
    "level_text",
    "limits_text",
    "probability_text",
    "quantity",
    "stated",
    "value_text",
]

_PREFIXES: Final = ((1e9, "G"), (1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "µ"), (1e-9, "n"), (1e-12, "p"))
_SCALED: Final = ("Hz", "s", "ohm")
_SIGNIFICANT: Final = {"Hz": 5, "s": 4, "ohm": 4, "": 3}
_DECIMALS: Final = {"dB": 2, "dBm": 1, "deg": 1}
_SPELLING: Final = {
    "loaded_q": "loaded Q",
    "stability_k": "stability K",
    "stability_mu": "stability µ",
    "input_p1db": "input P1dB",
    "output_p1db": "output P1dB",
}
_FIGURE_DIGITS: Final = {
    **dict.fromkeys(("input_return_loss", "output_return_loss", "reverse_isolation", "rejection"), 1),
    "bandwidth": 4,
}
"""Figures that are known less well, or wanted less finely, than their unit would have it."""
_UNIT_SIGN: Final = {"deg": "°", "ohm": "Ω"}


def figure_label(key: str) -> str:
    """Return the name of a figure as the page writes it.

    >>> figure_label("rejection at 10.7 MHz"), figure_label("loaded_q")
    ('rejection at 10.7 MHz', 'loaded Q')
    >>> figure_label("ripple over 21 MHz to 22 MHz")
    'ripple over 21 to 22 MHz'
    """
    name, _, rest = key.partition(" ")
    words = _SPELLING.get(name, name.replace("_", " "))
    # '21 MHz to 22 MHz' says MHz twice.
    rest = re.sub(r" (\w+) to (\S+) \1$", r" to \2 \1", rest)
    return f"{words} {rest}" if rest else words


def _scale(value: float, unit: str) -> tuple[float, str]:
    """Return the factor and the unit with its prefix in which `value` lies between 1 and 1000."""
    sign = _UNIT_SIGN.get(unit, unit)
    if unit not in _SCALED or value == 0 or not math.isfinite(value):
        return 1.0, sign
    # Rounded first, so that 999.9996 kHz becomes 1 MHz and not 1000 kHz.
    size = float(f"{abs(value):.5g}")
    factor, prefix = next((p for p in _PREFIXES if size >= p[0]), _PREFIXES[-1])
    return factor, prefix + sign


def _decimals(value: float, unit: str, factor: float, uncertainty: float | None, digits: int | None = None) -> int:
    if uncertainty is not None and uncertainty > 0 and math.isfinite(uncertainty):
        return min(6, 1 - math.floor(math.log10(uncertainty / factor)))
    if unit in _DECIMALS:
        return _DECIMALS[unit] if digits is None else digits
    size = float(f"{abs(value) / factor:.5g}")
    significant = _SIGNIFICANT.get(unit, 4) if digits is None else digits
    return max(0, significant - 1 - (math.floor(math.log10(size)) if size else 0))


def _plain(value: float, decimals: int) -> str:
    text = f"{round(value, decimals):.{max(0, decimals)}f}"
    return text.replace("-", "−") if float(text) else text.replace("-", "")


def _join(number: str, unit: str) -> str:
    return f"{number}{unit}" if unit in ("", "°") else f"{number} {unit}"


def _short(value: float) -> str:
    return f"{value:.6g}".replace("-", "−")


def stated(value: float, unit: str) -> str:
    """Return a value that somebody stated, with the digits that it has: '21.4 MHz'."""
    factor, sign = _scale(value, unit)
    return _join(_short(value / factor), sign)


def quantity(value: float, unit: str, uncertainty: float | None = None, digits: int | None = None) -> str:
    """Return a measured value with its unit; `digits` overrides the usual decimals (dB) or significant digits.

    >>> quantity(21.4e6, "Hz"), quantity(-3.0, "dBm"), quantity(40.123, "dB", 0.21), quantity(1.487e-6, "s")
    ('21.400 MHz', '−3.0 dBm', '40.12 dB', '1.487 µs')
    """
    factor, sign = _scale(value, unit)
    return _join(_plain(value / factor, _decimals(value, unit, factor, uncertainty, digits)), sign)


def value_text(figure: Figure | None) -> str:
    """Return the value of a figure: '40.12 dB', 'at least 1.2000 MHz', or 'not known'."""
    if figure is None or figure.value is None or not math.isfinite(figure.value):
        return "not known"
    text = quantity(figure.value, figure.unit, figure.standard_uncertainty, _FIGURE_DIGITS.get(figure.id))
    return f"{figure.bound} {text}" if figure.bound else text


def interval_text(figure: Figure | None) -> str:
    """Return the interval of a figure in the unit of its value, '39.70 to 40.50', or '' where there is none."""
    if figure is None or figure.value is None or figure.low is None or figure.high is None:
        return ""
    factor, _ = _scale(figure.value, figure.unit)
    spread = figure.standard_uncertainty or abs(figure.high - figure.low) / 4.0
    decimals = _decimals(figure.value, figure.unit, factor, spread)
    low, high = (_plain(v / factor, decimals) for v in (figure.low, figure.high))
    return f"{low} to {high}"


def budget_text(figure: Figure | None, most: int = 3) -> str:
    """Return the largest shares of a figure's budget: 'pad a20 70 %, mismatch 22 %, reading 8 %'."""
    if figure is None:
        return ""
    shares = [(source, share) for source, share in figure.budget.items() if share >= 0.005]
    return ", ".join(f"{source} {share:.0%}".replace("%", " %") for source, share in shares[:most])


def limits_text(target: TargetResult) -> str:
    """Return what a target asks for: '≥ 38 dB', '21.25 to 21.55 MHz', '600 kHz to 1.1 MHz'."""
    parts = []
    for limit in (target.min, target.max):
        if limit is not None:
            factor, sign = _scale(limit, target.unit)
            parts.append((_short(limit / factor), sign))
    if target.min is not None and target.max is not None:
        (low, low_unit), (high, high_unit) = parts
        start = low if low_unit == high_unit else _join(low, low_unit)
        return f"{start} to {_join(high, high_unit)}"
    if not parts:
        return "—"
    return f"{'≥' if target.min is not None else '≤'} {_join(*parts[0])}"


def level_text(level_dbm: float | None) -> str:
    """Return a level, or the words 'level unknown'."""
    return "level unknown" if level_dbm is None else quantity(level_dbm, "dBm")


def decibels(value_db: float) -> str:
    """Return decibels with no more decimals than they need, two at most: '20 dB', '9.63 dB'."""
    text = f"{value_db:.2f}".rstrip("0").rstrip(".").replace("-", "−")
    return f"{'0' if text in ('−0', '') else text} dB"


def probability_text(share: float) -> str:
    """Return a probability in percent to three digits, '77.8 %'; nothing that was drawn is certain."""
    if share > 0.999:
        return "> 99.9 %"
    return "< 0.1 %" if share < 0.001 else f"{100 * share:.3g} %"
