"""A number of benches in; a lot of them, each one device swept at three drives with 401 points, as files out.

Invented data for timing alone: single-tuned stages with Rapp limiting, additive noise and random spread of gain,
resonance and width, seeded. Some devices miss their targets.
"""

import sys
from pathlib import Path

import numpy as np

POINTS = 401
F0_HZ = 21.4e6
SHEET = """version = 1
title = "lot bench {number}"
[analyzer]
source_dbm = -8.0
port2_compression_dbm = 3.0
directivity_db = 36
reading_db = 0.05
[pads.b10]
loss_db = 10.0
tolerance_db = 0.3
return_loss_db = 28
[pads.a10]
loss_db = 10.0
tolerance_db = 0.3
return_loss_db = 28
[pads.a20]
loss_db = 20.0
tolerance_db = 0.3
return_loss_db = 28
[calibration]
input_pads = ["b10"]
[[device]]
name = "stage {number}"
kind = "amplifier"
design_frequency = "21.4 MHz"
[device.targets]
gain = {{ min = 26.5 }}
peak_frequency = {{ nominal = "21.4 MHz", tolerance = "150 kHz" }}
bandwidth = {{ min = "700 kHz", max = "1.1 MHz" }}
[[device.sweep]]
file = "low.s2p"
input_pads = ["b10", "a20"]
[[device.sweep]]
file = "mid.s2p"
input_pads = ["b10", "a10"]
[[device.sweep]]
file = "high.s2p"
"""
SWEEPS = {"low": 20.0, "mid": 10.0, "high": 0.0}


def sweep_text(rng, gain_db, f0_hz, quality, pad_db):
    """One forward pass as an analyzer writes it: S11 and S21, S12 and S22 zero."""
    f = np.linspace(18.4e6, 24.4e6, POINTS)
    response = 1.0 / (1.0 + 1j * quality * (f / f0_hz - f0_hz / f))
    gain = 10 ** (gain_db / 20.0)
    drive = 10 ** ((-18.0 - pad_db) / 20.0)
    s21 = gain * response / (1.0 + np.abs(gain * response * drive / 3.0) ** 4) ** 0.25 * 10 ** (-pad_db / 20.0)
    s11 = (0.2 - 0.3 * response) * 10 ** (-pad_db / 10.0)
    noise = 3e-5 * rng.standard_normal((4, POINTS))
    columns = [s11.real + noise[0], s11.imag + noise[1], s21.real + noise[2], s21.imag + noise[3]]
    rows = np.column_stack([f, *columns, *np.zeros((4, POINTS))])
    return "# Hz S RI R 50\n" + "\n".join(" ".join(f"{value:.8e}" for value in row) for row in rows.tolist()) + "\n"


def make_lot(folder, benches, seed=1):
    """Write the lot and return its sweep files."""
    rng = np.random.default_rng(seed)
    files = []
    for number in range(1, benches + 1):
        place = Path(folder) / f"bench_{number:03}"
        place.mkdir(parents=True)
        (place / "bench.toml").write_text(SHEET.format(number=number), encoding="utf-8")
        gain_db, f0_hz, quality = rng.normal(27.5, 0.6), rng.normal(F0_HZ, 60e3), rng.normal(24.0, 1.5)
        for name, pad_db in SWEEPS.items():
            path = place / f"{name}.s2p"
            path.write_text(sweep_text(rng, gain_db, f0_hz, quality, pad_db), encoding="utf-8")
            files.append(path)
    return files


if __name__ == "__main__":
    print(len(make_lot(sys.argv[1], int(sys.argv[2]))), "sweeps")
