"""Results in, plain tables on standard output: readable with colour off and when piped."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Final

from rich.console import Console
from rich.table import Table
from rich.text import Text

from benchtool.digits import (
    figure_label,
    interval_text,
    level_text,
    limits_text,
    probability_text,
    quantity,
    value_text,
)
from benchtool.model import BenchResult, DeviceResult, Sweep
from benchtool.units import format_si, to_db

__all__ = ["print_next", "print_result", "print_sweep"]

_PIPED_WIDTH: Final = 160
_STYLES: Final = {"met": "green", "missed": "red", "undecided": "yellow", "none": "dim"}


def _console() -> Console:
    console = Console(highlight=False, emoji=False, markup=False)
    if not console.is_terminal:
        console = Console(highlight=False, emoji=False, markup=False, width=_PIPED_WIDTH)
    return console


def _literal(text: str) -> Text:
    """Return text that is shown as it is: no markup, control characters as escapes."""
    return Text("".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text))


def _device_table(device: DeviceResult) -> Table:
    table = Table(box=None, pad_edge=False)
    for column in ("figure", "value", "interval", "target", "verdict", "p(met)"):
        table.add_column(column, no_wrap=True, justify="right" if column in ("value", "p(met)") else "left")
    for target in device.targets:
        figure = device.figures[target.figure]
        chance = "" if target.probability is None else probability_text(target.probability)
        verdict = Text(target.verdict, style=_STYLES[target.verdict])
        table.add_row(
            figure_label(target.figure), value_text(figure), interval_text(figure), limits_text(target), verdict, chance
        )
    judged = {target.figure for target in device.targets}
    for key, figure in device.figures.items():
        if key not in judged:
            table.add_row(figure_label(key), value_text(figure), interval_text(figure), "", "", "")
    return table


def print_result(result: BenchResult, folder: Path) -> None:
    """Print every device's verdict, table and findings, and where the pages are."""
    console = _console()
    for device in result.devices:
        head = Text.assemble(_literal(device.name), ": ", (device.verdict, _STYLES[device.verdict]))
        console.print(head, soft_wrap=True)
        console.print(f"  {device.summary.reason}", soft_wrap=True)
        console.print(f"  Next: {device.summary.next_step}", soft_wrap=True)
        console.print(_device_table(device))
        for finding in device.findings:
            line = f"  {finding.severity}: {finding.code}: {finding.message}; {finding.advice}"
            console.print(_literal(line), soft_wrap=True)
        console.print()
    console.print(_literal(f"Written to {folder}"), soft_wrap=True)


def print_next(result: BenchResult) -> None:
    """Print the sweeps most worth taking next, for each device, with their levels and cautions."""
    console = _console()
    for device in result.devices:
        planned = device.drive.next_sweeps if device.drive is not None else ()
        console.print(_literal(device.name), soft_wrap=True)
        if not planned:
            console.print(f"  {_nothing_planned(device)}", soft_wrap=True)
        for number, sweep in enumerate(planned, start=1):
            lines = [f"  {number}. {_side('input', sweep.input_pads)}; {_side('output', sweep.output_pads)}"]
            lines.append(
                f"     drive {level_text(sweep.drive_dbm)}, device output {level_text(sweep.device_output_dbm)}, "
                f"port 2 {level_text(sweep.port2_dbm)}{_headroom(sweep.headroom_db)}"
            )
            lines.append(f"     settles: {sweep.settles}")
            lines += [f"     caution: {caution}" for caution in sweep.cautions]
            for line in lines:
                console.print(_literal(line), soft_wrap=True)
        console.print()
    console.print(
        "Check pad power ratings and port limits before power is applied; an amplifier under test may oscillate.",
        soft_wrap=True,
    )


def _nothing_planned(device: DeviceResult) -> str:
    """Return why no sweep is planned: there is nothing to settle, or nothing to settle it with."""
    unproven = device.drive is not None and not device.drive.onset.reference.proven
    if device.kind == "amplifier" and (device.drive is None or unproven):
        return "nothing proves the reference small-signal, and no pad of the sheet would: add one to [pads]"
    return "nothing more to settle about drive"


def _side(side: str, pads: Sequence[str]) -> str:
    return f"{side} pads, from the analyzer: {', '.join(pads) if pads else 'none'}"


def _headroom(headroom_db: float | None) -> str:
    return "" if headroom_db is None else f" ({headroom_db:.1f} dB below the limit, every doubt counted)"


def print_sweep(sweep: Sweep) -> None:
    """Print what is in one file, and every finding about it."""
    console = _console()
    f = sweep.frequency_hz
    console.print(_literal(str(sweep.path or sweep.name)), soft_wrap=True)
    span = f"{format_si(float(f[0]), 'Hz', 6)} to {format_si(float(f[-1]), 'Hz', 6)}"
    references = " and ".join(f"{r:g} ohm" for r in dict.fromkeys(sweep.reference_ohm))
    console.print(
        f"  {f.size} frequencies, {span}, {references}; measured: {', '.join(sweep.measured)}", soft_wrap=True
    )
    for i, j in ((0, 0), (1, 0), (0, 1), (1, 1)):
        name = f"S{i + 1}{j + 1}"
        if name in sweep.measured:
            level = to_db(sweep.s[i, j])
            top = int(level.argmax())
            where = format_si(float(f[top]), "Hz", 6)
            low, high = (quantity(float(end), "dB") for end in (level.min(), level.max()))
            span = f"{low.removesuffix(' dB')} to {high}"
            console.print(f"  {name}: {span}, largest at {where}", soft_wrap=True)
    if sweep.noise is not None:
        console.print(f"  noise parameters at {sweep.noise.frequency_hz.size} frequencies", soft_wrap=True)
    for finding in sweep.findings:
        line = f"  {finding.severity}: {finding.code}: {finding.message}; {finding.advice}"
        console.print(_literal(line), soft_wrap=True)
