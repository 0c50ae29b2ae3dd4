"""A sweep and the line it went through in; the sweep at the device's own ports out, and the levels along the line.

The analyzer takes out what was in line at calibration, the chain A on the input side and B on the output side. With
the chains A' and B' in line at the sweep it shows M = A⁻¹ A' D B' B⁻¹ (chain matrices), so the device is
D = P⁻¹ M Q⁻¹ with P = A⁻¹ A' and Q = B' B⁻¹: pads added since calibration are taken out, pads taken away since
are put back. For matched pads this is one complex factor a side. Chain (T) parameters: D. M. Pozar, Microwave
Engineering, 4th ed., sec. 4.4; D. A. Frickey, IEEE Trans. MTT 42(2), 1994, 205-211.

A measured pad has its port 1 towards port 1 of the analyzer, wherever it stands.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import reduce
from typing import Final

import numpy as np

from benchtool.errors import SweepFileError
from benchtool.model import ComplexArray, Finding, FloatArray, PadInLine, SignalPath, Sweep
from benchtool.noise import rotation, trend_delay
from benchtool.sheet import BenchSheet, Pad, SweepEntry
from benchtool.touchstone import read_sweep
from benchtool.units import format_si, from_db, to_db

__all__ = [
    "ChangeOfLine",
    "PadBank",
    "cascade",
    "change_of_line",
    "de_embed",
    "invert",
    "levels",
    "matched_pad",
    "output_reflection",
    "signal_path",
]

_COVERAGE_SLACK: Final = 1e-9


def cascade(first: ComplexArray, second: ComplexArray) -> ComplexArray:
    """Return the scattering parameters of two two-ports in cascade, (..., 2, 2, n), same reference impedance.

    Source: closed form of the T-matrix product, e.g. S21 = S21a S21b / (1 - S22a S11b) (Pozar, Prob. 4.12).
    """
    loop = 1.0 - first[..., 1, 1, :] * second[..., 0, 0, :]
    s11 = first[..., 0, 0, :] + first[..., 0, 1, :] * first[..., 1, 0, :] * second[..., 0, 0, :] / loop
    s22 = second[..., 1, 1, :] + second[..., 0, 1, :] * second[..., 1, 0, :] * first[..., 1, 1, :] / loop
    s21 = first[..., 1, 0, :] * second[..., 1, 0, :] / loop
    s12 = first[..., 0, 1, :] * second[..., 0, 1, :] / loop
    return np.stack([np.stack([s11, s12], axis=-2), np.stack([s21, s22], axis=-2)], axis=-3)


def invert(s: ComplexArray) -> ComplexArray:
    """Return the two-port that undoes this one in a cascade, (..., 2, 2, n); S12 and S21 must not be zero.

    Source: the inverse of the T-matrix, written out in S.
    """
    s11, s12, s21, s22 = s[..., 0, 0, :], s[..., 0, 1, :], s[..., 1, 0, :], s[..., 1, 1, :]
    determinant = s11 * s22 - s12 * s21
    rows = [[s11, -s21], [-s12, s22]]
    return np.stack([np.stack(row, axis=-2) for row in rows], axis=-3) / determinant[..., None, None, :]


def matched_pad(frequency_hz: FloatArray, loss_db: float | FloatArray, delay_s: float = 0.0) -> ComplexArray:
    """Return a matched, reciprocal pad, (2, 2, n)."""
    through = from_db(-np.asarray(loss_db, np.float64)) * np.conj(rotation(frequency_hz, delay_s))
    nothing = np.zeros_like(through)
    return np.array([[nothing, through], [through, nothing]])


@dataclass(frozen=True, eq=False)
class PadBank:
    """The pads of a sheet, with the sweeps of the measured ones read."""

    pads: Mapping[str, Pad]
    sweeps: Mapping[str, Sweep]

    @classmethod
    def of(cls, sheet: BenchSheet) -> PadBank:
        """Return the pads of a sheet; reads the files of measured pads.

        Raises
        ------
        SweepFileError : a pad's file cannot be read, or has not all four parameters of a pad.
        """
        sweeps = {}
        for name, pad in sheet.pads.items():
            if pad.file is None:
                continue
            sweep = read_sweep(pad.file)
            if not sweep.full:
                shown = ", ".join(sweep.measured)
                raise SweepFileError(
                    pad.file,
                    f"pad {name} has only {shown} measured",
                    "measure the pad in both directions, or give its loss_db in the sheet instead",
                )
            sweeps[name] = sweep
        return cls(sheet.pads, sweeps)

    def network(self, name: str, frequency_hz: FloatArray) -> ComplexArray:
        """Return the scattering parameters of a pad at the frequencies of a sweep, (2, 2, n)."""
        pad = self.pads[name]
        sweep = self.sweeps.get(name)
        if sweep is None:
            loss = np.array([pad.loss_at(float(f)) for f in frequency_hz]) if pad.has_table else pad.loss_at(0.0)
            return matched_pad(frequency_hz, loss, pad.delay_s)
        return _resample(sweep, frequency_hz)

    def loss_db(self, name: str, at_hz: float) -> float:
        """Return the loss of a pad at one frequency."""
        sweep = self.sweeps.get(name)
        if sweep is None:
            return self.pads[name].loss_at(at_hz)
        return -float(to_db(_resample(sweep, np.array([at_hz]))[1, 0])[0])

    def measured(self, name: str) -> bool:
        """Whether the pad is given as a sweep."""
        return name in self.sweeps


def _resample(sweep: Sweep, frequency_hz: FloatArray) -> ComplexArray:
    """Return a pad's sweep at other frequencies, its delay taken out while interpolating in a straight line."""
    own = sweep.frequency_hz
    slack = _COVERAGE_SLACK * own[-1]
    if frequency_hz[0] < own[0] - slack or frequency_hz[-1] > own[-1] + slack:
        raise SweepFileError(
            sweep.path or sweep.name,
            f"the pad was measured from {format_si(own[0], 'Hz')} to {format_si(own[-1], 'Hz')}, but is needed "
            f"from {format_si(float(frequency_hz[0]), 'Hz')} to {format_si(float(frequency_hz[-1]), 'Hz')}",
            "measure the pad over the whole span of the sweeps it is in",
        )
    delay = trend_delay(own, sweep.s21)
    result = np.empty((2, 2, frequency_hz.size), np.complex128)
    for i in range(2):
        for j in range(2):
            trace = sweep.s[i, j] * rotation(own, delay)
            straight = np.interp(frequency_hz, own, trace.real) + 1j * np.interp(frequency_hz, own, trace.imag)
            result[i, j] = straight * np.conj(rotation(frequency_hz, delay))
    return result


@dataclass(frozen=True)
class ChangeOfLine:
    """What is different between the line at a sweep and the line at calibration, on one side, analyzer outwards."""

    added: tuple[str, ...]
    removed: tuple[str, ...]
    now: tuple[str, ...]
    calibration: tuple[str, ...]
    """`now` and `calibration` less the pads they share at the analyzer's end, in line order."""

    def weights(self) -> dict[str, int]:
        """Return how often each pad's loss counts in the correction: +1 added, -1 taken away."""
        return {**dict.fromkeys(self.added, 1), **dict.fromkeys(self.removed, -1)}


def change_of_line(now: Sequence[str], calibration: Sequence[str]) -> ChangeOfLine:
    """Return what was added and removed since calibration on one side; pads listed from the analyzer outwards."""
    shared = 0
    while shared < min(len(now), len(calibration)) and now[shared] == calibration[shared]:
        shared += 1
    return ChangeOfLine(
        tuple(name for name in now if name not in calibration),
        tuple(name for name in calibration if name not in now),
        tuple(now[shared:]),
        tuple(calibration[shared:]),
    )


def _chain(names: Sequence[str], network: Callable[[str], ComplexArray], count: int) -> ComplexArray:
    nothing = np.zeros(count)
    through = np.array([[nothing, nothing + 1.0], [nothing + 1.0, nothing]], np.complex128)
    return reduce(cascade, (network(name) for name in names), through)


def de_embed(
    sweep: Sweep, entry: SweepEntry, sheet: BenchSheet, bank: PadBank, at_hz: float
) -> tuple[Sweep, tuple[Finding, ...], float, float]:
    """Return the sweep at the device's own ports, findings, and the corrections in dB on input and output side.

    Corrections are those at `at_hz`: loss in line now less loss in line at calibration.
    """
    f = sweep.frequency_hz
    sides = (
        change_of_line(entry.input_pads, sheet.calibration.input_pads),
        change_of_line(entry.output_pads, sheet.calibration.output_pads),
    )
    corrections = [sum(sign * bank.loss_db(name, at_hz) for name, sign in side.weights().items()) for side in sides]
    changed = [name for side in sides for name in (*side.now, *side.calibration)]
    if not changed:
        return sweep, (), 0.0, 0.0

    def network(name: str) -> ComplexArray:
        return bank.network(name, f)

    # Both chains run from port 1 to port 2, so the output side's list, which runs from port 2, is turned round.
    before = cascade(invert(_chain(sides[0].calibration, network, f.size)), _chain(sides[0].now, network, f.size))
    after = cascade(
        _chain(sides[1].now[::-1], network, f.size), invert(_chain(sides[1].calibration[::-1], network, f.size))
    )
    findings: tuple[Finding, ...] = ()
    if sweep.full:
        s = cascade(cascade(invert(before), sweep.s), invert(after))
    else:
        s = np.array(sweep.s)
        findings = _remove_one_path(sweep, before, after, s)
    return replace(sweep, s=s), findings, corrections[0], corrections[1]


def _remove_one_path(sweep: Sweep, before: ComplexArray, after: ComplexArray, s: ComplexArray) -> tuple[Finding, ...]:
    """Fill `s` with S11 and S21 at the device from a one-path sweep; exact but for the device's S22 (see below).

    With P in front of the device and port 2 matched, M11 = P11 + P12 P21 Γ/(1 - P22 Γ) and
    M21 = P21 S21/(1 - P22 Γ). Behind the device Q leaves M21 = S21 Q21/(1 - S22 Q11): S22 was not measured and is
    taken as zero, so a reflecting Q leaves a doubt, reported when it passes 0.05 dB with |S22| = 1.
    """
    has_s11, has_s21 = "S11" in sweep.measured, "S21" in sweep.measured
    p11, p12, p21, p22 = before[0, 0], before[0, 1], before[1, 0], before[1, 1]
    findings: list[Finding] = []
    gamma: ComplexArray = np.zeros_like(p11)
    if has_s11:
        above = sweep.s11 - p11
        gamma = above / (p12 * p21 + p22 * above)
        s[0, 0] = gamma
    elif np.any(p22 != 0):
        findings.append(_unknown_match(sweep.name, "S11", "input", float(np.max(np.abs(p22)))))
    if has_s21:
        s[1, 0] = sweep.s21 * (1.0 - p22 * gamma) / (p21 * after[1, 0])
    if "S22" in sweep.measured:
        s[1, 1] = sweep.s22 / (after[0, 1] * after[1, 0])
    if "S12" in sweep.measured:
        s[0, 1] = sweep.s12 / (p12 * after[0, 1])
    worst = float(np.max(np.abs(after[0, 0])))
    if worst > 1.0 - from_db(-0.05):
        findings.append(_unknown_match(sweep.name, "S22", "output", worst))
    return tuple(findings)


def _unknown_match(sweep: str, parameter: str, side: str, reflection: float) -> Finding:
    worst_db = -to_db(1.0 - min(reflection, 0.99))
    return Finding(
        "pad-removal-inexact",
        "caution",
        f"{sweep}: a measured pad on the {side} side reflects up to {reflection:.3f}, and {parameter} of the "
        f"device was not measured, so taking the pad out may be wrong by up to {worst_db:.2f} dB in gain",
        "sweep the device in both directions, or use a better matched pad there",
        sweep,
    )


def output_reflection(entry: SweepEntry, sheet: BenchSheet, bank: PadBank, frequency_hz: FloatArray) -> ComplexArray:
    """Return what the device sees of the change of line behind it, (n,): zero where the pads there are matched."""
    side = change_of_line(entry.output_pads, sheet.calibration.output_pads)

    def network(name: str) -> ComplexArray:
        return bank.network(name, frequency_hz)

    now = _chain(side.now[::-1], network, frequency_hz.size)
    before = _chain(side.calibration[::-1], network, frequency_hz.size)
    seen: ComplexArray = cascade(now, invert(before))[0, 0]
    return seen


def levels(
    source_dbm: float | None,
    input_pads: Sequence[PadInLine],
    gain_db: float | None,
    output_pads: Sequence[PadInLine],
) -> tuple[float | None, float | None, float | None]:
    """Return the drive at the device, the level at its output, and the level at port 2, in dBm; None: not known."""
    if source_dbm is None:
        return None, None, None
    drive = source_dbm - sum(pad.loss_db for pad in input_pads)
    if gain_db is None or not np.isfinite(gain_db):
        return drive, None, None
    output = drive + gain_db
    return drive, output, output - sum(pad.loss_db for pad in output_pads)


def signal_path(entry: SweepEntry, sheet: BenchSheet, bank: PadBank, at_hz: float, gain_db: float | None) -> SignalPath:
    """Return the line of a sweep with the level at each joint at one frequency; `gain_db` is the device's there."""

    def pads(names: Sequence[str], calibration: Sequence[str]) -> tuple[PadInLine, ...]:
        return tuple(
            PadInLine(
                name,
                bank.loss_db(name, at_hz),
                name in calibration,
                bank.measured(name),
                bank.pads[name].tolerance_db,
            )
            for name in names
        )

    cal = sheet.calibration
    inputs, outputs = pads(entry.input_pads, cal.input_pads), pads(entry.output_pads, cal.output_pads)
    source = entry.source_at(at_hz)
    drive, output, port2 = levels(source, inputs, gain_db, outputs)
    return SignalPath(
        at_hz,
        source,
        inputs,
        outputs,
        pads([n for n in cal.input_pads if n not in entry.input_pads], cal.input_pads),
        pads([n for n in cal.output_pads if n not in entry.output_pads], cal.output_pads),
        drive,
        output,
        port2,
        sheet.analyzer.port2_compression_dbm,
        sheet.analyzer.port2_damage_dbm,
    )
