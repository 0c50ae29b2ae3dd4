"""A stretch of the page in; heading, lines of notes and the plotting area of one small diagram out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from matplotlib.axes import Axes

from benchtool.page_paper import HEADING_PT, LIGHT, Paper
from benchtool.page_text import fit, literal, width_pt

__all__ = ["NOTE_PT", "Panel", "joined"]

NOTE_PT: Final = 12.0
"""Height of the line of notes under a heading."""
_LEFT_PT: Final = 27.0
_BELOW_PT: Final = 11.0
_SIZES_PT: Final = (6.5, 6.2, 6.0)


def joined(parts: Sequence[str], width: float) -> str:
    """Return the parts as one note, as many from the first on as go into `width` points at the smallest size."""
    note = ""
    for part in parts:
        longer = f"{note}; {part}" if note else part
        if note and width_pt(literal(longer), _SIZES_PT[-1]) > width:
            break
        note = longer
    return note


@dataclass(frozen=True)
class Panel:
    """Where one small diagram goes, its heading included, in points."""

    left: float
    top: float
    width: float
    height: float

    def heading(self, paper: Paper, text: str, aside: str = "") -> bool:
        """Write the heading and, where there is room beside it, the aside; return whether there was."""
        room = self.width - width_pt(text, 7.5, bold=True) - 6.0
        roomy = bool(aside) and width_pt(literal(aside), 6.5) <= room
        paper.heading(self.top, text, self.left, self.width, aside if roomy else "")
        return roomy

    def heading_and_note(self, paper: Paper, what: str, against: str, parts: Sequence[str] = ()) -> None:
        """Write 'what against ...' as heading, or where that is too wide, the second half at the head of the note."""
        whole = f"{what} {against}"
        roomy = width_pt(whole, 7.5, bold=True) <= self.width
        paper.heading(self.top, whole if roomy else what, self.left, self.width)
        self.note(paper, list(parts) if roomy else [against, *parts])

    def note(self, paper: Paper, parts: Sequence[str]) -> None:
        """Write the line between heading and diagram; parts for which there is no room are left out."""
        if not parts:
            return
        lines = fit(joined(parts, self.width), _SIZES_PT, self.width)
        paper.lines(self.left, self.top + HEADING_PT - 1.5, lines, color=LIGHT)

    def say(self, paper: Paper, sentence: str) -> None:
        """Write a sentence in place of the diagram."""
        lines = fit(sentence, (7.0, 6.5), self.width, most=4)
        paper.lines(self.left, self.top + HEADING_PT + 6.0, lines, color=LIGHT)

    def plot(self, right_pt: float = 4.0, above_pt: float = NOTE_PT) -> Panel:
        """Return the plotting area: under the heading and `above_pt` of notes, with room for the ticks' labels."""
        above = HEADING_PT + above_pt
        return Panel(
            self.left + _LEFT_PT,
            self.top + above,
            self.width - _LEFT_PT - right_pt,
            self.height - above - _BELOW_PT,
        )

    def axes(self, paper: Paper) -> Axes:
        """Return axes that fill a plotting area."""
        return paper.axes(self.left, self.top, self.width, self.height)
