"""A device's sweeps, plans and comparison in; every doubt about the set-up out, each with what to do about it.

The codes are stable: other people's scripts look for them. To add one, write a function that returns findings, call it
in :func:`device_findings`, and list the code in the README.
"""

from __future__ import annotations

from collections.abc import Collection, Iterable, Iterator, Sequence
from dataclasses import replace
from typing import Final, get_args

import numpy as np

from benchtool.causes import NAMED, STILL_POSSIBLE, CauseCode
from benchtool.compression import MeasuredSweep
from benchtool.digits import decibels, level_text, stated
from benchtool.doubts import SweepDoubts
from benchtool.drive_results import DriveStudy
from benchtool.match import BURIED_UNCERTAINTY, stability
from benchtool.model import Compression, Finding, Kind, SweepResult
from benchtool.noise import moving_average
from benchtool.phase import ambiguous_steps
from benchtool.slips import slips
from benchtool.units import HALF_POWER_DB, format_si

__all__ = ["CAUSES", "SEVERITIES", "buried_parameters", "device_findings", "in_order"]

SEVERITIES: Final = ("fault", "caution", "note")
CAUSES: Final = tuple(code for code in get_args(CauseCode) if code != "clean")
"""Codes that tell why gain changed between sweeps."""
_EXPLAINED: Final = ("compressed-sweep", "receiver-near-limit")
"""Codes of what is seen, which a cause explains."""

_FEW_POINTS: Final = 8
_NEAR_LIMIT_DB: Final = 3.0
_OUT_OF_REACH_DB: Final = 6.0
"""A level this far below where the receiver starts to compress is out of its reach."""
_SAME_DRIVE_DB: Final = 0.5
_CLEAR_OF_DB: Final = 10.0
"""How much less drive than would undo the drop takes a sweep clear of compression."""
_PASSIVE_SLACK_DB: Final = 0.1
_OFF_DESIGN: Final = 0.25
"""Distance of the peak from the design frequency, as a share of the half-power band, that is worth a word."""
_Q_DISAGREES: Final = 0.05
_MU_NEIGHBOURS: Final = 5
_MU_SLACK: Final = 0.02
"""How far below one µ has to be before it is not taken for noise."""
_NOISY_SNR_DB: Final = 20.0


def device_findings(
    kind: Kind,
    design_hz: float | None,
    sweeps: Sequence[MeasuredSweep],
    reference: MeasuredSweep,
    compression: Compression | None,
    doubts: Sequence[SweepDoubts],
    drive: DriveStudy | None = None,
    targets: Collection[str] = (),
) -> tuple[Finding, ...]:
    """Return the findings of one device, worst first, in the order of the sweeps within one severity.

    Findings about causes and onset come with the study `drive`; without one, what can be said of drive is said here.
    `targets` are the figures that were asked for: a doubt about another figure is only a note.
    """
    found: list[Finding] = []
    for sweep in sweeps:
        found += sweep.result.raw.findings
        found += _receiver_level(sweep, sweeps, drive)
        found += _noise(sweep)
    found += reference.plan.findings
    found += slips(sweeps, compression)
    found += _drive(kind, sweeps, reference, compression, drive)
    found += _shape(reference)
    found += _against_design(kind, design_hz, reference)
    found += _cross_checks(kind, reference)
    found += _may_oscillate(kind, reference)
    found += _buried(reference, doubts[sweeps.index(reference)], targets)
    return in_order(_together(list(dict.fromkeys(found))))


def in_order(findings: Iterable[Finding]) -> tuple[Finding, ...]:
    """Return findings worst first; of one severity causes come before the rest, and what causes explain comes last."""

    def rank(finding: Finding) -> tuple[int, int]:
        within = 0 if finding.code in CAUSES else 2 if finding.code in _EXPLAINED else 1
        return SEVERITIES.index(finding.severity), within

    return tuple(sorted(findings, key=rank))


def _together(findings: Sequence[Finding]) -> list[Finding]:
    """Return the findings with notes that say the same of several sweeps made one."""
    merged: dict[tuple[str, str, str], list[Finding]] = {}
    for finding in findings:
        said = finding.message.removeprefix(f"{finding.sweep}: ") if finding.severity == "note" else finding.message
        merged.setdefault((finding.code, said, finding.advice), []).append(finding)
    result = []
    for (_, said, _), group in merged.items():
        names = [finding.sweep for finding in group if finding.sweep is not None]
        if len(names) < 2:
            result.append(group[0])
        else:
            listed = f"{', '.join(names[:-1])} and {names[-1]}"
            result.append(replace(group[0], message=f"{listed}: {said}", sweep=None))
    return result


def _receiver_level(
    sweep: MeasuredSweep, sweeps: Sequence[MeasuredSweep], drive: DriveStudy | None
) -> Iterator[Finding]:
    path = sweep.result.path
    level = path.port2_dbm
    if level is None:
        return
    damage, limit = path.port2_damage_dbm, path.port2_compression_dbm
    if damage is not None and level > damage - _NEAR_LIMIT_DB:
        yield Finding(
            "receiver-near-limit",
            "fault",
            f"{sweep.file}: {level_text(level)} reaches port 2, whose damage limit is {stated(damage, 'dBm')}",
            "switch the source off and add output pads before anything else is measured",
            sweep.file,
        )
    elif limit is not None and level > limit - _NEAR_LIMIT_DB and not _level_settled(sweep, sweeps, drive, limit):
        more = int(np.ceil(level - limit + 10.0))
        yield Finding(
            "receiver-near-limit",
            "caution",
            f"{sweep.file}: {level_text(level)} reaches port 2, whose receiver compresses from "
            f"{stated(limit, 'dBm')}; part of any gain drop may be the analyzer's",
            f"sweep again with {more} dB more output pad and enter it in the sheet",
            sweep.file,
        )


def _level_settled(
    sweep: MeasuredSweep, sweeps: Sequence[MeasuredSweep], drive: DriveStudy | None, limit_dbm: float
) -> bool:
    """Return whether it is known what the receiver did at this sweep's level.

    It is where a cause was named, the receiver or another that leaves it no share, and where the same drive was swept
    with the receiver out of reach, so that what the advice asks for is in the folder already.
    """
    if drive is not None and drive.confidence >= NAMED:
        if drive.cause == "receiver-overload":
            return sweep.file in drive.set_aside
        if drive.probabilities.get("receiver-overload", 1.0) < STILL_POSSIBLE:
            return True
    here = sweep.drive_dbm
    levels = ((other.result.path.port2_dbm, other.drive_dbm) for other in sweeps)
    return here is not None and any(
        level is not None
        and there is not None
        and level < limit_dbm - _OUT_OF_REACH_DB
        and abs(there - here) < _SAME_DRIVE_DB
        for level, there in levels
    )


def _noise(sweep: MeasuredSweep) -> Iterator[Finding]:
    ratio = sweep.signal_to_noise_db
    if ratio is not None and ratio < _NOISY_SNR_DB:
        yield Finding(
            "noise-limited",
            "caution",
            f"{sweep.file}: S21 stands only {ratio:.0f} dB above its noise at the peak",
            "narrow the measuring bandwidth, average, or take pads out where the levels allow",
            sweep.file,
        )


def _drive(
    kind: Kind,
    sweeps: Sequence[MeasuredSweep],
    reference: MeasuredSweep,
    compression: Compression | None,
    drive: DriveStudy | None,
) -> Iterator[Finding]:
    if any(sweep.drive_dbm is None for sweep in sweeps):
        yield Finding(
            "source-level-unknown",
            "caution" if kind == "amplifier" else "note",
            "the source level is not known, so no drive and no level at port 2 can be worked out",
            "enter analyzer.source_dbm in the sheet (the level leaving port 1, before any pad)",
        )
    proven = drive is not None and drive.onset.reference.proven
    by_file = {sweep.file: sweep for sweep in sweeps}
    aside = drive.set_aside if drive is not None else {}
    for point in compression.points if compression is not None else ():
        if point.compressed and point.file not in aside:
            level = "its drive" if point.drive_dbm is None else f"{level_text(point.drive_dbm)} drive"
            yield Finding(
                "compressed-sweep",
                "note" if proven else "caution",
                f"{point.file}: at {format_si(point.worst_at_hz, 'Hz')} and {level} "
                f"gain is {point.worst_db:.1f} dB down on {reference.file}; its peak, bandwidth and Q are not "
                "the device's and were not used",
                _less_drive(by_file[point.file], reference, point.worst_db, drive),
                point.file,
            )
    if kind == "amplifier" and drive is None:
        yield Finding(
            "drive-unproven",
            "caution",
            f"nothing shows that {reference.file} was not compressed: its gain may read low and its band wide",
            "sweep again over the same span with 10 dB more input pad; if the gain agrees, this sweep stands",
            reference.file,
        )


def _less_drive(sweep: MeasuredSweep, reference: MeasuredSweep, drop_db: float, drive: DriveStudy | None) -> str:
    """Return what to do for figures at the source level of a sweep that is down by `drop_db`, if the device limits."""
    here, there = sweep.result.path, reference.result.path
    more_db = sum(pad.loss_db for pad in there.input_pads) - sum(pad.loss_db for pad in here.input_pads)
    if here.source_dbm == there.source_dbm and more_db > drop_db + 0.5 * _CLEAR_OF_DB:
        advice = f"take figures from {reference.file}, swept with {decibels(round(more_db, 1))} more input pad"
    else:
        # The reference may be down as well, and then the device is down by more than the sweeps differ.
        low = None if drive is None else drive.onset.reference.reads_low_db.high
        clear_db = drop_db + (low or 0.0) + _CLEAR_OF_DB
        advice = f"to take figures at that source level, add {clear_db:.0f} dB of input pad"
    open_yet = drive is not None and drive.cause in ("input-limited-or-pad", "cause-unclear")
    return f"if the device limits, {advice}" if open_yet else advice


def _shape(reference: MeasuredSweep) -> Iterator[Finding]:
    band, file = reference.plan.passband, reference.file
    if band.points_inside < _FEW_POINTS and band.lower_inside and band.upper_inside:
        yield Finding(
            "too-few-points",
            "caution",
            f"{file}: only {band.points_inside} samples lie inside the half-power band, so peak, bandwidth and Q rest "
            "on the curve drawn between them",
            "sweep a narrower span, or more points",
            file,
        )
    if not band.lower_inside or not band.upper_inside:
        missing = " and ".join(
            name for name, inside in (("lower", band.lower_inside), ("upper", band.upper_inside)) if not inside
        )
        yield Finding(
            "edge-outside-sweep",
            "caution",
            f"{file}: the {missing} half-power edge lies outside the sweep ({format_si(band.start_hz, 'Hz')} to "
            f"{format_si(band.stop_hz, 'Hz')}), so bandwidth and Q are bounds",
            "sweep wider if the bandwidth matters",
            file,
        )
    if not band.peak_inside:
        yield Finding(
            "peak-at-window-edge",
            "caution",
            f"{file}: the gain is still rising at the end of the window or sweep, so the peak found there is a bound",
            "widen the window, or sweep wider",
            file,
        )
    if band.other_humps:
        where = ", ".join(format_si(hump, "Hz") for hump in band.other_humps[:3])
        yield Finding(
            "several-peaks",
            "caution",
            f"{file}: other peaks within {HALF_POWER_DB:.2f} dB of the highest stand at {where}; the figures are "
            "those of the highest alone",
            "set `window` in the sheet round the peak that is meant",
            file,
        )
    sweep = reference.result.sweep
    level = float(np.max(np.abs(sweep.s21)))
    steps = ambiguous_steps(sweep.s21, 0.1 * level)
    if steps:
        yield Finding(
            "phase-ambiguous",
            "caution",
            f"{file}: the phase turns by more than 150° from one sample to the next in {steps} places, so phase and "
            "delay could be out by whole turns",
            "sweep a narrower span, or more points",
            file,
        )


def _against_design(kind: Kind, design_hz: float | None, reference: MeasuredSweep) -> Iterator[Finding]:
    band = reference.passband
    peak, width = float(band.peak_frequency), float(band.bandwidth)
    file = reference.file
    if (
        design_hz is not None
        and kind != "network"
        and np.isfinite(width)
        and abs(peak - design_hz) > _OFF_DESIGN * width
    ):
        yield Finding(
            "peak-off-design",
            "caution",
            f"{file}: the peak is at {format_si(peak, 'Hz', 5)}, {format_si(abs(peak - design_hz), 'Hz', 3)} "
            f"{'above' if peak > design_hz else 'below'} the design frequency, "
            f"{abs(peak - design_hz) / width:.0%} of the half-power band",
            "retune, or correct design_frequency in the sheet",
            file,
        )
    gain = float(band.peak_gain)
    if kind == "filter" and gain > _PASSIVE_SLACK_DB:
        yield Finding(
            "passive-shows-gain",
            "fault",
            f"{file}: a passive device shows {gain:.2f} dB of gain",
            "check which pads were in line at calibration and at the sweep: one is probably counted twice or missing",
            file,
        )


def _cross_checks(kind: Kind, reference: MeasuredSweep) -> Iterator[Finding]:
    band = reference.plan.passband
    if not (band.lower_inside and band.upper_inside and band.peak_inside):
        return
    figures = reference.passband
    by_width, by_delay, by_phase = float(figures.loaded_q), float(figures.delay_q), float(figures.phase_q)
    rivals = [q for q in (by_delay, by_phase) if np.isfinite(q)]
    if not np.isfinite(by_width) or all(abs(q / by_width - 1.0) <= _Q_DISAGREES for q in rivals):
        return
    shown = ", ".join(
        f"{q:.3g} from {how}"
        for q, how in ((by_width, "bandwidth"), (by_delay, "group delay"), (by_phase, "the 45° phase points"))
        if np.isfinite(q)
    )
    yield Finding(
        "q-disagrees",
        "note" if kind != "amplifier" else "caution",
        f"{reference.file}: loaded Q is {shown}; a single-tuned response has one Q",
        ("look for" if kind == "amplifier" else "expected of a filter with several resonators; else look for")
        + " compression, a second resonance, a cable left in line, or too few samples",
        reference.file,
    )


def _may_oscillate(kind: Kind, reference: MeasuredSweep) -> Iterator[Finding]:
    sweep = reference.result.sweep
    if kind != "amplifier" or not sweep.full:
        return
    mu = moving_average(stability(sweep.s).mu, _MU_NEIGHBOURS)
    lowest = int(np.argmin(mu))
    if mu[lowest] < 1.0 - _MU_SLACK:
        where = format_si(float(sweep.frequency_hz[lowest]), "Hz")
        yield Finding(
            "may-oscillate",
            "caution",
            f"{reference.file}: µ is {mu[lowest]:.2f} at {where}: some passive source or load would make it oscillate",
            "keep pads on both ports while it is powered, and load or neutralise it before it goes to its place",
            reference.file,
        )


def buried_parameters(result: SweepResult, doubts: SweepDoubts) -> dict[str, float]:
    """Return which reflections of a sweep are buried under added pads: parameter and doubt of its magnitude.

    The rule is that of :func:`benchtool.match.buried_uncertainty`, with the pads' own reflection added to the
    directivity, since a matched pad that is not quite matched is read as part of the device.
    """
    before_s22 = result.input_correction_db if doubts.turned else result.output_correction_db
    sides = (
        ("S11", result.input_correction_db, doubts.reflection_doubt("S11")),
        ("S22", before_s22, doubts.reflection_doubt("S22")),
    )
    return {
        name: vector
        for name, correction, vector in sides
        if name in result.sweep.measured and correction > 0.0 and vector > BURIED_UNCERTAINTY
    }


def _buried(sweep: MeasuredSweep, doubts: SweepDoubts, wanted: Collection[str]) -> Iterator[Finding]:
    for name, doubt in buried_parameters(sweep.result, doubts).items():
        side = "input" if name == "S11" else "output"
        yield Finding(
            "return-loss-buried",
            "caution" if f"{side}_return_loss" in wanted else "note",
            f"{sweep.file}: {name} was read through the added {side} pads twice, so its magnitude is uncertain by "
            f"±{doubt:.2g}, where 1 is full reflection, and the {side} return loss is withheld",
            f"sweep {name} once without the added {side} pad (the device unpowered or at a drive it stands), or "
            "calibrate with the pad in line",
            sweep.file,
        )
