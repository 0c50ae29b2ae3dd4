"""Devices made by hand for the tests of the page: a name of a case in, a bench and its device out."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np

from benchtool.drive_results import Basis, CompressionMap, DrivePoint, DriveStudy, Estimate, Onset, ReferenceProof
from benchtool.model import (
    BenchResult,
    Bound,
    Compression,
    CompressionPoint,
    DeviceResult,
    Figure,
    Finding,
    PadInLine,
    SignalPath,
    Summary,
    Sweep,
    SweepResult,
    TargetResult,
)

F0_HZ = 21.4e6
NAME_40 = "second stage of the IF strip, board rev C"[:40]
NAME_60 = "second intermediate-frequency stage, balloon receiver, rev C"
EVIL_NAMES = (
    r"$\frac{a}{b}$ $x_1^2$ 100% \textbf{no}",
    "<b>stage & 'two'</b> \"q\"",
    "a\x07b\x1b[31mred\nnext\tline",
    "\u202egnp.exe\u200d",
    "Zwischenverstärker Ω µ",
    "усилитель ПЧ",
    "中間周波増幅器",
    "مرحلة ثانية",
    "rocket 🚀 smile 😀",
    "___^^^{{{}}}$",
)


def single_tuned(frequency_hz: np.ndarray, gain_db: float, q: float = 25.0, f0_hz: float = F0_HZ) -> np.ndarray:
    """Return S21 of a single-tuned stage, 1/(1 + jQ(f/f0 − f0/f))."""
    detuning = q * (frequency_hz / f0_hz - f0_hz / frequency_hz)
    return np.asarray(10 ** (gain_db / 20) / (1 + 1j * detuning))


def make_sweep(
    name: str,
    gain_db: float,
    *,
    start: float = 15e6,
    stop: float = 28e6,
    points: int = 401,
    full: bool = False,
    limit_db: float = 0.0,
) -> Sweep:
    frequency = np.linspace(start, stop, points)
    through = single_tuned(frequency, gain_db)
    if limit_db:
        through = through / (1 + (np.abs(through) / 10 ** ((gain_db - limit_db) / 20)) ** 3) ** (1 / 3)
    s = np.zeros((2, 2, points), complex)
    s[1, 0] = through
    s[0, 0] = 0.9 - 0.75 * through / 10 ** (gain_db / 20)
    if full:
        s[0, 1] = through if gain_db < 0 else 1e-3
        s[1, 1] = 0.85 - 0.8 * through / 10 ** (gain_db / 20)
    measured = ("S11", "S21", "S12", "S22") if full else ("S11", "S21")
    return Sweep(
        name=name,
        frequency_hz=frequency,
        s=s,
        measured=measured,
        sha256=hashlib.sha256(name.encode("utf-8")).hexdigest(),
    )


def make_path(
    source_dbm: float | None,
    inputs: Sequence[PadInLine],
    outputs: Sequence[PadInLine],
    gain_db: float,
    removed: Sequence[PadInLine] = (),
) -> SignalPath:
    drive = None if source_dbm is None else source_dbm - sum(p.loss_db for p in inputs)
    output = None if drive is None else drive + gain_db
    port2 = None if output is None else output - sum(p.loss_db for p in outputs)
    return SignalPath(
        F0_HZ, source_dbm, tuple(inputs), tuple(outputs), tuple(removed), (), drive, output, port2, -3.0, 10.0
    )


B30 = PadInLine("b30", 30.0, calibrated=True, tolerance_db=0.3)
A20 = PadInLine("a20", 20.0, calibrated=False, tolerance_db=0.3)
C10 = PadInLine("c10", 9.97, calibrated=True, measured=True)


def make_result(sweep: Sweep, path: SignalPath) -> SweepResult:
    taken = [sum(p.loss_db for p in side if not p.calibrated) for side in (path.input_pads, path.output_pads)]
    taken[0] -= sum(p.loss_db for p in path.input_removed)
    return SweepResult(sweep.name, sweep, sweep, path, *taken)


def figures_of(gain_db: float = 40.12, intervals: bool = False, q: float = 25.0) -> dict[str, Figure]:
    bandwidth = F0_HZ / q
    low, high = (F0_HZ * (np.sqrt(1 + 1 / (4 * q * q)) + sign / (2 * q)) for sign in (-1, 1))
    rows = [
        ("gain", gain_db, "dB", 0.21), ("peak_gain", gain_db + 0.01, "dB", 0.21), ("peak_frequency", F0_HZ, "Hz", 9e3),
        ("lower_edge", low, "Hz", 11e3), ("upper_edge", high, "Hz", 11e3), ("bandwidth", bandwidth, "Hz", 12e3),
        ("centre_frequency", F0_HZ, "Hz", 9e3), ("loaded_q", q, "", 0.31),
        ("group_delay", q / np.pi / F0_HZ, "s", 6e-9),
        ("phase", -3.4, "deg", 1.2), ("input_return_loss", 15.9, "dB", 0.9), ("output_return_loss", None, "dB", None),
        ("reverse_isolation", None, "dB", None), ("rejection at 16 MHz", 23.4, "dB", 0.4),
    ]  # fmt: skip
    figures = {}
    for key, value, unit, u in rows:
        interval = {}
        if intervals and value is not None and u is not None:
            interval = {
                "low": value - 1.96 * u,
                "high": value + 1.96 * u,
                "confidence": 0.95,
                "standard_uncertainty": u,
            }
        parameters = {"group_delay": {"aperture_hz": 130e3}, "rejection at 16 MHz": {"at_hz": 16e6}}.get(key, {})
        figures[key] = Figure(key.split(" ")[0], value, unit, parameters=parameters, **interval)
    return figures


TARGETS = (
    TargetResult("gain", "gain", "dB", 38.0, None, "met", 0.9996),
    TargetResult("peak_frequency", "peak_frequency", "Hz", 21.25e6, 21.55e6, "met", 0.992),
    TargetResult(
        "bandwidth", "bandwidth", "Hz", 600e3, 800e3, "missed", 0.0002, "raise the loaded Q, or widen the target"
    ),
    TargetResult(
        "rejection at 16 MHz",
        "rejection",
        "dB",
        23.0,
        None,
        "undecided",
        0.86,
        "sweep again with 10 dB more output pad",
    ),
    TargetResult(
        "output_return_loss",
        "output_return_loss",
        "dB",
        10.0,
        None,
        "undecided",
        None,
        "sweep with the device turned round",
    ),
)

FINDINGS = (
    Finding(
        "one-path", "note", "only S11 and S21 were measured", "turn the device round for S12 and S22", "stage2_low.s2p"
    ),
    Finding(
        "compressed-sweep",
        "caution",
        "gain at 21.4 MHz is 8.1 dB below the reference sweep",
        "take figures from the lower drive; add 20 dB input pad",
        "stage2_high.s2p",
    ),
    Finding(
        "receiver-near-limit",
        "fault",
        "the level at port 2 is −1.9 dBm, 1.1 dB above where port 2 compresses",
        "add 10 dB at the output and sweep again",
        "stage2_high.s2p",
    ),
)


def make_bench(device: DeviceResult) -> BenchResult:
    return BenchResult(
        "21.4 MHz IF strip, balloon telemetry receiver", "bench 2", "2026-11-28", None, "5f" * 32, "0.1.0",
        "2026-11-28T16:20:00+00:00", (device,),
    )  # fmt: skip


def compression_of(results: Sequence[SweepResult], gains: Sequence[float]) -> Compression:
    points = tuple(
        CompressionPoint(
            r.file,
            r.drive_dbm,
            None,
            g,
            gains[0] - g,
            0.4 * (gains[0] - g),
            gains[0] - g,
            gains[0] - g,
            F0_HZ,
            gains[0] - g > 1,
        )
        for r, g in zip(results, gains, strict=True)
    )
    return Compression(F0_HZ, F0_HZ, results[0].file, "lowest drive that noise allows", points)


def three_drives(intervals: bool = False, name: str = "second stage") -> DeviceResult:
    lines = (
        ("stage2_low.s2p", [B30, A20], 0.0),
        ("stage2_mid.s2p", [B30, PadInLine("a10", 10.0, calibrated=False)], 0.6),
        ("stage2_high.s2p", [B30], 8.1),
    )
    results = []
    for file, pads, drop in lines:
        sweep = make_sweep(file, 40.12, limit_db=-drop if drop else 0.0)
        if drop:
            sweep = make_sweep(file, 40.12, limit_db={0.6: -1.0, 8.1: 7.6}[drop])
        results.append(make_result(sweep, make_path(-8.0, pads, [C10], 40.12 - drop)))
    figures = figures_of(intervals=intervals)
    return DeviceResult(
        name, "amplifier", F0_HZ, True, (15e6, 28e6), "stage2_low.s2p", tuple(results), figures, TARGETS,
        compression_of(results, [40.12, 39.52, 32.02]), FINDINGS,
        Summary("missed", "Bandwidth is 856 kHz, above the 800 kHz allowed.",
                "Sweep stage2_low again with 10 dB more output pad to settle rejection at 16 MHz."),
    )  # fmt: skip


def one_path() -> DeviceResult:
    result = make_result(make_sweep("stage1.s2p", 18.3), make_path(-8.0, [B30], [], 18.3))
    figures = figures_of(18.3)
    figures["upper_edge"] = replace(figures["upper_edge"], value=28e6, bound="at least")
    figures["bandwidth"] = replace(figures["bandwidth"], value=1.2e6, bound="at least")
    targets = (
        TargetResult("gain", "gain", "dB", 15.0, 22.0, "met"),
        TargetResult("bandwidth", "bandwidth", "Hz", 1e6, None, "met"),
    )
    drive = Finding(
        "drive-unproven",
        "caution",
        "one drive alone does not show that the stage was not compressed",
        "sweep again with 10 dB more input pad",
        "stage1.s2p",
    )
    return DeviceResult(
        "first stage", "amplifier", F0_HZ, True, None, "stage1.s2p", (result,), figures, targets, None,
        (drive, FINDINGS[0]),
        Summary("met", "Both targets are met by the measured values.",
                "Sweep again with 10 dB more input pad to prove the drive."),
    )  # fmt: skip


def full_filter() -> DeviceResult:
    sweep = make_sweep("filter.s2p", -2.1, full=True, start=1e6, stop=60e6, points=801)
    result = make_result(sweep, make_path(-8.0, [], [], -2.1))
    figures = {k: f for k, f in figures_of(-2.1).items() if k != "gain"}
    figures["insertion_loss"] = Figure("insertion_loss", 2.1, "dB")
    figures["output_return_loss"] = replace(figures["output_return_loss"], value=23.1)
    figures["reverse_isolation"] = replace(figures["reverse_isolation"], value=2.1)
    targets = (
        TargetResult("insertion_loss", "insertion_loss", "dB", None, 3.0, "met"),
        TargetResult("bandwidth", "bandwidth", "Hz", 700e3, 1.1e6, "met"),
        TargetResult("rejection at 16 MHz", "rejection", "dB", 20.0, None, "met"),
        TargetResult("input_return_loss", "input_return_loss", "dB", 14.0, None, "met"),
    )
    return DeviceResult(
        "roofing filter", "filter", F0_HZ, True, (20e6, 23e6), "filter.s2p", (result,), figures, targets, None, (),
        Summary("met", "All four targets are met.", "Nothing to sweep again; file the page."),
    )  # fmt: skip


def phase_network() -> DeviceResult:
    """A network that turns by 90° at its design frequency, given as a phase that is whole circles away."""
    sweep = make_sweep("network.s2p", -8.6)
    sweep = replace(sweep, s=sweep.s * 1j)
    figures = figures_of(-8.6, intervals=True)
    phase = float(np.degrees(np.angle(np.interp(F0_HZ, sweep.frequency_hz, sweep.s21))))
    figures["phase"] = replace(figures["phase"], value=phase)
    over = {"over_hz": (21.3e6, 21.5e6)}
    figures["phase_linearity over 21.3-21.5 MHz"] = Figure("phase_linearity", 0.4, "deg", parameters=over)
    targets = (
        TargetResult("phase", "phase", "deg", 440.0, 460.0, "met", 0.99),
        TargetResult("phase_linearity over 21.3-21.5 MHz", "phase_linearity", "deg", None, 2.0, "met", 0.99),
    )
    result = make_result(sweep, make_path(-8.0, [], [], -8.6))
    return DeviceResult(
        "quadrature network", "network", F0_HZ, True, None, "network.s2p", (result,), figures, targets, None, (),
        Summary("met", "Both targets are met.", "Nothing: file this page."),
    )  # fmt: skip


def nothing_known() -> DeviceResult:
    sweep = make_sweep("quick.s2p", 12.0)
    sweep = replace(sweep, measured=("S21",), sha256="")
    path = replace(make_path(None, [A20], [], 12.0), port2_compression_dbm=None, port2_damage_dbm=None)
    figures = {k: Figure(f.id, None, f.unit) for k, f in figures_of().items()}
    return DeviceResult(
        "quick", "network", F0_HZ, False, None, "quick.s2p", (make_result(sweep, path),), figures, (), None,
        (Finding("source-level-unknown", "caution", "no source level was given, so no drive is known",
                 "give --source in dBm"),),
        Summary("none", "No targets were set, and no figure could be worked out.",
                "Give the source level and a design frequency."),
    )  # fmt: skip


def many_findings() -> DeviceResult:
    device = three_drives(intervals=True)
    more = tuple(replace(FINDINGS[k % 3], message=f"{FINDINGS[k % 3].message} ({k})") for k in range(25))
    return replace(device, findings=more)


def twelve_targets() -> DeviceResult:
    device = three_drives(intervals=True)
    figures = dict(device.figures)
    targets = list(TARGETS)
    for at in (15.5e6, 16.5e6, 17e6, 18e6, 26e6, 27e6):
        figure = Figure("rejection", 20.0, "dB", parameters={"at_hz": at})
        figures[figure.key] = figure
        targets.append(TargetResult(figure.key, "rejection", "dB", 15.0, None, "met"))
    figure = Figure("phase_linearity", 2.34, "deg", parameters={"over_hz": (21.05e6, 21.75e6)})
    figures[figure.key] = figure
    targets.append(TargetResult(figure.key, "phase_linearity", "deg", None, 3.0, "met"))
    return replace(device, figures=figures, targets=tuple(targets))


def ten_sweeps(name_length: int = 14) -> DeviceResult:
    device = three_drives(intervals=True)
    results, gains = [], []
    for k in range(10):
        file = f"stage2_{k:02d}_".ljust(name_length - 4, "x") + ".s2p"
        drop = max(0.0, k - 5) * 1.3
        gains.append(40.12 - drop)
        sweep = make_sweep(file, 40.12 - 0.02 * k, limit_db=0.7 * drop + 3 if drop else 0.0)
        pads = [B30, PadInLine(f"a{20 - 2 * k}", 20.0 - 2 * k, calibrated=False)]
        results.append(make_result(sweep, make_path(-8.0, pads, [C10], gains[-1])))
    return replace(
        device, sweeps=tuple(results), reference_sweep=results[0].file, compression=compression_of(results, gains)
    )


def crowded() -> DeviceResult:
    ten, twelve = ten_sweeps(60), twelve_targets()
    return replace(ten, name=NAME_60, targets=twelve.targets, figures=twelve.figures, findings=many_findings().findings)


def six_pads_a_side() -> DeviceResult:
    names = ("b30", NAME_40, "a20", "long_pad_name", "e1", "f1")
    inputs = [PadInLine(n, 3.0 + k, calibrated=k < 2, tolerance_db=0.3) for k, n in enumerate(names)]
    outputs = [PadInLine("o" + n, 2.0 + 1.37 * k, calibrated=k < 1, measured=k == 2) for k, n in enumerate(names)]
    device = three_drives()
    removed = (PadInLine("was6", 6.0, calibrated=True),)
    result = make_result(device.sweeps[0].sweep, make_path(-8.0, inputs, outputs, 40.12, removed))
    return replace(device, sweeps=(result, *device.sweeps[1:]))


def named(name: str) -> Callable[[], DeviceResult]:
    """Return a case whose device, sweep files and pads all carry `name`."""

    def build() -> DeviceResult:
        device = three_drives(name=name)
        first = device.sweeps[0]
        path = replace(first.path, input_pads=(replace(B30, name=name), A20))
        renamed = replace(first, file=f"{name}.s2p", path=path)
        device = replace(device, sweeps=(renamed, *device.sweeps[1:]), reference_sweep=renamed.file)
        finding = Finding(
            "pad-value-suspect", "caution", f"pad {name} may be wrong", f"measure {name} alone", renamed.file
        )
        return replace(device, findings=(finding, *device.findings), compression=None)

    return build


def rapp_drop_db(below_knee_db: np.ndarray) -> np.ndarray:
    """Return the drop in dB of a Rapp limiter with p = 2, at drives in dB from its knee: 1 dB at −1.165 dB."""
    return np.asarray(5.0 * np.log10(1.0 + 10.0 ** (4.0 * np.asarray(below_knee_db) / 20.0)))


def within(value: float | None, half: float) -> Estimate:
    """Return an estimate of `value` give or take `half`."""
    return Estimate(value, value - half, value + half) if value is not None else Estimate(None)


def study_of(
    device: DeviceResult,
    p1db: Estimate,
    safe: Estimate,
    *,
    mapped: bool = False,
    spoiled: Sequence[str] = (),
    known: bool = True,
) -> DriveStudy:
    """Return a study whose curve is that of a Rapp limiter with its 1 dB point at `p1db`, 20 dB above all if None."""
    compression = device.compression
    points = compression.points if compression else ()
    drives = np.array([0.0 if p.drive_dbm is None else p.drive_dbm for p in points])
    gains = np.array([p.gain_db for p in points])
    knee = 1.165 + (max(drives) + 20.0 if p1db.value is None or p1db.bound else p1db.value)
    along = np.linspace(min(drives) - 3.0, max(drives) + 5.0, 61)
    middle = gains[0] - rapp_drop_db(along - knee)
    curve = np.array([middle - 0.2 - 0.2 * (gains[0] - middle), middle, middle + 0.15])
    changes = 0.4 * (gains[0] - gains)
    marks = tuple(
        DrivePoint(
            p.file,
            float(drives[k]),
            within(p.gain_db, 0.4) if known else Estimate(p.gain_db),
            within(float(gains[0] - gains[k]), 0.1) if known else Estimate(None),
            float(gains[0]),
            (within(float(changes[k]), 1.1) if k else Estimate(0.0, 0.0, 0.0)) if known else Estimate(None),
            float((changes[k] - changes[k - 1]) / (drives[k] - drives[k - 1])) if k and known else None,
            p.file in spoiled,
        )
        for k, p in enumerate(points)
    )
    output = Estimate(None) if p1db.value is None else within(p1db.value + float(gains[0]) - 1.0, 0.5)
    basis: Basis = "none" if p1db.value is None else "bound" if p1db.bound else "fitted"
    onset = Onset(
        F0_HZ, 0.95, len(points), basis, p1db, output, safe,
        within(float(gains[0]), 0.3) if known else Estimate(None),
        ReferenceProof(points[0].file, known, within(0.02, 0.01) if known else Estimate(None)),
        marks, along, curve,
    )  # fmt: skip
    frequency = np.linspace(18e6, 25e6, 15)
    level = 20 * np.log10(np.abs(single_tuned(frequency, 0.0)))
    drop = rapp_drop_db(drives[:, np.newaxis] + level - knee)
    study_map = CompressionMap(frequency, drives, tuple(p.file for p in points), drop - drop[0]) if mapped else None
    return DriveStudy(
        cause="output-limited" if known else None,
        confidence=0.98,
        probabilities={},
        pads=(),
        odd_sweep=None,
        onset=onset,
        map=study_map,
        next_sweeps=(),
    )


FITTED_P1DB = Estimate(-46.9, -47.6, -46.1)


def drives_with_study(
    full: bool = False, spoiled: Sequence[str] = (), findings: tuple[Finding, ...] = FINDINGS
) -> DeviceResult:
    device = three_drives(intervals=True)
    if full:
        low = replace(device.sweeps[0], sweep=make_sweep("stage2_low.s2p", 40.12, full=True))
        figures = {**device.figures, "output_return_loss": Figure("output_return_loss", 12.2, "dB", 11.4, 13.0)}
        device = replace(device, sweeps=(low, *device.sweeps[1:]), figures=figures)
    else:
        figures = {**device.figures, "input_return_loss": Figure("input_return_loss", None, "dB")}
        device = replace(device, figures=figures)
    study = study_of(device, FITTED_P1DB, Estimate(-54.1, -55.4), mapped=True, spoiled=spoiled)
    return replace(device, drive=study, findings=findings)


def drives_with_one_that_did_not_repeat() -> DeviceResult:
    device = drives_with_study(spoiled=("stage2_high.s2p",))
    assert device.drive is not None
    aside = {"stage2_high.s2p": "did not repeat"}
    return replace(device, drive=replace(device.drive, cause="reference-not-repeating", set_aside=aside))


def drives_through_a_suspect_pad() -> DeviceResult:
    """Return drives of which the lowest was read through a pad that takes 1.5 dB more than the sheet says."""
    device = two_drives_with_bound()
    assert device.drive is not None
    low, *rest = device.drive.onset.points
    assert low.gain_db.value is not None
    low = replace(low, gain_db=within(low.gain_db.value - 1.5, 0.4))
    # The fit starts from the lowest drive and leaves what the pad loses open.
    curve = device.drive.onset.curve_gain_db - 1.5
    onset = replace(device.drive.onset, points=(low, *rest), curve_gain_db=curve)
    aside = {low.file: "pad a20 suspect"}
    return replace(device, drive=replace(device.drive, cause="pad-value-suspect", onset=onset, set_aside=aside))


def drives_with_unclear_cause() -> DeviceResult:
    device = drives_with_study()
    assert device.drive is not None
    return replace(device, drive=replace(device.drive, cause="cause-unclear"))


def two_drives_with_bound(bound: Bound = "at least") -> DeviceResult:
    device = three_drives(intervals=True)
    gains = [40.12, 40.02] if bound == "at least" else [33.0, 28.0]
    compression = compression_of(device.sweeps[:2], gains)
    device = replace(device, sweeps=device.sweeps[:2], compression=compression)
    value = -46.8 if bound == "at least" else -60.3
    low, high = (value, None) if bound == "at least" else (None, value)
    safe = Estimate(-61.5, -61.5, None, "at least") if bound == "at least" else Estimate(None)
    return replace(device, drive=study_of(device, Estimate(value, low, high, bound), safe))


def one_drive_with_study() -> DeviceResult:
    device = one_path()
    compression = compression_of(device.sweeps, [18.3])
    device = replace(device, compression=compression)
    return replace(device, drive=study_of(device, Estimate(None), Estimate(None)))


def study_without_values() -> DeviceResult:
    """Return drives of which nothing is known but the gain, against a source whose level is not known."""
    device = three_drives()
    sweeps = tuple(replace(s, path=replace(s.path, source_dbm=None, drive_dbm=None)) for s in device.sweeps)
    study = study_of(device, Estimate(None), Estimate(None), known=False)
    points = tuple(replace(p, drive_dbm=None) for p in device.compression.points) if device.compression else ()
    compression = replace(device.compression, points=points) if device.compression else None
    return replace(device, sweeps=sweeps, compression=compression, drive=study)


def ten_drives_with_study() -> DeviceResult:
    device = crowded()
    study = study_of(device, Estimate(-44.9, -45.2, -44.6), Estimate(-51.0, -52.0), mapped=True)
    return replace(device, drive=study)


CASES: dict[str, Callable[[], DeviceResult]] = {
    "three_drives": three_drives,
    "three_drives_intervals": lambda: three_drives(intervals=True),
    "one_path": one_path,
    "full_filter": full_filter,
    "phase_network": phase_network,
    "nothing_known": nothing_known,
    "many_findings": many_findings,
    "twelve_targets": twelve_targets,
    "ten_sweeps": ten_sweeps,
    "crowded": crowded,
    "six_pads_a_side": six_pads_a_side,
    "drives_with_study": drives_with_study,
    "drives_with_study_and_match": lambda: drives_with_study(full=True),
    "drives_with_study_tall": lambda: drives_with_study(findings=()),
    "drives_with_one_that_did_not_repeat": drives_with_one_that_did_not_repeat,
    "drives_through_a_suspect_pad": drives_through_a_suspect_pad,
    "drives_with_unclear_cause": drives_with_unclear_cause,
    "drives_with_one_spoiled": lambda: drives_with_study(spoiled=("stage2_high.s2p",)),
    "two_drives_with_bound": two_drives_with_bound,
    "two_drives_with_upper_bound": lambda: two_drives_with_bound("at most"),
    "one_drive_with_study": one_drive_with_study,
    "study_without_values": study_without_values,
    "ten_drives_with_study": ten_drives_with_study,
    "name_40": named(NAME_40),
    "name_60": named(NAME_60),
    **{f"evil_{k}": named(name) for k, name in enumerate(EVIL_NAMES)},
}
