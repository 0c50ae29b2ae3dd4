"""Scattering parameters in; return loss, stability, gain between other impedances out.

Sources: D. M. Pozar, Microwave Engineering, 4th ed., ch. 12 (gains, K, Δ); M. L. Edwards, J. H. Sinsky, IEEE Trans.
MTT 40(12), 1992, 2303-2311 (µ); K. Kurokawa, IEEE Trans. MTT 13(2), 1965, 194-202 (power waves).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from benchtool.curves import Trace
from benchtool.level_search import LevelSearch
from benchtool.model import ComplexArray, FloatArray
from benchtool.units import from_db

__all__ = [
    "BURIED_UNCERTAINTY",
    "Stability",
    "buried_uncertainty",
    "renormalise",
    "stability",
    "transducer_gain",
    "worst_return_loss",
]

BURIED_UNCERTAINTY: Final = 0.3
"""Uncertainty of a reflection magnitude above which a return loss read through pads says nothing."""


def worst_return_loss(search: LevelSearch, reflection: Trace) -> FloatArray:
    """Return the smallest return loss in dB over a stretch, (...,), of a reflection or copies of it."""
    return -search.levels(reflection).highest()[1]


def buried_uncertainty(correction_db: float, directivity_db: float) -> float:
    """Return the uncertainty of a reflection magnitude read through `correction_db` of added pads.

    The signal goes through the pads twice, so the directivity error grows by twice their loss: 10^((2A - D)/20).
    """
    return from_db(2.0 * correction_db - directivity_db)


@dataclass(frozen=True, eq=False)
class Stability:
    """Stability of a two-port at each frequency, (..., n): Rollett's K, |Δ| and the µ of Edwards and Sinsky."""

    k: FloatArray
    delta: FloatArray
    mu: FloatArray


def stability(s: ComplexArray) -> Stability:
    """Return K, |Δ| and µ of (..., 2, 2, n). All four parameters must have been measured (S12 = 0: K is infinite).

    Unconditionally stable: K > 1 and |Δ| < 1, or µ > 1.
    """
    s11, s12, s21, s22 = s[..., 0, 0, :], s[..., 0, 1, :], s[..., 1, 0, :], s[..., 1, 1, :]
    delta = s11 * s22 - s12 * s21
    loop = np.abs(s12 * s21)
    with np.errstate(divide="ignore", invalid="ignore"):
        k = (1.0 - np.abs(s11) ** 2 - np.abs(s22) ** 2 + np.abs(delta) ** 2) / (2.0 * loop)
        mu = (1.0 - np.abs(s11) ** 2) / (np.abs(s22 - delta * np.conj(s11)) + loop)
    return Stability(k, np.abs(delta), mu)


def transducer_gain(s: ComplexArray, gamma_source: complex, gamma_load: complex) -> FloatArray:
    """Return the transducer power gain (a ratio), (..., n), of (..., 2, 2, n) between two reflections.

    Source: Pozar, 4th ed., eq. (12.13).
    """
    s11, s12, s21, s22 = s[..., 0, 0, :], s[..., 0, 1, :], s[..., 1, 0, :], s[..., 1, 1, :]
    gamma_in = s11 + s12 * s21 * gamma_load / (1.0 - s22 * gamma_load)
    power = (1.0 - abs(gamma_source) ** 2) * np.abs(s21) ** 2 * (1.0 - abs(gamma_load) ** 2)
    loops = np.abs(1.0 - gamma_source * gamma_in) ** 2 * np.abs(1.0 - s22 * gamma_load) ** 2
    return np.asarray(power / loops)


def renormalise(s: ComplexArray, old_ohm: tuple[float, float], new_ohm: tuple[float, float]) -> ComplexArray:
    """Return (..., 2, 2, n) for other real reference impedances of its ports.

    Source: Kurokawa's power waves. With r = (Z' - Z)/(Z' + Z) at each port, R = diag(r) and A = diag(√(1 - r²)),
    S' = A⁻¹ (S - R)(1 - R S)⁻¹ A, written out for two ports.
    """
    r1, r2 = ((new - old) / (new + old) for old, new in zip(old_ohm, new_ohm, strict=True))
    s11, s12, s21, s22 = s[..., 0, 0, :], s[..., 0, 1, :], s[..., 1, 0, :], s[..., 1, 1, :]
    loop = (1.0 - r1 * s11) * (1.0 - r2 * s22) - r1 * r2 * s12 * s21
    n11 = ((s11 - r1) * (1.0 - r2 * s22) + r2 * s12 * s21) / loop
    n22 = ((s22 - r2) * (1.0 - r1 * s11) + r1 * s12 * s21) / loop
    through = np.sqrt((1.0 - r1**2) * (1.0 - r2**2)) / loop
    rows = [[n11, s12 * through], [s21 * through, n22]]
    return np.stack([np.stack(row, axis=-2) for row in rows], axis=-3)
