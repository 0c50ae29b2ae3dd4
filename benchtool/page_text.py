"""Any text in; the same text as it can be printed, with its width and its line breaks, out.

Names come from files and are shown literally: nothing is read as markup, a control character becomes a visible
escape, and a letter that no usable font has becomes its code point, such as <U+4E2D>, never an empty box.
Widths are sums of advance widths, without kerning, so they are known before anything is drawn.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Final
from unicodedata import bidirectional

from matplotlib.font_manager import FontProperties, findfont, fontManager, get_font
from matplotlib.ft2font import FT2Font

__all__ = ["FAMILY", "MIN_SIZE_PT", "Lines", "families", "fit", "in_reading_order", "literal", "width_pt", "wrap"]

FAMILY: Final = "DejaVu Sans"
"""Comes with matplotlib, so the page looks the same everywhere."""

MIN_SIZE_PT: Final = 6.0

_NOT_FOR_TEXT: Final = ("DejaVu", "STIX", "cm", "Last Resort")
_SIZE_EM: Final = 100.0
_SAFETY: Final = 1.015
"""The rasteriser rounds each glyph to its own grid; measured widths leave room for that."""


@cache
def _font(family: str, bold: bool) -> FT2Font:
    return get_font(findfont(FontProperties(family=family, weight="bold" if bold else "normal")))


@cache
def _letters(bold: bool) -> frozenset[int]:
    return frozenset(_font(FAMILY, bold).get_charmap())


def _is_truetype(path: str) -> bool:
    """Return whether a font file holds one TrueType font, the only kind that goes into a PDF whole (as Type 42)."""
    with Path(path).open("rb") as file:
        return file.read(4) in (b"\x00\x01\x00\x00", b"true")


@cache
def _fallback(character: str) -> str | None:
    """Return the family of an installed outline font that has `character` and can be embedded, or None."""
    seen = set()
    for entry in sorted(fontManager.ttflist, key=lambda e: (e.name, e.fname)):
        if entry.name in seen or entry.name.startswith(_NOT_FOR_TEXT) or entry.style != "normal":
            continue
        seen.add(entry.name)
        try:
            font = get_font(entry.fname)
            if font.scalable and _is_truetype(entry.fname) and ord(character) in font.get_charmap():
                return str(entry.name)
        except (OSError, RuntimeError):
            continue
    return None


@cache
def _shown(character: str) -> str:
    """Return the character as it can be printed."""
    if not character.isprintable():
        return character.encode("unicode_escape").decode()
    # Both weights must have it: the same name stands in a heading and in a list.
    if ord(character) in _letters(False) and ord(character) in _letters(True):
        return character
    return character if _fallback(character) else f"<U+{ord(character):04X}>"


def literal(text: str) -> str:
    r"""Return `text` on one line with every letter printable.

    >>> literal("a$b_<c\x07")
    'a$b_<c\\x07'
    """
    if text.isascii() and text.isprintable():
        return text
    return "".join(map(_shown, text))


def in_reading_order(text: str) -> str:
    """Return a literal text that reads from left to right as a line, whatever the direction of a name in it.

    The mark that says so, U+200E, has no width and no ink. Without it a line that begins with a right-to-left name
    would be set from the right, and the words around the name would change places.
    """
    if text.isascii() or not any(bidirectional(c) in ("R", "AL") for c in text):
        return text
    return f"\u200e{text}"


def families(text: str) -> tuple[str, ...]:
    """Return the font families that a literal text needs, the page's own first."""
    if text.isascii():
        return (FAMILY,)
    foreign = {_fallback(c) for c in text if ord(c) not in _letters(False) or ord(c) not in _letters(True)}
    return (FAMILY, *sorted(f for f in foreign if f))


@cache
def _advance_em(character: str, bold: bool) -> float:
    own = ord(character) in _letters(bold)
    font = _font(FAMILY if own else _fallback(character) or FAMILY, bold)
    font.set_size(_SIZE_EM, 72.0)
    return float(font.load_char(ord(character)).linearHoriAdvance) / 65536.0 / _SIZE_EM


def width_pt(text: str, size_pt: float, bold: bool = False) -> float:
    """Return the width of a literal text in points."""
    return size_pt * _SAFETY * sum(_advance_em(c, bold) for c in text)


def _pieces(word: str, size_pt: float, width: float, bold: bool) -> list[str]:
    """Return a word cut where it must be to stay within `width`, after a separator if one is near the end."""
    pieces = []
    while width_pt(word, size_pt, bold) > width and len(word) > 1:
        end, used = 0, 0.0
        while end < len(word):
            used += width_pt(word[end], size_pt, bold)
            if used > width:
                break
            end += 1
        end = max(end, 1)
        after = max(word.rfind(mark, 0, end) for mark in "_-./\\ ") + 1
        cut = after if after > end // 2 else end
        pieces.append(word[:cut])
        word = word[cut:]
    return [*pieces, word]


def wrap(text: str, size_pt: float, width: float, bold: bool = False) -> list[str]:
    """Return a literal text as lines no wider than `width` points. No letter is lost; blanks are, at line ends."""
    lines: list[str] = []
    line = ""
    for word in text.split(" "):
        longer = f"{line} {word}" if line else word
        if width_pt(longer, size_pt, bold) <= width:
            line = longer
            continue
        if line:
            lines.append(line)
        *full, line = _pieces(word, size_pt, width, bold)
        lines += full
    return [*lines, line] if line or not lines else lines


@dataclass(frozen=True)
class Lines:
    """Text set to a width: its lines and the size at which they fit."""

    lines: tuple[str, ...]
    size_pt: float

    def height_pt(self, leading: float = 1.22) -> float:
        """Return the height of the lines, in points."""
        return len(self.lines) * self.size_pt * leading


def fit(text: str, sizes_pt: Sequence[float], width: float, bold: bool = False, most: int = 1) -> Lines:
    """Return `text` made literal and set at the first of `sizes_pt` that needs no more than `most` lines.

    Where none does, the last size is used with as many lines as it takes: letters are never dropped.
    """
    shown = literal(text)
    lines: list[str] = []
    for size in sizes_pt:
        lines = wrap(shown, size, width, bold)
        if len(lines) <= most:
            return Lines(tuple(lines), size)
    return Lines(tuple(lines), sizes_pt[-1])
