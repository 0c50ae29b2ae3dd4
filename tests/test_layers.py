"""A module imports only from modules above it in the list; the command line starts without the heavy libraries."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import benchtool

PACKAGE = Path(benchtool.__file__).parent

LAYERS = [
    "errors",
    "whole_files",
    "processes",
    "units",
    "aliases",
    "drive_results",
    "model",
    "touchstone_table",
    "touchstone_text",
    "touchstone_option",
    "touchstone_rows",
    "touchstone_kinds",
    "touchstone_order",
    "touchstone_habits",
    "touchstone_measured",
    "touchstone_v1",
    "touchstone_v2",
    "touchstone_writing",
    "touchstone",
    "joining",
    "sheet_faults",
    "sheet_values",
    "sheet_targets",
    "sheet_tables",
    "sheet_quick",
    "sheet",
    "noise",
    "curves",
    "fitting",
    "level_search",
    "pads",
    "response",
    "phase",
    "match",
    "figure_plan",
    "figures",
    "propagation",
    "doubts",
    "copies",
    "even_draws",
    "draws",
    "digits",
    "compression",
    "uncertainty",
    "limiting",
    "drive_doubts",
    "drive_table",
    "evidence",
    "law_search",
    "rivals",
    "onset_belief",
    "causes",
    "cause_findings",
    "onset",
    "compression_study",
    "pad_stock",
    "planning",
    "advice",
    "pad_belief",
    "small_signal",
    "slips",
    "findings",
    "verdict",
    "analysis",
    "page_text",
    "page_paper",
    "page_scales",
    "page_traces",
    "page_verdict",
    "page_path",
    "page_sweeps",
    "page_gain",
    "page_panel",
    "page_marks",
    "page_drive",
    "page_map",
    "page_phase",
    "page_panels",
    "page_table",
    "page_notes",
    "page",
    "export",
    "reporting",
    "lots",
    "lot_page",
    "draft",
    "terminal",
    "cli",
]


def _imports(module: str) -> set[str]:
    tree = ast.parse((PACKAGE / f"{module}.py").read_text(encoding="utf-8"))
    names = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.ImportFrom) and node.module and node.module.startswith("benchtool."):
            names.add(node.module.split(".")[1])
        elif isinstance(node, ast.Import):
            names |= {alias.name.split(".")[1] for alias in node.names if alias.name.startswith("benchtool.")}
    return names


def test_every_module_has_its_place():
    assert {path.stem for path in PACKAGE.glob("*.py")} - {"__init__"} == set(LAYERS)


@pytest.mark.parametrize("module", LAYERS)
def test_module_imports_only_from_above(module):
    above = set(LAYERS[: LAYERS.index(module)])
    assert _imports(module) <= above


@pytest.mark.parametrize("module", [m for m in LAYERS if m not in ("cli", "terminal")])
def test_only_the_command_line_prints_or_exits(module):
    tree = ast.parse((PACKAGE / f"{module}.py").read_text(encoding="utf-8"))
    called = {node.func.id for node in ast.walk(tree) if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)}
    assert not called & {"print", "exit", "quit"}


def test_help_starts_light():
    probe = (
        "import sys; from typer.testing import CliRunner; from benchtool.cli import app; "
        "r = CliRunner().invoke(app, ['--help']); assert r.exit_code == 0, r.output; "
        "assert 'report' in r.output; "
        "heavy = {'skrf', 'scipy', 'matplotlib', 'pandas', 'numpy', 'pydantic'}; "
        "print(sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", probe], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_a_module_fits_a_reader():
    long = {path.name: n for path in PACKAGE.glob("*.py") if (n := len(path.read_text("utf-8").splitlines())) > 400}
    assert not long
