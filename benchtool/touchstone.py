"""A two-port Touchstone file in, a Sweep of scattering parameters out; and a Sweep in, its Touchstone text out.

Y, Z, H and G parameters are turned into S with the formulas of D. A. Frickey, IEEE Trans. MTT 42(2), 1994, 205-211;
version 1 of the format has them normalised to the reference impedance R, one for both ports. What the rows and the
option line may look like is the matter of :mod:`benchtool.touchstone_text`.

Which parameters were measured is worked out from the numbers, since the format cannot say it:

- A column of exact zeros is a placeholder; no receiver reads zero in every row. The one exception is a calculated
  matched line, S11 = S22 = 0 with S12 = S21.
- S12 equal to S21 to the last digit is what reciprocity looks like in calculated data and in data that an analyzer
  has averaged over both directions, so it is kept; but not with gain, where reciprocity has no part, and not beside
  a placeholder S22.
- S22 equal to S11 in two rows or more is a copy, unless S12 = S21 as well. Both together are what a calculated
  symmetric device looks like, and also what an analyzer with one path writes for any device. The second has noise,
  which two separate measurements could not share to the last digit: where noise shows, S12 and S22 are copies. Where
  none does they are kept, with a finding that says so.
"""

from __future__ import annotations

import hashlib
import math
import stat
from collections.abc import Sequence
from pathlib import Path
from typing import Final, cast

import numpy as np

from benchtool.errors import RequestError, SweepFileError
from benchtool.model import PARAMETERS, ComplexArray, Finding, FloatArray, NoiseBlock, Sweep
from benchtool.touchstone_text import SweepTable, read_table

__all__ = ["format_sweep", "parse_sweep", "read_sweep"]

_LARGEST_BYTES: Final = 256 * 1024**2
"""Two million rows; what is larger is not a sweep, and would fill the memory before it could be refused."""
_GAIN: Final = 10.0 ** (0.5 / 20.0)
"""|S21| that no passive device reads, calibration errors included: 0.5 dB."""
_NOISE_ROWS: Final = 16
_NOISE_SHARE: Final = (5e-5, 0.1)
"""Roughness over the rms value: above what rounding to five digits leaves, below a phase turning 90° a row."""
_WHITE_GROWTH: Final = 1.4
"""Growth of the fifth difference over the fourth: 1.9 for noise, below one for a curve that the rows resolve."""


def read_sweep(path: Path | str, *, name: str | None = None, strict: bool = False) -> Sweep:
    """Return the sweep in a two-port Touchstone file.

    Parameters
    ----------
    name : what the user calls the sweep; the file's own name where it is None
    strict : refuse what would otherwise be mended with a `file-mended` finding

    Raises
    ------
    SweepFileError : the file cannot be read, or cannot be understood.
    """
    where = Path(path)
    return parse_sweep(_read_bytes(where), name=where.name if name is None else name, path=where, strict=strict)


def parse_sweep(data: bytes, *, name: str, path: Path | None = None, strict: bool = False) -> Sweep:
    """Return the sweep in the bytes of a two-port Touchstone file; faults name `path`, or `name` where it is None.

    Raises
    ------
    SweepFileError : the bytes cannot be understood.
    """
    place = name if path is None else str(path)
    _check_port_count(Path(place).suffix, place)
    table = read_table(data, place, name=name, strict=strict)
    s = _scattering(table, place)
    measured, findings = _measured(s, name)
    for parameter in set(PARAMETERS) - set(measured):
        s[int(parameter[1]) - 1, int(parameter[2]) - 1] = 0.0
    return Sweep(
        name=name,
        frequency_hz=table.frequency_hz,
        s=s,
        measured=measured,
        reference_ohm=(table.option.reference_ohm, table.option.reference_ohm),
        path=path,
        sha256=hashlib.sha256(data).hexdigest(),
        findings=table.findings + findings,
        noise=_noise_block(table),
    )


def _read_bytes(path: Path) -> bytes:
    try:
        status = path.stat()
        if stat.S_ISDIR(status.st_mode):
            raise SweepFileError(path, "this is a folder, not a file", "name a .s2p file in it")
        if not stat.S_ISREG(status.st_mode):
            raise SweepFileError(path, "this is a device or a pipe, not a file", "save the sweep to a file first")
        if status.st_size > _LARGEST_BYTES:
            found = f"the file has {status.st_size / 1e6:.0f} MB, more than any sweep"
            raise SweepFileError(path, found, "check that it is a sweep, and sweep with fewer points")
        return path.read_bytes()
    except FileNotFoundError:
        raise SweepFileError(path, "no such file", "check the name and the folder") from None
    except PermissionError:
        raise SweepFileError(path, "the file may not be read", "give yourself the right to read it") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise SweepFileError(path, f"the file cannot be read ({reason})", "copy it to a local folder") from None


def _check_port_count(suffix: str, place: str) -> None:
    """Refuse a file whose name says that it has another number of ports; version 1 says it nowhere else."""
    ports = suffix[2:-1]
    if suffix[:2].lower() == ".s" and suffix[-1:].lower() == "p" and ports.isdecimal() and ports != "2":
        count = "1 port" if ports == "1" else f"{ports} ports"
        found = f"by its name ({suffix}) this file has {count}, and only two-port sweeps can be used"
        raise SweepFileError(place, found, "export a two-port sweep (.s2p) with S11, S21, S12 and S22")


def _scattering(table: SweepTable, place: str) -> ComplexArray:
    """Return (2, 2, n) scattering parameters of the table's rows."""
    with np.errstate(all="ignore"):
        n11, n21, n12, n22 = _complex(table.pairs, table.option.format).T
        if table.option.kind != "S":
            n11, n21, n12, n22 = _TO_S[table.option.kind](n11, n21, n12, n22)
    s = np.array([[n11, n12], [n21, n22]])
    finite = np.isfinite(s).all(axis=(0, 1))
    if not finite.all():
        found = f"the {table.option.kind} parameters of this row have no finite S parameters"
        remedy = "check the kind and format in the option line, or delete the row"
        raise SweepFileError(place, found, remedy, line=table.line(int(np.argmin(finite))))
    return s


def _complex(pairs: FloatArray, form: str) -> ComplexArray:
    """Return (n, 4) complex numbers of (n, 8) number pairs in the format RI, MA or DB, angles in degrees."""
    first, second = pairs[:, 0::2], pairs[:, 1::2]
    if form == "RI":
        return cast(ComplexArray, np.ascontiguousarray(pairs).view(np.complex128))
    magnitude = np.exp(first * (math.log(10.0) / 20.0)) if form == "DB" else first
    angle = np.deg2rad(second)
    values = np.empty(first.shape, np.complex128)
    values.real, values.imag = magnitude * np.cos(angle), magnitude * np.sin(angle)  # a complex exp takes twice as long
    return values


_Four = tuple[ComplexArray, ComplexArray, ComplexArray, ComplexArray]


def _z_to_s(z11: ComplexArray, z21: ComplexArray, z12: ComplexArray, z22: ComplexArray) -> _Four:
    """Return S11, S21, S12, S22 of impedances normalised to the reference (Frickey 1994, table I)."""
    d = (z11 + 1) * (z22 + 1) - z12 * z21
    return ((z11 - 1) * (z22 + 1) - z12 * z21) / d, 2 * z21 / d, 2 * z12 / d, ((z11 + 1) * (z22 - 1) - z12 * z21) / d


def _y_to_s(y11: ComplexArray, y21: ComplexArray, y12: ComplexArray, y22: ComplexArray) -> _Four:
    """Return S11, S21, S12, S22 of admittances normalised to the reference (Frickey 1994, table I)."""
    d = (1 + y11) * (1 + y22) - y12 * y21
    return ((1 - y11) * (1 + y22) + y12 * y21) / d, -2 * y21 / d, -2 * y12 / d, ((1 + y11) * (1 - y22) + y12 * y21) / d


def _h_to_s(h11: ComplexArray, h21: ComplexArray, h12: ComplexArray, h22: ComplexArray) -> _Four:
    """Return S11, S21, S12, S22 of hybrid parameters, h11 over R and h22 times R (Frickey 1994, table I)."""
    d = (h11 + 1) * (h22 + 1) - h12 * h21
    return ((h11 - 1) * (h22 + 1) - h12 * h21) / d, -2 * h21 / d, 2 * h12 / d, ((1 + h11) * (1 - h22) + h12 * h21) / d


def _g_to_s(g11: ComplexArray, g21: ComplexArray, g12: ComplexArray, g22: ComplexArray) -> _Four:
    """Return S11, S21, S12, S22 of inverse hybrid parameters, g11 times R and g22 over R.

    From I1 = g11 V1 + g12 I2 and V2 = g21 V1 + g22 I2 with Vi = ai + bi and Ii = ai - bi; the G matrix is the inverse
    of the H matrix, whose conversion is published.
    """
    d = (g11 + 1) * (g22 + 1) - g12 * g21
    return ((1 - g11) * (g22 + 1) + g12 * g21) / d, 2 * g21 / d, -2 * g12 / d, ((g11 + 1) * (g22 - 1) - g12 * g21) / d


_TO_S: Final = {"Z": _z_to_s, "Y": _y_to_s, "H": _h_to_s, "G": _g_to_s}


def _noise_block(table: SweepTable) -> NoiseBlock | None:
    if not len(table.noise):
        return None
    frequency_hz, nf_min_db, magnitude, angle_deg, rn = table.noise.T
    gamma_opt = magnitude * np.exp(1j * np.deg2rad(angle_deg))
    return NoiseBlock(frequency_hz, nf_min_db, gamma_opt, rn * table.option.reference_ohm)


def _measured(s: ComplexArray, name: str) -> tuple[tuple[str, ...], tuple[Finding, ...]]:
    """Return which parameters were measured, and what to say of the others; the rules head this module."""
    columns = {parameter: s[int(parameter[1]) - 1, int(parameter[2]) - 1] for parameter in PARAMETERS}
    s11, s21, s12, s22 = columns.values()
    zero = {parameter for parameter, column in columns.items() if not column.any()}
    same_transfer = "S21" not in zero and np.array_equal(s12, s21)
    same_match = len(s11) > 1 and "S11" not in zero and np.array_equal(s22, s11)
    if zero == {"S11", "S22"} and same_transfer:
        zero, same_match = set(), True
    gain = same_transfer and bool((np.abs(s21) > _GAIN).any())
    noisy = same_transfer and same_match and (_shows_noise(s11) or _shows_noise(s21))
    copied = {"S12"} if gain or noisy or (same_transfer and "S22" in zero) else set()
    if same_match and (not same_transfer or copied):
        copied.add("S22")
    measured = tuple(parameter for parameter in PARAMETERS if parameter not in zero | copied)
    if len(measured) < len(PARAMETERS):
        return measured, (_one_path(name, zero, copied),)
    if same_transfer and same_match:
        return measured, (_symmetric(name),)
    return measured, ()


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


def _one_path(name: str, zero: set[str], copied: set[str]) -> Finding:
    parts = []
    if zero:
        parts.append(f"{_listed(zero)} {'is' if len(zero) == 1 else 'are'} zero in every row")
    if copied:
        of = {"S12": "S21", "S22": "S11"}
        copies = "a copy" if len(copied) == 1 else "copies"
        parts.append(
            f"{_listed(copied)} {'is' if len(copied) == 1 else 'are'} {copies} of {_listed({of[c] for c in copied})}"
        )
    message = f"{name}: {' and '.join(parts)}, so taken as not measured"
    return Finding("one-path", "note", message, "turn the device round and sweep it again if you need them", name)


def _symmetric(name: str) -> Finding:
    message = (
        f"{name}: S12 equals S21 and S22 equals S11 in every row, and no noise shows, so they are taken as "
        "calculated for a symmetric device"
    )
    advice = "if an analyzer with one path wrote this file they are copies: use no isolation or output match from it"
    return Finding("symmetric-file", "note", message, advice, name)


def _listed(parameters: set[str]) -> str:
    """Return the parameters in their own order as words: 'S12 and S22'."""
    names = [parameter for parameter in PARAMETERS if parameter in parameters]
    return " and ".join(filter(None, [", ".join(names[:-1]), names[-1]]))


def format_sweep(sweep: Sweep, *, comments: Sequence[str] = ()) -> str:
    """Return the sweep as Touchstone version 1 text, in Hz, S and RI; reading it gives the same numbers to the bit.

    Magnitude and angle of a noise block are the exception: they come back to within rounding.

    Raises
    ------
    RequestError : the format cannot hold the sweep.
    """
    _check_can_be_written(sweep)
    lines = [f"! {line}".rstrip() for comment in comments for line in comment.splitlines() or [""]]
    reference_ohm = sweep.reference_ohm[0]
    lines.append(f"# Hz S RI R {reference_ohm!r}".removesuffix(".0"))
    lines.append("! Hz  S11  S21  S12  S22, real and imaginary")
    pairs = sweep.s.transpose(2, 1, 0).reshape(-1, len(PARAMETERS)).view(np.float64)
    rows = np.column_stack([sweep.frequency_hz, pairs]).tolist()
    if sweep.noise is not None:
        lines += [" ".join(map(repr, row)) for row in rows]
        lines.append("! noise: Hz  minimum dB  optimum source reflection  angle  Rn / R")
        block = sweep.noise
        angle_deg = np.rad2deg(np.angle(block.gamma_opt))
        columns = (
            block.frequency_hz,
            block.nf_min_db,
            np.abs(block.gamma_opt),
            angle_deg,
            block.rn_ohm / reference_ohm,
        )
        rows = np.column_stack(columns).tolist()
    lines += [" ".join(map(repr, row)) for row in rows]
    return "\n".join(lines) + "\n"


def _check_can_be_written(sweep: Sweep) -> None:
    first, second = sweep.reference_ohm
    if first != second:
        found = f"{sweep.name} has {first:g} ohm at port 1 and {second:g} ohm at port 2, and a file can hold but one"
        raise RequestError(found, "bring both ports to one impedance first")
    if not len(sweep.frequency_hz) or not np.isfinite(sweep.s).all():
        raise RequestError(f"{sweep.name} has no points, or some that are not finite", "leave those frequencies out")
    if sweep.noise is not None and sweep.noise.frequency_hz[0] > sweep.frequency_hz[-1]:
        found = f"the noise block of {sweep.name} starts above its last frequency, where a file cannot tell it"
        raise RequestError(found, "write the sweep without its noise block")
