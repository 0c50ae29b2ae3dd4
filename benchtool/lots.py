"""A folder of bench folders in; each bench's own report, and what became of every device of the lot, out.

A bench is a folder that holds a bench sheet. Benches are measured in parallel processes; one that cannot be used is
listed with its faults and stops no other. A bench whose results still hold is not measured again.
"""

from __future__ import annotations

import csv
import io
import os
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

from benchtool import __version__
from benchtool.processes import run_tasks
from benchtool.reporting import ReportOptions, results_that_hold
from benchtool.whole_files import cell_text

if TYPE_CHECKING:
    from benchtool.model import Verdict

__all__ = [
    "Lot",
    "LotBench",
    "LotDevice",
    "LotTarget",
    "counted",
    "find_benches",
    "lot_csv",
    "lot_lines",
    "measure_lot",
]

_SHEET_NAME: Final = "bench.toml"
_RESULT_FOLDERS: Final = ("report", "corrected", "quick-look")
_RANK: Final[dict[Verdict, int]] = {"missed": 0, "undecided": 1, "met": 2, "none": 3}


@dataclass(frozen=True)
class LotTarget:
    """A target of one device, and the figure it is about."""

    figure: str
    unit: str
    value: float | None
    low: float | None
    high: float | None
    confidence: float | None
    bound: str | None
    min: float | None
    max: float | None
    verdict: Verdict
    probability: float | None


@dataclass(frozen=True)
class LotDevice:
    """One device of the lot: its verdict, why, and its targets."""

    bench: str
    name: str
    verdict: Verdict
    reason: str
    targets: tuple[LotTarget, ...]

    @property
    def rank(self) -> tuple[object, ...]:
        """What to sort by for the worst first: verdict, targets missed, then the least likely to be met."""
        counts = Counter(target.verdict for target in self.targets)
        chances = [target.probability for target in self.targets if target.probability is not None]
        return _RANK[self.verdict], -counts["missed"], -counts["undecided"], min(chances, default=1.0)


@dataclass(frozen=True)
class LotBench:
    """One bench of the lot, by its folder relative to the lot: its devices, or the faults that keep it from use."""

    name: str
    devices: tuple[LotDevice, ...] = ()
    faults: tuple[str, ...] = ()
    reused: bool = False
    made_at: str = ""


@dataclass(frozen=True)
class Lot:
    """All benches under one folder, by name."""

    title: str
    benches: tuple[LotBench, ...]
    version: str = __version__

    @property
    def made_at(self) -> str:
        """When the newest of its results was made; the same results give the same lot."""
        return max((bench.made_at for bench in self.benches), default="")

    @property
    def unusable(self) -> tuple[LotBench, ...]:
        """Benches that could not be used."""
        return tuple(bench for bench in self.benches if bench.faults)

    @property
    def devices(self) -> tuple[LotDevice, ...]:
        """All devices, the worst first."""
        found = [device for bench in self.benches for device in bench.devices]
        return tuple(sorted(found, key=lambda device: device.rank))

    @property
    def counts(self) -> dict[Verdict, int]:
        """How many devices have each verdict, the worst first; all four, with zeros."""
        counts = Counter(device.verdict for device in self.devices)
        return {verdict: counts[verdict] for verdict in _RANK}

    @property
    def exit_status(self) -> int:
        """2 with an unusable bench, else 1 with a target missed or undecided, else 0."""
        if self.unusable:
            return 2
        return 1 if self.counts["missed"] or self.counts["undecided"] else 0


def find_benches(folder: Path) -> tuple[list[Path], list[LotBench]]:
    """Return the bench folders under `folder`, by name, and the folders that cannot be listed, with their faults.

    Hidden folders, `report` and `corrected` are passed over, and so is what lies inside a bench.
    """
    benches: list[Path] = []
    closed: list[LotBench] = []

    def unlisted(error: OSError) -> None:
        place = Path(error.filename)
        fault = f"{place}: the folder cannot be listed ({error.strerror}); check its permissions"
        closed.append(LotBench(_name(place, folder), faults=(fault,)))

    for place, inner, files in os.walk(folder, onerror=unlisted):
        if _SHEET_NAME in files:
            benches.append(Path(place))
            inner.clear()
        else:
            inner[:] = sorted(n for n in inner if not n.startswith(".") and n not in _RESULT_FOLDERS)
    return sorted(benches), closed


def _name(bench: Path, lot: Path) -> str:
    return bench.relative_to(lot).as_posix()


@dataclass(frozen=True)
class _Task:
    bench: Path
    out: Path
    options: ReportOptions


def _report_bench(task: _Task) -> dict[str, Any] | tuple[str, ...]:
    """Return what results.json of a bench says, once its report is written; or its faults, a line each."""
    import json

    from benchtool.errors import BenchtoolError
    from benchtool.reporting import measure, write_report
    from benchtool.sheet import load_sheet

    try:
        report = measure(load_sheet(task.bench), task.options)
        tree: dict[str, Any] = json.loads(write_report(report, task.out))
    except BenchtoolError as error:
        return tuple(error.lines())
    except Exception as error:
        # A fault of the program at one bench must not lose the others.
        found = f"{task.bench}: the program failed here ({type(error).__name__}: {error})"
        return (" ".join(f"{found}; send this bench to its maintainers".split()),)
    return tree


def measure_lot(
    folder: Path,
    benches: Sequence[Path],
    out: Path | None,
    options: ReportOptions,
    *,
    jobs: int,
    again: bool = False,
    progress: Callable[[], None] | None = None,
) -> Lot:
    """Return the lot, each bench's report being written to ``BENCH/report``, or to its place under `out`.

    Parameters
    ----------
    folder, benches : the lot, and what :func:`find_benches` found in it
    jobs : processes to share the benches out to
    again : measure every bench, also where its results still hold
    progress : called for each bench when it is done
    """
    names = [_name(bench, folder) for bench in benches]
    tasks = [
        _Task(bench, bench / "report" if out is None else out / name, options)
        for bench, name in zip(benches, names, strict=True)
    ]
    done: dict[int, LotBench] = {}
    todo = []
    for place, task in enumerate(tasks):
        held = None if again else results_that_hold(task.bench, task.out, options)
        bench = _from_results(names[place], held, reused=True) if held is not None else None
        if bench is None:
            todo.append(place)
            continue
        done[place] = bench
        if progress is not None:
            progress()
    with closing(run_tasks(_report_bench, [tasks[place] for place in todo], jobs)) as outcomes:
        for position, outcome in outcomes:
            place = todo[position]
            done[place] = _outcome(names[place], tasks[place], outcome)
            if progress is not None:
                progress()
    title = folder.resolve().name or str(folder)
    return Lot(title, tuple(done[place] for place in range(len(tasks))))


def _outcome(name: str, task: _Task, outcome: dict[str, Any] | tuple[str, ...] | None) -> LotBench:
    if outcome is None:
        outcome = (f"{task.bench}: its process was ended from outside; free some memory, or use --jobs 1",)
    if isinstance(outcome, tuple):
        return LotBench(name, faults=outcome)
    bench = _from_results(name, outcome, reused=False)
    assert bench is not None
    return bench


def _from_results(name: str, tree: Mapping[str, Any], *, reused: bool) -> LotBench | None:
    """Return a bench as its results.json tells it; None where that is not what this program wrote."""
    try:
        devices = tuple(_device(name, device) for device in tree["devices"])
        return LotBench(name, devices, reused=reused, made_at=str(tree["made"]["at"]))
    except (KeyError, TypeError):
        return None


def _device(bench: str, device: Mapping[str, Any]) -> LotDevice:
    targets = []
    for target in device["targets"]:
        figure = device["figures"][target["figure"]]
        known = {key: figure[key] for key in ("unit", "value", "low", "high", "confidence", "bound")}
        asked = {key: target[key] for key in ("figure", "min", "max", "verdict", "probability")}
        targets.append(LotTarget(**known, **asked))
    return LotDevice(bench, device["name"], device["verdict"], device["reason"], tuple(targets))


_COLUMNS: Final = (
    "bench",
    "device",
    "device_verdict",
    "figure",
    "value",
    "unit",
    "low",
    "high",
    "confidence",
    "bound",
    "target_min",
    "target_max",
    "verdict",
    "probability",
)


def lot_csv(lot: Lot) -> bytes:
    """Return lot.csv: a row for each device and target, RFC 4180, UTF-8.

    A device without targets, and a bench that could not be used, have one row each.
    """
    stream = io.StringIO()
    writer = csv.writer(stream)
    writer.writerow(_COLUMNS)
    for bench in lot.benches:
        if bench.faults:
            writer.writerow([cell_text(bench.name), "", "unusable", *[""] * (len(_COLUMNS) - 3)])
        for device in bench.devices:
            head = [cell_text(bench.name), cell_text(device.name), device.verdict]
            for t in device.targets:
                known = (t.figure, t.value, t.unit, t.low, t.high, t.confidence, t.bound)
                writer.writerow([*head, *known, t.min, t.max, t.verdict, t.probability])
            if not device.targets:
                writer.writerow([*head, *[""] * (len(_COLUMNS) - 3)])
    return stream.getvalue().encode()


def counted(number: int, what: str, many: str | None = None) -> str:
    """Return a number with its noun: '1 device', '3 devices'.

    >>> counted(1, "bench", "benches"), counted(3, "bench", "benches")
    ('1 bench', '3 benches')
    """
    return f"{number} {what if number == 1 else many or what + 's'}"


def lot_lines(lot: Lot) -> list[str]:
    """Return the lot as lines to print: how many of each verdict, then every device, the worst first."""
    words = {"missed": "missed", "undecided": "undecided", "met": "met", "none": "without a target"}
    counts = ", ".join(f"{number} {words[verdict]}" for verdict, number in lot.counts.items() if number)
    head = f"{counted(len(lot.benches), 'bench', 'benches')}, {counted(len(lot.devices), 'device')}"
    parts = [f"{head}: {counts}" if counts else head]
    if lot.unusable:
        parts.append(f"{counted(len(lot.unusable), 'bench', 'benches')} unusable")
    reused = sum(bench.reused for bench in lot.benches)
    if reused:
        parts.append(f"{reused} unchanged since last measured")
    lines = ["; ".join(parts)]
    lines += [f"{device.verdict:<9}  {device.bench} / {device.name}: {device.reason}" for device in lot.devices]
    lines += [f"unusable   {bench.name}" for bench in lot.unusable]
    return lines
