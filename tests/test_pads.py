"""Pads out of the data and back: closed forms, Pozar's cascade, scikit-rf's cascading, and the arithmetic of levels."""

import numpy as np
import pytest
import skrf
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from benchtool.errors import SweepFileError
from benchtool.model import Sweep
from benchtool.pads import PadBank, cascade, change_of_line, de_embed, invert, levels, matched_pad, signal_path
from benchtool.sheet import load_sheet
from benchtool.touchstone import format_sweep

FREQUENCY = np.linspace(15e6, 28e6, 41)


def polar(magnitude, angle_deg):
    return magnitude * np.exp(1j * np.radians(angle_deg))


def constant(s11, s12, s21, s22, n=1):
    return np.array([[s11, s12], [s21, s22]], complex)[:, :, None] * np.ones(n)


# D. M. Pozar, Microwave Engineering, 4th ed., Example 12.1.
DEVICE = constant(polar(0.38, -158), polar(0.11, 54), polar(3.50, 80), polar(0.40, -43))


def network(s):
    return skrf.Network(f=np.arange(1, s.shape[-1] + 1) * 1e6, s=np.moveaxis(s, -1, 0), z0=50)


def random_two_port(rng, n):
    s = 0.35 * (rng.standard_normal((2, 2, n)) + 1j * rng.standard_normal((2, 2, n)))
    s[0, 1] += 0.4
    s[1, 0] += 0.4
    return s


def test_cascade_of_a_device_between_reflecting_pads():
    # Cascade S21 = S21A S21B/(1 - S22A S11B) (Pozar, Prob. 4.12); figures recomputed with scikit-rf: the exact cascade
    # reads -15.0637 dB, adding decibels reads -15.1186 dB.
    first = constant(0.02, 10 ** (-6 / 20), 10 ** (-6 / 20), 0.02)
    last = constant(0.05j, 0.1, 0.1, 0.05j)
    whole = cascade(cascade(first, DEVICE), last)
    assert_allclose(20 * np.log10(np.abs(whole[1, 0])), -15.0637, rtol=0, atol=6e-5)
    assert_allclose(20 * np.log10(3.5) - 26, -15.1186, rtol=0, atol=6e-5)
    back = cascade(cascade(invert(first), whole), invert(last))
    assert_allclose(back, DEVICE, rtol=0, atol=1e-14)


@pytest.mark.parametrize("seed", range(5))
def test_cascade_and_inverse_agree_with_scikit_rf(seed):
    rng = np.random.default_rng(seed)
    a, b = random_two_port(rng, 7), random_two_port(rng, 7)
    assert_allclose(cascade(a, b), np.moveaxis((network(a) ** network(b)).s, 0, -1), rtol=0, atol=1e-10)
    assert_allclose(invert(a), np.moveaxis(network(a).inv.s, 0, -1), rtol=0, atol=1e-10)


@pytest.mark.parametrize(
    ("loss", "series", "shunt"), [(3, 8.550, 141.93), (6, 16.614, 66.93), (10, 25.975, 35.136), (20, 40.909, 10.101)]
)
def test_handbook_tee_pads_have_the_loss_of_the_matched_model(loss, series, shunt):
    # Standard handbook table of 50 ohm T pads (recomputed: Z0 (K-1)/(K+1) and 2 Z0 K/(K²-1)), solved as a circuit.
    line = skrf.media.DefinedGammaZ0(skrf.Frequency(1, 1, 1, "mhz"), z0=50)
    tee = line.resistor(series) ** line.shunt_resistor(shunt) ** line.resistor(series)
    model = matched_pad(np.array([1e6]), float(loss))
    assert_allclose(np.abs(tee.s[0]), np.abs(model[:, :, 0]), rtol=0, atol=5e-5)


@pytest.mark.parametrize(
    ("shunt", "series", "actual"), [(300, 18, 2.995), (150, 39, 6.136), (100, 68, 9.629), (62, 240, 19.680)]
)
def test_standard_resistor_pads_are_not_their_label(shunt, series, actual):
    # E24 π pads, closed form recomputed: a pad measured as a file is taken out with its own loss, not its label's.
    line = skrf.media.DefinedGammaZ0(skrf.Frequency(1, 1, 1, "mhz"), z0=50)
    pi = line.shunt_resistor(shunt) ** line.resistor(series) ** line.shunt_resistor(shunt)
    pad = np.moveaxis(pi.s, 0, -1)
    assert_allclose(-20 * np.log10(np.abs(pad[1, 0])), actual, rtol=0, atol=6e-4)
    assert_allclose(cascade(invert(pad), cascade(pad, DEVICE)), DEVICE, rtol=0, atol=1e-12)


class Bench:
    """A bench sheet in a folder, with one sweep of a device behind a line."""

    def __init__(self, folder, pads, calibration, line, s, measured=("S11", "S21", "S12", "S22"), files=()):
        self.folder = folder
        for name, content in files:
            sweep = Sweep(name, FREQUENCY, content)
            (folder / name).write_text(format_sweep(sweep), encoding="utf-8")
        (folder / "device.s2p").write_text(format_sweep(Sweep("device.s2p", FREQUENCY, s)), encoding="utf-8")
        text = (
            f"version = 1\n{pads}\n[analyzer]\nsource_dbm = -8.0\n[calibration]\n{calibration}\n"
            f'[[device]]\nname = "d"\nkind = "amplifier"\n[[device.sweep]]\nfile = "device.s2p"\n{line}\n'
        )
        (folder / "bench.toml").write_text(text, encoding="utf-8")
        self.sheet = load_sheet(folder)
        self.bank = PadBank.of(self.sheet)
        self.entry = self.sheet.devices[0].sweeps[0]
        self.sweep = Sweep("device.s2p", FREQUENCY, s, measured=measured)

    def removed(self):
        return de_embed(self.sweep, self.entry, self.sheet, self.bank, 21.4e6)


TWO_PADS = '[pads.a20]\nloss_db = 20.0\ndelay = "95 ps"\n[pads.b3]\nloss_db = 3.0\ndelay = "40 ps"'


def test_matched_pads_come_out_of_all_four_parameters(tmp_path):
    # Closed form: S21 and S12 gain 10^(A/20) e^(+jωd); S11 gains the square of that of the input side.
    rng = np.random.default_rng(2)
    device = random_two_port(rng, FREQUENCY.size)
    shown = cascade(cascade(matched_pad(FREQUENCY, 20.0, 95e-12), device), matched_pad(FREQUENCY, 3.0, 40e-12))
    bench = Bench(tmp_path, TWO_PADS, "", 'input_pads = ["a20"]\noutput_pads = ["b3"]', shown)
    sweep, findings, into, out = bench.removed()
    assert_allclose(sweep.s, device, rtol=0, atol=1e-12)
    assert (into, out, findings) == (20.0, 3.0, ())
    turn = 10 ** (23 / 20) * np.exp(2j * np.pi * FREQUENCY * 135e-12)
    assert_allclose(sweep.s21 / shown[1, 0], turn, rtol=1e-12, atol=0)


def test_a_pad_taken_away_since_calibration_is_put_back(tmp_path):
    device = DEVICE * np.ones(FREQUENCY.size)
    shown = cascade(invert(matched_pad(FREQUENCY, 20.0, 95e-12)), device)
    bench = Bench(tmp_path, TWO_PADS, 'input_pads = ["a20"]', "input_pads = []", shown)
    sweep, _, into, _ = bench.removed()
    assert into == -20.0
    assert_allclose(sweep.s, device, rtol=0, atol=1e-12)


def test_pads_in_line_at_calibration_are_left_alone(tmp_path):
    device = DEVICE * np.ones(FREQUENCY.size)
    bench = Bench(tmp_path, TWO_PADS, 'input_pads = ["a20"]\noutput_pads = ["b3"]', "", device)
    sweep, _, into, out = bench.removed()
    assert (into, out) == (0.0, 0.0)
    assert_allclose(sweep.s, device, rtol=0, atol=0)


def test_measured_pads_come_out_by_inverse_cascading(tmp_path):
    # Independent: scikit-rf's inverse of the same two measured pads around the same device.
    rng = np.random.default_rng(3)
    pad, last, device = (random_two_port(rng, FREQUENCY.size) for _ in range(3))
    shown = cascade(cascade(pad, device), last)
    names = '[pads.p]\nfile = "p.s2p"\n[pads.q]\nfile = "q.s2p"'
    line = 'input_pads = ["p"]\noutput_pads = ["q"]'
    bench = Bench(tmp_path, names, "", line, shown, files=[("p.s2p", pad), ("q.s2p", last)])
    sweep, _, _, _ = bench.removed()
    by_skrf = network(pad).inv ** network(shown) ** network(last).inv
    assert_allclose(sweep.s, np.moveaxis(by_skrf.s, 0, -1), rtol=0, atol=1e-10)
    assert_allclose(sweep.s, device, rtol=0, atol=1e-10)


def test_one_path_sweep_behind_a_measured_input_pad_is_exact(tmp_path):
    rng = np.random.default_rng(4)
    pad, device = (random_two_port(rng, FREQUENCY.size) for _ in range(2))
    shown = cascade(pad, device)
    shown[0, 1] = shown[1, 1] = 0
    bench = Bench(
        tmp_path, '[pads.p]\nfile = "p.s2p"', "", 'input_pads = ["p"]', shown, ("S11", "S21"), [("p.s2p", pad)]
    )
    sweep, findings, _, _ = bench.removed()
    assert_allclose(sweep.s11, device[0, 0], rtol=0, atol=1e-12)
    assert_allclose(sweep.s21, device[1, 0], rtol=1e-11, atol=0)
    assert findings == ()


def test_one_path_sweep_before_a_reflecting_output_pad_says_what_it_cannot_know(tmp_path):
    rng = np.random.default_rng(5)
    device = random_two_port(rng, FREQUENCY.size)
    pad = constant(0.1, 0.5, 0.5, 0.1, FREQUENCY.size)
    shown = cascade(device, pad)
    bench = Bench(
        tmp_path, '[pads.p]\nfile = "p.s2p"', "", 'output_pads = ["p"]', shown, ("S11", "S21"), [("p.s2p", pad)]
    )
    sweep, findings, _, _ = bench.removed()
    # What is left is exactly the factor 1/(1 - S22 P11) of the device's own unmeasured S22.
    assert_allclose(sweep.s21, device[1, 0] / (1 - device[1, 1] * 0.1), rtol=1e-12, atol=0)
    assert [finding.code for finding in findings] == ["pad-removal-inexact"]


def test_a_measured_pad_that_does_not_cover_the_sweep_is_a_fault(tmp_path):
    pad = constant(0, 0.5, 0.5, 0, 5)
    short = Sweep("p.s2p", np.linspace(20e6, 25e6, 5), pad)
    (tmp_path / "p.s2p").write_text(format_sweep(short), encoding="utf-8")
    device = DEVICE * np.ones(FREQUENCY.size)
    bench = Bench(tmp_path, '[pads.p]\nfile = "p.s2p"', "", 'input_pads = ["p"]', device)
    with pytest.raises(SweepFileError, match=r"measured from 20 MHz to 25 MHz, but is needed from 15 MHz to 28 MHz"):
        bench.removed()


def test_a_one_way_sweep_of_a_pad_is_a_fault(tmp_path):
    rng = np.random.default_rng(6)
    pad = random_two_port(rng, FREQUENCY.size)
    pad[0, 1] = pad[1, 1] = 0
    device = DEVICE * np.ones(FREQUENCY.size)
    with pytest.raises(SweepFileError, match="pad p has only S11, S21 measured; measure the pad in both directions"):
        Bench(tmp_path, '[pads.p]\nfile = "p.s2p"', "", 'input_pads = ["p"]', device, files=[("p.s2p", pad)])


@settings(max_examples=50, deadline=None)
@given(st.floats(0, 60), st.floats(0, 60), st.floats(0, 2e-9), st.integers(0, 2**32 - 1))
def test_adding_then_removing_pads_is_the_identity(loss_in, loss_out, delay, seed):
    device = random_two_port(np.random.default_rng(seed), FREQUENCY.size)
    first, last = matched_pad(FREQUENCY, loss_in, delay), matched_pad(FREQUENCY, loss_out, delay / 3)
    back = cascade(cascade(invert(first), cascade(cascade(first, device), last)), invert(last))
    assert_allclose(back, device, rtol=0, atol=1e-12)


def test_change_of_line():
    change = change_of_line(["b30", "a20"], ["b30"])
    assert (change.added, change.removed, change.now, change.calibration) == (("a20",), (), ("a20",), ())
    change = change_of_line(["a20"], ["b30"])
    assert (change.added, change.removed) == (("a20",), ("b30",))
    assert change.weights() == {"a20": 1, "b30": -1}


def test_levels_along_the_line(tmp_path):
    # Common practice, no source: drive = source - input pads now in line; port 2 = drive + gain - output pads in line.
    device = DEVICE * np.ones(FREQUENCY.size)
    bench = Bench(tmp_path, TWO_PADS, 'output_pads = ["b3"]', 'input_pads = ["a20"]', device)
    path = signal_path(bench.entry, bench.sheet, bench.bank, 21.4e6, 38.0)
    assert (path.drive_dbm, path.device_output_dbm, path.port2_dbm) == (-28.0, 10.0, 7.0)
    pads = (*path.input_pads, *path.output_pads)
    assert [(pad.name, pad.calibrated) for pad in pads] == [("a20", False), ("b3", True)]
    assert levels(None, (), 10.0, ()) == (None, None, None)


def test_a_twenty_db_pad_added_after_calibration_makes_twenty_a_forty(tmp_path):
    # Common practice, no source.
    shown = constant(0, 0, 10.0, 0, FREQUENCY.size)
    bench = Bench(tmp_path, TWO_PADS, "", 'input_pads = ["a20"]', shown, ("S11", "S21"))
    sweep, _, _, _ = bench.removed()
    assert_allclose(20 * np.log10(np.abs(sweep.s21)), 40.0, rtol=0, atol=1e-9)
