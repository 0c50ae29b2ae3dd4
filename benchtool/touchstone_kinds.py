"""Z, Y, H or G parameters of a two-port in, its S parameters out, whatever the two reference impedances.

Formulas: D. A. Frickey, IEEE Trans. MTT 42(2), 1994, 205-211, for parameters normalised to the reference. Those that
are not are normalised first, each voltage by the root of its port's impedance and each current times it, so that two
different impedances need no formulas of their own.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Final, TypeAlias

from benchtool.model import ComplexArray

__all__ = ["TO_S", "normalise"]

Four: TypeAlias = tuple[ComplexArray, ComplexArray, ComplexArray, ComplexArray]
"""N11, N21, N12, N22, each (n,)."""


def normalise(kind: str, parameters: Four, reference_ohm: tuple[float, float]) -> Four:
    """Return parameters in ohm, siemens or neither as parameters normalised to the reference of each port.

    With v = V / sqrt(R) and i = I sqrt(R) at each port, Vi = zij Ij gives zij / sqrt(Ri Rj), and so on.
    """
    n11, n21, n12, n22 = parameters
    first, second = reference_ohm
    middle = math.sqrt(first) * math.sqrt(second)
    step = math.sqrt(second) / math.sqrt(first)
    if kind == "Z":
        return n11 / first, n21 / middle, n12 / middle, n22 / second
    if kind == "Y":
        return n11 * first, n21 * middle, n12 * middle, n22 * second
    if kind == "H":
        return n11 / first, n21 * step, n12 * step, n22 * second
    return n11 * first, n21 / step, n12 / step, n22 / second


def _z_to_s(z11: ComplexArray, z21: ComplexArray, z12: ComplexArray, z22: ComplexArray) -> Four:
    """Return S11, S21, S12, S22 of impedances normalised to the reference (Frickey 1994, table I)."""
    d = (z11 + 1) * (z22 + 1) - z12 * z21
    return ((z11 - 1) * (z22 + 1) - z12 * z21) / d, 2 * z21 / d, 2 * z12 / d, ((z11 + 1) * (z22 - 1) - z12 * z21) / d


def _y_to_s(y11: ComplexArray, y21: ComplexArray, y12: ComplexArray, y22: ComplexArray) -> Four:
    """Return S11, S21, S12, S22 of admittances normalised to the reference (Frickey 1994, table I)."""
    d = (1 + y11) * (1 + y22) - y12 * y21
    return ((1 - y11) * (1 + y22) + y12 * y21) / d, -2 * y21 / d, -2 * y12 / d, ((1 + y11) * (1 - y22) + y12 * y21) / d


def _h_to_s(h11: ComplexArray, h21: ComplexArray, h12: ComplexArray, h22: ComplexArray) -> Four:
    """Return S11, S21, S12, S22 of hybrid parameters, h11 over R and h22 times R (Frickey 1994, table I)."""
    d = (h11 + 1) * (h22 + 1) - h12 * h21
    return ((h11 - 1) * (h22 + 1) - h12 * h21) / d, -2 * h21 / d, 2 * h12 / d, ((1 + h11) * (1 - h22) + h12 * h21) / d


def _g_to_s(g11: ComplexArray, g21: ComplexArray, g12: ComplexArray, g22: ComplexArray) -> Four:
    """Return S11, S21, S12, S22 of inverse hybrid parameters, g11 times R and g22 over R.

    From I1 = g11 V1 + g12 I2 and V2 = g21 V1 + g22 I2 with Vi = ai + bi and Ii = ai - bi; the G matrix is the inverse
    of the H matrix, whose conversion is published.
    """
    d = (g11 + 1) * (g22 + 1) - g12 * g21
    return ((1 - g11) * (g22 + 1) + g12 * g21) / d, 2 * g21 / d, -2 * g12 / d, ((g11 + 1) * (g22 - 1) - g12 * g21) / d


TO_S: Final[Mapping[str, Callable[[ComplexArray, ComplexArray, ComplexArray, ComplexArray], Four]]] = {
    "Z": _z_to_s,
    "Y": _y_to_s,
    "H": _h_to_s,
    "G": _g_to_s,
}
"""Gives S11, S21, S12, S22 of normalised parameters in the same order."""
