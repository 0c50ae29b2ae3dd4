"""The sweeps of a folder in; the text of a first bench sheet out, with a comment at every line to fill.

Only what the files show is written: names, frequency span, points and what was measured. What nobody but the user can
know is commented out, with ``?`` where the value goes, so the draft loads as it is and claims nothing.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Final

from benchtool.errors import RequestError
from benchtool.model import Sweep
from benchtool.units import format_si

__all__ = ["draft_sheet", "sweep_files"]

_DRIVE_WORD: Final = re.compile(r"(?P<stem>.*[^_\- ])[_\- ]+(?:low|mid|high|\d+)", re.IGNORECASE)
"""A file name that ends in a word for how hard the device was driven, or in a number."""
_COMMENT_COLUMN: Final = 34

_HEAD: Final = """\
# A first bench sheet, drafted from the sweeps in this folder. Fill in the lines that say so: take away the # in front
# and write the value in place of the ?. Decibels are plain numbers; frequencies and times are text with a unit.
"""


def sweep_files(folder: Path) -> list[Path]:
    """Return the two-port Touchstone files of a folder, in order of name.

    Raises
    ------
    RequestError : there is no such folder, or nothing in it to draft from.
    """
    if not folder.is_dir():
        raise RequestError(f"there is no folder {folder}", "name the folder that holds the .s2p files")
    files = [entry for entry in folder.iterdir() if entry.suffix.lower() == ".s2p" and entry.is_file()]
    if not files:
        raise RequestError(f"{folder} holds no .s2p file", "name the folder that holds the sweeps")
    return sorted(files, key=lambda file: (file.name.casefold(), file.name))


def draft_sheet(folder: Path, sweeps: Sequence[Sweep]) -> str:
    """Return the text of a first bench sheet for the sweeps, to be saved as bench.toml in `folder`.

    Sweeps whose names differ only in a last word for the drive, or a last number, go to one device.

    Raises
    ------
    RequestError : there are no sweeps, or a file name that no sheet can hold.
    """
    if not sweeps:
        raise RequestError("there are no sweeps to draft from", "name a folder that holds .s2p files")
    lines = [_HEAD, *_session_lines()]
    for name, members in _devices(sweeps).items():
        lines += _device_lines(name, members)
        for sweep in members:
            lines += _sweep_lines(folder, sweep)
    return "\n".join(lines) + "\n"


def _devices(sweeps: Sequence[Sweep]) -> dict[str, list[Sweep]]:
    """Return the sweeps by device, named after what their files have in common."""
    by_stem: dict[str, list[Sweep]] = {}
    for sweep in sweeps:
        by_stem.setdefault(_drive_stem(sweep), []).append(sweep)
    devices: dict[str, list[Sweep]] = {}
    for stem, members in by_stem.items():
        wanted = stem if len(members) > 1 else Path(members[0].name).stem
        name, copy = wanted, 2
        while name in devices:
            name, copy = f"{wanted} ({copy})", copy + 1
        devices[name] = members
    return devices


def _drive_stem(sweep: Sweep) -> str:
    stem = Path(sweep.name).stem
    match = _DRIVE_WORD.fullmatch(stem)
    return match["stem"] if match else stem


def _session_lines() -> Iterator[str]:
    yield "version = 1"
    yield _line('title = ""', "fill in: what was measured, in one line")
    yield _line('operator = ""', "fill in: who measured")
    yield _line("# date = ?", "fill in: year-month-day, no quotes")
    yield ""
    yield "[analyzer]"
    yield _line("# source_dbm = ?", "fill in: level leaving port 1, before any pad; without it no drive is known")
    yield _line("# port2_compression_dbm = ?", "fill in: level into port 2 where the receiver starts to compress")
    yield _line("# port2_damage_dbm = ?", "fill in: level into port 2 that does harm")
    yield _line("# directivity_db = ?", "fill in: effective, after calibration")
    yield _line("# reading_db = ?", "fill in: standard uncertainty of one corrected ratio")
    yield ""
    yield "# One table for each pad that was in line, under a name of your own, such as a20."
    yield _line("# [pads.?]", "fill in: the name of the pad")
    yield _line("# loss_db = ?", 'fill in: its loss; or file = "…" for a pad that was itself swept')
    yield _line("# tolerance_db = ?", "fill in: ± limits of the loss")
    yield _line("# return_loss_db = ?", "fill in: how well it is matched")
    yield _line('# delay = "? ps"', "fill in: its delay, where phase matters")
    yield ""
    yield "[calibration]"
    yield _line('# input_pads = ["?"]', "fill in: pads at port 1 when the analyzer was calibrated, outwards from it")
    yield _line('# output_pads = ["?"]', "fill in: pads at port 2 when the analyzer was calibrated, outwards from it")


def _device_lines(name: str, members: Sequence[Sweep]) -> Iterator[str]:
    low = min(sweep.frequency_hz[0] for sweep in members)
    high = max(sweep.frequency_hz[-1] for sweep in members)
    span = f"{format_si(float(low), 'Hz', 6)} to {format_si(float(high), 'Hz', 6)}"
    yield ""
    yield "[[device]]"
    yield _line(f"name = {_quoted(name)}", "fill in: what it is called on the page; taken from the file names")
    yield _line('kind = "amplifier"', "fill in: amplifier, filter or network")
    yield _line('# design_frequency = "? MHz"', "fill in: where gain, phase and delay are wanted")
    yield _line('# window = ["? MHz", "? MHz"]', f"fill in where several peaks show; swept: {span}")
    yield _line("# [device.targets]", "fill in: what each figure should be; none are set")
    yield _line("# gain = { min = ? }", "fill in; a filter has insertion_loss in place of gain")
    yield _line('# bandwidth = { min = "? kHz", max = "? kHz" }', "fill in")
    yield _line('# peak_frequency = { nominal = "? MHz", tolerance = "? kHz" }', "fill in")


def _sweep_lines(folder: Path, sweep: Sweep) -> Iterator[str]:
    f = sweep.frequency_hz
    span = f"{format_si(float(f[0]), 'Hz', 6)} to {format_si(float(f[-1]), 'Hz', 6)}"
    yield ""
    yield "[[device.sweep]]"
    yield _line(
        f"file = {_quoted(_name_in(folder, sweep))}",
        f"{f.size} points, {span}; measured: {', '.join(sweep.measured) or 'nothing'}",
    )
    yield _line(
        '# input_pads = ["?"]',
        "fill in: every pad from port 1 to the device, calibrated ones too; left out = as then",
    )
    yield _line('# output_pads = ["?"]', "fill in: pads from port 2 to the device; left out = as at calibration")


def _name_in(folder: Path, sweep: Sweep) -> str:
    """Return the name of a sweep's file relative to the folder of the sheet."""
    if sweep.path is None:
        return sweep.name
    try:
        return sweep.path.absolute().relative_to(folder.absolute()).as_posix()
    except ValueError:
        return str(sweep.path.absolute())


def _line(content: str, comment: str) -> str:
    return f"{content:<{_COMMENT_COLUMN}} # {comment}"


def _quoted(text: str) -> str:
    """Return text as a TOML string."""
    try:
        text.encode()
    except UnicodeEncodeError:
        found = f"the file name {text!r} is not UTF-8"
        raise RequestError(found, "rename the file; a bench sheet is UTF-8 text") from None
    escaped = (f"\\{c}" if c in '\\"' else c if c.isprintable() else f"\\U{ord(c):08x}" for c in text)
    return f'"{"".join(escaped)}"'
