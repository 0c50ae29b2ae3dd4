"""The page: one A4 sheet, nothing clipped or over anything else, every name literal, every number in its place."""

from __future__ import annotations

import importlib.util
import re
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import replace
from functools import cache
from itertools import combinations
from pathlib import Path
from types import ModuleType

import matplotlib
import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.contour import ContourSet
from matplotlib.figure import Figure as Canvas
from matplotlib.lines import Line2D
from matplotlib.text import Text
from matplotlib.transforms import Bbox
from numpy.testing import assert_allclose

from benchtool.digits import limits_text
from benchtool.drive_results import Estimate
from benchtool.model import DeviceResult, FloatArray, Verdict
from benchtool.page import draw_page, render_page
from benchtool.page_marks import DriveMark, apart
from benchtool.page_paper import STYLE
from benchtool.page_text import MIN_SIZE_PT, literal
from benchtool.page_traces import traces


def _load(name: str) -> ModuleType:
    spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name(f"{name}.py"))
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    return module


examples = _load("page_examples")
CASES: list[str] = list(examples.CASES)


def _device(case: str) -> DeviceResult:
    device = examples.CASES[case]()
    assert isinstance(device, DeviceResult)
    return device


def _page(device: DeviceResult) -> Canvas:
    canvas = draw_page(examples.make_bench(device), device)
    with matplotlib.rc_context(STYLE):
        FigureCanvasAgg(canvas).draw()  # type: ignore[no-untyped-call]
    return canvas


@cache
def _page_of(case: str) -> Canvas:
    """Return the page of a case, for tests that only look at it."""
    return _page(_device(case))


def _texts(canvas: Canvas) -> Iterator[tuple[Text, Bbox]]:
    """Yield every visible text with the box of its letters: the box of the line less its empty top and bottom."""
    renderer = canvas.canvas.get_renderer()  # type: ignore[attr-defined]
    for text in canvas.findobj(Text):
        if isinstance(text, Text) and text.get_visible() and text.get_text().strip():
            box = text.get_window_extent(renderer)
            yield text, Bbox.from_extents(box.x0, box.y0 + 0.2 * box.height, box.x1, box.y1 - 0.2 * box.height)


def _words(canvas: Canvas) -> list[str]:
    return [text.get_text() for text, _ in _texts(canvas)]


def _letters(canvas: Canvas) -> str:
    """Return all that is written, in the order of writing, without blanks: line breaks take blanks away."""
    return "".join("".join(text.get_text().split()).replace("\u200e", "") for text in canvas.findobj(Text))


def _strokes(canvas: Canvas) -> list[Line2D]:
    """Return the lines and marks outside the diagrams."""
    return [artist for artist in canvas.artists if isinstance(artist, Line2D)]


def _x(line: Line2D) -> FloatArray:
    return np.asarray(line.get_xdata(), dtype=float)


def _y(line: Line2D) -> FloatArray:
    return np.asarray(line.get_ydata(), dtype=float)


def _xy(line: Line2D) -> FloatArray:
    """Return (2, n): where the points of a line stand, across and up."""
    return np.stack([_x(line), _y(line)])


def _share(one: Bbox, other: Bbox) -> float:
    """Return the area that two boxes share, in square pixels."""
    wide = min(one.x1, other.x1) - max(one.x0, other.x0)
    tall = min(one.y1, other.y1) - max(one.y0, other.y0)
    return float(max(wide, 0.0) * max(tall, 0.0))


def _curve(axes: Axes, width: float) -> Line2D:
    return next(line for line in axes.get_lines() if line.get_linewidth() == width and len(_x(line)) > 50)


# --- the sheet ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("case", CASES)
def test_no_text_is_small_clipped_or_over_another(case: str) -> None:
    canvas = _page_of(case)
    found = list(_texts(canvas))
    assert len(found) > 60
    width, height = canvas.get_size_inches() * canvas.dpi
    for text, box in found:
        assert float(text.get_fontsize()) >= MIN_SIZE_PT, text.get_text()
        assert box.x0 > 30 and box.y0 > 30 and box.x1 < width - 30 and box.y1 < height - 30, text.get_text()
    for (one, first), (other, second) in combinations(found, 2):
        assert _share(first, second) < 1.0, (one.get_text(), other.get_text())


@pytest.mark.parametrize("case", CASES)
def test_no_word_or_key_stands_over_data(case: str) -> None:
    canvas = _page_of(case)
    assert canvas.get_axes()
    assert not canvas.legends
    for axes in canvas.get_axes():
        assert axes.get_legend() is None
        for text, box in _texts(canvas):
            assert _share(axes.bbox, box) < 1.0, text.get_text()


def test_overlap_is_noticed() -> None:
    canvas = _page(_device("one_path"))
    canvas.text(0.5, 0.5, "over the data")
    canvas.text(0.5, 0.5, "over the words")
    boxes = {text.get_text(): box for text, box in _texts(canvas)}
    assert _share(boxes["over the data"], boxes["over the words"]) > 100.0
    assert any(_share(axes.bbox, boxes["over the data"]) > 100.0 for axes in canvas.get_axes())


@pytest.mark.parametrize("case", ["one_path", "crowded", "evil_2", "evil_4", "evil_6", "evil_7", "evil_8"])
def test_pdf_is_one_a4_page_with_its_fonts_embedded(case: str) -> None:
    device = _device(case)
    pdf, png = render_page(examples.make_bench(device), device)
    assert len(re.findall(rb"/Type /Page\b(?!s)", pdf)) == 1
    box = re.search(rb"/MediaBox \[ ?([\d. ]+?) ?\]", pdf)
    assert box is not None
    assert_allclose([float(v) for v in box[1].split()], [0, 0, 210 / 25.4 * 72, 297 / 25.4 * 72], rtol=0, atol=0.01)
    assert b"/Type3" not in pdf
    assert pdf.count(b"/FontFile2") == pdf.count(b"/Type /FontDescriptor") > 0
    assert png.startswith(b"\x89PNG")
    assert [int.from_bytes(png[k : k + 4], "big") for k in (16, 20)] == [1240, 1753]


def test_each_font_is_embedded_once() -> None:
    device = _device("drives_with_study")
    pdf, _ = render_page(examples.make_bench(device), device)
    # The upright face and the bold one.
    assert pdf.count(b"/FontFile2") == 2


def test_same_result_same_bytes_whatever_the_settings(monkeypatch: pytest.MonkeyPatch) -> None:
    device = _device("three_drives")
    bench = examples.make_bench(device)
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1700000000")
    first = render_page(bench, device)
    with matplotlib.rc_context({"font.size": 25, "lines.linewidth": 9, "text.parse_math": True, "pdf.fonttype": 3}):
        before = dict(matplotlib.rcParams)
        assert render_page(bench, device) == first
        assert dict(matplotlib.rcParams) == before
    assert render_page(replace(bench, version="9.9"), device)[0] != first[0]
    assert b"(D:20261128162000" in first[0]


def test_page_needs_neither_pyplot_nor_scikit_rf() -> None:
    code = "import sys, benchtool.page; print([m for m in ('matplotlib.pyplot', 'skrf') if m in sys.modules])"
    root = Path(__file__).parents[1]
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=root)
    assert done.stdout.strip() == "[]"


# --- what it says ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", [*examples.EVIL_NAMES, examples.NAME_40, examples.NAME_60])
def test_names_are_literal(name: str) -> None:
    canvas = _page(examples.named(name)())
    letters = _letters(canvas)
    shown = "".join(literal(name).split())
    # In the heading, in the strip or its key, in the list of sweeps, in a finding: no letter lost.
    assert letters.count(shown) >= 5
    assert all(not text.get_parse_math() for text in canvas.findobj(Text))


@pytest.mark.parametrize(
    ("verdict", "word"), [("met", "MET"), ("missed", "MISSED"), ("undecided", "UNDECIDED"), ("none", "NO TARGET")]
)
def test_head_gives_verdict_reason_and_next_step(verdict: Verdict, word: str) -> None:
    device = _device("three_drives")
    device = replace(device, summary=replace(device.summary, verdict=verdict))
    canvas = _page(device)
    sizes = {text.get_text(): float(text.get_fontsize()) for text, _ in _texts(canvas)}
    assert sizes[word] >= 13.0 and sizes["second stage"] >= 13.0
    assert device.summary.reason in sizes and device.summary.next_step in sizes
    upper = [box.y0 for text, box in _texts(canvas) if text.get_text() in (device.summary.reason, word)]
    assert min(upper) > 0.86 * canvas.get_size_inches()[1] * canvas.dpi


def test_strip_has_every_level_in_order() -> None:
    canvas = _page_of("six_pads_a_side")
    words = ["level unknown" if w == "dBm" else w for w in _words(canvas)]
    levels = [w for w in words if re.fullmatch(r"−?\d+\.\d", w)]
    # −8 dBm less 3, 4 … 8 dB; +40.12 dB; less 8.85, 7.48, 6.11, 4.74, 3.37, 2 dB (each prints to a tenth).
    assert levels[:7] == ["−8.0", "−11.0", "−15.0", "−20.0", "−26.0", "−33.0", "−41.0"]
    assert levels[7:14] == ["−0.9", "−9.7", "−17.2", "−23.3", "−28.1", "−31.4", "−33.4"]
    assert "removed" in words and words.count("calibration plane") == 2
    assert words.count("added") == 9 and words.count("in cal.") == 3


def test_calibration_planes_stand_between_calibrated_and_added_pads() -> None:
    canvas = _page_of("three_drives")
    where = {
        text.get_text(): (box.x0 + box.x1) / 2 for text, box in _texts(canvas) if float(text.get_fontsize()) >= 6.9
    }
    planes = sorted(
        line.get_transform().transform((_x(line)[0], 0))[0]
        for line in _strokes(canvas)
        if line.get_color() == "#0072B2" and line.get_linewidth() == 1.0 and line.is_dashed()
    )
    assert len(planes) == 2
    assert where["b30"] < planes[0] < where["a20"] < where["device"] < planes[1] < where["c10"]


def test_unknown_levels_say_so() -> None:
    words = _words(_page_of("nothing_known"))
    assert words.count("level unknown") == 5
    assert not [w for w in words if "nan" in w.lower() or "None" in w]


def test_findings_are_sorted_and_counted() -> None:
    canvas = _page_of("many_findings")
    words = _words(canvas)
    shown = [w for w in words if w in ("fault", "caution", "note")]
    assert shown and shown == sorted(shown, key=["fault", "caution", "note"].index)
    assert f"{25 - len(shown)} more in results.json" in words
    assert "8 faults, 8 cautions, 9 notes" in words


@pytest.mark.parametrize("case", ["twelve_targets", "crowded"])
def test_every_target_has_its_row(case: str) -> None:
    device = _device(case)
    words = _words(_page(device))
    assert len(device.targets) == 12
    assert sum(w in ("met", "missed", "undecided") for w in words) == 12
    assert all(limits_text(target) in words for target in device.targets)


def test_targets_that_cannot_fit_leave_the_missed_ones() -> None:
    device = _device("twelve_targets")
    many = tuple(replace(device.targets[0], verdict="missed" if k == 77 else "met") for k in range(80))
    words = _words(_page(replace(device, targets=many)))
    rows = sum(w in ("met", "missed") for w in words)
    assert "missed" in words and 5 < rows < 80
    assert f"{80 - rows} more targets in results.json, none worse than these" in words


# --- what it draws --------------------------------------------------------------------------------------------------


def test_gain_curve_is_the_sweep() -> None:
    device = _device("three_drives")
    axes = _page(device).get_axes()[0]
    sweep = device.reference.sweep
    drawn = _curve(axes, 2.0)
    assert_allclose(_x(drawn), sweep.frequency_hz / 1e6, rtol=1e-12, atol=0)
    assert_allclose(_y(drawn), 20 * np.log10(np.abs(sweep.s21)), rtol=0, atol=1e-9)
    assert len([line for line in axes.get_lines() if len(_x(line)) > 50]) == 3
    dashed = [line for line in axes.get_lines() if len(_x(line)) > 50 and line.is_dashed()]
    assert len(dashed) == 1
    assert max(_y(dashed[0])) < 33.0


def test_half_power_marks_and_zones_stand_where_the_figures_say() -> None:
    device = _device("three_drives")
    axes = _page(device).get_axes()[0]
    marks = next(line for line in axes.get_lines() if line.get_marker() == "|")
    edges = [(device.figures[key].value or 0.0) / 1e6 for key in ("lower_edge", "upper_edge")]
    assert_allclose(_x(marks), edges, rtol=1e-12, atol=0)
    assert_allclose(_y(marks), 40.13 - 10 * np.log10(2), rtol=0, atol=1e-9)
    zones = sorted((p.get_x(), p.get_width(), p.get_y(), p.get_y() + p.get_height()) for p in axes.patches)  # type: ignore[attr-defined]
    # Rejection at 16 MHz of 23 dB; bandwidth 600 to 800 kHz about 21.4 MHz; peak 21.25 to 21.55 MHz; gain from 38 dB.
    assert_allclose([zones[0][0] + zones[0][1] / 2, zones[0][3]], [16.0, 40.13 - 23.0], rtol=0, atol=1e-9)
    assert_allclose([zones[1][0], zones[1][1]], [21.0, 0.1], rtol=0, atol=1e-9)
    assert_allclose([zones[2][0], zones[2][1]], [21.25, 0.3], rtol=0, atol=1e-9)
    assert_allclose(zones[3][2], 38.0, rtol=0, atol=1e-9)
    assert_allclose([zones[4][0], zones[4][1]], [21.7, 0.1], rtol=0, atol=1e-9)


def test_narrow_band_is_shown_near_its_peak_and_says_so() -> None:
    canvas = _page_of("full_filter")
    low, high = canvas.get_axes()[0].get_xlim()
    assert 1.0 < low < 16.0 and 26.0 < high < 60.0
    assert "of 1 MHz to 60 MHz swept" in _words(canvas)
    low, high = canvas.get_axes()[1].get_xlim()
    assert_allclose([low, high], [21.4 - 3 * 0.856, 21.4 + 3 * 0.856], rtol=1e-9, atol=0)


def test_drive_panel_has_every_drive() -> None:
    axes = _page_of("three_drives").get_axes()[1]
    points = next(line for line in axes.get_lines() if len(_x(line)) == 3 and line.get_marker() == "None")
    assert_allclose(_x(points), [-58, -48, -38], rtol=0, atol=1e-9)
    assert_allclose(_y(points), [40.12, 39.52, 32.02], rtol=0, atol=1e-9)
    hollow = next(line for line in axes.get_lines() if line.get_markerfacecolor() == "white")
    assert_allclose([_x(hollow)[0], _y(hollow)[0]], [-38, 32.02], rtol=0, atol=1e-9)


def _drive_axes(case: str) -> tuple[Axes, Axes]:
    """Return the diagram of gain against drive and the strip of phase below it."""
    axes = _page_of(case).get_axes()
    return axes[1], axes[2]


def _whisker(axes: Axes) -> tuple[list[float], list[float]]:
    """Return the lower and the upper ends of the whiskers, from left to right."""
    caps = next(line for line in axes.get_lines() if line.get_marker() == "_")
    half = len(_y(caps)) // 2
    return _y(caps)[:half].tolist(), _y(caps)[half:].tolist()


def test_drive_panel_shows_gain_curve_and_onset_of_the_study() -> None:
    gain, _ = _drive_axes("drives_with_study")
    lines = gain.get_lines()
    full = next(li for li in lines if li.get_marker() == "o" and li.get_markerfacecolor() == "#1b2127")
    hollow = next(li for li in lines if li.get_marker() == "o" and li.get_markerfacecolor() == "white")
    assert_allclose(_xy(full), [[-58.0, -48.0], [40.12, 39.52]], rtol=0, atol=1e-9)
    assert_allclose(_xy(hollow), [[-38.0], [32.02]], rtol=0, atol=1e-9)
    low, high = _whisker(gain)
    assert_allclose(low, [39.72, 39.12, 31.62], rtol=0, atol=1e-9)
    assert_allclose(high, [40.52, 39.92, 32.42], rtol=0, atol=1e-9)
    study = _device("drives_with_study").drive
    assert study is not None
    curve = _curve(gain, 0.9)
    assert_allclose(_x(curve), study.onset.curve_drive_dbm, rtol=0, atol=1e-12)
    assert_allclose(_y(curve), study.onset.curve_gain_db[1], rtol=0, atol=1e-12)
    point = next(li for li in lines if li.get_marker() == "D")
    assert_allclose([_x(point)[0], _y(point)[0]], [-46.9, 40.12 - 1.0], rtol=0, atol=1e-9)
    interval = next(li for li in lines if li.get_marker() == "|" and li.get_linestyle() == "-")
    assert_allclose(_x(interval), [-47.6, -46.1], rtol=0, atol=1e-9)
    limit = next(li for li in lines if li.get_color() == "#0072B2")
    assert_allclose(_x(limit), [-55.4, -55.4], rtol=0, atol=1e-9)
    words = _words(_page_of("drives_with_study"))
    assert "input P1dB −46.9 dBm (−47.6 to −46.1)" in words
    assert "proven safe to −55.4 dBm" in words and "compressed" in words and "left out" not in words


def test_sweep_numbers_stand_over_their_drives() -> None:
    canvas = _page_of("drives_with_study")
    gain = canvas.get_axes()[1]
    for number, drive in (("1", -58.0), ("2", -48.0), ("3", -38.0)):
        x, top = gain.transData.transform((drive, gain.get_ylim()[1]))
        over = [b for t, b in _texts(canvas) if t.get_text() == number and 0.0 < b.y0 - top < 12.0]
        assert len(over) == 1
        assert_allclose((over[0].x0 + over[0].x1) / 2.0, x, rtol=0, atol=1.0)


def test_phase_change_has_a_strip_below_the_gain() -> None:
    gain, phase = _drive_axes("drives_with_study")
    assert phase.bbox.y1 < gain.bbox.y0 and phase.get_xlim() == gain.get_xlim()
    marks = next(li for li in phase.get_lines() if li.get_marker() == "s")
    assert_allclose(_xy(marks), [[-58.0, -48.0, -38.0], [0.0, 0.24, 3.24]], rtol=0, atol=1e-9)
    low, high = _whisker(phase)
    assert_allclose(low, [0.0, -0.86, 2.14], rtol=0, atol=1e-9)
    assert_allclose(high, [0.0, 1.34, 4.34], rtol=0, atol=1e-9)
    assert "phase change, °; up to 0.30°/dB" in _words(_page_of("drives_with_study"))
    assert not [w for w in _words(_page_of("study_without_values")) if w.startswith("phase change")]


def test_bound_of_the_1_db_point_is_an_arrow_away_from_it() -> None:
    for case, shape, bound in (("two_drives_with_bound", ">", -46.8), ("two_drives_with_upper_bound", "<", -60.3)):
        gain, _ = _drive_axes(case)
        assert not [li for li in gain.get_lines() if li.get_marker() == "D"]
        head = next(li for li in gain.get_lines() if li.get_marker() == shape)
        foot = [li for li in gain.get_lines() if li.get_marker() == "|" and li.get_color() == "#D55E00"]
        assert_allclose(_x(foot[0]), [bound], rtol=0, atol=1e-9)
        away = _x(head)[0] - bound
        assert (away > 1.0) if shape == ">" else (away < -1.0)
        side = "at least" if shape == ">" else "at most"
        assert f"input P1dB {side} −{-bound} dBm" in _words(_page_of(case))
    assert "proven safe to −61.5 dBm" in _words(_page_of("two_drives_with_bound"))
    assert "safe drive not known" in _words(_page_of("two_drives_with_upper_bound"))


def test_spoiled_sweep_is_crossed_and_not_mapped() -> None:
    canvas = _page_of("drives_with_one_spoiled")
    crossed = next(li for li in canvas.get_axes()[1].get_lines() if li.get_marker() == "x")
    assert_allclose(_xy(crossed), [[-38.0], [32.02]], rtol=0, atol=1e-9)
    assert not [li for li in canvas.get_axes()[1].get_lines() if li.get_markerfacecolor() == "white"]
    words = _words(canvas)
    assert "left out" in words and "Compression, dB" not in words
    # Steepest between the two sweeps that are not spoiled: 0.24° over 10 dB.
    assert "phase change, °; up to 0.02°/dB" in words
    assert "Compression, dB" in _words(_page_of("drives_with_study"))


def test_a_sweep_set_aside_is_crossed_and_the_key_says_why() -> None:
    canvas = _page_of("drives_with_one_that_did_not_repeat")
    crossed = next(li for li in canvas.get_axes()[1].get_lines() if li.get_marker() == "x")
    assert_allclose(_xy(crossed), [[-38.0], [32.02]], rtol=0, atol=1e-9)
    words = _words(canvas)
    assert "did not repeat" in words and "left out" not in words and "compressed" not in words
    assert any(w.startswith("set aside: did not repeat, 8.1 dB lower") for w in words)
    look = next(t for t in traces(_device("drives_with_one_that_did_not_repeat")) if t.sweep.file == "stage2_high.s2p")
    assert look.aside == "did not repeat" and not look.compressed and look.dash != (0.0, (4.0, 1.6))


def test_the_curve_goes_through_the_sweeps_that_are_kept() -> None:
    device = _device("drives_through_a_suspect_pad")
    canvas = _page_of("drives_through_a_suspect_pad")
    axes = canvas.get_axes()[1]
    curve = _curve(axes, 0.9)
    kept = next(li for li in axes.get_lines() if li.get_marker() == "o")
    off = np.interp(_x(kept), _x(curve), _y(curve)) - _y(kept)
    assert_allclose(float(np.mean(off)), 0.0, rtol=0, atol=1e-9)
    crossed = next(li for li in axes.get_lines() if li.get_marker() == "x")
    # 40.12 - 1.5 dB through the pad, where the sweep that is kept reads 40.02 dB.
    assert_allclose(np.interp(_x(crossed), _x(curve), _y(curve)) - _y(crossed), [1.4], rtol=0, atol=0.01)
    assert device.drive is not None and "pad a20 suspect" in _words(canvas)


def test_where_nobody_can_tell_a_sweep_is_not_called_compressed() -> None:
    words = _words(_page_of("drives_with_unclear_cause"))
    assert words.count("over 1 dB down") == 2 and "compressed" not in words
    assert any(w.startswith("8.1 dB lower") for w in words)


def test_a_mark_set_aside_stands_beside_the_one_of_its_drive() -> None:
    here = DriveMark("a", 1, -38.0, Estimate(20.0), Estimate(0.0), None, False, False)
    there = replace(here, file="b", spoiled=True, aside="did not repeat")
    assert [m.drive_dbm for m in apart([here, there], 0.3)] == [-38.0, -37.7]
    assert [m.drive_dbm for m in apart([here, replace(there, drive_dbm=-36.0)], 0.3)] == [-38.0, -36.0]
    assert [m.drive_dbm for m in apart([here, replace(here, file="b")], 0.3)] == [-38.0, -38.0]


def test_a_sweep_that_agrees_with_the_reference_is_seen_over_it() -> None:
    device = _device("three_drives")
    lines = [line for line in _page(device).get_axes()[0].get_lines() if len(_x(line)) > 50]
    reference = next(line for line in lines if line.get_linewidth() == 2.0)
    for line in lines:
        if line is not reference:
            assert line.get_linewidth() < 1.0 and line.get_zorder() > reference.get_zorder()


def test_one_drive_has_no_drive_panel() -> None:
    canvas = _page_of("one_drive_with_study")
    assert not [w for w in _words(canvas) if "against drive" in w]
    assert len(canvas.get_axes()) == 3


def test_a_phase_network_shows_its_phase_where_the_target_wants_it() -> None:
    device = _device("phase_network")
    axes = _page_of("phase_network").get_axes()[1]
    assert any(words.startswith("Phase, °") for words in _words(_page_of("phase_network")))
    curve = _curve(axes, 1.1)
    sweep = device.reference.sweep
    expected = np.degrees(np.angle(np.interp(_x(curve) * 1e6, sweep.frequency_hz, sweep.s21)))
    # The same angles, but for whole circles, and without a jump.
    assert_allclose(np.mod(_y(curve) - expected + 180.0, 360.0), 180.0, rtol=0, atol=1e-6)
    assert np.max(np.abs(np.diff(_y(curve)))) < 30.0
    ring = next(line for line in axes.get_lines() if line.get_markerfacecolor() == "white")
    assert 440.0 < float(_y(ring)[0]) < 460.0
    assert_allclose(np.interp(_x(ring)[0], _x(curve), _y(curve)), _y(ring)[0], rtol=0, atol=0.5)
    limits = next(line for line in axes.get_lines() if line.get_marker() == "_")
    assert _y(limits).tolist() == [440.0, 460.0]
    dashed = next(line for line in axes.get_lines() if line.is_dashed())
    middle = (_x(curve) > 21.35) & (_x(curve) < 21.45)
    assert_allclose(np.interp(_x(curve)[middle], _x(dashed), _y(dashed)), _y(curve)[middle], rtol=0, atol=1.0)


def test_phase_is_shown_only_where_it_matters() -> None:
    for case in ("one_path", "full_filter", "three_drives"):
        assert not [words for words in _words(_page_of(case)) if words.startswith("Phase, ")]


def test_study_without_values_says_so() -> None:
    canvas = _page_of("study_without_values")
    words = _words(canvas)
    assert "safe drive not known" in words and "Gain, dB against drive, dB" in words
    assert "drive against the source; its level is unknown" in words
    assert not [w for w in words if "nan" in w.lower() or "None" in w]
    lines = canvas.get_axes()[1].get_lines()
    assert sorted(str(line.get_marker()) for line in lines) == ["o", "o", "|"]


def test_map_has_the_1_db_contour_where_the_sweeps_put_it() -> None:
    device = _device("drives_with_study")
    assert device.drive is not None and device.drive.map is not None
    measured = device.drive.map
    axes = _page_of("drives_with_study").get_axes()[3]
    contours = [c for c in axes.collections if isinstance(c, ContourSet)]
    filled, lines = (next(c for c in contours if c.filled is kind) for kind in (True, False))
    assert list(lines.levels) == [0.5, 1.0, 2.0, 3.0, 6.0]
    ring = np.asarray(lines.get_paths()[1].vertices, dtype=float)
    node = int(np.argmax(measured.compression_db[2]))
    middle, high = measured.compression_db[1:, node]
    # Compression as a power of the drive between −48 and −38 dBm: straight in its logarithm.
    expected = -48.0 + 10.0 * np.log(1.0 / middle) / np.log(high / middle)
    at_node = ring[np.abs(ring[:, 0] - measured.frequency_hz[node] / 1e6) < 1e-6]
    assert_allclose(at_node[:, 1], [expected], rtol=0, atol=0.1)
    grey = np.asarray(filled.get_facecolor())[:, :3] @ [0.2126, 0.7152, 0.0722]
    assert len(grey) == 6 and np.all(np.diff(grey) < -0.05)


def test_nothing_is_mapped_where_nothing_compressed() -> None:
    device = _device("drives_with_study")
    assert device.drive is not None
    unproven = replace(device.drive, onset=replace(device.drive.onset, basis="bound"))
    assert "Compression, dB" not in _words(_page(replace(device, drive=unproven)))


def test_match_gives_way_to_the_map_only_where_it_cannot_be_shown() -> None:
    assert not [w for w in _words(_page_of("drives_with_study")) if w.startswith("Return loss")]
    words = _words(_page_of("drives_with_study_and_match"))
    assert {"Compression, dB", "Return loss, dB", "Group delay, ns", "against MHz"} <= set(words)


def test_match_and_delay_curves() -> None:
    delay = _page_of("three_drives").get_axes()[3]
    # A single-tuned peak: τ = Q/(π f0) at the centre; 0.15 of the band as aperture reads atan(x)/x of it, 0.7 % less.
    peak = max(_y(_curve(delay, 1.1))) * 1e-9
    assert_allclose(peak, 25 / np.pi / 21.4e6 * np.arctan(0.15) / 0.15, rtol=0.002, atol=0)
    device = _device("full_filter")
    match = _page(device).get_axes()[2]
    sweep = device.reference.sweep
    for color, s in (("#1b2127", sweep.s11), ("#0072B2", sweep.s22)):
        line = next(li for li in match.get_lines() if li.get_color() == color and len(_x(li)) > 50)
        loss = np.interp(_x(line), sweep.frequency_hz / 1e6, -20 * np.log10(np.abs(s)))
        assert_allclose(_y(line), loss, rtol=0, atol=1e-6)
    assert "S22 was not measured." not in _words(_page(device))
    assert "S22 was not measured." in _words(_page_of("one_path"))
    assert "S11wasnotmeasured.S22wasnotmeasured." in _letters(_page_of("nothing_known"))


def _strip(canvas: Canvas, verdict_color: str) -> tuple[float, list[float], list[float]]:
    """Return, in points across, the mark of the first row with that verdict, its limits and its whisker's ends."""
    mark = next(li for li in _strokes(canvas) if li.get_marker() == "D" and li.get_markerfacecolor() == verdict_color)
    height = _y(mark)[0]
    near = [li for li in _strokes(canvas) if abs(np.mean(_y(li)) - height) < 0.01 and li.get_marker() == "None"]
    limits = sorted(_x(li)[0] for li in near if li.get_color() == "#009E73")
    whisker = next((sorted(_x(li)) for li in near if li.get_linewidth() == 1.0), [])
    return _x(mark)[0], limits, whisker


def test_strip_shows_zone_value_and_whisker() -> None:
    value, limits, whisker = _strip(_page_of("three_drives_intervals"), "#D55E00")
    # Bandwidth 856 kHz, 832.48 to 879.52, against 600 to 800 kHz: the strip is a linear scale through the limits.
    per_khz = (limits[1] - limits[0]) / 200.0
    assert_allclose(value - limits[1], 56.0 * per_khz, rtol=1e-6, atol=0)
    assert_allclose(np.subtract(whisker, limits[1]), [32.48 * per_khz, 79.52 * per_khz], rtol=1e-6, atol=0)
    assert _strip(_page_of("three_drives"), "#D55E00")[2] == []
