"""A two-port Touchstone file in, a Sweep of scattering parameters out; and a Sweep in, its Touchstone text out.

The parts: bytes to text in :mod:`benchtool.touchstone_text`; text to a table of numbers in
:mod:`benchtool.touchstone_v1` and :mod:`benchtool.touchstone_v2`; Y, Z, H and G to S in
:mod:`benchtool.touchstone_kinds`; which parameters were measured in :mod:`benchtool.touchstone_measured`.
"""

from __future__ import annotations

import hashlib
import math
import stat
from collections.abc import Callable
from pathlib import Path
from threading import Thread
from typing import Final, cast

import numpy as np

from benchtool.errors import SweepFileError
from benchtool.model import PARAMETERS, ComplexArray, FloatArray, NoiseBlock, Sweep
from benchtool.touchstone_kinds import TO_S, normalise
from benchtool.touchstone_measured import doubtful_values, measured_parameters
from benchtool.touchstone_table import Reading, SweepTable, quoted
from benchtool.touchstone_text import decode, first_data_line, line_number
from benchtool.touchstone_v1 import read_version_1
from benchtool.touchstone_v2 import read_version_2
from benchtool.touchstone_writing import format_sweep

__all__ = ["format_sweep", "parse_sweep", "read_sweep"]

_PORTS: Final = 2
_WORTH_A_THREAD: Final = 256 * 1024
_LARGEST_BYTES: Final = 64 * 1024**2
"""Some 400,000 rows of long numbers; what is larger is not a sweep, and is refused before it can fill the memory."""


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
    reading = Reading(place, name, strict=strict)
    sha256 = _hashing(data)
    table = _read_table(data, (Path(place) if path is None else path).suffix, reading)
    s = _scattering(table, reading)
    for parameter in table.missing:
        s[int(parameter[1]) - 1, int(parameter[2]) - 1] = 0.0
    reading.findings += doubtful_values(table, s, name)
    measured, findings = measured_parameters(s, table.missing, name)
    for parameter in set(PARAMETERS) - set(measured):
        s[int(parameter[1]) - 1, int(parameter[2]) - 1] = 0.0
    return Sweep(
        name=name,
        frequency_hz=table.frequency_hz,
        s=s,
        measured=measured,
        reference_ohm=table.option.reference_ohm,
        path=path,
        sha256=sha256(),
        findings=(*reading.findings, *findings),
        noise=_noise_block(table.noise),
    )


def _hashing(data: bytes) -> Callable[[], str]:
    """Return what gives the SHA-256 of a file; of a large one it is worked out beside the reading."""
    if len(data) < _WORTH_A_THREAD:
        return lambda: hashlib.sha256(data).hexdigest()
    found: list[str] = []
    worker = Thread(target=lambda: found.append(hashlib.sha256(data).hexdigest()), daemon=True)
    worker.start()

    def wait() -> str:
        worker.join()
        return found[0]

    return wait


def _read_bytes(path: Path) -> bytes:
    try:
        status = path.stat()
        if stat.S_ISDIR(status.st_mode):
            raise SweepFileError(path, "this is a folder, not a file", "name a .s2p file in it")
        if not stat.S_ISREG(status.st_mode):
            raise SweepFileError(path, "this is a device or a pipe, not a file", "save the sweep to a file first")
        if status.st_size > _LARGEST_BYTES:
            raise _too_large(status.st_size, path)
        return path.read_bytes()
    except FileNotFoundError:
        raise SweepFileError(path, "no such file", "check the name and the folder") from None
    except PermissionError:
        raise SweepFileError(path, "the file may not be read", "give yourself the right to read it") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise SweepFileError(path, f"the file cannot be read ({reason})", "copy it to a local folder") from None


def _too_large(size: int, place: Path | str) -> SweepFileError:
    found = f"the file has {size / 1e6:.0f} MB, more than any sweep"
    return SweepFileError(place, found, "check that it is a sweep, and sweep with fewer points")


def _read_table(data: bytes, suffix: str, reading: Reading) -> SweepTable:
    """Return the table of numbers in the bytes of a file, of either version."""
    if len(data) > _LARGEST_BYTES:
        raise _too_large(len(data), reading.place)
    text = decode(data, reading)
    first = first_data_line(text)
    if first is None:
        found, remedy = "nothing but comments and blank lines", "sweep again and save all of the file"
        raise reading.fault(found, remedy)
    if text.startswith("[", first.start(1)):
        word = text[first.start(1) : first.start(1) + 100].partition("\n")[0].partition("]")[0] + "]"
        if word.lower() == "[version]":
            return read_version_2(text, reading)
        found, remedy = f"the keyword {quoted(word)} before any [Version]", "write '[Version] 2.0' at the top"
        raise reading.fault(found, remedy, line=line_number(text, first.start(1)))
    ports = _ports_by_name(suffix)
    try:
        table = read_version_1(text, first, reading)
    except SweepFileError:
        if ports == _PORTS:
            raise
        raise _other_ports(suffix, ports, reading) from None
    if ports != _PORTS:
        _mend_name(suffix, ports, len(table.frequency_hz), reading)
    return table


def _ports_by_name(suffix: str) -> int:
    """Return how many ports the file has by its name; version 1 says it nowhere else. Other names are taken for two."""
    digits = suffix[2:-1]
    named = suffix[:2].lower() == ".s" and suffix[-1:].lower() == "p" and digits.isdecimal() and len(digits) < 4
    return int(digits) if named else _PORTS


def _mend_name(suffix: str, ports: int, rows: int, reading: Reading) -> None:
    """Take a file named for other ports as that of a two-port, whose rows it has.

    A file of four ports or more may begin with a row of nine numbers too, but not go on with them.
    """
    if reading.strict or (ports > _PORTS + 1 and rows == 1):
        raise _other_ports(suffix, ports, reading)
    found, done = f"the name ({suffix}) is not that of a two-port file", "the rows are those of a two-port"
    reading.mend(found, f"{done}, and were read so", "name the file .s2p", severity="note")


def _other_ports(suffix: str, ports: int, reading: Reading) -> SweepFileError:
    count = "1 port" if ports == 1 else f"{ports} ports"
    found = f"by its name ({suffix}) this file has {count}, and only two-port sweeps can be used"
    return reading.fault(found, "export a two-port sweep (.s2p) with S11, S21, S12 and S22")


def _scattering(table: SweepTable, reading: Reading) -> ComplexArray:
    """Return (2, 2, n) scattering parameters of the table's rows."""
    kind = table.option.kind
    with np.errstate(all="ignore"):
        n11, n21, n12, n22 = _complex(table.pairs, table.option.format).T
        if kind != "S":
            four = n11, n21, n12, n22
            n11, n21, n12, n22 = TO_S[kind](
                *(four if table.normalised else normalise(kind, four, table.option.reference_ohm))
            )
    s = np.array([[n11, n12], [n21, n22]])
    if not np.isfinite(s).all():
        finite = np.isfinite(s).all(axis=(0, 1))
        found = f"the {kind} parameters of this row have no finite S parameters"
        remedy = "check the kind and format in the option line, or delete the row"
        raise reading.fault(found, remedy, line=table.line(int(np.argmin(finite))))
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


def _noise_block(rows: FloatArray) -> NoiseBlock | None:
    if not len(rows):
        return None
    frequency_hz, nf_min_db, magnitude, angle_deg, rn_ohm = rows.T
    return NoiseBlock(frequency_hz, nf_min_db, magnitude * np.exp(1j * np.deg2rad(angle_deg)), rn_ohm)
