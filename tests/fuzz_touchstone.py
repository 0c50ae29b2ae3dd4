"""Sweep files damaged in every way, and what must hold of each: a sweep or one fault, and no silent change.

Used by the tests with some hundred files, and by the benchmark with many thousands.
"""

from __future__ import annotations

import importlib.util
import os
import random
import re
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType

import numpy as np
import skrf

from benchtool.errors import SweepFileError
from benchtool.model import NoiseBlock, Sweep
from benchtool.touchstone import format_sweep, parse_sweep

HERE = Path(__file__).resolve().parent
ROWS_KEPT = 12
SCRAPS = (
    b"#", b"!", b"[", b"]", b"\n", b"\r\n", b"\r", b" ", b"\t", b",", b";", b".", b"-", b"+", b"e", b"E", b"D", b"R 75",
    b"# MHz S RI R 50\n", b"[End]\n", b"[Network Data]\n", b"nan", b"inf", b"OVL", b"--", b"1e999", b"0", b"-1", b"1D6",
    b"GHz", b"DB", b"Z", b"\x00", b"\xff", b"\xb5", b"\xef\xbb\xbf", b"\x1a", b"\x0b", b"\x1c", b"0x10", b"1_0",
    b"99999999999999999999", b"5.", b".5", b"007", b"1e5", b"\xc2\xa0", b"true", b"null", b"1e-400",
    b"[Reference] 50 75\n",
)  # fmt: skip
WHOLE_FAULTS = re.compile("binary|no finite S|breaks off|one reading|longer than any row|UTF-16|more than any sweep")
"""Why a file that the standard allows may be refused all the same."""

MENDED_ALL_THE_SAME = re.compile("second option line|breaks off in its last row")
UNREADABLE = (ValueError, KeyError, IndexError, ZeroDivisionError, OverflowError)
"""What the slow reader raises of a file that the standard does not allow."""


def _load(name: str) -> ModuleType:
    spec = importlib.util.spec_from_file_location(name, HERE / f"{name}.py")
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


slow = _load("slow_touchstone")


def real_files() -> list[Path]:
    """Return the measured sweeps at hand, each cut to its heading and first rows by :func:`seeds`."""
    beside = Path(os.environ.get("BENCHTOOL_REAL", HERE.parents[1] / "shared" / "real"))
    return sorted((Path(skrf.__file__).parent / "data").glob("*.s2p")) + sorted(beside.glob("*.s2p"))


def _head(data: bytes) -> bytes:
    lines = data.splitlines(keepends=True)
    rows = [i for i, line in enumerate(lines) if line.strip()[:1].isdigit()]
    return b"".join(lines[: rows[ROWS_KEPT] if len(rows) > ROWS_KEPT else len(lines)])


def seeds() -> list[bytes]:
    """Return sound files: the heads of measured ones, and one of each version, kind and format."""
    found = [_head(path.read_bytes()) for path in real_files()]
    rng = np.random.default_rng(5)
    frequency_hz = np.linspace(1e6, 9e6, 8)
    s = (rng.normal(size=(2, 2, 8)) + 1j * rng.normal(size=(2, 2, 8))) / 4
    noise = NoiseBlock(np.array([2e6, 9e6]), np.array([1.0, 1.5]), np.array([0.3, 0.2j]), np.array([20.0, 19.0]))
    for block in (None, noise):
        sweep = Sweep("seed", frequency_hz, s, reference_ohm=(50.0, 50.0), noise=block)
        found += [format_sweep(sweep, version=version).encode() for version in (1, 2)]
    for option in ("# MHz S MA R 75", "# GHz S DB", "#kHz Z RI R 50", "# Hz Y MA", "# MHz H RI", "# MHz G DB R 1", "#"):
        values = rng.uniform(0.01, 0.9, (8, 8)).round(5)
        rows = "".join(f"{f:.3f}  {' '.join(map(str, row))}\n" for f, row in zip(range(1, 9), values, strict=True))
        found.append(f"! seed\n{option} ! as set\n{rows}".encode())
    lower = "".join(f"{f} 0.1 0.{f} -0.2 0.3 0.{f}5 0.1\n" for f in range(1, 6))
    found.append(
        f"[Version] 2.0\n# GHz Z RI R 50\n[Number of Ports] 2\n[Number of Frequencies] 5\n[Reference] 50\n 75\n"
        f"[Two-Port Data Order] 12_21\n[Matrix Format] Lower\n[Network Data]\n{lower}[End]\n".encode()
    )
    return found


def damaged(count: int, seed: int) -> Iterator[bytes]:
    """Yield files with one to four damages each: bytes flipped, cut, spliced, lines moved, scraps put in."""
    rng = random.Random(seed)
    files = seeds()
    for _ in range(count):
        data = rng.choice(files)
        for _ in range(rng.choice((1, 1, 1, 2, 4))):
            data = _damage(data, files, rng)
        yield data


def _damage(data: bytes, files: list[bytes], rng: random.Random) -> bytes:
    at = rng.randrange(len(data) + 1)
    to = min(len(data), at + rng.choice((1, 1, 2, 5, 30, 200)))
    lines = data.splitlines(keepends=True) or [b""]
    line, other = rng.randrange(len(lines)), rng.randrange(len(lines))
    match rng.randrange(10):
        case 0:  # a byte becomes another
            return data[:at] + bytes([rng.randrange(256)]) + data[at + 1 :]
        case 1:  # a bit flips
            return data[:at] + bytes(byte ^ (1 << rng.randrange(8)) for byte in data[at : at + 1]) + data[at + 1 :]
        case 2:  # broken off
            return data[:at]
        case 3:  # a piece lost
            return data[:at] + data[to:]
        case 4:  # spliced with another file
            second = rng.choice(files)
            return data[:at] + second[rng.randrange(len(second)) :]
        case 5:  # a scrap put in
            return data[:at] + rng.choice(SCRAPS) + data[at:]
        case 6:  # a line lost, doubled or moved
            lines[line : line + 1] = rng.choice(([], [lines[line]] * 2, [lines[other]]))
            return b"".join(lines)
        case 7:  # a number becomes another word
            words = lines[line].split(b" ")
            words[rng.randrange(len(words))] = rng.choice(SCRAPS)
            return b"".join([*lines[:line], b" ".join(words), *lines[line + 1 :]])
        case 8:  # a digit becomes another
            digits = [i for i in range(len(data)) if data[i : i + 1].isdigit()] or [0]
            place = rng.choice(digits)
            return data[:place] + str(rng.randrange(10)).encode() + data[place + 1 :]
        case _:  # one character becomes another all over
            old, new = rng.choice(
                ((b".", b","), (b" ", b"\t"), (b" ", b","), (b" ", b";"), (b"\n", b"\r\n"), (b"e", b"D"))
            )
            return data.replace(old, new)


def outcome(data: bytes) -> str:
    """Return how a file read: 'sweep', 'mended' or 'fault'; AssertionError where it should not have read so."""
    try:
        sweep = parse_sweep(data, name="x.s2p")
    except SweepFileError as fault:
        message = str(fault)
        assert len(message.splitlines()) == 1 and message.startswith("x.s2p") and "; " in message, message
        _check_refusal(data, message)
        return "fault"
    assert np.isfinite(sweep.s).all() and sweep.s.shape == (2, 2, len(sweep.frequency_hz)), "not a sweep"
    assert (np.diff(sweep.frequency_hz) > 0).all() and sweep.frequency_hz[0] >= 0, "frequencies do not rise"
    mended = [finding.message for finding in sweep.findings if finding.code == "file-mended"]
    if mended:
        _check_mending(data, mended)
        try:
            parse_sweep(data, name="x.s2p", strict=True)
        except SweepFileError:
            return "mended"
        raise AssertionError("read strictly, and mended")
    _check_same(data, sweep)
    return "sweep"


def _check_mending(data: bytes, messages: list[str]) -> None:
    """Refuse the mending of a sound file, but for what two sweeps in one or a lost end look like."""
    try:
        slow.parse(data)
    except UNREADABLE:
        return
    assert any(MENDED_ALL_THE_SAME.search(message) for message in messages), f"the standard allows this: {messages}"


def _check_refusal(data: bytes, message: str) -> None:
    try:
        slow.parse(data)
    except UNREADABLE:
        return
    assert WHOLE_FAULTS.search(message), f"the standard allows this file: {message}"


def _check_same(data: bytes, sweep: Sweep) -> None:
    """Compare with the slow reader: to the bit where nothing is worked out, else to within rounding."""
    frequencies, rows, noise, ohms, form = slow.parse(data)
    assert sweep.frequency_hz.tolist() == frequencies, "frequencies"
    assert sweep.reference_ohm == ohms, "reference"
    columns = {"S11": 0, "S21": 1, "S12": 2, "S22": 3}
    expected = np.array(rows, dtype=complex)
    for parameter, column in columns.items():
        read = sweep.s[int(parameter[1]) - 1, int(parameter[2]) - 1]
        if parameter in sweep.measured:
            # a conversion loses digits with the ratio of what it subtracts, 1e-13 of the largest S of the row here
            scale = np.abs(expected).max(axis=1)
            assert (np.abs(read - expected[:, column]) <= 1e-9 * np.maximum(scale, np.abs(read))).all(), parameter
        else:
            assert not read.any(), parameter
    if form == "sri" and sweep.full:
        assert np.array_equal(np.array([sweep.s11, sweep.s21, sweep.s12, sweep.s22]).T, expected), "not to the bit"
    assert (sweep.noise is None) == (not noise), "noise"
    if sweep.noise is not None:
        found = [sweep.noise.frequency_hz, sweep.noise.nf_min_db, sweep.noise.rn_ohm]
        table = np.array(noise)
        assert np.allclose(np.array(found).T, table[:, [0, 1, 4]], rtol=1e-13, atol=0), "noise numbers"
