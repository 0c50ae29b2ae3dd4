"""Every benchtool command and the Python lines that the README shows work as shown."""

import os
import re
import shlex
import shutil
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

from benchtool.findings import SEVERITIES
from benchtool.sheet import FIGURE_UNITS

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
BLOCKS = re.findall(r"```(\w+)\n(.*?)```", README, re.DOTALL)
COMMANDS = [
    line for kind, text in BLOCKS if kind == "sh" for line in text.splitlines() if line.startswith("benchtool ")
]


@pytest.fixture
def clone(tmp_path):
    shutil.copytree(ROOT / "sample_data", tmp_path / "sample_data", ignore=shutil.ignore_patterns("report"))
    return tmp_path


def in_clone(clone, *arguments):
    return subprocess.run(
        [sys.executable, *arguments],
        cwd=clone,
        capture_output=True,
        text=True,
        check=False,
        env={**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8"},
    )


def test_there_are_commands():
    assert len(COMMANDS) >= 4


@pytest.mark.parametrize("command", COMMANDS)
def test_command(command, clone):
    done = in_clone(clone, "-c", "from benchtool.cli import main; main()", *shlex.split(command)[1:])
    assert done.returncode in (0, 1), done.stderr
    assert done.stderr == ""


def test_python_lines(clone):
    (code,) = [text for kind, text in BLOCKS if kind == "python"]
    done = in_clone(clone, "-c", code)
    assert done.returncode == 0, done.stderr
    assert 26.0 < float(done.stdout) < 28.0


def test_the_sheet_shown_is_toml_that_loads(clone):
    (text,) = [text for kind, text in BLOCKS if kind == "toml"]
    assert tomllib.loads(text)["version"] == 1
    folder = clone / "shown"
    (folder / "pads").mkdir(parents=True)
    for name in ("stage2_low.s2p", "stage2_high.s2p"):
        shutil.copy(clone / "sample_data" / "telemetry" / "first_low.s2p", folder / name)
    shutil.copy(clone / "sample_data" / "telemetry" / "pads" / "m6.s2p", folder / "pads" / "m6.s2p")
    (folder / "bench.toml").write_text(text, encoding="utf-8")
    probe = "from benchtool.sheet import load_sheet; print(load_sheet('shown').devices[0].name)"
    done = in_clone(clone, "-c", probe)
    assert done.stdout == "second stage\n", done.stderr


def test_every_figure_is_explained():
    for figure in FIGURE_UNITS:
        assert f"`{figure}`" in README, figure


def test_every_finding_code_is_explained():
    codes = set()
    for path in (ROOT / "benchtool").glob("*.py"):
        text = path.read_text(encoding="utf-8")
        codes |= set(re.findall(r'(?:Finding|finding)\(\s*"([a-z0-9-]+)"', text))
    assert len(codes) > 12
    for code in sorted(codes - set(SEVERITIES)):
        assert f"`{code}`" in README, code


def test_two_set_up_commands():
    assert len(re.findall(r"^\[ -x \.venv/bin/", README, re.MULTILINE)) == 2
