"""The text of a file with foreign number habits in, the same lines in the standard's own way of writing out.

Decimal commas, commas or semicolons between the numbers, D for an exponent: each is mended only where the whole
stretch of text has no other reading, and every character stays in its place, so that lines and offsets still hold.
"""

from __future__ import annotations

import re
from typing import Final

from benchtool.touchstone_table import Reading
from benchtool.touchstone_text import line_number, words_of

__all__ = ["mend_habits"]

_LINE: Final = re.compile(r"[^\n]*[^ \t\n][^\n]*")
_WORD: Final = re.compile(r"[^ \t\n]+")
_WORD_WITH_COMMA: Final = re.compile(r"[^ \t\n,]*,[^ \t\n]*")
_COMMENT: Final = re.compile(r"![^\n]*")
_NO_NUMBERS: Final = re.compile(r"^[ \t]*[#\[][^\n]*", re.MULTILINE)
_FORTRAN: Final = re.compile(r"(?<=[0-9.])[dD](?=[+-]?[0-9])")
_FOREIGN: Final = re.compile(rf"[,;]|{_FORTRAN.pattern}")
_COMMA_WORD: Final = re.compile(r"[+-]?(?:[0-9]+,?[0-9]*|,[0-9]+)(?:[eE][+-]?[0-9]+)?")
_GROUPED: Final = re.compile(r"[+-]?[1-9][0-9]{0,2}(?:,[0-9]{3})+")
"""A number such as 21,400 that may have its thousands set apart."""
_PAIRED_WORDS: Final = 5
_SEPARATED: Final = re.compile(r"[ \t]*[^ \t,]+(?:[ \t]*,[ \t]*[^ \t,]+)+(?:[ \t]*,)?[ \t]*")
_POINTS: Final = "export with decimal points, and blanks between the numbers"


def mend_habits(text: str, start: int, stop: int, reading: Reading) -> str:
    """Return the text with the numbers between two offsets as the standard writes them; untouched where it is strict.

    Read strictly, the first such number is a fault that names its line and column.
    """
    if reading.strict or not _FOREIGN.search(text, start, stop):
        return text
    body = _blank_out(_COMMENT, text[start:stop])
    numbers = _blank_out(_NO_NUMBERS, body)
    mended = numbers
    if ";" in mended:
        _say(reading, text, start + mended.index(";"), "semicolons", "they were read as blanks", _POINTS)
        mended = mended.replace(";", " ")
    if "," in mended:
        at = start + mended.index(",")
        if _has_decimal_commas(mended):
            _say(reading, text, at, "decimal commas", "they were read as decimal points", _POINTS)
            mended = mended.replace(",", ".")
        elif all(_SEPARATED.fullmatch(line[0]) for line in _LINE.finditer(mended)):
            _say(reading, text, at, "commas between the numbers", "they were read as blanks", _POINTS)
            mended = mended.replace(",", " ")
    if match := _FORTRAN.search(mended):
        _say(reading, text, start + match.start(), "D for an exponent", "it was read as E", "write E in place of D")
        mended = _FORTRAN.sub("e", mended)
    if mended is numbers:
        return text
    return text[:start] + "".join(_keep_others(body, mended)) + text[stop:]


def _blank_out(pattern: re.Pattern[str], text: str) -> str:
    return pattern.sub(lambda match: " " * len(match[0]), text)


def _keep_others(body: str, mended: str) -> list[str]:
    """Return the pieces of the mended text, with the lines that hold no numbers as they were."""
    pieces = []
    done = 0
    for match in _NO_NUMBERS.finditer(body):
        pieces += [mended[done : match.start()], match[0]]
        done = match.end()
    return [*pieces, mended[done:]]


def _has_decimal_commas(numbers: str) -> bool:
    """Return whether the commas can only be decimal: no point anywhere, and not all of them set thousands apart.

    Rows of five words may also be a frequency and four pairs, each with a comma between its two numbers.
    """
    first_row = numbers.strip().partition("\n")[0]
    if "." in numbers or len(words_of(first_row)) == _PAIRED_WORDS:
        return False
    words = (match[0] for match in _WORD.finditer(numbers))
    if not all(map(_COMMA_WORD.fullmatch, words)):
        return False
    with_comma = (match[0] for match in _WORD_WITH_COMMA.finditer(numbers))
    return not all(map(_GROUPED.fullmatch, with_comma))


def _say(reading: Reading, text: str, offset: int, found: str, done: str, remedy: str) -> None:
    reading.mend(found, f"from there on {done}", remedy, lines=[line_number(text, offset)])
