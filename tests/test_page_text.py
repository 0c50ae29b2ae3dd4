"""The words and numbers of the page: digits, limits, literal text, widths and line breaks."""

from __future__ import annotations

import io
from collections.abc import Iterator
from pathlib import Path

import matplotlib
import pytest
from fontTools.ttLib import TTFont  # type: ignore[import-untyped]
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure as Canvas
from matplotlib.font_manager import findfont, fontManager
from numpy.testing import assert_allclose

from benchtool import page_text
from benchtool.digits import figure_label, interval_text, limits_text, quantity, value_text
from benchtool.model import Figure, TargetResult
from benchtool.page_paper import STYLE, Paper
from benchtool.page_text import families, fit, in_reading_order, literal, width_pt, wrap


@pytest.mark.parametrize(
    ("figure", "value", "interval"),
    [
        (Figure("gain", 40.1234, "dB"), "40.12 dB", ""),
        (Figure("gain", 40.1234, "dB", 39.7, 40.5, 0.95, None, 0.21), "40.12 dB", "39.70 to 40.50"),
        (Figure("gain", -0.001, "dB"), "0.00 dB", ""),
        (Figure("bandwidth", 999.9999e3, "Hz"), "1.000 MHz", ""),
        (Figure("bandwidth", 1.2e6, "Hz", bound="at least"), "at least 1.200 MHz", ""),
        (Figure("peak_frequency", 21.4e6, "Hz", standard_uncertainty=31e3), "21.400 MHz", ""),
        (Figure("group_delay", 1.48743e-6, "s"), "1.487 µs", ""),
        (Figure("loaded_q", 24.97, ""), "25.0", ""),
        (Figure("phase", -92.34, "deg"), "−92.3°", ""),
        (Figure("rejection", 23.44, "dB"), "23.4 dB", ""),
        (Figure("gain", None, "dB"), "not known", ""),
        (Figure("gain", float("nan"), "dB"), "not known", ""),
        (None, "not known", ""),
    ],
)
def test_figures_in_words(figure: Figure | None, value: str, interval: str) -> None:
    assert value_text(figure) == value
    assert interval_text(figure) == interval


@pytest.mark.parametrize(
    ("low", "high", "unit", "text"),
    [
        (38.0, None, "dB", "≥ 38 dB"),
        (None, 3.0, "dB", "≤ 3 dB"),
        (600e3, 1.1e6, "Hz", "600 kHz to 1.1 MHz"),
        (21.25e6, 21.55e6, "Hz", "21.25 to 21.55 MHz"),
        (85.0, 95.0, "deg", "85 to 95°"),
        (None, None, "dB", "—"),
    ],
)
def test_limits_in_words(low: float | None, high: float | None, unit: str, text: str) -> None:
    assert limits_text(TargetResult("x", "x", unit, low, high, "met")) == text


def test_labels_in_words() -> None:
    assert figure_label("input_p1db") == "input P1dB"
    assert figure_label("phase_linearity over 21.1 MHz to 21.7 MHz") == "phase linearity over 21.1 to 21.7 MHz"
    assert quantity(-0.04, "dBm") == "0.0 dBm"


@settings(deadline=None, max_examples=60)
@given(st.text(max_size=60), st.floats(8.0, 300.0), st.sampled_from([6.0, 7.0, 9.0]))
def test_any_text_is_printable_and_wraps_without_losing_a_letter(text: str, width: float, size: float) -> None:
    shown = literal(text)
    assert shown.isprintable()
    lines = wrap(shown, size, width)
    assert "".join("".join(lines).split()) == "".join(shown.split())
    assert all(width_pt(line, size) <= width or len(line) == 1 for line in lines)
    set_lines = fit(text, (9.0, 7.0, 6.0), width, most=2)
    assert len(set_lines.lines) <= 2 or set_lines.size_pt == 6.0


def test_measured_widths_are_those_drawn() -> None:
    canvas = Canvas(dpi=150)
    renderer = FigureCanvasAgg(canvas).get_renderer()  # type: ignore[no-untyped-call]
    with matplotlib.rc_context(STYLE):
        for bold in (False, True):
            words = "Sweep stage2_low again: 21.4 MHz, −58.0 dBm ≥ 38 dB Ω µ"
            text = canvas.text(0, 0, words, size=7, weight="bold" if bold else "normal", family=["DejaVu Sans"])
            drawn = text.get_window_extent(renderer).width * 72.0 / 150.0
            assert_allclose(width_pt(words, 7.0, bold), drawn, rtol=0.035, atol=0)
            assert width_pt(words, 7.0, bold) >= drawn


@pytest.fixture
def font_with_one_han_letter(tmp_path: Path) -> Iterator[str]:
    """Install, for one test, a font whose only claim is that it has U+4E2D, and return its name."""
    family = "Bench Han"
    font = TTFont(findfont("DejaVu Sans"))
    glyph = font.getBestCmap()[ord("H")]
    for table in font["cmap"].tables:
        table.cmap = {0x4E2D: glyph} if table.isUnicode() else {}
    for record in font["name"].names:
        if record.nameID in (1, 4, 6, 16):
            record.string = family.replace(" ", "") if record.nameID == 6 else family
    path = tmp_path / "han.ttf"
    font.save(path)
    font.close()
    listed = list(fontManager.ttflist)
    caches = [value for value in vars(page_text).values() if hasattr(value, "cache_clear")]
    fontManager.addfont(path)
    for clear in caches:
        clear.cache_clear()
    yield family
    fontManager.ttflist[:] = listed
    for clear in caches:
        clear.cache_clear()


def test_a_letter_of_an_installed_font_is_printed_with_it(font_with_one_han_letter: str) -> None:
    assert literal("a\u4e2d\u4e2e") == "a\u4e2d<U+4E2E>"
    assert families("a\u4e2d") == ("DejaVu Sans", font_with_one_han_letter)
    assert_allclose(width_pt("\u4e2d", 10.0), width_pt("H", 10.0), rtol=1e-9, atol=0)
    paper = Paper()
    paper.text(0, 0, "a\u4e2d")
    pdf = io.BytesIO()
    with matplotlib.rc_context(STYLE):
        paper.canvas.savefig(pdf, format="pdf")
    assert b"BenchHan" in pdf.getvalue() and b"/Type3" not in pdf.getvalue()


def test_a_letter_of_no_font_becomes_its_code_point() -> None:
    assert literal("a\u4e2d") == "a<U+4E2D>"
    assert literal("\x07\n\u202e\xa0") == r"\x07\n\u202e\xa0"


def test_a_right_to_left_name_leaves_the_line_in_order() -> None:
    arabic = "\u0645\u0631.s2p"
    assert in_reading_order(arabic) == "\u200e" + arabic
    assert in_reading_order("Verst\u00e4rker") == "Verst\u00e4rker"
