"""The command line: the only module that prints, exits or catches. Everything heavy is imported inside a command."""

from __future__ import annotations

import sys
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, NoReturn

import typer

from benchtool import __version__

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence

    from benchtool.lots import LotBench
    from benchtool.model import BenchResult
    from benchtool.reporting import ReportOptions
    from benchtool.sheet import BenchSheet

__all__ = ["app", "main"]

app = typer.Typer(
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    help="Two-port sweeps in, one measured-vs-target page per device out.",
)

Bench = Annotated[
    list[Path],
    typer.Argument(
        help="A folder holding bench.toml, a bench sheet, or .s2p files for a quick look.", show_default=False
    ),
]
BenchOrLot = Annotated[
    list[Path],
    typer.Argument(
        help="A folder holding bench.toml, or folders that do (a lot); a bench sheet; or .s2p files for a quick look.",
        show_default=False,
    ),
]
Jobs = Annotated[
    int | None,
    typer.Option("--jobs", min=1, help="Processes that share the work; left out, one for each processor."),
]
Out = Annotated[Path | None, typer.Option("--out", help="Folder for the results; made if it is not there.")]
Strict = Annotated[bool, typer.Option("--strict", help="Refuse sweep files that do not follow the standard.")]
Trials = Annotated[
    int | None, typer.Option("--trials", min=20, help="Trials behind each interval; left out, until they settle.")
]
Design = Annotated[str | None, typer.Option("--design", help="Design frequency of a quick look, such as '21.4 MHz'.")]
Source = Annotated[float | None, typer.Option("--source", help="Level leaving port 1 in dBm, for a quick look.")]
InputPad = Annotated[
    list[float] | None,
    typer.Option("--input-pad", help="Added input-side pad in dB, for a quick look: once, or once for each file."),
]
OutputPad = Annotated[
    list[float] | None,
    typer.Option("--output-pad", help="Added output-side pad in dB, for a quick look: once, or once for each file."),
]


_PLANNING_TRIALS = 200
"""Trials of a command that shows no interval."""


def main() -> NoReturn:
    """Run the command line; a fault of the input is one line on standard error and exit status 2."""
    from benchtool.errors import BenchtoolError

    try:
        app(standalone_mode=True)
    except BenchtoolError as error:
        for line in error.lines():
            print(line, file=sys.stderr)
        sys.exit(2)
    except KeyboardInterrupt:
        print("stopped; files already written are whole", file=sys.stderr)
        sys.exit(130)
    sys.exit(0)


def _version(wanted: bool) -> None:
    if wanted:
        print(f"benchtool {__version__}")
        raise typer.Exit


@app.callback()
def _root(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Show it and exit.")
    ] = False,
) -> None:
    pass


def _load(
    bench: Sequence[Path],
    design: str | None,
    source: float | None,
    inputs: list[float] | None,
    outputs: list[float] | None,
) -> tuple[BenchSheet, Path]:
    """Return the sheet that the arguments mean, and the folder that results go to by default."""
    from benchtool.errors import RequestError
    from benchtool.sheet import load_sheet, sheet_from_files

    sweeps = [path for path in bench if path.suffix.lower() == ".s2p"]
    if len(sweeps) == len(bench):
        sheet = sheet_from_files(
            sweeps, design=design, source_dbm=source, input_pads_db=inputs or [], output_pads_db=outputs or []
        )
        # Never over the results of a bench that has the same folder.
        return sheet, sweeps[0].parent / "quick-look"
    if len(bench) > 1:
        raise RequestError(
            f"{len(bench)} arguments that are not all .s2p files", "give one folder, one sheet, or only .s2p files"
        )
    _refuse_quick_look(design, source, inputs, outputs)
    sheet = load_sheet(bench[0])
    return sheet, sheet.folder / "report"


def _refuse_quick_look(
    design: str | None, source: float | None, inputs: list[float] | None, outputs: list[float] | None
) -> None:
    """Refuse the options of a quick look where there is a sheet to say it."""
    from benchtool.errors import RequestError

    quick = {"--design": design, "--source": source, "--input-pad": inputs, "--output-pad": outputs}
    given = [option for option, value in quick.items() if value]
    if given:
        raise RequestError(f"{' and '.join(given)} with a bench sheet", "write it in the sheet instead")


@contextmanager
def _interruptible() -> Iterator[None]:
    """Answer an interrupt with one line and status 130, whatever the version of typer makes of it."""
    try:
        yield
    except KeyboardInterrupt:
        print("stopped; files already written are whole", file=sys.stderr)
        raise typer.Exit(130) from None


@contextmanager
def _progress(what: str, total: int) -> Iterator[Callable[..., None]]:
    """Give a function to call at each step; it moves a bar on a terminal, and is silent when piped."""
    if total < 2 or not sys.stderr.isatty():
        yield lambda *_: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as progress:
        task = progress.add_task(what, total=total)
        yield lambda *_: progress.advance(task)


def _analyse(sheet: BenchSheet, strict: bool, trials: int | None) -> BenchResult:
    from benchtool.processes import processors
    from benchtool.reporting import ReportOptions, measure

    with _interruptible(), _progress("Devices", len(sheet.devices)) as advance:
        return measure(sheet, ReportOptions(False, strict, trials), processors(), advance).result


def _benches_of_lot(bench: Sequence[Path]) -> tuple[list[Path], list[LotBench]]:
    """Return the benches of a lot, and the folders that cannot be listed; nothing where the argument is no lot."""
    if len(bench) != 1 or not bench[0].is_dir() or (bench[0] / "bench.toml").is_file():
        return [], []
    from benchtool.lots import find_benches

    return find_benches(bench[0])


def _report_lot(
    folder: Path,
    benches: list[Path],
    closed: list[LotBench],
    out: Path | None,
    options: ReportOptions,
    jobs: int,
    again: bool,
) -> NoReturn:
    from dataclasses import replace

    from benchtool.lots import lot_csv, lot_lines, measure_lot
    from benchtool.whole_files import prepare_folder, write_whole

    summary = out or folder / "report"
    # An output folder that cannot be made is told before hours of work, not after.
    prepare_folder(summary)
    with _progress("Benches", len(benches)) as advance:
        lot = measure_lot(folder, benches, out, options, jobs=jobs, again=again, progress=advance)
    lot = replace(lot, benches=(*lot.benches, *closed))
    for bench in lot.unusable:
        for line in bench.faults:
            print(line, file=sys.stderr)
    write_whole(summary / "lot.csv", lot_csv(lot))
    if options.pages:
        from benchtool.lot_page import render_lot

        pdf, png = render_lot(lot)
        write_whole(summary / "lot.pdf", pdf)
        write_whole(summary / "lot.png", png)
    for line in lot_lines(lot):
        print("".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in line))
    print(f"Written to {summary}")
    raise typer.Exit(lot.exit_status)


@app.command()
def report(
    bench: BenchOrLot,
    out: Out = None,
    no_page: Annotated[bool, typer.Option("--no-page", help="Write the numbers only.")] = False,
    strict: Strict = False,
    trials: Trials = None,
    jobs: Jobs = None,
    again: Annotated[bool, typer.Option("--again", help="Measure every bench of a lot, changed or not.")] = False,
    design: Design = None,
    source: Source = None,
    input_pad: InputPad = None,
    output_pad: OutputPad = None,
) -> None:
    """Measure every device, judge it against its targets, and write one page for each.

    A folder of bench folders is a lot: each bench has its own report, and the lot one page and lot.csv.

    Exit status: 0 every target met or none set; 1 a target missed or undecided; 2 the input cannot be used.
    """
    from benchtool.processes import processors
    from benchtool.reporting import ReportOptions, measure, write_report

    options, jobs = ReportOptions(not no_page, strict, trials), jobs or processors()
    benches, closed = _benches_of_lot(bench)
    if benches:
        _refuse_quick_look(design, source, input_pad, output_pad)
        with _interruptible():
            _report_lot(bench[0], benches, closed, out, options, jobs, again)
    from benchtool.terminal import print_result

    sheet, folder = _load(bench, design, source, input_pad, output_pad)
    folder = out or folder
    with _interruptible(), _progress("Devices", len(sheet.devices)) as advance:
        measured = measure(sheet, options, jobs, advance)
    write_report(measured, folder)
    print_result(measured.result, folder)
    if any(device.verdict in ("missed", "undecided") for device in measured.result.devices):
        raise typer.Exit(1)


@app.command()
def draft(folder: Annotated[Path, typer.Argument(help="Folder with .s2p files.", show_default=False)]) -> None:
    """Write a first bench.toml from the sweeps in a folder, with a comment at every line to fill; never overwrites."""
    from benchtool.draft import draft_sheet, sweep_files
    from benchtool.errors import RequestError
    from benchtool.export import write_whole
    from benchtool.touchstone import read_sweep

    target = folder / "bench.toml"
    files = sweep_files(folder)
    if target.exists():
        raise RequestError(f"{target} is already there", "edit it, or move it away first")
    write_whole(target, draft_sheet(folder, [read_sweep(path, name=path.name) for path in files]).encode())
    print(
        f"{target}: {len(files)} sweeps; fill in the lines marked with a comment, then run: benchtool report {folder}"
    )


@app.command()
def inspect(
    files: Annotated[list[Path], typer.Argument(help="Touchstone files.", show_default=False)], strict: Strict = False
) -> None:
    """Show what is in each file, and every finding about it."""
    from benchtool.errors import BenchtoolError
    from benchtool.terminal import print_sweep
    from benchtool.touchstone import read_sweep

    faults = 0
    for path in files:
        try:
            sweep = read_sweep(path, strict=strict)
        except BenchtoolError as error:
            print(error, file=sys.stderr)
            faults += 1
        else:
            print_sweep(sweep)
    if faults:
        raise typer.Exit(2)


@app.command("next")
def next_sweeps(
    bench: Bench,
    strict: Strict = False,
    design: Design = None,
    source: Source = None,
    input_pad: InputPad = None,
    output_pad: OutputPad = None,
) -> None:
    """Name the two or three sweeps most worth taking next, with pads, levels, and what each would settle."""
    from benchtool.terminal import print_next

    sheet, _ = _load(bench, design, source, input_pad, output_pad)
    print_next(_analyse(sheet, strict, _PLANNING_TRIALS))


@app.command()
def correct(
    bench: Bench,
    out: Out = None,
    strict: Strict = False,
    touchstone: Annotated[int, typer.Option("--touchstone", min=1, max=2, help="Version of the files written.")] = 1,
    design: Design = None,
    source: Source = None,
    input_pad: InputPad = None,
    output_pad: OutputPad = None,
) -> None:
    """Write the sweeps at the device's own ports, added pads taken out, as .s2p files for other programs."""
    from benchtool.export import corrected_files, prepare_folder, write_whole

    sheet, folder = _load(bench, design, source, input_pad, output_pad)
    folder = out or folder.parent / "corrected"
    files = corrected_files(sheet, strict=strict, version=2 if touchstone == 2 else 1)
    prepare_folder(folder)
    for name, text in files:
        write_whole(folder / name, text.encode())
        print(folder / name)
