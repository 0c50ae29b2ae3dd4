"""Results in; results.json, results.csv and corrected Touchstone files out, each written whole or not at all."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Final, Literal

import numpy as np
from pydantic_core import to_json

from benchtool import __version__
from benchtool.analysis import correct_sweep, read_all
from benchtool.doubts import sweep_doubts
from benchtool.drive_results import Estimate
from benchtool.findings import buried_parameters
from benchtool.model import BenchResult, DeviceResult, Figure, SweepResult
from benchtool.pads import PadBank
from benchtool.sheet import BenchSheet
from benchtool.touchstone import format_sweep
from benchtool.whole_files import cell_text, file_stem, prepare_folder, unique_stems, write_whole

__all__ = [
    "FORMAT",
    "corrected_files",
    "file_stem",
    "prepare_folder",
    "results_csv",
    "results_json",
    "unique_stems",
    "write_whole",
]

FORMAT: Final = "benchtool-results/1"


def _number(value: float | None) -> float | None:
    """Return a number JSON can hold: NaN and infinities become null."""
    return value if value is not None and math.isfinite(value) else None


def _figure(figure: Figure) -> dict[str, Any]:
    entry: dict[str, Any] = {
        "value": _number(figure.value),
        "unit": figure.unit,
        "low": _number(figure.low),
        "high": _number(figure.high),
        "confidence": figure.confidence,
        "bound": figure.bound,
    }
    if figure.standard_uncertainty is not None:
        entry["standard_uncertainty"] = _number(figure.standard_uncertainty)
    if figure.budget:
        entry["budget"] = {source: _number(share) for source, share in figure.budget.items()}
    for name, given in figure.parameters.items():
        entry[name] = list(given) if isinstance(given, tuple) else given
    return entry


def _sweep(result: SweepResult) -> dict[str, Any]:
    raw = result.raw
    return {
        "file": result.file,
        "sha256": raw.sha256,
        "points": int(raw.frequency_hz.size),
        "start_hz": float(raw.frequency_hz[0]),
        "stop_hz": float(raw.frequency_hz[-1]),
        "measured": list(raw.measured),
        "drive_dbm": _number(result.path.drive_dbm),
        "port2_dbm": _number(result.path.port2_dbm),
        "input_correction_db": result.input_correction_db,
        "output_correction_db": result.output_correction_db,
    }


def _compression(device: DeviceResult) -> dict[str, Any]:
    compression = device.compression
    if compression is None:
        return {"at_hz": device.design_hz, "reference": device.reference_sweep, "points": []}
    return {
        "at_hz": compression.at_hz,
        "peak_hz": compression.peak_hz,
        "reference": compression.reference,
        "reason": compression.reason,
        "points": [
            {
                "file": point.file,
                "drive_dbm": _number(point.drive_dbm),
                "output_dbm": _number(point.output_dbm),
                "gain_db": _number(point.gain_db),
                "compression_db": _number(point.compression_db),
                "phase_change_deg": _number(point.phase_change_deg),
                "compression_at_peak_db": _number(point.compression_at_peak_db),
                "worst_db": _number(point.worst_db),
                "worst_at_hz": _number(point.worst_at_hz),
                "compressed": bool(point.compressed),
            }
            for point in compression.points
        ],
    }


def _estimate(found: Estimate) -> dict[str, Any]:
    return {"value": _number(found.value), "low": _number(found.low), "high": _number(found.high), "bound": found.bound}


def _drive(device: DeviceResult) -> dict[str, Any] | None:
    study = device.drive
    if study is None:
        return None
    onset = study.onset
    return {
        "cause": study.cause,
        "confidence": _number(study.confidence),
        "probabilities": {name: _number(share) for name, share in study.probabilities.items()},
        "pads": [
            {
                "name": pad.name,
                "stated_db": pad.stated_db,
                "value_db": pad.value_db,
                "low_db": pad.low_db,
                "high_db": pad.high_db,
                "probability": pad.probability,
            }
            for pad in study.pads
        ],
        "set_aside": dict(study.set_aside),
        "basis": onset.basis,
        "drives": onset.drives,
        "safe_drive_dbm": _estimate(onset.safe_drive_dbm),
        "small_signal_gain_db": _estimate(onset.small_signal_gain_db),
        "reference_proven": onset.reference.proven,
        "reference_reads_low_db": _estimate(onset.reference.reads_low_db),
        "points": [
            {
                "file": point.file,
                "drive_dbm": _number(point.drive_dbm),
                "gain_db": _estimate(point.gain_db),
                "compression_db": _estimate(point.compression_db),
                "uncompressed_gain_db": _number(point.uncompressed_gain_db),
                "phase_change_deg": _estimate(point.phase_change_deg),
                "phase_deg_per_db": _number(point.phase_deg_per_db),
                "spoiled": point.spoiled,
            }
            for point in onset.points
        ],
        "next_sweeps": [
            {
                "input_pads": list(sweep.input_pads),
                "output_pads": list(sweep.output_pads),
                "source_dbm": _number(sweep.source_dbm),
                "drive_dbm": _number(sweep.drive_dbm),
                "device_output_dbm": _number(sweep.device_output_dbm),
                "port2_dbm": _number(sweep.port2_dbm),
                "headroom_db": _number(sweep.headroom_db),
                "purpose": sweep.purpose,
                "settles": sweep.settles,
                "cautions": list(sweep.cautions),
            }
            for sweep in study.next_sweeps
        ],
    }


def _device(device: DeviceResult) -> dict[str, Any]:
    return {
        "name": device.name,
        "kind": device.kind,
        "verdict": device.verdict,
        "reason": device.summary.reason,
        "next_step": device.summary.next_step,
        "design_hz": device.design_hz,
        "reference_sweep": device.reference_sweep,
        "sweeps": [_sweep(sweep) for sweep in device.sweeps],
        "figures": {key: _figure(figure) for key, figure in device.figures.items()},
        "targets": [
            {
                "figure": target.figure,
                "min": target.min,
                "max": target.max,
                "verdict": target.verdict,
                "probability": target.probability,
                **({"advice": target.advice} if target.advice else {}),
            }
            for target in device.targets
        ],
        "compression": _compression(device),
        "drive": _drive(device),
        "findings": [
            {
                "code": finding.code,
                "severity": finding.severity,
                "sweep": finding.sweep,
                "message": finding.message,
                "advice": finding.advice,
            }
            for finding in device.findings
        ],
    }


def results_json(bench: BenchResult, made: Mapping[str, Any] | None = None) -> bytes:
    """Return results.json: UTF-8, every number in Hz, s, dB, dBm, deg or ohm, null for what is not known.

    `made` adds to what is said of how it was made: options, and hashes of inputs and outputs.
    """
    tree: Mapping[str, Any] = {
        "format": FORMAT,
        "title": bench.title,
        "operator": bench.operator,
        "date": bench.date,
        "sheet_sha256": bench.sheet_sha256,
        "made": {"version": bench.version, "at": bench.made_at, **(made or {})},
        "devices": [_device(device) for device in bench.devices],
    }
    return to_json(tree, indent=1, inf_nan_mode="null") + b"\n"


_COLUMNS: Final = (
    "device",
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


def results_csv(bench: BenchResult) -> bytes:
    """Return results.csv: a row for each figure and target, the same numbers as results.json, RFC 4180, UTF-8."""
    stream = io.StringIO()
    writer = csv.writer(stream)
    writer.writerow(_COLUMNS)
    for device in bench.devices:
        for key, figure in device.figures.items():
            entry = _figure(figure)
            head = [
                cell_text(device.name),
                key,
                *(entry[k] for k in ("value", "unit", "low", "high", "confidence", "bound")),
            ]
            targets = [target for target in device.targets if target.figure == key]
            for target in targets:
                writer.writerow([*head, target.min, target.max, target.verdict, target.probability])
            if not targets:
                writer.writerow([*head, None, None, None, None])
    return stream.getvalue().encode()


def corrected_files(sheet: BenchSheet, *, strict: bool = False, version: Literal[1, 2] = 1) -> list[tuple[str, str]]:
    """Return name and Touchstone text of every sweep at the device's own ports, one file for each, names all different.

    `version` is that of the Touchstone format.

    Raises
    ------
    BenchtoolError : a sweep or pad cannot be read or used.
    """
    bank = PadBank.of(sheet)
    sweeps = read_all(sheet, strict)
    entries = [(device, entry) for device in sheet.devices for entry in device.sweeps]
    stems = unique_stems(f"{Path(entry.name).stem}_at_device" for _, entry in entries)
    files = []
    for stem, (device, entry) in zip(stems, entries, strict=True):
        sweep = sweeps[entry.file]
        middle = float(np.sqrt(sweep.frequency_hz[0] * sweep.frequency_hz[-1]))
        turned = sweeps[entry.reversed] if entry.reversed is not None else None
        result = correct_sweep(sheet, entry, sweep, bank, device.design_hz or middle, turned)
        comments = [
            f"{entry.name} at the device's own ports; device: {device.name}",
            f"taken out: {result.input_correction_db:g} dB on the input side, "
            f"{result.output_correction_db:g} dB on the output side",
            f"measured: {', '.join(result.sweep.measured)}; made by benchtool {__version__}",
        ]
        doubts = sweep_doubts(result.sweep, entry, sheet, bank, device.design_hz or middle)
        comments += [
            f"{name} was read through added pads twice and is of no use: +-{doubt:.2g}, where 1 is full reflection"
            for name, doubt in buried_parameters(result, doubts).items()
        ]
        files.append((f"{stem}.s2p", format_sweep(result.sweep, comments=comments, version=version)))
    return files
