"""Slips between bench and sheet: invented benches in which one was made, and the same benches without it."""

import numpy as np
import pytest

from benchtool.analysis import analyse
from benchtool.sheet import load_sheet

F = np.linspace(9e6, 12.4e6, 201)
SHEET = """version = 1
[analyzer]
source_dbm = -10
[pads.p10]
loss_db = 10
[pads.a20]
loss_db = 20
[calibration]
input_pads = ["p10"]
[[device]]
name = "stage"
kind = "amplifier"
design_frequency = "{design}"
[device.targets]
gain = {{ min = 20 }}
[[device.sweep]]
file = "{low}"
input_pads = {pads}
[[device.sweep]]
file = "{high}"
"""


@pytest.fixture
def bench(tmp_path):
    """A stage of 24 dB swept through p10, which was calibrated, and once through 20 dB more."""
    rng = np.random.default_rng(8)
    tank = 10 ** (24 / 20) / (1.0 + 28j * (F / 10.7e6 - 10.7e6 / F))
    for name, pad_db in (("low.s2p", 20.0), ("high.s2p", 0.0)):
        hiss = 1e-4 * (rng.normal(size=F.size) + 1j * rng.normal(size=F.size))
        read = tank * 10 ** (-pad_db / 20) + hiss
        rows = [f"{f:.0f} 0.2 0 {s.real:.9g} {s.imag:.9g} 0 0 0 0" for f, s in zip(F, read, strict=True)]
        (tmp_path / name).write_text("# Hz S RI R 50\n" + "\n".join(rows) + "\n", encoding="utf-8")

    def measure(low="low.s2p", high="high.s2p", pads='["p10", "a20"]', design="10.7 MHz"):
        text = SHEET.format(low=low, high=high, pads=pads, design=design)
        (tmp_path / "bench.toml").write_text(text, encoding="utf-8")
        return analyse(load_sheet(tmp_path), trials=200).devices[0]

    return measure


def codes(device):
    return {finding.code: finding for finding in device.findings}


def test_a_bench_without_slips_is_left_alone(bench):
    device = bench()
    assert not {"pad-put-back", "sweeps-interchanged", "outside-sweep"} & codes(device).keys()
    assert device.verdict == "met"


def test_a_calibrated_pad_that_is_not_listed_is_named(bench):
    finding = codes(bench(pads='["a20"]'))["pad-put-back"]
    assert finding.message == (
        "p10 was in line at calibration and not listed for low.s2p, so 10 dB of loss were put back"
    )
    assert finding.advice.startswith("if it was still on its port, list it too")


def test_interchanged_files_are_named_and_no_target_is_judged(bench):
    device = bench(low="high.s2p", high="low.s2p")
    finding = codes(device)["sweeps-interchanged"]
    assert "by 40.0 dB, more than any device gives way, and by 0.0 dB with the two files exchanged" in finding.message
    assert device.verdict == "undecided"
    assert device.summary.next_step.startswith("Look up which file belongs to which line")


@pytest.mark.parametrize(("design", "said"), [("10.7 Hz", "1000000 times higher"), ("10.7 GHz", "1000 times lower")])
def test_a_frequency_in_another_unit_is_taken_for_a_slip(bench, design, said):
    advice = codes(bench(design=design))["outside-sweep"].advice
    assert "check the unit" in advice
    number = float(advice.split("lies ")[1].split(" times")[0])
    assert abs(number / float(said.split()[0]) - 1.0) < 0.05
    assert said.split(" ", 1)[1] in advice
