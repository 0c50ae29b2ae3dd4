"""Scattering parameters of a file in; which of them were measured, and what no device can have read, out.

Which parameters were measured is worked out from the numbers, since the format cannot say it:

- A column of exact zeros is a placeholder; no receiver reads zero in every row. The one exception is a calculated
  matched line, S11 = S22 = 0 with S12 = S21.
- One number in every row is a placeholder too where it is one that no receiver holds to the last digit: S12 at or below
  -120 dB, S22 beside an S12 that is nothing, or both of them one.
- S12 equal to S21 to the last digit is what reciprocity looks like in calculated data and in data that an analyzer
  has averaged over both directions, so it is kept; but not with gain, where reciprocity has no part, and not beside
  a placeholder S22.
- S22 equal to S11 in two rows or more is a copy, unless S12 = S21 as well. Both together are what a calculated
  symmetric device looks like, and also what an analyzer with one path writes for any device. The second has noise,
  which two separate measurements could not share to the last digit: where noise shows, S12 and S22 are copies. Where
  none does they are kept, with a finding that says so.
"""

from __future__ import annotations

import math
from collections.abc import Collection
from typing import Final

import numpy as np

from benchtool.model import PARAMETERS, ComplexArray, Finding
from benchtool.touchstone_table import SweepTable
from benchtool.units import format_si, to_db

__all__ = ["doubtful_values", "measured_parameters"]

_GAIN: Final = 10.0 ** (0.5 / 20.0)
"""|S21| that no passive device reads, calibration errors included: 0.5 dB."""
_LIMITS_DB: Final = {"S11": 20.0, "S21": 100.0, "S12": 100.0, "S22": 20.0}
"""What no two-port shows on an analyzer: it would oscillate, or overload the receiver."""
_REFERENCE_OHM: Final = (1.0, 1000.0)
_FIXED_ROWS: Final = 3
_NOTHING: Final = 1e-6
"""|S12| of -120 dB, below what any receiver of a network analyzer resolves."""
_NOISE_ROWS: Final = 16
_NOISE_SHARE: Final = (5e-5, 0.1)
"""Roughness over the rms value: above what rounding to five digits leaves, below a phase turning 90° a row."""
_WHITE_GROWTH: Final = 1.4
"""Growth of the fifth difference over the fourth: 1.9 for noise, below one for a curve that the rows resolve."""


def measured_parameters(
    s: ComplexArray, missing: frozenset[str], name: str
) -> tuple[tuple[str, ...], tuple[Finding, ...]]:
    """Return which parameters were measured, and what to say of the others; the rules head this module.

    Those that the file has no numbers for are `missing`, and zero in `s`.
    """
    columns = {parameter: s[int(parameter[1]) - 1, int(parameter[2]) - 1] for parameter in PARAMETERS}
    s11, s21, s12, s22 = columns.values()
    zero = {parameter for parameter, column in columns.items() if not column.any()} - missing
    fixed = _fixed_placeholders(s12, s22) if zero.isdisjoint(("S11", "S21")) else set()
    absent = zero | fixed | missing
    # One row tells most files: the whole is compared where that is the same.
    same_transfer = "S21" not in absent and s12[0] == s21[0] and np.array_equal(s12, s21)
    same_match = len(s11) > 1 and "S11" not in absent and s22[0] == s11[0] and np.array_equal(s22, s11)
    gain = same_transfer and bool((np.abs(s21) > _GAIN).any())
    if absent == zero == {"S11", "S22"} and same_transfer and not gain and not _shows_noise(s21):
        zero, absent, same_match = set(), set(), True
    noisy = same_transfer and same_match and (_shows_noise(s11) or _shows_noise(s21))
    copied = {"S12"} if gain or noisy or (same_transfer and "S22" in absent) else set()
    if same_match and (not same_transfer or copied):
        copied.add("S22")
    measured = tuple(parameter for parameter in PARAMETERS if parameter not in absent | copied)
    if len(measured) < len(PARAMETERS):
        return measured, (_one_path(name, zero, copied - fixed, fixed, missing),)
    if same_transfer and same_match:
        return measured, (_symmetric(name),)
    return measured, ()


def _fixed_placeholders(s12: ComplexArray, s22: ComplexArray) -> set[str]:
    """Return which of S12 and S22 are one number in every row that no receiver reads: nothing at all, or all of it."""
    if len(s12) < _FIXED_ROWS or (s12 != s12[0]).any() or (s22 != s22[0]).any():
        return set()
    nothing = 0.0 < abs(s12[0]) <= _NOTHING or (s12[0] == 0.0 and s22[0] != 0.0)
    if nothing:
        return {"S22"} if s12[0] == 0.0 else {"S12", "S22"} if s22[0] != 0.0 else {"S12"}
    return {"S12", "S22"} if s12[0] == s22[0] == 1.0 else set()


def _shows_noise(column: ComplexArray) -> bool:
    """Return whether a parameter over frequency is rough beyond its rounding, as only measured data are.

    The difference of order k of white noise has the variance C(2k, k) of the noise: 70 at the fourth, 252 at the fifth.
    Medians, so that the few joints of a sweep in segments, where the step changes, do not count.
    """
    if len(column) < _NOISE_ROWS:
        return False
    fourth, fifth = (np.median(np.abs(np.diff(column, order))) for order in (4, 5))
    rms = np.sqrt(np.mean(np.abs(column) ** 2))
    low, high = _NOISE_SHARE
    return bool(fifth > _WHITE_GROWTH * fourth and low * rms < fourth / math.sqrt(70.0) < high * rms)


def _one_path(name: str, zero: set[str], copied: set[str], fixed: set[str], missing: frozenset[str]) -> Finding:
    parts = [
        f"{_listed(parameters)} {'is' if len(parameters) == 1 else 'are'} {what}"
        for parameters, what in ((zero, "zero in every row"), (fixed, "one number in every row"), (missing, "left out"))
        if parameters
    ]
    if copied:
        of = {"S12": "S21", "S22": "S11"}
        copies = "is a copy" if len(copied) == 1 else "are copies"
        parts.append(f"{_listed(copied)} {copies} of {_listed({of[c] for c in copied})}")
    message = f"{name}: {' and '.join(parts)}, so taken as not measured"
    return Finding("one-path", "note", message, "turn the device round and sweep it again if you need them", name)


def _symmetric(name: str) -> Finding:
    message = (
        f"{name}: S12 equals S21 and S22 equals S11 in every row, and no noise shows, so they are taken as "
        "calculated for a symmetric device"
    )
    advice = "if an analyzer with one path wrote this file they are copies: use no isolation or output match from it"
    return Finding("symmetric-file", "note", message, advice, name)


def _listed(parameters: Collection[str]) -> str:
    """Return the parameters in their own order as words: 'S12 and S22'."""
    names = [parameter for parameter in PARAMETERS if parameter in parameters]
    return " and ".join(filter(None, [", ".join(names[:-1]), names[-1]]))


def doubtful_values(table: SweepTable, s: ComplexArray, name: str) -> list[Finding]:
    """Return a finding for each thing in the file that no measured two-port has, as far as one file can show it.

    Whether a passive device shows gain is not known here.
    """
    findings = []
    if table.option.format == "MA" and table.pairs[:, 0::2].min() < 0:
        negative = (table.pairs[:, 0::2] < 0).any(axis=1)
        found = f"a magnitude is negative in line {table.line(int(np.argmax(negative)))}, as only decibels are"
        findings.append(_impossible(name, found, "if the numbers are decibels, write DB in the option line"))
    usual = np.abs(s.view(np.float64)).max() <= 1.0  # a part: a test that costs less than four magnitudes
    for parameter in PARAMETERS if not usual else ():
        column = s[int(parameter[1]) - 1, int(parameter[2]) - 1]
        row = int(np.argmax(np.abs(column)))
        if (level_db := float(to_db(column[row]))) > _LIMITS_DB[parameter] and parameter not in table.missing:
            where = f"{format_si(float(table.frequency_hz[row]), 'Hz', 6)}, line {table.line(row)}"
            found = f"{parameter} is {level_db:.0f} dB at {where}, which no two-port shows"
            findings.append(_impossible(name, found, "check the number format in the option line, or sweep again"))
    low, high = _REFERENCE_OHM
    if not all(low <= ohm <= high for ohm in table.option.reference_ohm):
        found = "a reference impedance of {:g} and {:g} ohm, which no analyzer has".format(*table.option.reference_ohm)
        findings.append(_impossible(name, found, "check R in the option line, or [Reference]"))
    return findings


def _impossible(name: str, found: str, remedy: str) -> Finding:
    return Finding("impossible-value", "caution", f"{name}: {found}", remedy, name)
