"""The first sheet drafted from a folder of sweeps: it loads as it is, and claims nothing the files do not show."""

import re
import tomllib
from pathlib import Path

import numpy as np
import pytest

from benchtool.draft import draft_sheet, sweep_files
from benchtool.errors import RequestError
from benchtool.model import Sweep
from benchtool.sheet import load_sheet

ROWS = "# Hz S RI R 50\n1e6 0 0 1 0 0 0 0 0\n2e6 0 0 1 0 0 0 0 0\n"


def _sweeps(folder: Path, *names: str, measured=("S11", "S21")) -> list[Sweep]:
    """Put files of these names into a folder and return their sweeps, as the reader would."""
    for name in names:
        (folder / name).write_text(ROWS, encoding="utf-8")
    grid = np.linspace(15e6, 28e6, 401)
    s = np.zeros((2, 2, grid.size))
    return [Sweep(path.name, grid, s, measured, path=path) for path in sweep_files(folder)]


def _saved(folder: Path, sweeps: list[Sweep]):
    text = draft_sheet(folder, sweeps)
    (folder / "bench.toml").write_text(text, encoding="utf-8")
    return text, load_sheet(folder)


def test_draft_loads_as_it_is(tmp_path):
    _, sheet = _saved(tmp_path, _sweeps(tmp_path, "stage2_low.s2p", "stage2_high.s2p", "filter.s2p"))
    assert {d.name: [s.name for s in d.sweeps] for d in sheet.devices} == {
        "filter": ["filter.s2p"],
        "stage2": ["stage2_high.s2p", "stage2_low.s2p"],
    }


def test_nothing_unknown_is_claimed(tmp_path):
    text, sheet = _saved(tmp_path, _sweeps(tmp_path, "stage.s2p"))
    assert sheet.analyzer.source_dbm is None and sheet.pads == {} and sheet.date == ""
    device = sheet.devices[0]
    assert device.design_hz is None and device.window_hz is None and device.targets == ()
    assert tomllib.loads(text) == {
        "version": 1,
        "title": "",
        "operator": "",
        "analyzer": {},
        "calibration": {},
        "device": [{"name": "stage", "kind": "amplifier", "sweep": [{"file": "stage.s2p"}]}],
    }


def test_every_line_to_fill_has_a_comment(tmp_path):
    text, _ = _saved(tmp_path, _sweeps(tmp_path, "stage.s2p"))
    to_fill = [line for line in text.splitlines()[2:] if "?" in line or line.startswith(("title", "operator", "kind"))]
    assert len(to_fill) > 15
    assert [line for line in to_fill if "# fill in" not in line] == []


@pytest.mark.parametrize("left_as_it_is", [False, True])
def test_a_commented_line_works_once_filled_in(tmp_path, left_as_it_is):
    text, _ = _saved(tmp_path, _sweeps(tmp_path, "stage.s2p"))
    uncommented = re.sub(r"^# (source_dbm|design_frequency) ", r"\1 ", text, flags=re.MULTILINE)
    if left_as_it_is:
        with pytest.raises(tomllib.TOMLDecodeError):
            tomllib.loads(uncommented)
        return
    filled = uncommented.replace("source_dbm = ?", "source_dbm = -8").replace("? MHz", "21.4 MHz", 1)
    (tmp_path / "bench.toml").write_text(filled, encoding="utf-8")
    sheet = load_sheet(tmp_path)
    assert sheet.devices[0].sweeps[0].source_at(1e6) == -8.0
    assert sheet.devices[0].design_hz == 21.4e6


def test_what_the_files_show_stands_in_comments(tmp_path):
    text, _ = _saved(tmp_path, _sweeps(tmp_path, "stage.s2p"))
    assert "# 401 points, 15 MHz to 28 MHz; measured: S11, S21\n" in text


@pytest.mark.parametrize(
    ("files", "devices"),
    [
        (["a_low.s2p", "a_mid.s2p", "a_HIGH.s2p"], {"a": 3}),
        (["if strip 1.s2p", "if strip 2.s2p"], {"if strip": 2}),
        (["a-10.s2p", "a-20.s2p", "b.s2p"], {"a": 2, "b": 1}),
        (["a_low.s2p"], {"a_low": 1}),  # one alone: no sign that 'low' is a drive
        (["slow.s2p", "shallow.s2p"], {"slow": 1, "shallow": 1}),
        (["a.s2p", "a_2.s2p"], {"a": 2}),
        (["x.s2p", "x.S2P"], {"x": 2}),
        (["a_2.s2p", "a_2_low.s2p", "a_2_high.s2p"], {"a_2": 1, "a_2 (2)": 2}),
        (["_low.s2p", "low.s2p", "7.s2p"], {"_low": 1, "low": 1, "7": 1}),
    ],
)
def test_sweeps_are_grouped_by_what_their_names_share(tmp_path, files, devices):
    sweeps = _sweeps(tmp_path, *files)
    if len(sweeps) < len(files):
        pytest.skip("this file system does not tell x.s2p from x.S2P")
    _, sheet = _saved(tmp_path, sweeps)
    assert {d.name: len(d.sweeps) for d in sheet.devices} == devices


@pytest.mark.parametrize(
    "name",
    ["$x_$1.s2p", 'quote".s2p', "back\\slash.s2p", "中周 21,4.s2p", "é è.s2p", "new\nline.s2p", "#1.s2p", "\x7f.s2p"],
)
def test_any_file_name_comes_through(tmp_path, name):
    _, sheet = _saved(tmp_path, _sweeps(tmp_path, name))
    assert sheet.devices[0].sweeps[0].name == name
    assert sheet.devices[0].name == Path(name).stem


def test_a_name_no_sheet_can_hold_is_refused(tmp_path):
    sweep = Sweep("stage\udce9.s2p", np.array([1e6]), np.zeros((2, 2, 1)))
    with pytest.raises(RequestError, match="is not UTF-8; rename the file"):
        draft_sheet(tmp_path, [sweep])


def test_a_sweep_from_elsewhere_keeps_its_place(tmp_path):
    inner, other = tmp_path / "inner", tmp_path / "other"
    (inner / "sweeps").mkdir(parents=True)
    other.mkdir()
    sweeps = _sweeps(other, "far.s2p") + _sweeps(inner / "sweeps", "near.s2p")
    _, sheet = _saved(inner, sweeps)
    assert [d.sweeps[0].name for d in sheet.devices] == [str(other / "far.s2p"), "sweeps/near.s2p"]


def test_sweep_files_are_found_in_any_case_of_ending(tmp_path):
    for name in ("b.S2P", "a.s2p", "notes.txt", "c.s1p"):
        (tmp_path / name).write_text(ROWS)
    (tmp_path / "folder.s2p").mkdir()
    assert [path.name for path in sweep_files(tmp_path)] == ["a.s2p", "b.S2P"]


def test_no_folder_and_no_sweeps(tmp_path):
    with pytest.raises(RequestError, match=r"there is no folder .*; name the folder that holds the .s2p files"):
        sweep_files(tmp_path / "none")
    with pytest.raises(RequestError, match=r"holds no .s2p file; name the folder that holds the sweeps"):
        sweep_files(tmp_path)
    with pytest.raises(RequestError, match="there are no sweeps to draft from"):
        draft_sheet(tmp_path, [])
