"""Marks in points in, measured from the top left corner of the sheet; matplotlib artists on one A4 figure out.

The palette is the one of M. Okabe and K. Ito, "Color Universal Design" (2008), which readers with any common form
of colour blindness can tell apart. Colour never stands alone: shape, dash or a word says the same in grey.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Final, Literal

import matplotlib
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure as Canvas
from matplotlib.lines import Line2D
from matplotlib.patches import Polygon, Rectangle
from matplotlib.text import Text
from matplotlib.transforms import Affine2D

from benchtool.page_text import FAMILY, Lines, families, in_reading_order, literal

__all__ = [
    "BLUE",
    "FAINT",
    "GREEN",
    "HEADING_PT",
    "HEIGHT_PT",
    "INK",
    "LEFT_PT",
    "LIGHT",
    "ORANGE",
    "PURPLE",
    "RULE",
    "SKY",
    "STYLE",
    "VERMILLION",
    "WIDTH_PT",
    "ZONE",
    "Block",
    "Dash",
    "Paper",
]

# A4, ISO 216: 210 mm by 297 mm.
SHEET_WIDTH_PT: Final = 210.0 / 25.4 * 72.0
SHEET_HEIGHT_PT: Final = 297.0 / 25.4 * 72.0
LEFT_PT: Final = 36.0
TOP_PT: Final = 26.0
WIDTH_PT: Final = SHEET_WIDTH_PT - 2 * LEFT_PT
HEIGHT_PT: Final = SHEET_HEIGHT_PT - TOP_PT - 24.0

INK: Final = "#1b2127"
LIGHT: Final = "#56616b"
RULE: Final = "#b4bcc3"
FAINT: Final = "#eef0f2"
BLUE: Final = "#0072B2"
SKY: Final = "#56B4E9"
GREEN: Final = "#009E73"
ORANGE: Final = "#E69F00"
VERMILLION: Final = "#D55E00"
PURPLE: Final = "#CC79A7"
ZONE: Final = "#cfe9df"

Dash = Literal["-"] | tuple[float, tuple[float, ...]]

STYLE: Final[dict[Any, Any]] = {
    **{key: value for key, value in matplotlib.rcParamsDefault.items() if not key.startswith("backend")},
    "font.family": [FAMILY],
    "text.parse_math": False,
    # Hinting would stretch lines on screen past the widths that they have in print.
    "text.hinting": "no_hinting",
    "axes.unicode_minus": True,
    "pdf.fonttype": 42,
    # matplotlib groups the glyphs of a PDF by this setting; at its default, 3, every font is subset and embedded twice.
    "ps.fonttype": 42,
    "axes.linewidth": 0.6,
    "axes.edgecolor": LIGHT,
    "xtick.color": LIGHT,
    "ytick.color": LIGHT,
    "xtick.labelsize": 6.5,
    "ytick.labelsize": 6.5,
    "xtick.major.size": 2.0,
    "ytick.major.size": 2.0,
    "xtick.major.width": 0.5,
    "ytick.major.width": 0.5,
    "xtick.major.pad": 2.0,
    "ytick.major.pad": 2.0,
    "grid.color": "#dfe3e6",
    "grid.linewidth": 0.45,
    "axes.grid": True,
    "axes.axisbelow": True,
    "axes.xmargin": 0.0,
    "axes.ymargin": 0.0,
}
"""matplotlib's own defaults and ours, so that a user's settings file cannot restyle the page."""


class Paper:
    """The sheet: every mark is placed in points from the top left corner of the sheet's text area."""

    def __init__(self) -> None:
        self.canvas = Canvas(figsize=(SHEET_WIDTH_PT / 72.0, SHEET_HEIGHT_PT / 72.0), dpi=150)
        self._points = (
            Affine2D().translate(LEFT_PT, TOP_PT).scale(1.0 / 72.0, -1.0 / 72.0).translate(0.0, SHEET_HEIGHT_PT / 72.0)
            + self.canvas.dpi_scale_trans
        )
        self._laid = 0

    def _lay(self, artist: Artist) -> None:
        """Lay a mark over those that were laid before it."""
        self._laid += 1
        artist.set_zorder(1.0 + self._laid)
        artist.set_transform(self._points)
        self.canvas.add_artist(artist, clip=False)

    def text(
        self,
        x: float,
        y: float,
        text: str,
        size: float = 7.0,
        *,
        bold: bool = False,
        color: str = INK,
        align: Literal["left", "center", "right"] = "left",
    ) -> None:
        """Write one line with its baseline at y."""
        shown = literal(text)
        artist = Text(
            x,
            y,
            in_reading_order(shown),
            size=size,
            color=color,
            family=list(families(shown)),
            weight="bold" if bold else "normal",
            ha=align,
            va="baseline",
            parse_math=False,
        )
        if hasattr(artist, "set_fontfeatures"):
            # A ligature is one glyph for two letters: names are shown, and found in the PDF, letter by letter.
            artist.set_fontfeatures(("-liga", "-clig", "-kern"))
        self._lay(artist)

    def lines(
        self,
        x: float,
        y: float,
        setting: Lines,
        *,
        bold: bool = False,
        color: str = INK,
        align: Literal["left", "center", "right"] = "left",
        leading: float = 1.22,
    ) -> float:
        """Write lines below one another, the first with its top at y; return the y below the last."""
        step = setting.size_pt * leading
        for number, line in enumerate(setting.lines):
            self.text(
                x, y + setting.size_pt + number * step, line, setting.size_pt, bold=bold, color=color, align=align
            )
        return y + step * len(setting.lines)

    def stroke(
        self, xs: Sequence[float], ys: Sequence[float], color: str = INK, width: float = 0.8, dash: Dash = "-"
    ) -> None:
        """Draw a line through points."""
        line = Line2D(
            xs,
            ys,
            color=color,
            linewidth=width,
            linestyle=dash,
            solid_capstyle="butt",
            dash_capstyle="butt",
        )
        self._lay(line)

    def marker(self, x: float, y: float, shape: Any, size: float, color: str, fill: str | None = None) -> None:
        """Draw one of matplotlib's marker shapes centred on a point."""
        line = Line2D(
            [x],
            [y],
            marker=shape,
            markersize=size,
            markeredgecolor=color,
            markerfacecolor=fill or color,
            markeredgewidth=0.7,
            linestyle="none",
        )
        self._lay(line)

    def box(
        self,
        x: float,
        y: float,
        width: float,
        height: float,
        *,
        fill: str = "none",
        edge: str = "none",
        line: float = 0.8,
        dash: Dash = "-",
    ) -> None:
        """Draw a rectangle whose top left corner is (x, y)."""
        patch = Rectangle(
            (x, y),
            width,
            height,
            facecolor=fill,
            edgecolor=edge,
            linewidth=line,
            linestyle=dash,
        )
        self._lay(patch)

    def shape(self, corners: Sequence[tuple[float, float]], fill: str, edge: str = "none", line: float = 0.8) -> None:
        """Draw a closed polygon."""
        patch = Polygon(corners, closed=True, facecolor=fill, edgecolor=edge, linewidth=line)
        self._lay(patch)

    def axes(self, x: float, y: float, width: float, height: float) -> Axes:
        """Return axes whose plotting area has its top left corner at (x, y)."""
        left = (LEFT_PT + x) / SHEET_WIDTH_PT
        bottom = 1.0 - (TOP_PT + y + height) / SHEET_HEIGHT_PT
        return self.canvas.add_axes((left, bottom, width / SHEET_WIDTH_PT, height / SHEET_HEIGHT_PT))

    def heading(self, y: float, text: str, x: float = 0.0, width: float = WIDTH_PT, aside: str = "") -> None:
        """Write the heading of a part under a thin rule that starts at (x, y); `aside` stands at its right end."""
        self.stroke([x, x + width], [y, y], RULE, 0.6)
        self.text(x, y + 9.0, text, 7.5, bold=True)
        if aside:
            self.text(x + width, y + 9.0, aside, 6.5, color=LIGHT, align="right")


HEADING_PT: Final = 13.0
"""Height that a heading takes, rule included."""


@dataclass(frozen=True)
class Block:
    """A part of the page whose height is known before it is drawn; ``draw(paper, top)`` puts it there."""

    height: float
    draw: Callable[[Paper, float], None]
