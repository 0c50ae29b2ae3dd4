"""A device swept in both directions through one path: the two sweeps make one of all four parameters."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import skrf
from numpy.testing import assert_allclose, assert_array_equal

from benchtool.analysis import analyse
from benchtool.errors import SweepFileError
from benchtool.joining import join_reversed
from benchtool.model import PARAMETERS, Finding, Sweep
from benchtool.sheet import load_sheet

FREQUENCY_HZ = np.linspace(1e6, 9e6, 5)
RNG = np.random.default_rng(7)
DEVICE = RNG.normal(size=(2, 2, 5)) + 1j * RNG.normal(size=(2, 2, 5))
ONE_PATH = Finding("one-path", "note", "S12 and S22 left out", "turn the device round")
MENDED = Finding("file-mended", "note", "a row was left out", "look at it", "back.s2p")


def one_path(device, name: str, **changes) -> Sweep:
    s = np.array(device)
    s[:, 1] = 0.0
    whole = Sweep(name, FREQUENCY_HZ, s, measured=("S11", "S21"), path=Path("bench") / name, findings=(ONE_PATH,))
    return replace(whole, **changes)


FORWARD = one_path(DEVICE, "forth.s2p")
BACKWARD = one_path(DEVICE[::-1, ::-1], "back.s2p")


def test_both_directions_make_the_whole_device():
    joined = join_reversed(FORWARD, BACKWARD)
    assert joined.full and joined.measured == PARAMETERS
    assert_array_equal(joined.s, DEVICE)
    assert (joined.name, joined.path, joined.sha256) == (FORWARD.name, FORWARD.path, FORWARD.sha256)


def test_turning_is_that_of_scikit_rf():
    network = skrf.Network(frequency=skrf.Frequency.from_f(FREQUENCY_HZ, unit="Hz"), s=DEVICE.transpose(2, 0, 1))
    turned = network.flipped().s.transpose(1, 2, 0)
    assert_array_equal(join_reversed(FORWARD, one_path(turned, "back.s2p")).s, DEVICE)


def test_what_the_forward_sweep_has_is_kept():
    s = np.array(DEVICE)
    s[0, 1] = 0.0
    forward = replace(FORWARD, s=s, measured=("S11", "S21", "S22"))
    joined = join_reversed(forward, one_path(2 * DEVICE[::-1, ::-1], "back.s2p"))
    assert_array_equal(joined.s22, DEVICE[1, 1])
    assert_allclose(joined.s12, 2 * DEVICE[0, 1], rtol=1e-15, atol=0)


def test_findings_of_both_stay_but_for_what_each_lacks():
    joined = join_reversed(FORWARD, replace(BACKWARD, findings=(ONE_PATH, MENDED)))
    assert joined.findings[0] is MENDED
    (said,) = joined.findings[1:]
    assert (said.code, said.severity, said.sweep) == ("joined-sweep", "note", "forth.s2p")
    assert said.message == "forth.s2p: S12 and S22 come from back.s2p, the device turned end for end"


def test_ports_of_two_impedances_change_places():
    forward = replace(FORWARD, reference_ohm=(50.0, 300.0))
    joined = join_reversed(forward, replace(BACKWARD, reference_ohm=(300.0, 50.0)))
    assert joined.reference_ohm == (50.0, 300.0)


def test_frequencies_may_differ_by_their_rounding_alone():
    rounded = replace(BACKWARD, frequency_hz=FREQUENCY_HZ * (1 + 1e-12))
    assert_array_equal(join_reversed(FORWARD, rounded).frequency_hz, FREQUENCY_HZ)


SAME_POINTS = "sweep both ways over the same points as forth.s2p"


@pytest.mark.parametrize(
    ("forward", "backward", "message"),
    [
        (
            FORWARD,
            replace(BACKWARD, frequency_hz=FREQUENCY_HZ * [1, 1, 1.001, 1, 1]),
            f"point 3 is at 5.005 MHz, where forth.s2p has 5 MHz; {SAME_POINTS}",
        ),
        (
            FORWARD,
            replace(BACKWARD, frequency_hz=FREQUENCY_HZ[:4], s=BACKWARD.s[..., :4]),
            f"4 points, where forth.s2p has 5; {SAME_POINTS}",
        ),
        (
            FORWARD,
            replace(BACKWARD, reference_ohm=(75.0, 75.0)),
            "reference impedances of 75 and 75 ohm, where the turned device of forth.s2p (50 and 50 ohm) needs the "
            "reverse; sweep both ways with the same set-up",
        ),
        (
            FORWARD,
            replace(BACKWARD, measured=("S11",)),
            "S21 was not measured, which would be the S12 of forth.s2p; sweep the turned device again with S11 and S21",
        ),
        (
            replace(FORWARD, measured=PARAMETERS, s=DEVICE),
            BACKWARD,
            "forth.s2p has S12 and S22 already; leave the sweep of the turned device out, or give it as one of its own",
        ),
    ],
)
def test_sweeps_that_do_not_belong_together_are_refused(forward, backward, message):
    with pytest.raises(SweepFileError) as caught:
        join_reversed(forward, backward)
    assert str(caught.value) == f"{Path('bench') / 'back.s2p'}: {message}"


def test_output_match_of_a_turned_sweep_is_doubted_by_the_port_that_read_it(tmp_path):
    # S22 read at port 1, whose match of 20 dB adds S22²·0.1 to it at the worst phase: truth must lie in the interval.
    # With an output pad of 10 dB in line, port 2 itself would add a hundredth of that.
    f = np.linspace(19e6, 24e6, 201)
    tank = 1.0 / (1.0 + 30j * (f / 21.4e6 - 21.4e6 / f))
    rng = np.random.default_rng(3)

    def write(name, s11, s21):
        hiss = 1e-5 * (rng.normal(size=(2, f.size)) + 1j * rng.normal(size=(2, f.size)))
        rows = [
            f"{hz:.0f} {a.real:.8g} {a.imag:.8g} {b.real:.8g} {b.imag:.8g} 0 0 0 0"
            for hz, a, b in zip(f, s11 + hiss[0], s21 + hiss[1], strict=True)
        ]
        (tmp_path / name).write_text("# Hz S RI R 50\n" + "\n".join(rows) + "\n", encoding="utf-8")

    pad, true = 10 ** (-10 / 20), 0.6
    write("forward.s2p", 0.3 + 0.1 * tank, 20.0 * tank * pad)
    write("back.s2p", np.full(f.size, true / (1.0 - 0.1 * true), complex), 1e-4 * tank * pad)
    (tmp_path / "bench.toml").write_text(
        "version = 1\n[analyzer]\nsource_dbm = -10\ndirectivity_db = 60\nport_match_db = 20\nreading_db = 0.01\n"
        "[pads.a10]\nloss_db = 10\nreturn_loss_db = 60\ntolerance_db = 0.01\n"
        '[[device]]\nname = "d"\nkind = "amplifier"\ndesign_frequency = "21.4 MHz"\n'
        '[[device.sweep]]\nfile = "forward.s2p"\nreversed = "back.s2p"\noutput_pads = ["a10"]\n',
        encoding="utf-8",
    )
    figure = analyse(load_sheet(tmp_path), trials=2000).devices[0].figures["output_return_loss"]
    assert figure.low <= -20 * np.log10(true) <= figure.high
    assert figure.high - figure.low < 1.5
