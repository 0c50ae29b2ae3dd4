"""A Sweep in, its Touchstone text out, version 1 or 2; reading the text gives the same numbers to the bit."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal, TypeAlias

import numpy as np

from benchtool.errors import RequestError
from benchtool.model import PARAMETERS, FloatArray, NoiseBlock, Sweep

__all__ = ["Version", "format_sweep"]

Version: TypeAlias = Literal[1, 2]


def format_sweep(sweep: Sweep, *, comments: Sequence[str] = (), version: Version = 1) -> str:
    """Return the sweep as Touchstone text of version 1 or 2, in Hz, S and RI.

    Reading it gives the same numbers to the bit, but for the optimum Γ and, in version 1, the Rn of a noise block,
    which come back to within rounding. Two different reference impedances need version 2.

    Raises
    ------
    RequestError : the format cannot hold the sweep.
    """
    _check_can_be_written(sweep, version)
    lines = [f"! {line}".rstrip() for comment in comments for line in comment.splitlines() or [""]]
    option_line = f"# Hz S RI R {sweep.reference_ohm[0]!r}".removesuffix(".0")
    rows = _lines(_network_rows(sweep))
    noise = _lines(_noise_rows(sweep.noise, sweep.reference_ohm[0] if version == 1 else 1.0)) if sweep.noise else []
    heading = "! Hz  S11  S21  S12  S22, real and imaginary"
    noise_heading = f"! noise: Hz  minimum dB  optimum source reflection  angle  {'Rn / R' if version == 1 else 'Rn'}"
    if version == 1:
        lines += [option_line, heading, *rows]
        lines += [noise_heading, *noise] if noise else []
    else:
        lines += ["[Version] 2.0", option_line, "[Number of Ports] 2", "[Two-Port Data Order] 21_12"]
        lines.append(f"[Number of Frequencies] {len(rows)}")
        lines += [f"[Number of Noise Frequencies] {len(noise)}"] if noise else []
        lines.append("[Reference] {!r} {!r}".format(*sweep.reference_ohm))
        lines += ["[Matrix Format] Full", "[Network Data]", heading, *rows]
        lines += ["[Noise Data]", noise_heading, *noise] if noise else []
        lines.append("[End]")
    return "\n".join(lines) + "\n"


def _network_rows(sweep: Sweep) -> FloatArray:
    """Return (n, 9) numbers: frequency, then S11 S21 S12 S22 as real and imaginary parts."""
    pairs = sweep.s.transpose(2, 1, 0).reshape(-1, len(PARAMETERS)).view(np.float64)
    return np.column_stack([sweep.frequency_hz, pairs])


def _noise_rows(block: NoiseBlock, unit_ohm: float) -> FloatArray:
    """Return (m, 5) numbers: frequency, least noise figure, magnitude and angle of the optimum Γ, Rn in `unit_ohm`."""
    magnitude, angle_deg = np.abs(block.gamma_opt), np.rad2deg(np.angle(block.gamma_opt))
    return np.column_stack([block.frequency_hz, block.nf_min_db, magnitude, angle_deg, block.rn_ohm / unit_ohm])


def _lines(rows: FloatArray) -> list[str]:
    return [" ".join(map(repr, row)) for row in rows.tolist()]


def _check_can_be_written(sweep: Sweep, version: Version) -> None:
    first, second = sweep.reference_ohm
    if first != second and version == 1:
        found = f"{sweep.name} has {first:g} ohm at port 1 and {second:g} ohm at port 2, and version 1 holds but one"
        raise RequestError(found, "write version 2, or bring both ports to one impedance first")
    if not len(sweep.frequency_hz) or not np.isfinite(sweep.s).all():
        raise RequestError(f"{sweep.name} has no points, or some that are not finite", "leave those frequencies out")
    if version == 1 and sweep.noise is not None and sweep.noise.frequency_hz[0] > sweep.frequency_hz[-1]:
        found = f"the noise block of {sweep.name} starts above its last frequency, where version 1 cannot tell it"
        raise RequestError(found, "write version 2, or leave the noise block out")
