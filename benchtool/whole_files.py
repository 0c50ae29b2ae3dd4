"""Bytes and a place in; a file there, whole or not at all, out; and names that file systems and spreadsheets take."""

from __future__ import annotations

import os
import re
import secrets
from collections.abc import Iterable
from contextlib import suppress
from pathlib import Path
from typing import Final

from benchtool.errors import OutputError

__all__ = ["cell_text", "file_stem", "prepare_folder", "remove_unfinished", "unique_stems", "write_whole"]

_LONGEST_STEM: Final = 100
"""Bytes of a file name that leave room for a suffix within the 255 that file systems allow."""


_UNFINISHED: Final[set[Path]] = set()
"""Files that are being written, by names that nobody else has."""


def write_whole(path: Path, data: bytes) -> None:
    """Write a file so that it appears whole or not at all; an existing one is replaced only by a whole one.

    Raises
    ------
    OutputError : the disk is full, or the folder cannot be written.
    """
    part = path.parent / f".benchtool-{secrets.token_hex(8)}"
    _UNFINISHED.add(part)
    try:
        with part.open("xb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        part.replace(path)
    except OSError as error:
        raise OutputError(
            path, f"cannot be written ({error.strerror or error})", "free the disk, or choose another folder with --out"
        ) from None
    finally:
        with suppress(OSError):
            part.unlink()
        _UNFINISHED.discard(part)


def remove_unfinished() -> None:
    """Remove what is being written just now; for a process that must end at once."""
    for part in tuple(_UNFINISHED):
        with suppress(OSError):
            part.unlink()


def prepare_folder(folder: Path) -> None:
    """Make the output folder.

    Raises
    ------
    OutputError : it cannot be made, or something that is no folder has its name.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise OutputError(
            folder, f"cannot be made ({error.strerror or error})", "choose another folder with --out"
        ) from None


def file_stem(name: str) -> str:
    """Return a device name as a file name that every common file system takes, without its suffix.

    >>> file_stem("stage 2: 50% <limiting>")
    'stage 2_ 50% _limiting_'
    """
    stem = re.sub(r'[\x00-\x1f\x7f/\\:*?"<>|]', "_", name).strip(" .") or "device"
    while len(stem.encode()) > _LONGEST_STEM:
        stem = stem[:-1]
    return stem


def unique_stems(names: Iterable[str]) -> list[str]:
    """Return one file stem for each name, no two alike even where file systems ignore case."""
    taken: set[str] = set()
    stems = []
    for name in names:
        stem = base = file_stem(name)
        count = 1
        while stem.casefold() in taken or stem.casefold() == "results":
            count += 1
            stem = f"{base} ({count})"
        taken.add(stem.casefold())
        stems.append(stem)
    return stems


def cell_text(name: str) -> str:
    """Return a name that no spreadsheet takes for a formula.

    >>> cell_text("=1+1"), cell_text("stage 2")
    ("'=1+1", 'stage 2')
    """
    return f"'{name}" if name[:1] in ("=", "+", "-", "@") else name
