"""Sweeps of one device in, without a bench sheet; a BenchSheet out, with ideal pads added after calibration."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from itertools import takewhile
from pathlib import Path

from pydantic_core import PydanticCustomError

from benchtool.errors import RequestError
from benchtool.model import Kind
from benchtool.sheet_tables import Analyzer, BenchSheet, Device, Pad, SweepEntry
from benchtool.sheet_values import Reader, decibels, frequency, loss

__all__ = ["sheet_from_files"]


def sheet_from_files(
    files: Sequence[Path],
    *,
    design: str | float | None,
    source_dbm: float | None,
    input_pads_db: Sequence[float],
    output_pads_db: Sequence[float],
    kind: Kind = "amplifier",
) -> BenchSheet:
    """Return a bench of one device from its sweeps alone, for a quick look without a sheet.

    Parameters
    ----------
    files : sweeps of one device; it is named after what their names have in common
    design : design frequency, '21.4 MHz' or in Hz
    source_dbm : level leaving port 1
    input_pads_db, output_pads_db : loss of an ideal pad added after calibration; nothing, one for all files, or one
        for each file in order. Zero is no pad.
    kind : of the device

    Raises
    ------
    RequestError : a file is missing, or a value cannot be used.
    """
    if not files:
        raise RequestError("there are no sweeps", "name at least one .s2p file")
    for place, file in enumerate(files):
        if not _is_file(file):
            raise RequestError(f"there is no file {file}", "check the name")
        if file.resolve() in [earlier.resolve() for earlier in files[:place]]:
            raise RequestError(f"{file} is named twice", "name each sweep once")
    source = None if source_dbm is None else _checked(decibels(-150.0, 30.0, "dBm"), source_dbm, "source level")
    inputs = _ideal_pads("input", input_pads_db, len(files))
    outputs = _ideal_pads("output", output_pads_db, len(files))
    alone = len({file.name for file in files}) == len(files)
    entries = [
        SweepEntry(
            file=file.absolute(),
            name=file.name if alone else str(file),
            input_pads=tuple(into),
            output_pads=tuple(out),
            source_dbm=source,
        )
        for file, into, out in zip(files, inputs, outputs, strict=True)
    ]
    device = Device(
        name=_common_stem([file.stem for file in files]),
        kind=kind,
        design_hz=None if design is None else _checked(frequency, design, "design frequency"),
        sweeps=tuple(entries),
    )
    pads = {name: pad for line in (*inputs, *outputs) for name, pad in line.items()}
    return BenchSheet(
        folder=files[0].parent,
        title="Quick look, no bench sheet",
        analyzer=Analyzer(source_dbm=source),
        pads=pads,
        devices=(device,),
    )


def _checked(reader: Reader, value: object, what: str) -> float:
    """Return a value of the request, its fault told as the request's."""
    try:
        return float(reader(value))
    except PydanticCustomError as error:
        context = error.context or {}
        raise RequestError(f"{what}: {context['found']}", str(context["remedy"])) from None


def _ideal_pads(side: str, losses_db: Sequence[float], count: int) -> list[dict[str, Pad]]:
    """Return for each of `count` sweeps its ideal pad of one side, by name; nothing where the loss is zero."""
    if len(losses_db) not in (0, 1, count):
        found = f"{len(losses_db)} {side} pads for {count} sweeps"
        raise RequestError(found, "give one pad for all sweeps, or one for each in order (0 where there is none)")
    values = [_checked(loss, value, f"{side} pad") for value in losses_db] or [0.0]
    lines = [{f"{side} {value:g} dB": Pad(loss_db=value)} if value > 0.0 else {} for value in values]
    return lines * count if len(lines) == 1 else lines


def _common_stem(stems: Iterable[str]) -> str:
    """Return the words that file names have in common at their start; the first name where there are none.

    >>> _common_stem(["stage2_low", "stage2_high"]), _common_stem(["if hot", "if home"]), _common_stem(["a", "b"])
    ('stage2', 'if', 'a')
    """
    split = [re.split(r"([_\-. ]+)", stem) for stem in stems]
    common = takewhile(lambda words: len(set(words)) == 1, zip(*split, strict=False))
    return "".join(words[0] for words in common).strip("_-. ") or "".join(split[0])


def _is_file(path: Path) -> bool:
    try:
        return path.is_file()
    except OSError:  # such as a name that is too long
        return False
