"""The bench sheet of a session in; the sweeps that session would have left, and the true figures, out.

    python sample_data/make_sweeps.py [SESSION] [--out DIR]

The sheet says which device was swept, into which file and through which pads. The devices come from `circuits.py`,
what the analyzer makes of them from `analyzer.py`, their true figures from `truth.py`, and how each file is written,
with all that the sheet does not know, from `sessions.py`. Everything random comes from one seed and the name of what
is drawn: the same files come out each time, and one more file changes no other.
"""

from __future__ import annotations

import argparse
import json
import tomllib
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Final

import numpy as np
from analyzer import Pad, Reading, read_device
from circuits import CIRCUITS, DESIGN_HZ, ComplexArray, FloatArray
from numpy.random import PCG64, Generator
from sessions import SESSIONS, Pairs, Recording, ReversePass, Session
from truth import true_figures

__all__ = ["SESSIONS", "draw_pads", "draw_source_dbm", "line_of", "main", "make"]

SEED: Final = 2188
SIDES: Final = ("input_pads", "output_pads")

HERTZ: Final = {"Hz": (1.0, 0), "kHz": (1e3, 3), "MHz": (1e6, 6), "GHz": (1e9, 9)}
"""For each unit: how many Hz it has, and how many decimals hold a whole number of Hz."""


PAD_RECORDING: Final = Recording((10.0, 40.0), "# MHz S DB R 50", "MHz", "DB", "measured")

# The labels of pads that were measured instead of trusted.
MEASURED_PAD_LABELS_DB: Final = {"m6": 6.0}
MEASURED_PAD_NOISE: Final = 2e-5
SOURCE_LIMITS_DB: Final = 0.2
LOSS_LIMITS_DB: Final = 0.3
DELAY_S: Final = 95e-12
DELAY_LIMITS_S: Final = 4e-12
RETURN_LOSS_DB: Final = (29.0, 36.0)


def _generator(what: str) -> Generator:
    """Return the random numbers of one file or one pad."""
    return Generator(PCG64([SEED, *what.encode("utf-8")]))


def draw_source_dbm(sheet: dict[str, Any]) -> float:
    """Return what the source gives, which is near what the sheet says."""
    return float(sheet["analyzer"]["source_dbm"] + _generator("source").uniform(-SOURCE_LIMITS_DB, SOURCE_LIMITS_DB))


def draw_pads(sheet: dict[str, Any], off_label_db: Mapping[str, float] | None = None) -> dict[str, Pad]:
    """Return the pads of the session as they are, by name; `off_label_db` is what a pad loses beyond its label."""
    labels = {name: entry.get("loss_db", MEASURED_PAD_LABELS_DB.get(name)) for name, entry in sheet["pads"].items()}
    off = off_label_db or {}
    return {name: _draw_pad(label + off.get(name, 0.0), _generator(f"pad {name}")) for name, label in labels.items()}


def _draw_pad(label_db: float, rng: Generator) -> Pad:
    """Return a pad that keeps what this label promises, no more."""
    loss_db = label_db + rng.uniform(-LOSS_LIMITS_DB, LOSS_LIMITS_DB)
    delay_s = DELAY_S + rng.uniform(-DELAY_LIMITS_S, DELAY_LIMITS_S)
    sizes = 10.0 ** (-rng.uniform(*RETURN_LOSS_DB, size=2) / 20.0)
    first, second = sizes * np.exp(2j * np.pi * rng.random(2))
    return Pad(float(loss_db), float(delay_s), (complex(first), complex(second)))


def _pair(value: complex, pairs: Pairs) -> tuple[str, str]:
    """Return one parameter as its two columns."""
    if pairs == "RI":
        return f"{value.real:.8e}", f"{value.imag:.8e}"
    angle = f"{np.degrees(np.angle(value)):.4f}"
    if pairs == "MA":
        return f"{abs(value):.8f}", angle
    return f"{20.0 * np.log10(abs(value)):.5f}", angle


def _as_written(s: ComplexArray, reverse_pass: ReversePass) -> ComplexArray:
    """Return S with what an analyzer that sweeps one way only puts into the columns it has not measured."""
    written = s.copy()
    if reverse_pass == "zeros":
        written[0, 1] = written[1, 1] = 0.0
    elif reverse_pass == "copies":
        written[0, 1], written[1, 1] = s[1, 0], s[0, 0]
    return written


def touchstone_text(title: str, frequency_hz: FloatArray, s: ComplexArray, recording: Recording) -> str:
    """Return a two-port Touchstone 1.x file; its lines end as the recording says."""
    hertz, decimals = HERTZ[recording.unit]
    start, stop = recording.span_mhz
    passes = "forward and reverse passes" if recording.reverse_pass == "measured" else "forward pass only"
    lines = [
        f"! {title}",
        f"! {frequency_hz.size} points, {start:g} to {stop:g} MHz, {passes}",
        "! invented sample data: no instrument was used",
        recording.option_line,
    ]
    written = _as_written(s, recording.reverse_pass)
    for i, f in enumerate(frequency_hz):
        columns = [f"{f / hertz:.{decimals}f}"]
        for row, column in ((0, 0), (1, 0), (0, 1), (1, 1)):
            columns += _pair(written[row, column, i], recording.pairs)
        lines.append(recording.separator.join(columns))
    return recording.newline.join([*lines, ""])


def _grid(recording: Recording, points: int) -> FloatArray:
    """Return the frequencies of a recording, whole numbers of Hz."""
    start, stop = (round(mhz * 1e6) for mhz in recording.span_mhz)
    step, rest = divmod(stop - start, points - 1)
    if rest:
        raise ValueError(f"{points} points do not divide the span {recording.span_mhz} MHz into whole Hz")
    return np.asarray(start + step * np.arange(points), dtype=np.float64)


def _added(now: Sequence[str], calibrated: Sequence[str]) -> list[str]:
    """Return the pads in line that were not there at calibration; the others still stand next to the port."""
    if list(now[: len(calibrated)]) != list(calibrated):
        raise ValueError(f"the line {list(now)} does not begin with the calibrated pads {list(calibrated)}")
    return list(now[len(calibrated) :])


def _write(path: Path, text: str) -> None:
    """Write text with the line ends it has."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(text.encode("utf-8"))


def line_of(
    entry: dict[str, Any], sheet: dict[str, Any], pads: dict[str, Pad]
) -> tuple[tuple[list[Pad], list[Pad]], tuple[list[Pad], list[Pad]]]:
    """Return the pads of a sweep inside the calibration and outside it, each (input side, output side)."""
    at_calibration = [sheet["calibration"][side] for side in SIDES]
    now = [entry.get(side, calibrated) for side, calibrated in zip(SIDES, at_calibration, strict=True)]
    added = [_added(line, calibrated) for line, calibrated in zip(now, at_calibration, strict=True)]
    inside, outside = ([[pads[name] for name in side] for side in both] for both in (at_calibration, added))
    return (inside[0], inside[1]), (outside[0], outside[1])


def make(out: Path, session: Session = SESSIONS["telemetry"]) -> None:
    """Write sheet, sweeps, pad files and true figures of a session into the folder `out`."""
    sheet_text = (session.home / "bench.toml").read_text(encoding="utf-8")
    sheet: dict[str, Any] = tomllib.loads(sheet_text)
    source_dbm, pads = draw_source_dbm(sheet), draw_pads(sheet, session.off_label_db)
    truth: dict[str, Any] = {
        "format": "sample-truth/1",
        "seed": SEED,
        "source_dbm": round(source_dbm, 6),
        "pads": {n: {"loss_db": round(p.loss_db, 6), "delay_s": float(f"{p.delay_s:.6e}")} for n, p in pads.items()},
        "devices": {},
    }
    if session.receiver is not None:
        truth["receiver"] = {"p1db_dbm": session.receiver.p1db_dbm}
    for device in sheet["device"]:
        name = device["name"]
        figures = true_figures(CIRCUITS[name], device)
        sweeps: dict[str, dict[str, float]] = {}
        for entry in device["sweep"]:
            recording = session.recordings[entry["file"]]
            frequency_hz = _grid(recording, session.points)
            inside, outside = line_of(entry, sheet, pads)
            circuit = CIRCUITS[session.swept_as.get(entry["file"], name)]
            reading = read_device(
                circuit,
                frequency_hz,
                source_dbm=source_dbm,
                calibrated=inside,
                added=outside,
                rng=_generator(entry["file"]),
                receiver=session.receiver,
            )
            _write(out / entry["file"], touchstone_text(name, frequency_hz, reading.shown, recording))
            small_signal_db = true_figures(circuit, device)["gain_db"]
            sweeps[entry["file"]] = _true_levels(frequency_hz, reading, small_signal_db, session)
        cause = {"cause": session.causes[name]} if name in session.causes else {}
        truth["devices"][name] = {**cause, "figures": figures, "sweeps": sweeps}
    _write_pads(out, sheet, pads)
    _write(out / "truth.json", json.dumps(truth, indent=2) + "\n")
    _write(out / "bench.toml", sheet_text)


def _true_levels(
    frequency_hz: FloatArray, reading: Reading, small_signal_db: float, session: Session
) -> dict[str, float]:
    """Return what was true at the design frequency during a sweep; of port 2 only where its receiver compresses."""

    def at_design(trace: FloatArray) -> float:
        return float(np.interp(DESIGN_HZ, frequency_hz, trace))

    compression = at_design(reading.compression_db)
    levels = {
        "drive_dbm": round(at_design(reading.drive_dbm), 6),
        "gain_db": round(small_signal_db - compression, 6),
        "compression_db": round(compression, 6),
    }
    if session.receiver is not None:
        levels["port2_dbm"] = round(at_design(reading.port2_dbm), 6)
        levels["receiver_compression_db"] = round(at_design(reading.receiver_compression_db), 6)
    return levels


def _write_pads(out: Path, sheet: dict[str, Any], pads: dict[str, Pad]) -> None:
    """Write a file for each pad that the sheet says was measured."""
    for name, entry in sheet["pads"].items():
        if "file" not in entry:
            continue
        frequency_hz = _grid(PAD_RECORDING, 121)
        s = pads[name].scattering(frequency_hz)
        rng = _generator(entry["file"])
        noise = rng.standard_normal(s.shape) + 1j * rng.standard_normal(s.shape)
        text = touchstone_text(f"pad {name}", frequency_hz, s + MEASURED_PAD_NOISE * noise, PAD_RECORDING)
        _write(out / entry["file"], text)


def main(arguments: Sequence[str] | None = None) -> None:
    """Make a sample session from the command line."""
    parser = argparse.ArgumentParser(description="Make the sweeps of a sample session, always the same ones.")
    parser.add_argument("session", nargs="?", choices=sorted(SESSIONS), default="telemetry")
    parser.add_argument("--out", type=Path, help="folder to write to (default: the folder of the session)")
    options = parser.parse_args(arguments)
    session = SESSIONS[options.session]
    out: Path = options.out or session.home
    make(out, session)
    print(f"wrote {len(session.recordings)} sweeps, the sheet and the true figures to {out}")


if __name__ == "__main__":
    main()
