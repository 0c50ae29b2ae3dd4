"""Bytes of a file in, its text with plain line ends out; and its lines, numbered as the user's editor numbers them."""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import Final, NamedTuple

from benchtool.touchstone_table import Reading

__all__ = ["Line", "data_lines", "decode", "first_data_line", "line_number", "line_of_text", "words_of"]

_FIRST_LINE: Final = re.compile(r"^[ \t]*([^ \t\n!][^\n]*)", re.MULTILINE)
_WORD: Final = re.compile(r"[^ \t]+")
_TEXT_BYTES: Final = bytes(range(32, 256)) + b"\t\n\v\f\r\x1a"
_LONGEST_LINE: Final = 100_000
"""Characters of a line that is no comment; nine numbers need some hundred."""


class Line(NamedTuple):
    """One line of the file that holds something: its number from 1, and its words without the comment."""

    number: int
    words: list[str]


def decode(data: bytes, reading: Reading) -> str:
    """Return the text of the file with plain line ends; comments may be in any 8-bit encoding.

    Raises
    ------
    SweepFileError : the file is empty or not text.
    """
    if not data:
        raise reading.fault("the file is empty (0 bytes)", "sweep again and save, or copy the file again")
    if encoding := _two_byte_encoding(data):
        text = _decode_two_bytes(data, encoding, reading)
    else:
        start = data[:512]
        if b"\0" in data or len(start.translate(None, _TEXT_BYTES)) * 20 > len(start):
            raise reading.fault("the file is binary, not text", "export the sweep as a Touchstone .s2p file")
        try:
            text = data.decode("utf-8-sig")
        except UnicodeDecodeError:
            text = data.decode("latin-1")
    if "\r" in text:
        text = text.replace("\r\n", "\n").replace("\r", "\n")
    if text.endswith("\x1a"):
        found, remedy = "the file ends with an end-of-file mark of old systems", "delete the last character"
        reading.mend(found, "it was left out", remedy, severity="note")
        text = text.rstrip("\x1a")
    return text


def _two_byte_encoding(data: bytes) -> str | None:
    """Return the encoding of text with two bytes a letter, by its mark or by every second byte being zero."""
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return "utf-16"
    start = data[:64]
    if len(start) < 4 or len(start) % 2 or not any(start):
        return None
    if not any(start[1::2]):
        return "utf-16-le"
    return "utf-16-be" if not any(start[0::2]) else None


def _decode_two_bytes(data: bytes, encoding: str, reading: Reading) -> str:
    reading.mend("the text is UTF-16", "it was read as that", "save the file as plain text or UTF-8", severity="note")
    try:
        text = data.decode(encoding)
    except UnicodeDecodeError:
        raise reading.fault("the text begins as UTF-16 and breaks off", "copy or save the file again") from None
    if "\0" in text:
        raise reading.fault("the file is binary, not text", "export the sweep as a Touchstone .s2p file")
    return text


def first_data_line(text: str, start: int = 0) -> re.Match[str] | None:
    """Return the first line from `start` on that is neither blank nor a comment; its group 1 begins at its text."""
    return _FIRST_LINE.search(text, start)


def line_number(text: str, offset: int) -> int:
    """Return the number of the line that holds the character at `offset`."""
    return text.count("\n", 0, offset) + 1


def line_of_text(text: str, number: int) -> str:
    """Return the line with this number, without its comment."""
    start = 0
    for _ in range(number - 1):
        start = text.index("\n", start) + 1
    return text[start:].partition("\n")[0].partition("!")[0]


def data_lines(text: str, start: int, stop: int, reading: Reading) -> Iterator[Line]:
    """Yield each line between two offsets that is neither blank nor all comment.

    Raises
    ------
    SweepFileError : a line is longer than any line of a sweep, and would fill the memory if it were taken apart.
    """
    number = line_number(text, start)
    while start < stop:
        end = text.find("\n", start, stop)
        end = stop if end < 0 else end
        comment = text.find("!", start, end)
        content = text[start : end if comment < 0 else comment].strip(" \t")
        if len(content) > _LONGEST_LINE:
            found = f"a line of {len(content) / 1e6:.1f} million characters, longer than any row"
            raise reading.fault(found, "export the sweep again with a line for each frequency", line=number)
        if content:
            yield Line(number, words_of(content))
        start, number = end + 1, number + 1


def words_of(line: str) -> list[str]:
    """Return what stands between the blanks and tabs of a line; no other character parts two words."""
    return _WORD.findall(line)
