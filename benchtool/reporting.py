"""A bench sheet in; the report folder of that bench out, with what it was made from, and whether that still holds.

Nothing heavy is imported until there is something to measure, so that a folder that needs nothing costs nothing.
"""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType
from typing import TYPE_CHECKING, Any, Final

from benchtool import __version__
from benchtool.processes import run_tasks
from benchtool.whole_files import prepare_folder, unique_stems, write_whole

if TYPE_CHECKING:
    from collections.abc import Callable

    from benchtool.errors import BenchtoolError
    from benchtool.model import BenchResult, DeviceResult, Sweep
    from benchtool.pads import PadBank
    from benchtool.sheet import BenchSheet, Device

__all__ = ["Report", "ReportOptions", "input_hashes", "measure", "results_that_hold", "write_report"]

_ALONE: Final = 4
"""Up to this many devices are measured in this process: starting another costs more than it saves."""

Page = tuple[bytes, bytes]


@dataclass(frozen=True)
class ReportOptions:
    """What the user asked for, as far as results depend on it."""

    pages: bool = True
    strict: bool = False
    trials: int | None = None

    def as_made(self) -> dict[str, bool | int | None]:
        """Return the options as results.json states them."""
        return {"pages": self.pages, "strict": self.strict, "trials": self.trials}


@dataclass(frozen=True, eq=False)
class Report:
    """The result of a bench, the page of each device as (PDF, PNG) if pages were wanted, and what it was made from."""

    result: BenchResult
    pages: tuple[Page, ...]
    inputs: Mapping[str, str]
    options: ReportOptions


def input_hashes(sheet: BenchSheet, read: Mapping[Path, Sweep] = MappingProxyType({})) -> dict[str, str]:
    """Return the SHA-256 of every file that a sheet rests on, by its name relative to the sheet.

    A file that cannot be read has an empty one: it is for the analysis to say what is wrong with it. Of those that were
    `read` already it is the one that was found then.
    """
    files = [pad.file for pad in sheet.pads.values() if pad.file is not None]
    for device in sheet.devices:
        for entry in device.sweeps:
            files += [file for file in (entry.file, entry.reversed) if file is not None]
    hashes = {sheet.path.name: sheet.sha256} if sheet.path is not None else {}
    for file in dict.fromkeys(files):
        name = Path(os.path.relpath(file, sheet.folder.absolute())).as_posix()
        hashes[name] = read[file].sha256 if file in read else _sha256(file)
    return hashes


def _sha256(file: Path) -> str:
    try:
        return hashlib.sha256(file.read_bytes()).hexdigest()
    except OSError:
        return ""


def measure(
    sheet: BenchSheet, options: ReportOptions, jobs: int = 1, progress: Callable[[str], None] | None = None
) -> Report:
    """Return the report of a bench; many devices are shared out to `jobs` processes.

    Parameters
    ----------
    progress : called with each device's name when that device is done

    Raises
    ------
    BenchtoolError : a sweep or pad cannot be read or used.
    """
    # Of the very bytes that were read, or taken before: what changes meanwhile is seen as changed the next time.
    if jobs > 1 and len(sheet.devices) > _ALONE:
        inputs = input_hashes(sheet)
        result, pages = _measure_in_processes(sheet, options, jobs, progress)
    else:
        from benchtool.analysis import analyse, read_all

        sweeps = read_all(sheet, options.strict)
        inputs = input_hashes(sheet, sweeps)
        result = analyse(sheet, progress, trials=options.trials, sweeps=sweeps)
        pages = tuple(_pages(result)) if options.pages else ()
    return Report(result, pages, inputs, options)


def _pages(result: BenchResult) -> Iterator[Page]:
    from benchtool.page import render_page

    for device in result.devices:
        yield render_page(result, device)


@dataclass(frozen=True, eq=False)
class _DeviceTask:
    """What one device needs: its sheet without the other devices, its number in the sheet, and what was read."""

    sheet: BenchSheet
    number: int
    bank: PadBank
    sweeps: Mapping[Path, Sweep]
    options: ReportOptions
    bench: BenchResult


def _of_device(device: Device, sweeps: Mapping[Path, Sweep]) -> dict[Path, Sweep]:
    """Return the sweeps of one device: a process is sent no more than it needs."""
    files = (file for entry in device.sweeps for file in (entry.file, entry.reversed))
    return {file: sweeps[file] for file in files if file is not None}


def _measure_device(task: _DeviceTask) -> tuple[DeviceResult, Page | None] | BenchtoolError:
    from benchtool.analysis import analyse_device
    from benchtool.errors import BenchtoolError

    try:
        device = analyse_device(
            task.sheet, task.sheet.devices[0], task.number, task.bank, task.sweeps, task.options.trials
        )
    except BenchtoolError as error:
        return error
    if not task.options.pages:
        return device, None
    from benchtool.page import render_page

    return device, render_page(task.bench, device)


def _measure_in_processes(
    sheet: BenchSheet, options: ReportOptions, jobs: int, progress: Callable[[str], None] | None
) -> tuple[BenchResult, tuple[Page, ...]]:
    from contextlib import closing
    from dataclasses import replace

    from benchtool.analysis import made_at, read_all
    from benchtool.errors import BenchtoolError, RequestError
    from benchtool.model import BenchResult
    from benchtool.pads import PadBank

    bank, sweeps = PadBank.of(sheet), read_all(sheet, options.strict)
    bench = BenchResult(sheet.title, sheet.operator, sheet.date, sheet.path, sheet.sha256, __version__, made_at(), ())
    tasks = [
        _DeviceTask(
            sheet.model_copy(update={"devices": (device,)}),
            number,
            bank,
            _of_device(device, sweeps),
            options,
            bench,
        )
        for number, device in enumerate(sheet.devices, start=1)
    ]
    done: dict[int, tuple[DeviceResult, Page | None]] = {}
    faults: dict[int, BenchtoolError] = {}
    with closing(run_tasks(_measure_device, tasks, jobs)) as outcomes:
        for place, outcome in outcomes:
            name = sheet.devices[place].name
            if outcome is None:
                found = f"the process that measured {name!r} was ended from outside"
                faults[place] = RequestError(found, "free some memory, or use --jobs 1")
            elif isinstance(outcome, BenchtoolError):
                faults[place] = outcome
            else:
                done[place] = outcome
            if progress is not None:
                progress(name)
    if faults:
        raise faults[min(faults)]
    measured = [done[place] for place in range(len(tasks))]
    pages = tuple(page for _, page in measured if page is not None)
    return replace(bench, devices=tuple(device for device, _ in measured)), pages


def write_report(report: Report, folder: Path) -> bytes:
    """Write the pages, results.csv and, last, results.json into a folder, each whole; return results.json.

    Raises
    ------
    OutputError : the folder or a file cannot be written.
    """
    from benchtool.export import results_csv, results_json

    prepare_folder(folder)
    files: dict[str, bytes] = {}
    if report.pages:
        stems = unique_stems(device.name for device in report.result.devices)
        for stem, (pdf, png) in zip(stems, report.pages, strict=True):
            files |= {f"{stem}.pdf": pdf, f"{stem}.png": png}
    files["results.csv"] = results_csv(report.result)
    for name, data in files.items():
        write_whole(folder / name, data)
    made = {
        "options": report.options.as_made(),
        "inputs": report.inputs,
        "outputs": {name: hashlib.sha256(data).hexdigest() for name, data in files.items()},
    }
    data = results_json(report.result, made)
    write_whole(folder / "results.json", data)
    return data


def results_that_hold(bench: Path, folder: Path, options: ReportOptions) -> dict[str, Any] | None:
    """Return what results.json in `folder` says if measuring `bench` again would change nothing, else None.

    That is: made by this version with these options, and every file that it was made from, and that was made with
    it, is as it was.
    """
    try:
        tree = json.loads((folder / "results.json").read_bytes())
        made = tree["made"]
        same = made["version"] == __version__ and made["options"] == options.as_made()
        checks = [*((bench / name, h) for name, h in made["inputs"].items())]
        checks += [(folder / name, h) for name, h in made["outputs"].items()]
        whole = same and bool(made["inputs"]) and all(h and _sha256(file) == h for file, h in checks)
    except (OSError, ValueError, KeyError, TypeError, AttributeError, RecursionError):
        return None
    return tree if whole and isinstance(tree, dict) else None
