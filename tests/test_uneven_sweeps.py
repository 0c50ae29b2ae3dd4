"""Sweeps of one device that do not match: other frequencies, no sample in common, one that did not repeat.

Invented benches whose truth is known: a linear or a Rapp-limited single-tuned stage, noise 70 dB below the peak.
"""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.analysis import analyse
from benchtool.page_map import map_shown
from benchtool.sheet import load_sheet

F0 = 21.4e6
GAIN_DB = 26.0206


def write(folder, sweeps, *, quality=30.0, p1db_dbm=None, targets="", match=0.1):
    """Write a bench of sweeps, each a name, frequencies, dB of added input pad and dB that it reads too much."""
    rng = np.random.default_rng(11)
    text = "version = 1\n[analyzer]\nsource_dbm = 0\nport2_compression_dbm = 60\nreading_db = 0.02\n"
    pads = sorted({pad for _, _, pad, _ in sweeps if pad})
    text += "".join(f"[pads.p{pad}]\nloss_db = {pad}\ntolerance_db = 0.05\nreturn_loss_db = 50\n" for pad in pads)
    text += '[[device]]\nname = "stage"\nkind = "amplifier"\ndesign_frequency = "21.4 MHz"\n' + targets
    for name, f, pad, off in sweeps:
        tank = 10 ** (GAIN_DB / 20) / (1.0 + 1j * quality * (f / F0 - F0 / f))
        if p1db_dbm is not None:
            level = -pad + 20 * np.log10(np.abs(tank)) - GAIN_DB - p1db_dbm
            tank = tank / np.sqrt(1.0 + (10**0.1 - 1.0) * 10 ** (level / 10.0))
        hiss = 3e-4 * 10 ** (-pad / 20) * (rng.normal(size=f.size) + 1j * rng.normal(size=f.size))
        read = (tank + 10 * hiss) * 10 ** ((off - pad) / 20)
        rows = [f"{hz:.0f} {match} 0 {s.real:.9g} {s.imag:.9g} 0 0 0 0" for hz, s in zip(f, read, strict=True)]
        (folder / name).write_text("# Hz S RI R 50\n" + "\n".join(rows) + "\n", encoding="utf-8")
        text += f'[[device.sweep]]\nfile = "{name}"\n' + (f'input_pads = ["p{pad}"]\n' if pad else "")
    (folder / "bench.toml").write_text(text, encoding="utf-8")
    return analyse(load_sheet(folder), trials=200).devices[0]


NARROW = np.linspace(18e6, 25e6, 401)


@pytest.mark.parametrize(
    ("quality", "other"),
    [
        (30.0, np.linspace(1e6, 100e6, 401)),
        (60.0, np.linspace(18e6, 25e6, 101)),
        (60.0, np.linspace(18e6, 25e6, 51)),
        (30.0, np.linspace(19e6, 24e6, 201)),
    ],
)
def test_a_linear_device_is_clean_whatever_the_frequencies(tmp_path, quality, other):
    # A parabola through seven samples misses much of a peak that a coarse sweep resolves with three.
    device = write(tmp_path, [("low.s2p", NARROW, 20, 0.0), ("high.s2p", other, 0, 0.0)], quality=quality)
    assert device.drive.cause == "clean"
    assert device.drive.onset.input_p1db_dbm.bound == "at least"


def test_sweeps_without_a_common_sample_crash_nothing(tmp_path):
    few = np.linspace(17e6, 31e6, 8)
    device = write(tmp_path, [("few.s2p", few, 20, 0.0), ("fine.s2p", np.linspace(21.2e6, 21.6e6, 41), 0, 0.0)])
    assert device.figures["gain"].value is not None


def test_a_sweep_without_the_design_frequency_is_named(tmp_path):
    away = np.linspace(30e6, 40e6, 101)
    device = write(tmp_path, [("low.s2p", NARROW, 20, 0.0), ("away.s2p", away, 0, 0.0)])
    (finding,) = [finding for finding in device.findings if finding.code == "outside-sweep"]
    assert finding.message.startswith("away.s2p runs from 30 MHz to 40 MHz, without the design frequency, 21.4 MHz")


@pytest.mark.parametrize("off", [2.0, -2.0])
def test_of_two_that_disagree_the_others_tell_the_odd_one(tmp_path, off):
    ladder = [
        ("one.s2p", 40, 0.0),
        ("again.s2p", 40, off),
        ("mid.s2p", 30, 0.0),
        ("high.s2p", 20, 0.0),
        ("full.s2p", 10, 0.0),
    ]
    device = write(tmp_path, [(name, NARROW, pad, read) for name, pad, read in ladder], p1db_dbm=-18.0)
    drive = device.drive
    assert drive.cause == "reference-not-repeating"
    assert (drive.odd_sweep, dict(drive.set_aside)) == ("again.s2p", {"again.s2p": "did not repeat"})
    assert device.reference_sweep == "one.s2p"
    gain = device.figures["gain"]
    assert gain.low < GAIN_DB < gain.high and gain.high - gain.low < 1.5
    # What is set aside bears neither on the onset nor on the map.
    assert [point.file for point in drive.onset.points if point.spoiled] == ["again.s2p"]
    shown = map_shown(device)
    assert shown is not None
    assert np.max(np.abs(shown.compression_db[:2])) < 0.3  # −40 and −30 dBm: nothing compressed there
    finding = next(f for f in device.findings if f.code == "reference-not-repeating")
    assert "probability" not in finding.message


def test_where_nothing_fits_no_level_is_judged(tmp_path):
    # A pad 2 dB off and a device that limits: no single cause explains both, and the gain read is 2 dB wrong.
    ladder = [("one.s2p", 40, -2.0), ("mid.s2p", 30, 0.0), ("high.s2p", 20, 0.0), ("full.s2p", 10, 0.0)]
    targets = "[device.targets]\ngain = { min = 25 }\nbandwidth = { max = '1 MHz' }\noutput_p1db = { min = 12 }\n"
    sweeps = [(name, NARROW, pad, read) for name, pad, read in ladder]
    device = write(tmp_path, sweeps, p1db_dbm=-18.0, targets=targets)
    assert (device.drive.cause, device.drive.confidence) == ("cause-unclear", 0.0)
    found = {target.id: target for target in device.targets}
    assert {name: found[name].verdict for name in ("gain", "output_p1db")} == dict.fromkeys(
        ("gain", "output_p1db"), "undecided"
    )
    assert found["bandwidth"].verdict == "met"
    # The 1 dB point is −18 dBm at the input: the bound is true, and no narrow interval is given.
    onset = device.drive.onset.input_p1db_dbm
    assert onset.bound == "at least"
    assert onset.value < -18.0
    assert found["gain"].advice == next(f.advice for f in device.findings if f.code == "cause-unclear")


def test_a_reflection_far_below_its_doubt_lies_in_its_interval(tmp_path):
    # Directivity is taken as 36 dB where it is not stated, so a reading of 60 dB may be a match of about that.
    loss = write(tmp_path, [("only.s2p", NARROW, 0, 0.0)], match=0.001).figures["input_return_loss"]
    assert_allclose(loss.value, 60.0, rtol=0, atol=0.1)
    assert loss.low < 36.0
    assert loss.low <= loss.value <= loss.high
