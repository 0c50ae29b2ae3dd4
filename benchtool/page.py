"""A bench and one of its devices in; one A4 page out, as a matplotlib figure or as PDF and PNG.

The page reads from top to bottom as its reader thinks: verdict and next step, signal path, gain against frequency,
gain against drive or group delay beside match, measured against target, findings, cautions, origin of the data.
Every part knows its height before it is drawn; the diagrams and the findings share what the others leave.
"""

from __future__ import annotations

import io
from datetime import datetime
from typing import Final

from matplotlib import rc_context
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_pdf import FigureCanvasPdf
from matplotlib.figure import Figure as Canvas

from benchtool.model import BenchResult, DeviceResult
from benchtool.page_gain import draw_gain
from benchtool.page_notes import cautions, findings_block, provenance
from benchtool.page_panels import draw_panels, least_height
from benchtool.page_paper import HEIGHT_PT, STYLE, Block, Paper
from benchtool.page_path import path_strip
from benchtool.page_scales import view_of
from benchtool.page_sweeps import sweep_list
from benchtool.page_table import other_figures, target_table
from benchtool.page_text import literal
from benchtool.page_traces import traces
from benchtool.page_verdict import head

__all__ = ["draw_page", "render_page"]

_GAP_PT: Final = 5.0
_GAPS: Final = 9
_LEAST_GAIN_PT: Final = 112.0
_MOST_GAIN_PT: Final = 250.0
_MOST_PANELS_PT: Final = 170.0
_GAIN_SHARE: Final = 0.6
_GAIN_SHARE_BESIDE_DRIVE: Final = 0.35
"""Share of the free height that goes to gain against frequency; the smaller diagrams get the rest."""
_LEAST_FINDINGS_PT: Final = 46.0
_PNG_DPI: Final = 150


def _compose(bench: BenchResult, device: DeviceResult) -> Canvas:
    """Return the page; the house style must be in force."""
    paper = Paper()
    looks, view = traces(device), view_of(device)
    top_parts = [head(bench, device), path_strip(device), sweep_list(device, looks)]
    foot_parts = [cautions(), provenance(bench, device, looks)]
    free = HEIGHT_PT - _GAP_PT * _GAPS - sum(part.height for part in [*top_parts, *foot_parts])
    least_panels = least_height(device, looks)
    free -= _LEAST_GAIN_PT + least_panels
    tables, findings = _numbers_and_findings(device, free)
    free -= sum(part.height for part in [*tables, findings])
    to_gain = _GAIN_SHARE if device.drive is None else _GAIN_SHARE_BESIDE_DRIVE
    gain = _LEAST_GAIN_PT + min(to_gain * max(free, 0.0), _MOST_GAIN_PT - _LEAST_GAIN_PT)
    panels = least_panels + min((1.0 - to_gain) * max(free, 0.0), _MOST_PANELS_PT - least_panels)

    y = _put(paper, top_parts, 0.0)
    draw_gain(paper, device, looks, view, y, gain)
    y += gain + _GAP_PT
    draw_panels(paper, device, looks, view, y, panels)
    y += panels + _GAP_PT
    _put(paper, [*tables, findings], y)
    _put(paper, foot_parts, HEIGHT_PT - sum(part.height for part in foot_parts) - _GAP_PT)
    return paper.canvas


def _put(paper: Paper, parts: list[Block], y: float) -> float:
    """Draw parts below one another and return where the next begins."""
    for part in parts:
        if part.height > 0.0:
            part.draw(paper, y)
            y += part.height + _GAP_PT
    return y


def _numbers_and_findings(device: DeviceResult, room: float) -> tuple[list[Block], Block]:
    """Return the tables and the findings for `room` points.

    Whole if they fit. Else the advice of single targets goes first, as the findings give it too, then figures without
    a target, then the last of the findings; targets go only when nothing else is left to go.
    """
    wanted = findings_block(device.findings, float("inf")).height
    tables: list[Block] = []
    every_target = target_table(device, float("inf"), advise=False).height
    for advise, rows in ((True, 12), (False, 12), (False, 8), (False, 5), (False, 3), (False, 0)):
        others = other_figures(device, rows)
        table = target_table(device, room - others.height - _LEAST_FINDINGS_PT, advise)
        tables = [table, others]
        left = room - table.height - others.height
        enough = wanted if rows > 5 else min(wanted, 2 * _LEAST_FINDINGS_PT)
        if table.height >= every_target and left >= enough:
            break
    return tables, findings_block(device.findings, room - sum(part.height for part in tables))


def draw_page(bench: BenchResult, device: DeviceResult) -> Canvas:
    """Return the page of `device` as a matplotlib figure, A4 portrait."""
    with rc_context(STYLE):
        return _compose(bench, device)


def _made_at(bench: BenchResult) -> datetime | None:
    try:
        return datetime.fromisoformat(bench.made_at)
    except ValueError:
        return None


def render_page(bench: BenchResult, device: DeviceResult) -> tuple[bytes, bytes]:
    """Return the page of `device` as (PDF, PNG).

    The same result gives the same bytes: the date in the PDF is the one of the result, not of the clock.
    """
    pdf, png = io.BytesIO(), io.BytesIO()
    title = literal(device.name)
    with rc_context(STYLE):
        canvas = _compose(bench, device)
        maker = f"benchtool {bench.version}"
        about = {"Title": title, "Subject": literal(bench.title), "Creator": maker, "CreationDate": _made_at(bench)}
        FigureCanvasPdf(canvas).print_figure(pdf, format="pdf", metadata=about)
        quick = {"compress_level": 3}
        FigureCanvasAgg(canvas).print_figure(
            png, format="png", dpi=_PNG_DPI, metadata={"Software": maker}, pil_kwargs=quick
        )
    return pdf.getvalue(), png.getvalue()
