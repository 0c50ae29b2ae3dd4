"""Two one-way sweeps of one device in, the second taken with the device turned end for end; one two-port sweep out.

Turned round, the device has its port 2 at the analyzer's port 1: what then reads S11 is the device's S22, and S21 its
S12. Nothing else is worked out, so pads must stand in the same line for both, or be taken out of each before.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Final

import numpy as np

from benchtool.errors import SweepFileError
from benchtool.model import PARAMETERS, ComplexArray, Finding, Sweep
from benchtool.units import format_si

__all__ = ["join_reversed", "settle_ports"]

_TURNED: Final = {"S12": "S21", "S22": "S11"}
"""What the sweep of the turned device holds each parameter as."""
_SUBSTITUTIONS: Final = 30
_ROUNDING: Final = 1e-9
"""Relative difference of frequencies that were written in different units."""


def join_reversed(forward: Sweep, backward: Sweep) -> Sweep:
    """Return the forward sweep with those of S12 and S22 it lacks, taken from the sweep of the device end for end.

    Raises
    ------
    SweepFileError : the forward sweep lacks nothing, the backward one has not what is needed, or their frequencies or
        reference impedances differ.
    """
    lacking = [parameter for parameter in _TURNED if parameter not in forward.measured]
    if not lacking:
        found = f"{forward.name} has S12 and S22 already"
        raise _fault(backward, found, "leave the sweep of the turned device out, or give it as one of its own")
    for parameter in lacking:
        if _TURNED[parameter] not in backward.measured:
            found = f"{_TURNED[parameter]} was not measured, which would be the {parameter} of {forward.name}"
            raise _fault(backward, found, "sweep the turned device again with S11 and S21")
    _check_frequencies(forward, backward)
    if forward.reference_ohm != backward.reference_ohm[::-1]:
        here, there = ("{:g} and {:g} ohm".format(*sweep.reference_ohm) for sweep in (backward, forward))
        found = f"reference impedances of {here}, where the turned device of {forward.name} ({there}) needs the reverse"
        raise _fault(backward, found, "sweep both ways with the same set-up")
    s = np.array(forward.s)
    for parameter in lacking:
        s[_place(parameter)] = backward.s[_place(_TURNED[parameter])]
    measured = tuple(parameter for parameter in PARAMETERS if parameter in (*forward.measured, *lacking))
    return replace(forward, s=s, measured=measured, findings=_findings(forward, backward, lacking))


def _check_frequencies(forward: Sweep, backward: Sweep) -> None:
    """Refuse sweeps over other frequencies; a parameter between two of them is for nobody to guess."""
    remedy = f"sweep both ways over the same points as {forward.name}"
    here, there = backward.frequency_hz, forward.frequency_hz
    if len(here) != len(there):
        raise _fault(backward, f"{len(here)} points, where {forward.name} has {len(there)}", remedy)
    differs = ~np.isclose(here, there, rtol=_ROUNDING, atol=0.0)
    if differs.any():
        point = int(np.argmax(differs))
        ours, theirs = (format_si(float(frequency_hz[point]), "Hz", 9) for frequency_hz in (here, there))
        found = f"point {point + 1} is at {ours}, where {forward.name} has {theirs}"
        raise _fault(backward, found, remedy)


def _findings(forward: Sweep, backward: Sweep, lacking: list[str]) -> tuple[Finding, ...]:
    """Return what was said of both sweeps, but for what each lacks, and that they were joined."""
    kept = [finding for finding in (*forward.findings, *backward.findings) if finding.code != "one-path"]
    message = f"{forward.name}: {' and '.join(lacking)} come from {backward.name}, the device turned end for end"
    advice = "be sure that the line, the drive and the bias were the same in both"
    return (*kept, Finding("joined-sweep", "note", message, advice, forward.name))


def _place(parameter: str) -> tuple[int, int]:
    return int(parameter[1]) - 1, int(parameter[2]) - 1


def _fault(backward: Sweep, found: str, remedy: str) -> SweepFileError:
    return SweepFileError(backward.path or backward.name, found, remedy)


def settle_ports(joined: Sweep, behind: ComplexArray) -> Sweep:
    """Return a joined sweep with what stood behind the device taken out of all four parameters, exactly.

    Swept one way, a device reads Γ = S11 + S12 S21 q/(1 - S22 q) and T = S21/(1 - S22 q), with q the reflection of
    the pads behind it; turned round, the same with its ports exchanged. Both ways together settle all four by
    repeated substitution, since |q| is small.

    Parameters
    ----------
    joined : from :func:`join_reversed`, each sweep with the pads in front of the device already out
    behind : (n,) the reflection q
    """
    if not np.any(behind):
        return joined
    one_way, turned = joined.s[[0, 1], 0], joined.s[[1, 0], 1]
    s11, s21, s22, s12 = one_way[0], one_way[1], turned[0], turned[1]
    for _ in range(_SUBSTITUTIONS):
        loop1, loop2 = 1.0 - s11 * behind, 1.0 - s22 * behind
        s21, s12 = one_way[1] * loop2, turned[1] * loop1
        s11, s22 = one_way[0] - s12 * s21 * behind / loop2, turned[0] - s12 * s21 * behind / loop1
    return replace(joined, s=np.array([[s11, s12], [s21, s22]]))
