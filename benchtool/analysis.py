"""A bench sheet in, the result of the whole bench session out: the one path that every command takes."""

from __future__ import annotations

import datetime
import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Final

import numpy as np

from benchtool import __version__
from benchtool.advice import agreed, onset_advice, reference_finding
from benchtool.compression import MeasuredSweep, choose_reference, compare_drives
from benchtool.compression_study import onset_figures, study_compression
from benchtool.doubts import SweepDoubts, assumptions, pads_that_count, sweep_doubts
from benchtool.drive_results import DriveStudy
from benchtool.errors import BenchtoolError, FaultsError, SheetError, SweepFileError
from benchtool.figure_plan import units_or_span
from benchtool.figures import FigurePlan, plan_figures, target_key
from benchtool.findings import buried_parameters, device_findings, in_order
from benchtool.joining import join_reversed, settle_ports
from benchtool.model import BenchResult, DeviceResult, Figure, Finding, SignalPath, Sweep, SweepResult, TargetResult
from benchtool.pad_belief import carry_pad_doubt
from benchtool.pads import PadBank, de_embed, output_reflection, signal_path
from benchtool.planning import plan_next
from benchtool.response import span_of
from benchtool.sheet import BenchSheet, Device, SweepEntry
from benchtool.slips import VOID
from benchtool.small_signal import BOUND_WHEN_COMPRESSED, carry_drive_doubt
from benchtool.touchstone import read_sweep
from benchtool.uncertainty import figure_trials
from benchtool.units import format_si, to_db
from benchtool.verdict import judge, remedy, summarise

__all__ = ["analyse", "analyse_device", "correct_sweep", "made_at", "read_all"]

Progress = Callable[[str], None]


def made_at() -> str:
    """Return the time a result is stamped with, ISO 8601 UTC; SOURCE_DATE_EPOCH sets it where builds must repeat."""
    epoch = os.environ.get("SOURCE_DATE_EPOCH")
    now = datetime.datetime.fromtimestamp(int(epoch), datetime.UTC) if epoch else datetime.datetime.now(datetime.UTC)
    return now.strftime("%Y-%m-%dT%H:%M:%SZ")


def analyse(
    sheet: BenchSheet,
    progress: Progress | None = None,
    *,
    strict: bool = False,
    trials: int | None = None,
    sweeps: Mapping[Path, Sweep] | None = None,
) -> BenchResult:
    """Return everything that can be worked out from a bench sheet and its sweeps.

    Parameters
    ----------
    sheet : from :func:`benchtool.sheet.load_sheet` or :func:`benchtool.sheet.sheet_from_files`
    progress : called with each device's name when that device is done
    strict : refuse every sweep file that does not follow the standard to the letter
    trials : how many the intervals rest on; None runs until they have settled
    sweeps : from :func:`read_all`, where they were read already

    Raises
    ------
    BenchtoolError : a sweep or pad cannot be read or used; all faulty files are named at once.
    """
    bank = PadBank.of(sheet)
    sweeps = read_all(sheet, strict) if sweeps is None else sweeps
    devices = []
    for number, device in enumerate(sheet.devices, start=1):
        devices.append(analyse_device(sheet, device, number, bank, sweeps, trials))
        if progress is not None:
            progress(device.name)
    return BenchResult(
        sheet.title,
        sheet.operator,
        sheet.date,
        sheet.path,
        sheet.sha256,
        __version__,
        made_at(),
        tuple(devices),
    )


def read_all(sheet: BenchSheet, strict: bool) -> dict[Path, Sweep]:
    """Return every sweep of the sheet by its path; raises all faults together."""
    sweeps: dict[Path, Sweep] = {}
    faults: list[BenchtoolError] = []
    for device in sheet.devices:
        for entry in device.sweeps:
            for file in (entry.file, entry.reversed):
                if file is None or file in sweeps:
                    continue
                try:
                    sweep = read_sweep(file, name=entry.name if file == entry.file else file.name, strict=strict)
                    _check_usable(sweep, file)
                    sweeps[file] = sweep
                except SweepFileError as fault:
                    faults.append(fault)
    if len(faults) == 1:
        raise faults[0]
    if faults:
        raise FaultsError(faults)
    return sweeps


def _check_usable(sweep: Sweep, file: Path) -> None:
    if "S21" not in sweep.measured:
        raise SweepFileError(
            file, "S21 was not measured, only " + ", ".join(sweep.measured), "sweep from port 1 to port 2"
        )
    if not np.any(sweep.s21):
        raise SweepFileError(file, "S21 is zero at every frequency", "check the cables, then sweep again")
    if sweep.frequency_hz.size < 3:
        raise SweepFileError(
            file, f"only {sweep.frequency_hz.size} frequencies", "sweep at least 3; 201 or more is usual"
        )


def correct_sweep(
    sheet: BenchSheet, entry: SweepEntry, sweep: Sweep, bank: PadBank, at_hz: float, turned: Sweep | None = None
) -> SweepResult:
    """Return one sweep at the device's own ports; its path has no level beyond the drive yet.

    `turned` is the sweep of the device end for end in the same line, where there is one: it completes S12 and S22.

    Raises
    ------
    SweepFileError : the two sweeps do not fit together.
    """
    at_device, findings, into, out = de_embed(sweep, entry, sheet, bank, at_hz)
    if turned is not None:
        other, _, _, _ = de_embed(turned, entry, sheet, bank, at_hz)
        behind = output_reflection(entry, sheet, bank, sweep.frequency_hz)
        at_device = settle_ports(join_reversed(at_device, other), behind)
        findings = tuple(finding for finding in findings if finding.code != "pad-removal-inexact")
        findings = (*findings, *(f for f in at_device.findings if f not in sweep.findings))
    # What the joining settled is no longer said of the forward sweep alone.
    own = () if turned is not None else sweep.findings
    raw = replace(sweep, findings=(*own, *findings))
    return SweepResult(entry.name, raw, at_device, signal_path(entry, sheet, bank, at_hz, None), into, out)


def analyse_device(
    sheet: BenchSheet,
    device: Device,
    number: int,
    bank: PadBank,
    sweeps: Mapping[Path, Sweep],
    trials: int | None = None,
) -> DeviceResult:
    """Return the result of one device; `sweeps` holds every sweep that it names, by its path.

    `number` is its place in the sheet, counted from 1: messages name it, and it seeds the trials.
    """
    measured = [_measure(sheet, device, number, entry, sweeps, bank) for entry in device.sweeps]
    reference, reason = choose_reference(measured)
    drive, drive_findings = _study_drive(sheet, device, bank, measured, reference)
    trusted = _trusted(measured, device, sheet, drive)
    if drive is not None and trusted and reference not in trusted:
        distrusted = reference.file
        reference, reason = choose_reference(trusted)
        reason += f", once {distrusted} is set aside: {_WHY_ASIDE[drive.cause or '']}"
        drive, drive_findings = _study_drive(sheet, device, bank, measured, reference)
    at_hz = reference.plan.design_hz
    compression = compare_drives(measured, reference, reason, at_hz)
    doubts = [
        sweep_doubts(sweep.result.sweep, entry, sheet, bank, at_hz)
        for sweep, entry in zip(measured, device.sweeps, strict=True)
    ]
    own = doubts[measured.index(reference)]
    confidence = sheet.decision.confidence
    keys = [target_key(target) for target in device.targets]
    trial = figure_trials(
        reference,
        own,
        bank,
        _withhold_buried(reference, own),
        confidence,
        trials=trials,
        seed=number,
        deciding=keys or [next(iter(reference.plan.extractors))],
    )
    figures, values = dict(trial.figures), dict(trial.values)
    if drive is not None:
        added = {**own.input_weights, **own.output_weights}
        figures, values = carry_pad_doubt(figures, values, drive.pads, added, confidence, seed=number)
    if drive is not None and device.kind == "amplifier":
        figures, values = carry_drive_doubt(figures, values, drive.onset.reference, seed=number)
        figures.update(onset_figures(drive.onset))
    findings = in_order(
        (
            *device_findings(device.kind, device.design_hz, measured, reference, compression, doubts, drive, keys),
            *drive_findings,
            *trial.findings,
        )
    )
    results = tuple(
        judge(
            figures[key],
            target,
            values.get(key),
            confidence,
            _way_out(figures[key], sheet, bank, drive, drive_findings),
        )
        for key, target in zip(keys, device.targets, strict=True)
    )
    results = _void(results, findings, drive)
    used = {pad for entry in device.sweeps for pad in pads_that_count(entry, sheet)}
    return DeviceResult(
        device.name,
        device.kind,
        at_hz,
        device.design_hz is not None,
        device.window_hz,
        reference.file,
        tuple(sweep.result for sweep in measured),
        figures,
        results,
        compression,
        findings,
        summarise(results, figures, findings, drive is not None and bool(drive.next_sweeps)),
        drive,
        tuple(f"{item.what} {item.value_db:g} dB" for item in assumptions(sheet, used, bank)),
        trial.trials,
    )


_WHY_ASIDE: Final = {
    "pad-value-suspect": "a pad in it is probably not what the sheet says",
    "reference-not-repeating": "it does not repeat",
}


def _trusted(
    measured: Sequence[MeasuredSweep], device: Device, sheet: BenchSheet, drive: DriveStudy | None
) -> list[MeasuredSweep]:
    """Return the sweeps that the cause of the gain changes leaves fit to be the reference."""
    if drive is None or drive.cause not in _WHY_ASIDE:
        return list(measured)
    suspect = {pad.name for pad in drive.pads[:1]} if drive.cause == "pad-value-suspect" else set()
    return [
        sweep
        for sweep, entry in zip(measured, device.sweeps, strict=True)
        if sweep.file != drive.odd_sweep and not suspect & set(pads_that_count(entry, sheet))
    ]


def _study_drive(
    sheet: BenchSheet,
    device: Device,
    bank: PadBank,
    measured: Sequence[MeasuredSweep],
    reference: MeasuredSweep,
) -> tuple[DriveStudy | None, tuple[Finding, ...]]:
    """Return what the sweeps say about drive, with its findings; nothing for a passive device swept once."""
    if device.kind != "amplifier" and len(measured) < 2:
        return None, ()
    at_hz = reference.plan.design_hz
    study = study_compression(measured, device.sweeps, sheet, bank, at_hz, reference.file, device.kind)
    if study is None:
        return None, tuple(_apart(measured, at_hz))
    planned = plan_next(sheet, bank, device.sweeps, study, reference.signal_to_noise_db)
    # That a device limits at a high drive is worth knowing, but no doubt about figures that a proven reference gives.
    harmless = study.verdict is not None and study.verdict.device_compresses and study.onset.reference.proven
    findings = [
        replace(finding, severity="note") if harmless else finding
        for finding in agreed(study.findings, study.verdict, study.onset, planned)
    ]
    if device.kind == "amplifier":
        findings.insert(0, reference_finding(study.onset, study.verdict, planned))
    cause = study.verdict
    drive = DriveStudy(
        None if cause is None else cause.code,
        0.0 if cause is None else cause.confidence,
        {} if cause is None else {str(name): p for name, p in cause.probabilities.items()},
        () if cause is None else cause.pads,
        None if cause is None else cause.odd_sweep,
        study.onset,
        study.map,
        planned,
        study.set_aside,
    )
    return drive, tuple(findings)


_OF_LEVEL: Final = frozenset({"gain", "peak_gain", "insertion_loss", "input_p1db", "output_p1db"})
"""Figures that a pad or a sweep that is off makes wrong."""


def _void(
    results: tuple[TargetResult, ...], findings: Sequence[Finding], drive: DriveStudy | None
) -> tuple[TargetResult, ...]:
    """Return targets undecided where what was measured is not what the sheet says.

    Where no explanation fits the sweeps some pad or sweep is off, nobody knows which: no level can then be judged.
    """
    wrong = next((finding for finding in findings if finding.code in VOID), None)
    nothing_fits = drive is not None and drive.cause == "cause-unclear" and drive.confidence == 0.0
    unclear = next((finding for finding in findings if finding.code == "cause-unclear" and nothing_fits), None)
    judged = []
    for each in results:
        why = wrong or (unclear if each.id in _OF_LEVEL else None)
        judged.append(each if why is None else replace(each, verdict="undecided", probability=None, advice=why.advice))
    return tuple(judged)


def _apart(measured: Sequence[MeasuredSweep], at_hz: float) -> Iterator[Finding]:
    """Yield the sweeps for which drives cannot be compared at the design frequency, where others have it."""
    spans = [sweep.result.sweep.frequency_hz[[0, -1]] for sweep in measured]
    without = [not low <= at_hz <= high for low, high in spans]
    for sweep, (low, high), lacks in zip(measured, spans, without, strict=True):
        if lacks and not all(without):
            yield Finding(
                "outside-sweep",
                "caution",
                f"{sweep.file} runs from {format_si(low, 'Hz', 6)} to {format_si(high, 'Hz', 6)}, without the design "
                f"frequency, {format_si(at_hz, 'Hz', 6)}, so nothing is known of compression",
                units_or_span(at_hz, float(np.sqrt(low * high))),
                sweep.file,
            )


def _way_out(
    figure: Figure, sheet: BenchSheet, bank: PadBank, drive: DriveStudy | None, drive_findings: Sequence[Finding]
) -> str:
    """Return what would decide a target of this figure: a second drive where that is the doubt, else its budget's."""
    if drive is not None and figure.id in ("input_p1db", "output_p1db"):
        return onset_advice(drive.next_sweeps)
    unproven = [finding for finding in drive_findings if finding.code == "drive-unproven"]
    if figure.bound is not None and figure.bound == BOUND_WHEN_COMPRESSED.get(figure.id) and unproven:
        return unproven[0].advice
    return remedy(figure, bank, port_match_stated=sheet.analyzer.port_match_db is not None)


def _measure(
    sheet: BenchSheet,
    device: Device,
    number: int,
    entry: SweepEntry,
    sweeps: Mapping[Path, Sweep],
    bank: PadBank,
) -> MeasuredSweep:
    sweep = sweeps[entry.file]
    turned = sweeps[entry.reversed] if entry.reversed is not None else None
    _check_window(sheet, device, number, sweep)
    middle = float(np.sqrt(sweep.frequency_hz[0] * sweep.frequency_hz[-1]))
    result = correct_sweep(sheet, entry, sweep, bank, device.design_hz or middle, turned)
    plan = plan_figures(result.sweep, device.kind, device.design_hz, device.window_hz, device.targets)
    if device.design_hz is None:
        result = correct_sweep(sheet, entry, sweep, bank, plan.design_hz, turned)
    path = _path(sheet, entry, bank, plan, result.sweep)
    measured = MeasuredSweep(replace(result, path=path), plan)
    return replace(measured, result=replace(measured.result, noise_db=measured.signal_to_noise_db))


def _check_window(sheet: BenchSheet, device: Device, number: int, sweep: Sweep) -> None:
    if device.window_hz is None or span_of(sweep.frequency_hz, device.window_hz) > 0:
        return
    low, high = (format_si(f, "Hz") for f in device.window_hz)
    first, last = (format_si(float(sweep.frequency_hz[i]), "Hz") for i in (0, -1))
    raise SheetError(
        sheet.path or sweep.name,
        f"device[{number}].window",
        f"no sample of {sweep.name} lies between {low} and {high}; the sweep runs from {first} to {last}",
        "change the window, or sweep there",
    )


def _path(sheet: BenchSheet, entry: SweepEntry, bank: PadBank, plan: FigurePlan, sweep: Sweep) -> SignalPath:
    f = sweep.frequency_hz
    inside = f[0] <= plan.design_hz <= f[-1]
    gain = float(to_db(plan.design_curve.at(sweep.s21, plan.design_hz)[0])) if inside else None
    return signal_path(entry, sheet, bank, plan.design_hz, gain)


def _withhold_buried(reference: MeasuredSweep, doubts: SweepDoubts) -> dict[str, Figure]:
    """Return the figures of the reference sweep; a return loss buried under pads is withheld (a finding says why)."""
    figures = reference.plan.figures(reference.result.sweep.s)
    for name in buried_parameters(reference.result, doubts):
        key = "input_return_loss" if name == "S11" else "output_return_loss"
        if key in figures:
            figures[key] = replace(figures[key], value=None, bound=None)
    return figures
