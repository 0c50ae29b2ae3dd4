"""The bench sheet: what is written comes out as the bench stood, and every fault comes out as one plain line."""

import hashlib
import re
import shutil
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from pydantic import ValidationError

from benchtool.errors import BenchtoolError, FaultsError, RequestError, SheetError
from benchtool.sheet import (
    FIGURE_PARAMETERS,
    FIGURE_UNITS,
    Analyzer,
    BenchSheet,
    Pad,
    SweepEntry,
    TargetSpec,
    load_sheet,
    sheet_from_files,
)

FAULTS = Path(__file__).parent / "faults"
GOOD = (FAULTS / "good_minimal.toml").read_text(encoding="utf-8")

# file: (place, what was found and what to do)
ONE_FAULT = {
    "analyzer_not_a_table": ("analyzer", "-8 is not a table; write [analyzer], and its keys below it"),
    "confidence_percent": (
        "decision.confidence",
        "95 is not a level of confidence; write a value above 0.5 and below 1, such as 0.95",
    ),
    "damage_below_compression": (
        "analyzer",
        "port2_compression_dbm 10 is not below port2_damage_dbm 3; "
        "a receiver compresses before it is damaged: correct one of them",
    ),
    "date_not_a_date": (
        "date",
        "'28/11/2026' is not a date; write year-month-day without quotes, such as 2026-11-28",
    ),
    "date_not_in_calendar": (
        "line 3, column 8",
        "not TOML: invalid date or datetime; write a date of the calendar, such as 2026-11-28",
    ),
    "device_kind_unknown": (
        "device[1].kind",
        '\'amp\' is no kind of device; write "amplifier", "filter" or "network"',
    ),
    "device_name_empty": ("device[1].name", "it is empty; write a name in the quotes"),
    "device_name_twice": (
        "device[2].name",
        "'stage' is also the name of device[1]; give each device a name of its own",
    ),
    "device_none": ("device", "the sheet has no device; add a [[device]] with its [[device.sweep]]"),
    "device_single_brackets": ("device", "single brackets; write [[device]] in double brackets, once for each"),
    "frequency_no_unit": (
        "device[1].design_frequency",
        "'21.4' has no unit; write a frequency such as '21.4 MHz'",
    ),
    "not_utf8": ("line 2", "byte 0xe8 is not UTF-8; save the sheet as UTF-8 text"),
    "pad_delay_comma": (
        "pads.a20.delay",
        "'0,095 ns' has a comma; write a decimal point: a time such as '95 ps'",
    ),
    "pad_file_missing": (
        "pads.a20.file",
        "the file 'good_minimum.s2p' is not there; did you mean good_minimal.s2p?",
    ),
    "pad_loss_and_file": (
        "pads.a20",
        "both loss_db and file; write loss_db for a pad of known loss, or file for a measured one",
    ),
    "pad_loss_negative": (
        "pads.a20.loss_db",
        "a loss of -20 dB would be gain; write the loss as a positive number, here 20",
    ),
    "pad_loss_not_finite": ("pads.a20.loss_db", "nan is not a number; write a finite number, without quotes"),
    "pad_no_loss": (
        "pads.a20",
        "neither loss_db nor file; write loss_db for a pad of known loss, or file for a measured one",
    ),
    "pad_on_both_sides": (
        "device[1].sweep[1].input_pads",
        "pad 'c10' is on both sides (output_pads is left out, so as at calibration); "
        "write output_pads of this sweep too",
    ),
    "pad_tolerance_with_file": (
        "pads.a20",
        "tolerance_db beside a file; the file has it already: delete it "
        "(doubt about a measured pad goes in uncertainty_db)",
    ),
    "pad_twice": (
        "device[1].sweep[1].input_pads",
        "pad 'a20' stands twice; "
        "a pad can be in one place only: give the other one a name and a [pads.NAME] of its own",
    ),
    "pad_unknown": ("device[1].sweep[1].input_pads", "there is no pad 'a21'; did you mean a20?"),
    "pads_not_a_list": ("device[1].sweep[1].input_pads", "'a20' is not a list; put it in brackets: [\"a20\"]"),
    "source_absurd": ("analyzer.source_dbm", "60 dBm is beyond reason; write a value from -150 to 30 dBm"),
    "source_table_order": (
        "analyzer.source_dbm",
        "1 MHz after 30 MHz; put the pairs in order of rising frequency, each frequency once",
    ),
    "source_text": ("analyzer.source_dbm", "'-8 dBm' is not a number; decibels are plain numbers: write -8"),
    "source_true": ("analyzer.source_dbm", "true is not a number; write a finite number, without quotes"),
    "sweep_missing": (
        "device[1].sweep[1].file",
        "the file 'good_minimal_low.s2p' is not there; did you mean good_minimal.s2p?",
    ),
    "sweep_none": ("device[1].sweep", "the device has no sweep; add [[device.sweep]] with its file"),
    "sweep_twice": (
        "device[1].sweep[2].file",
        "'good_minimal.s2p' is already sweep[1] of this device; list each sweep once",
    ),
    "syntax_key_twice": (
        "line 10, column 15",
        "not TOML: cannot overwrite a value; the same key stands twice: delete one",
    ),
    "syntax_unquoted_text": (
        "line 20, column 25",
        "not TOML: expected newline or end of document after a statement; "
        "write one key = value on a line, text in quotes",
    ),
    "target_decibel_text": (
        "device[1].targets.gain.min",
        "'38 dB' is not a number; decibels are plain numbers: write 38",
    ),
    "target_gain_of_filter": (
        "device[1].targets.gain",
        "a filter has no gain; write insertion_loss, as a positive number of dB",
    ),
    "target_insertion_loss_of_amplifier": (
        "device[1].targets.insertion_loss",
        "an amplifier has no insertion_loss; write gain, negative where there is loss",
    ),
    "target_min_above_max": (
        "device[1].targets.gain",
        "min 38 is above max 36; exchange them, or correct one",
    ),
    "target_no_limit": ("device[1].targets.gain", "no limit; write min, max, or nominal and tolerance"),
    "target_nominal_alone": (
        "device[1].targets.gain.tolerance",
        "missing; write it beside nominal, or write min and max instead",
    ),
    "target_parameter_missing": (
        "device[1].targets.rejection[1].at",
        'missing; rejection needs it: at = "10.7 MHz"',
    ),
    "target_parameter_unneeded": ("device[1].targets.gain.at", "gain takes no 'at'; delete it"),
    "target_beside_targets": (
        "device[1].peak_frequency",
        "unknown key; a target stands below the line [device.targets]",
    ),
    "target_two_forms": (
        "device[1].targets.gain",
        "nominal beside min; write either min and max, or nominal and tolerance",
    ),
    "target_unknown_figure": ("device[1].targets.gian", "unknown figure; did you mean gain?"),
    "target_wrong_unit": (
        "device[1].targets.bandwidth.min",
        "'600 ns' has the unit 's'; write a frequency such as '21.4 MHz'",
    ),
    "title_number": ("title", "12 is not text; put it in quotes"),
    "unknown_key": ("pads.a20.los_db", "unknown key; did you mean loss_db?"),
    "unknown_table": ("calibraton", "unknown key; did you mean calibration?"),
    "version_2": ("version", "2 is not a version this release reads; write version = 1"),
    "version_missing": ("version", "missing; write version = 1 as the first line"),
    "version_true": ("version", "true is not a version this release reads; write version = 1"),
    "window_misses_design": (
        "device[1].design_frequency",
        "21.4 MHz is outside the window 21.5 MHz to 21.8 MHz; widen the window, or correct the design frequency",
    ),
    "window_reversed": ("device[1].window", "21.8 MHz to 21 MHz is no window; write the lower frequency first"),
}

FULL = """\
version = 1
title = "21.4 MHz IF strip"
operator = "bench 2"
date = 2026-11-28

[analyzer]
source_dbm = [["1 MHz", -8.0], ["301 MHz", -11.0]]
source_tolerance_db = 1
port2_compression_dbm = -3.0
port2_damage_dbm = 10.0
directivity_db = 36
port_match_db = 30
reading_db = 0.05

[pads.b30]
loss_db = [["1 MHz", 30.0], ["31 MHz", 30.6]]
[pads.a20]
loss_db = 20
tolerance_db = 0.3
return_loss_db = 28
delay = "95 ps"
[pads.c10]
file = "pads/c10.s2p"
uncertainty_db = 0.02

[calibration]
input_pads = ["b30"]
output_pads = ["c10"]

[decision]
confidence = 0.9

[[device]]
name = "second stage"
kind = "amplifier"
design_frequency = "21.4 MHz"
window = ["15 MHz", 28e6]
[device.targets]
gain = { min = 38 }
peak_frequency = { nominal = "21.4 MHz", tolerance = "150 kHz" }
bandwidth = { min = "600 kHz", max = "1.1 MHz" }
group_delay = { max = "1.5 us" }
loaded_q = { nominal = 20, tolerance = 2 }
phase = { min = -10, max = 10 }
output_p1db = { min = -3 }
rejection = [{ at = "10.7 MHz", min = 30 }, { at = 42.8e6, min = 35.5 }]
ripple = { over = ["21.3 MHz", "21.5 MHz"], max = 0.5 }
shape_factor = { between = [60, 3], max = 4 }
[[device.sweep]]
file = "stage2_low.s2p"
input_pads = ["b30", "a20"]
[[device.sweep]]
file = "stage2_high.s2p"
output_pads = []
source_dbm = 0

[[device]]
name = "post filter"
kind = "filter"
[device.targets]
insertion_loss = { max = 3 }
[[device.sweep]]
file = "stage2_low.s2p"
"""


def bench(folder: Path, text: str = GOOD, *files: str) -> Path:
    """Put a sheet and its sweeps into a folder; return the folder."""
    for name in files or ("good_minimal.s2p",):
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        shutil.copyfile(FAULTS / "good_minimal.s2p", folder / name)
    (folder / "bench.toml").write_text(text, encoding="utf-8")
    return folder


@pytest.fixture
def full(tmp_path) -> BenchSheet:
    return load_sheet(bench(tmp_path, FULL, "stage2_low.s2p", "stage2_high.s2p", "pads/c10.s2p"))


# --- faults


@pytest.mark.parametrize("name", ONE_FAULT)
def test_one_fault_gives_one_plain_line(name):
    path = FAULTS / f"{name}.toml"
    with pytest.raises(SheetError) as caught:
        load_sheet(path)
    place, line = ONE_FAULT[name]
    assert str(caught.value) == f"{path}: {place}: {line}"
    assert caught.value.key == place


def test_every_broken_sheet_is_in_the_table():
    assert {path.stem for path in FAULTS.glob("*.toml")} == ONE_FAULT.keys() | {"good_minimal", "several_faults"}


def test_the_sheet_they_are_broken_from_is_good():
    sheet = load_sheet(FAULTS / "good_minimal.toml")
    assert [device.name for device in sheet.devices] == ["stage"]


def test_all_faults_of_a_sheet_come_at_once():
    path = FAULTS / "several_faults.toml"
    with pytest.raises(FaultsError) as caught:
        load_sheet(path)
    assert [line.removeprefix(f"{path}: ").split(": ")[0] for line in caught.value.lines()] == [
        "pads.a20.loss_db",
        "device[1].kind",
        "device[1].targets.gain",
        "device[1].sweep[1].file",
    ]


# a change of the good sheet, and the fault it makes; more than the files show
MORE_FAULTS = [
    ('"one stage"', '"one stage', "line 2, column 19: not TOML: illegal character '\\n'"),
    ("[analyzer]", "[analyzer", "line 5, column 10: not TOML: expected ']'"),
    ("-8.0", "inf", "analyzer.source_dbm: inf is not a number"),
    ("-8.0", "[]", "analyzer.source_dbm: an empty list"),
    ("-8.0", '[["1 MHz", -8, 3]]', "analyzer.source_dbm: row 1 is not a pair"),
    ("-8.0", '[["1 MHz", -8], ["1 MHz", -8]]', "analyzer.source_dbm: 1 MHz after 1 MHz"),
    ("-8.0", "-8.0\nreading_db = -0.1", "analyzer.reading_db: -0.1 dB is beyond reason"),
    ("-8.0", f"1{'0' * 400}", "analyzer.source_dbm: a very large number is not a number"),
    ("20.0", "120", "pads.a20.loss_db: a loss of 120 dB is beyond reason"),
    ("20.0", "20.0\ntolerance_db = -0.3", "pads.a20.tolerance_db: -0.3 dB is beyond reason"),
    ("20.0", "20.0\nuncertainty_db = 0.1", "pads.a20: uncertainty_db without a file"),
    ("20.0", "20.0\ndelay = 95", "pads.a20.delay: 95 is 95 seconds, beyond reason"),
    ("20.0", '20.0\ndelay = "-95 ps"', "pads.a20.delay: '-95 ps' is no delay of a pad"),
    ("20.0", "20.0\ndelay_s = 95e-12", "pads.a20.delay_s: unknown key; did you mean delay?"),
    ("[pads.a20]\nloss_db = 20.0", "[pads]\na20 = 20.0", "pads.a20: 20 is not a table; write [pads.a20]"),
    ("loss_db = 20.0", 'file = "good_minimal.s2p"\ndelay = "95 ps"', "pads.a20: delay beside a file"),
    ('["c10"]', '["a20"]', "device[1].sweep[1].input_pads: pad 'a20' is on both sides"),
    ('["c10"]', '["c11"]', "calibration.output_pads: there is no pad 'c11'; did you mean c10?"),
    ('["c10"]', "[10]", "calibration.output_pads: 10 is not the name of a pad"),
    ('["c10"]', '["c10"]\ninput_pads = ["c10"]', "calibration.input_pads: pad 'c10' is on both sides"),
    ('"21.4 MHz"', "true", "device[1].design_frequency: true is not a frequency"),
    ('"21.4 MHz"', "0", "device[1].design_frequency: 0 is not a frequency that can be swept"),
    ('"21.4 MHz"', '"21.4 mhz"', "device[1].design_frequency: '21.4 mhz' has the unit"),
    ('["21 MHz", "21.8 MHz"]', '"21 MHz"', "device[1].window: '21 MHz' is not a pair"),
    ("gain = { min = 38 }", "gain = 38", "device[1].targets.gain: 38 is not a table"),
    ("gain = { min = 38 }", "gain = [{ min = 38 }]", "device[1].targets.gain: a list is not a table"),
    ("{ min = 38 }", "{ minimum = 38 }", "device[1].targets.gain.minimum: unknown key"),
    ("{ min = 38 }", "{ min = false }", "device[1].targets.gain.min: false is not a number"),
    ("{ min = 38 }", "{ nominal = 38, tolerance = -1 }", "device[1].targets.gain.tolerance: -1 leaves no room"),
    ("gain = { min = 38 }", "ripple = { over = [2, 1], max = 1 }", "device[1].targets.ripple.over: the lower"),
    ("gain = { min = 38 }", "shape_factor = { between = [3, 60], max = 4 }", "shape_factor.between: 3 and 60 dB"),
    ("gain = { min = 38 }", "frobnication = { max = 4 }", "frobnication: unknown figure; the figures are gain, ins"),
    (
        "gain = { min = 38 }",
        'rejection = [{ at = "1 MHz", min = 3 }, { at = 1e6, max = 9 }]',
        "device[1].targets.rejection[2]: the same figure is asked for twice",
    ),
    ('kind = "amplifier"\n', "", 'device[1].kind: missing; add kind = "amplifier"'),
    ('"good_minimal.s2p"', '"."', "device[1].sweep[1].file: the file '.' is a folder"),
    ('"good_minimal.s2p"', f'"{"x" * 300}"', "cannot be opened (File name too long)"),
    ('"good_minimal.s2p"', "7", "device[1].sweep[1].file: 7 is not text"),
    ('file = "good_minimal.s2p"\n', "", "device[1].sweep[1].file: missing"),
    ("[[device.sweep]]", "[device.sweep]", "device[1].sweep: single brackets; write [[device.sweep]]"),
    ("version = 1", "version = 1\npath = 3\n", "path: unknown key"),
    ("[calibration]", '[pads."x y"]\nloss = 3\n[calibration]', 'pads."x y".loss: unknown key; did you mean loss_db?'),
    ("2026-11-28", "12:30:00", "date: 12:30:00 is not a date"),
]


@pytest.mark.parametrize(("old", "new", "expected"), MORE_FAULTS)
def test_a_slip_of_the_pen_is_told(tmp_path, old, new, expected):
    assert GOOD.count(old) >= 1
    with pytest.raises(BenchtoolError) as caught:
        load_sheet(bench(tmp_path, GOOD.replace(old, new, 1)))
    lines = caught.value.lines()
    assert [line for line in lines if expected in line], lines
    assert all("; " in line for line in lines)


def test_a_folder_without_a_sheet(tmp_path):
    folder = tmp_path / "my bench"
    folder.mkdir()
    with pytest.raises(RequestError) as caught:
        load_sheet(folder)
    assert str(caught.value) == f"{folder} has no bench.toml; start one with: benchtool draft '{folder}'"


@pytest.mark.parametrize("name", ["none", "none/bench.toml", "x" * 300])
def test_no_such_folder_or_sheet(tmp_path, name):
    with pytest.raises(RequestError, match="check the name"):
        load_sheet(tmp_path / name)


def test_a_nest_of_brackets_is_refused(tmp_path):
    with pytest.raises(SheetError, match="no bench sheet can be read from it; start again from a draft"):
        load_sheet(bench(tmp_path, "a = " + "[" * 100_000))


def _toml_values() -> st.SearchStrategy[str]:
    plain = st.sampled_from(
        ["1", "-3.5", "nan", "true", '""', '"21.4 MHz"', '"a20"', '"good_minimal.s2p"', "2026-11-28", "1e400", '"; "']
    )
    names = st.sampled_from(["min", "max", "at", "over", "file", "loss_db", "gain", "name", "sweep", '"x\\n"'])
    return st.recursive(
        plain,
        lambda inner: st.one_of(
            st.lists(inner, max_size=3).map(lambda members: f"[{', '.join(members)}]"),
            st.dictionaries(names, inner, max_size=3).map(
                lambda table: "{" + ", ".join(f"{key} = {value}" for key, value in table.items()) + "}"
            ),
        ),
        max_leaves=6,
    )


@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(line=st.sampled_from([line for line in GOOD.splitlines() if "=" in line]), value=_toml_values())
def test_any_value_gives_a_sheet_or_plain_faults(tmp_path, line, value):
    changed = GOOD.replace(line, f"{line.split(' = ')[0]} = {value}")
    try:
        load_sheet(bench(tmp_path, changed))
    except BenchtoolError as error:
        for told in error.lines():
            assert "; " in told and "\n" not in told
            assert not re.search(r"Input should|type=|https?:|pydantic|Traceback|compare it with", told)


@settings(max_examples=200, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.binary(max_size=200))
def test_any_bytes_give_plain_faults(tmp_path, data):
    (tmp_path / "bench.toml").write_bytes(data)
    with pytest.raises(BenchtoolError):
        load_sheet(tmp_path)


# --- what a good sheet says


def test_the_session(full, tmp_path):
    assert (full.version, full.title, full.operator, full.date) == (1, "21.4 MHz IF strip", "bench 2", "2026-11-28")
    assert full.path == tmp_path / "bench.toml"
    assert full.folder == tmp_path
    assert full.sha256 == hashlib.sha256(FULL.encode()).hexdigest()
    assert full.decision.confidence == 0.9
    analyzer = full.analyzer
    assert (analyzer.source_tolerance_db, analyzer.port2_compression_dbm, analyzer.port2_damage_dbm) == (
        1.0,
        -3.0,
        10.0,
    )
    assert (analyzer.directivity_db, analyzer.port_match_db, analyzer.reading_db) == (36.0, 30.0, 0.05)


def test_levels_over_frequency(full):
    """Straight lines in dB between the pairs; the end value is held beyond the table."""
    at = [0.5e6, 1e6, 151e6, 226e6, 301e6, 1e9]
    assert_allclose([full.analyzer.source_at(hz) for hz in at], [-8, -8, -9.5, -10.25, -11, -11], rtol=1e-12, atol=0)
    pad = full.pads["b30"]
    assert pad.has_table
    assert_allclose([pad.loss_at(hz) for hz in (1e5, 16e6, 1e9)], [30.0, 30.3, 30.6], rtol=1e-12, atol=0)


def test_pads(full, tmp_path):
    a20, c10 = full.pads["a20"], full.pads["c10"]
    assert (a20.loss_db, a20.tolerance_db, a20.return_loss_db, a20.file) == (20.0, 0.3, 28.0, None)
    assert_allclose(a20.delay_s, 95e-12, rtol=1e-12, atol=0)
    assert not a20.has_table and a20.loss_at(1e9) == 20.0
    assert c10.file == tmp_path / "pads/c10.s2p" and c10.file.is_absolute()
    assert (c10.loss_db, c10.uncertainty_db) == (None, 0.02)
    with pytest.raises(ValueError, match="is in "):
        c10.loss_at(1e6)


def test_what_a_sweep_leaves_out_is_as_at_calibration(full):
    low, high = full.devices[0].sweeps
    assert (low.input_pads, low.output_pads) == (("b30", "a20"), ("c10",))
    assert (high.input_pads, high.output_pads) == (("b30",), ())
    assert_allclose(low.source_at(151e6), -9.5, rtol=1e-12, atol=0)
    assert high.source_at(151e6) == 0.0


def test_device_and_targets(full):
    device, other = full.devices
    assert (device.name, device.kind, device.design_hz, device.window_hz) == (
        "second stage",
        "amplifier",
        21.4e6,
        (15e6, 28e6),
    )
    assert (other.kind, other.design_hz, other.window_hz) == ("filter", None, None)
    assert other.targets == (TargetSpec(figure="insertion_loss", max=3.0),)
    found = {(t.figure, t.at_hz or t.over_hz or t.between_db): (t.min, t.max) for t in device.targets}
    expected = {
        ("gain", None): (38.0, None),
        ("peak_frequency", None): (21.25e6, 21.55e6),
        ("bandwidth", None): (600e3, 1.1e6),
        ("group_delay", None): (None, 1.5e-6),
        ("loaded_q", None): (18.0, 22.0),
        ("phase", None): (-10.0, 10.0),
        ("output_p1db", None): (-3.0, None),
        ("rejection", 10.7e6): (30.0, None),
        ("rejection", 42.8e6): (35.5, None),
        ("ripple", (21.3e6, 21.5e6)): (None, 0.5),
        ("shape_factor", (60.0, 3.0)): (None, 4.0),
    }
    assert list(found) == list(expected)
    for key, limits in expected.items():
        for value, wanted in zip(found[key], limits, strict=True):
            assert (value is None) == (wanted is None)
            if wanted is not None:
                assert_allclose(value, wanted, rtol=1e-12, atol=0)


@pytest.mark.parametrize("figure", FIGURE_UNITS)
def test_every_figure_can_have_a_target(tmp_path, figure):
    limit = {"Hz": '"1.5 MHz"', "s": '"1.5 us"'}.get(FIGURE_UNITS[figure], "1.5")
    parameter = {"at": "at = 1e6, ", "over": "over = [1e6, 2e6], ", "between": "between = [30, 3], "}
    text = GOOD.replace("gain =", f"{figure} =").replace(
        "min = 38", parameter.get(FIGURE_PARAMETERS.get(figure), "") + f"min = {limit}"
    )
    if figure == "insertion_loss":
        text = text.replace('"amplifier"', '"filter"')
    target = load_sheet(bench(tmp_path, text)).devices[0].targets[0]
    assert target.figure == figure
    assert_allclose(target.min, {"Hz": 1.5e6, "s": 1.5e-6}.get(FIGURE_UNITS[figure], 1.5), rtol=1e-12, atol=0)


def test_a_small_sheet_leaves_the_rest_unknown(tmp_path):
    text = 'version = 1\n[[device]]\nname = "x"\nkind = "network"\n[[device.sweep]]\nfile = "good_minimal.s2p"\n'
    sheet = load_sheet(bench(tmp_path, text))
    assert sheet.analyzer == Analyzer()
    assert set(sheet.analyzer.model_dump().values()) == {None}
    assert (sheet.title, sheet.operator, sheet.date, sheet.pads, sheet.decision.confidence) == ("", "", "", {}, 0.95)
    assert sheet.devices[0].targets == ()
    assert sheet.devices[0].sweeps[0].source_at(1e6) is None


@pytest.mark.parametrize("name", ["stage $2.s2p", "中周 21,4 MHz.s2p", "été_1.s2p", "it's.S2P", "a&b<c>.s2p"])
def test_any_file_name_and_device_name(tmp_path, name):
    text = GOOD.replace('"good_minimal.s2p"', f'"{name}"').replace('"stage"', f'"{name} $x_1$ 😀"')
    device = load_sheet(bench(tmp_path, text, name)).devices[0]
    assert device.name == f"{name} $x_1$ 😀"
    assert (device.sweeps[0].name, device.sweeps[0].file) == (name, tmp_path / name)


@pytest.mark.parametrize("encode", [lambda t: b"\xef\xbb\xbf" + t.encode(), lambda t: t.replace("\n", "\r\n").encode()])
def test_other_editors_are_forgiven(tmp_path, encode):
    bench(tmp_path)
    (tmp_path / "bench.toml").write_bytes(encode(GOOD))
    assert load_sheet(tmp_path).devices == load_sheet(bench(tmp_path)).devices


@pytest.mark.parametrize(
    ("written", "date"),
    [('"2026-11-28"', "2026-11-28"), ("2026-11-28T10:30:00", "2026-11-28T10:30:00"), ('""', "")],
)
def test_dates(tmp_path, written, date):
    assert load_sheet(bench(tmp_path, GOOD.replace("2026-11-28", written))).date == date


def test_a_sheet_of_another_name_and_a_path_as_text(tmp_path):
    shutil.move(bench(tmp_path) / "bench.toml", tmp_path / "evening.toml")
    assert load_sheet(str(tmp_path / "evening.toml")).folder == tmp_path


def test_relative_folder_gives_absolute_files(tmp_path, monkeypatch):
    bench(tmp_path / "here")
    monkeypatch.chdir(tmp_path)
    sheet = load_sheet("here")
    assert sheet.path == Path("here/bench.toml")
    assert sheet.devices[0].sweeps[0].file == tmp_path / "here" / "good_minimal.s2p"


@pytest.mark.parametrize(
    "build",
    [
        lambda: Pad(loss_db=True),
        lambda: Pad(loss_db="20"),
        lambda: Pad(),
        lambda: Pad(loss_db=20.0, lost=1),
        lambda: Analyzer(source_dbm=float("nan")),
        lambda: TargetSpec(figure="gain", min="38"),
        lambda: SweepEntry(file="a.s2p", name="a.s2p"),
    ],
)
def test_models_are_strict(build):
    with pytest.raises(ValidationError):
        build()


def test_models_are_frozen():
    with pytest.raises(ValidationError):
        Pad(loss_db=20.0).loss_db = 30.0


# --- a quick look without a sheet


def quick(files, *, design=None, source_dbm=None, input_pads_db=(), output_pads_db=(), **more) -> BenchSheet:
    return sheet_from_files(
        files,
        design=design,
        source_dbm=source_dbm,
        input_pads_db=input_pads_db,
        output_pads_db=output_pads_db,
        **more,
    )


@pytest.fixture
def files(tmp_path) -> list[Path]:
    bench(tmp_path, GOOD, "stage2_low.s2p", "stage2_high.s2p")
    return [tmp_path / "stage2_low.s2p", tmp_path / "stage2_high.s2p"]


def test_quick_look_with_one_pad_for_all(files, tmp_path):
    sheet = quick(files, design="21.4 MHz", source_dbm=-8, input_pads_db=[20], output_pads_db=[0.0])
    device = sheet.devices[0]
    assert (device.name, device.kind, device.design_hz, device.targets) == ("stage2", "amplifier", 21.4e6, ())
    assert (sheet.path, sheet.folder, sheet.sha256) == (None, tmp_path, "")
    assert sheet.calibration.input_pads == sheet.calibration.output_pads == ()
    assert [sweep.name for sweep in device.sweeps] == ["stage2_low.s2p", "stage2_high.s2p"]
    for sweep in device.sweeps:
        assert [sheet.pads[name].loss_db for name in sweep.input_pads] == [20.0]
        assert sweep.output_pads == ()
        assert sweep.source_at(1e6) == -8.0


def test_quick_look_with_a_pad_for_each(files):
    sheet = quick(files, design=21.4e6, input_pads_db=[20.0, 0.0], output_pads_db=[10.0, 20.0], kind="network")
    low, high = sheet.devices[0].sweeps
    assert [sheet.pads[name].loss_db for name in (*low.input_pads, *low.output_pads)] == [20.0, 10.0]
    assert [sheet.pads[name].loss_db for name in (*high.input_pads, *high.output_pads)] == [20.0]
    assert not set(low.input_pads) & set(high.output_pads)  # 20 dB on either side are two pads
    assert low.source_at(1e6) is None
    assert sheet.devices[0].kind == "network"


def test_quick_look_at_files_of_the_same_name(tmp_path):
    bench(tmp_path, GOOD, "a/x.s2p", "b/x.s2p")
    sheet = quick([tmp_path / "a/x.s2p", tmp_path / "b/x.s2p"])
    assert [sweep.name for sweep in sheet.devices[0].sweeps] == [str(tmp_path / "a/x.s2p"), str(tmp_path / "b/x.s2p")]
    assert sheet.devices[0].name == "x"


@pytest.mark.parametrize(
    ("request_", "line"),
    [
        (
            {"input_pads_db": [1, 2, 3]},
            "3 input pads for 2 sweeps; give one pad for all sweeps, or one for each in order (0 where there is none)",
        ),
        (
            {"output_pads_db": [-20]},
            "output pad: a loss of -20 dB would be gain; write the loss as a positive number, here 20",
        ),
        ({"input_pads_db": [float("nan")]}, "input pad: nan is not a number; write a finite number, without quotes"),
        ({"source_dbm": 60}, "source level: 60 dBm is beyond reason; write a value from -150 to 30 dBm"),
        (
            {"design": "21,4 MHz"},
            "design frequency: '21,4 MHz' has a comma; write a decimal point: a frequency such as '21.4 MHz'",
        ),
        (
            {"design": "soon"},
            "design frequency: 'soon' is not a frequency; "
            "write a frequency such as '21.4 MHz', or a plain number in Hz",
        ),
    ],
)
def test_quick_look_refuses(files, request_, line):
    with pytest.raises(RequestError) as caught:
        quick(files, **request_)
    assert str(caught.value) == line


def test_quick_look_needs_its_files(files, tmp_path):
    with pytest.raises(RequestError, match="there are no sweeps"):
        quick([])
    with pytest.raises(RequestError, match=r"there is no file .*; check the name"):
        quick([tmp_path / "none.s2p"])
    with pytest.raises(RequestError, match=r"is named twice; name each sweep once"):
        quick([files[0], tmp_path / "." / files[0].name])
