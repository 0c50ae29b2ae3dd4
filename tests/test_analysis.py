"""The whole path on the sample bench against the true figures of its circuits, and the decisions along the way."""

import json
import shutil
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import signal

from benchtool.analysis import analyse
from benchtool.errors import BenchtoolError, FaultsError, SheetError, SweepFileError
from benchtool.match import stability
from benchtool.model import Sweep
from benchtool.pads import cascade
from benchtool.sheet import load_sheet
from benchtool.touchstone import format_sweep

SAMPLE = Path(__file__).parents[1] / "sample_data" / "telemetry"
TRUTH = json.loads((SAMPLE / "truth.json").read_text(encoding="utf-8"))["devices"]


@pytest.fixture(scope="module")
def sample():
    return {device.name: device for device in analyse(load_sheet(SAMPLE)).devices}


def bench(folder, sweeps, sheet, pads="", s11=0.1):
    """A folder with sweeps (name -> S21 over frequency) and a sheet."""
    folder.mkdir(exist_ok=True)
    for name, (f, s21) in sweeps.items():
        s = np.zeros((2, 2, f.size), complex)
        s[1, 0] = s21
        s[0, 0] = s11
        (folder / name).write_text(format_sweep(Sweep(name, f, s)), encoding="utf-8")
    (folder / "bench.toml").write_text(f"version = 1\n{pads}\n{sheet}", encoding="utf-8")
    return load_sheet(folder)


def single_tuned(f, gain=10.0, f0=21.4e6, q=25.0):
    return gain / (1 + 1j * q * (f / f0 - f0 / f))


FREQUENCY = np.linspace(18e6, 25e6, 401)
SHEET = '[analyzer]\nsource_dbm = -10.0\n[[device]]\nname = "d"\nkind = "amplifier"\n'


def codes(device):
    return {finding.code for finding in device.findings}


TRUTHS = [
    ("gain", "gain_db"),
    ("peak_frequency", "peak_frequency_hz"),
    ("bandwidth", "bandwidth_hz"),
    ("loaded_q", "loaded_q"),
    ("group_delay", "group_delay_s"),
    ("phase", "phase_deg"),
]


@pytest.mark.parametrize("name", ["first IF stage", "detector driver", "post-mixer filter", "discriminator network"])
@pytest.mark.parametrize(("key", "true"), TRUTHS)
def test_intervals_of_the_sample_hold_the_truth(sample, name, key, true):
    # Truth: the circuits' own closed solution (sample_data/truth.py), which knows nothing of sweeps or of this tool.
    figures, truth = sample[name].figures, TRUTH[name]["figures"][true]
    if key == "gain" and name == "post-mixer filter":
        key, truth = "insertion_loss", -truth
    figure = figures[key]
    # One figure in twenty may miss its 95 % interval; none may miss by its whole width.
    slack = 0.5 * (figure.high - figure.low)
    assert figure.low - slack <= truth <= figure.high + slack
    assert_allclose(figure.value, truth, rtol=0.02, atol=0)


def test_verdicts_of_the_sample(sample):
    assert sample["first IF stage"].verdict == "met"
    assert sample["post-mixer filter"].verdict == "missed"
    assert sample["detector driver"].verdict == "undecided"
    assert sample["discriminator network"].verdict == "met"


def test_findings_of_the_sample(sample):
    assert {"compressed-sweep", "return-loss-buried"} <= codes(sample["first IF stage"])
    assert "drive-unproven" in codes(sample["limiter stage"])
    assert "one-path" in codes(sample["discriminator network"])


def test_drives_and_levels_of_the_sample(sample):
    # Truth: the drives that the maker of the sample really put on the device, source and pads as drawn.
    device = sample["first IF stage"]
    for sweep in device.sweeps:
        true = TRUTH["first IF stage"]["sweeps"][sweep.file]
        assert_allclose(sweep.drive_dbm, true["drive_dbm"], rtol=0, atol=0.5)
    points = {point.file: point for point in device.compression.points}
    for file, true in TRUTH["first IF stage"]["sweeps"].items():
        relative = true["compression_db"] - TRUTH["first IF stage"]["sweeps"][device.reference_sweep]["compression_db"]
        assert_allclose(points[file].compression_db, relative, rtol=0, atol=0.35)


def test_undecided_comes_with_the_way_out(sample):
    target = next(t for t in sample["detector driver"].targets if t.verdict == "undecided")
    assert 0.05 < target.probability < 0.95
    assert target.advice.startswith("measure pad a20 as a .s2p file: interval of gain ±")
    assert target.advice in sample["detector driver"].summary.next_step.replace("Measure", "measure").rstrip(".") + "."


def test_budget_shares_sum_to_one(sample):
    for device in sample.values():
        for figure in device.figures.values():
            if figure.budget:
                assert_allclose(sum(figure.budget.values()), 1.0, rtol=1e-9, atol=0)


def test_budget_has_the_variance_of_a_rectangular_tolerance(sample):
    # One pad of ±0.3 dB was added, and moves a gain in dB by just its own error: u² = 0.3²/3 (JCGM 100:2008, 4.3.7).
    gain = sample["detector driver"].figures["gain"]
    of_pad = gain.budget["pad a20"] * gain.standard_uncertainty**2
    assert_allclose(of_pad, 0.3**2 / 3.0, rtol=0.06, atol=0)


def test_zero_doubt_gives_zero_width_and_the_same_values(tmp_path):
    pads = "[pads.a]\nloss_db = 20.0\ntolerance_db = 0.0\nreturn_loss_db = 100\n"
    analyzer = "[analyzer]\nsource_dbm = -10.0\nreading_db = 0.0\nport_match_db = 100\ndirectivity_db = 100\n"
    device = '[[device]]\nname = "d"\nkind = "amplifier"\n[[device.sweep]]\nfile = "x.s2p"\ninput_pads = ["a"]\n'
    # Behind a 20 dB pad a reflection of 0.1 reads 0.001.
    sweeps = {"x.s2p": (FREQUENCY, 0.1 * single_tuned(FREQUENCY))}
    sheet = bench(tmp_path / "b", sweeps, analyzer + device, pads, s11=0.001)
    found = analyse(sheet).devices[0].figures
    for key in ("gain", "peak_gain", "peak_frequency", "bandwidth", "loaded_q", "group_delay"):
        figure = found[key]
        # 100 dB of match, the most a sheet takes, is not infinity: against an unknown output of 3 dB return loss, an
        # input of 10 dB and as much again that resonates it leaves 2 · 20 log10(1 + 2.1e-5) = 3.6e-4 dB.
        assert abs(figure.high - figure.low) < (3.6e-4 if figure.unit == "dB" else 2e-5 * figure.value)
    assert_allclose(found["gain"].value, 20.0, rtol=0, atol=1e-6)


def test_same_seed_same_intervals():
    first, second = (analyse(load_sheet(SAMPLE), trials=200).devices[0].figures["gain"] for _ in range(2))
    assert (first.low, first.high) == (second.low, second.high)


def test_thirty_two_against_forty_is_eight_down(tmp_path):
    # Common practice, no source: 32 dB at one drive and 40 dB with 20 dB less drive is about 8 dB of compression, and
    # the flat top's bandwidth is not the device's.
    low = single_tuned(FREQUENCY, 10.0)  # 40 dB device behind a 20 dB pad
    flat = single_tuned(FREQUENCY, 100.0)
    flat = flat / np.abs(flat) * np.minimum(np.abs(flat), 10 ** (32 / 20))
    pads = "[pads.a]\nloss_db = 20.0\n"
    sweeps = '[[device.sweep]]\nfile = "low.s2p"\ninput_pads = ["a"]\n[[device.sweep]]\nfile = "high.s2p"\n'
    sheet = bench(tmp_path / "b", {"low.s2p": (FREQUENCY, low), "high.s2p": (FREQUENCY, flat)}, SHEET + sweeps, pads)
    device = analyse(sheet).devices[0]
    assert device.reference_sweep == "low.s2p"
    point = next(p for p in device.compression.points if p.file == "high.s2p")
    assert_allclose(point.compression_db, 8.0, rtol=0, atol=0.05)
    assert point.compressed
    assert "compressed-sweep" in codes(device)
    assert_allclose(device.figures["bandwidth"].value, 21.4e6 / 25, rtol=1e-3, atol=0)
    assert_allclose(device.figures["gain"].value, 40.0, rtol=0, atol=0.01)


def test_one_drive_alone_is_unproven_for_an_amplifier_only(tmp_path):
    sweep = '[[device.sweep]]\nfile = "x.s2p"\n'
    sheet = bench(tmp_path / "a", {"x.s2p": (FREQUENCY, single_tuned(FREQUENCY))}, SHEET + sweep)
    assert "drive-unproven" in codes(analyse(sheet).devices[0])
    lossy = {"x.s2p": (FREQUENCY, single_tuned(FREQUENCY, 0.7))}
    sheet = bench(tmp_path / "f", lossy, SHEET.replace("amplifier", "filter") + sweep)
    device = analyse(sheet).devices[0]
    assert "drive-unproven" not in codes(device)
    assert_allclose(device.figures["insertion_loss"].value, -20 * np.log10(0.7), rtol=0, atol=1e-3)
    assert "gain" not in device.figures


def test_a_filter_that_shows_gain_is_a_pad_mistake(tmp_path):
    pads = "[pads.a]\nloss_db = 20.0\n"
    sweep = '[[device.sweep]]\nfile = "x.s2p"\ninput_pads = ["a"]\n'
    sheet = bench(
        tmp_path / "f",
        {"x.s2p": (FREQUENCY, single_tuned(FREQUENCY, 0.7))},
        SHEET.replace("amplifier", "filter") + sweep,
        pads,
    )
    finding = next(f for f in analyse(sheet).devices[0].findings if f.code == "passive-shows-gain")
    assert finding.severity == "fault"


def test_an_edge_outside_the_sweep_makes_bounds(tmp_path):
    f = np.linspace(21.1e6, 25e6, 401)
    targets = (
        '[device.targets]\nbandwidth = { min = "500 kHz" }\nloaded_q = { max = 20 }\n'
        'lower_edge = { min = "20.9 MHz" }\n'
    )
    sweep = '[[device.sweep]]\nfile = "x.s2p"\n'
    # A network: an amplifier swept at one drive alone would have bounds for another reason too.
    sheet = bench(
        tmp_path / "b", {"x.s2p": (f, single_tuned(f))}, SHEET.replace("amplifier", "network") + targets + sweep
    )
    device = analyse(sheet).devices[0]
    bounds = {key: device.figures[key].bound for key in ("lower_edge", "upper_edge", "bandwidth", "loaded_q")}
    assert bounds == {"lower_edge": "at most", "upper_edge": None, "bandwidth": "at least", "loaded_q": "at most"}
    assert device.figures["bandwidth"].value < 21.4e6 / 25
    assert "edge-outside-sweep" in codes(device)
    verdicts = {target.figure: target.verdict for target in device.targets}
    # The band is at least 728 kHz, which meets a minimum of 500 kHz; where the lower edge is, nobody knows.
    assert verdicts == {"bandwidth": "met", "loaded_q": "undecided", "lower_edge": "undecided"}
    assert all(target.advice for target in device.targets if target.verdict == "undecided")


def test_too_few_points_is_said(tmp_path):
    f = np.linspace(18e6, 25e6, 33)  # 4 in the band
    sweep = '[[device.sweep]]\nfile = "x.s2p"\n'
    sheet = bench(tmp_path / "b", {"x.s2p": (f, single_tuned(f))}, SHEET + sweep)
    device = analyse(sheet).devices[0]
    assert "too-few-points" in codes(device)
    assert_allclose(device.figures["bandwidth"].value, 21.4e6 / 25, rtol=0.02, atol=0)


def test_a_window_with_no_sample_is_a_fault_of_the_sheet(tmp_path):
    device = 'window = ["40 MHz", "50 MHz"]\n[[device.sweep]]\nfile = "x.s2p"\n'
    sheet = bench(tmp_path / "b", {"x.s2p": (FREQUENCY, single_tuned(FREQUENCY))}, SHEET + device)
    with pytest.raises(SheetError, match=r"device\[1\]\.window: no sample of x\.s2p lies between 40 MHz and 50 MHz"):
        analyse(sheet)


def test_all_faulty_sweeps_are_named_at_once(tmp_path):
    sweeps = '[[device.sweep]]\nfile = "x.s2p"\n[[device.sweep]]\nfile = "y.s2p"\n'
    named = {name: (FREQUENCY, single_tuned(FREQUENCY)) for name in ("x.s2p", "y.s2p")}
    sheet = bench(tmp_path / "b", named, SHEET + sweeps)
    for name in named:
        (tmp_path / "b" / name).write_text("# MHz S RI R 50\n1 2 3\n", encoding="utf-8")
    with pytest.raises(FaultsError) as caught:
        analyse(sheet)
    assert [type(fault) for fault in caught.value.faults] == [SweepFileError, SweepFileError]
    assert isinstance(caught.value, BenchtoolError)


def test_unknown_source_level_is_said(tmp_path):
    sweep = '[[device.sweep]]\nfile = "x.s2p"\n'
    sheet = bench(
        tmp_path / "b",
        {"x.s2p": (FREQUENCY, single_tuned(FREQUENCY))},
        SHEET.replace("source_dbm = -10.0", "") + sweep,
    )
    device = analyse(sheet).devices[0]
    assert "source-level-unknown" in codes(device)
    assert device.sweeps[0].drive_dbm is None


@pytest.mark.parametrize(("limit", "damage", "severity"), [(12.0, 30.0, "caution"), (-5.0, 11.0, "fault")])
def test_level_at_port_2_is_watched(tmp_path, limit, damage, severity):
    # -10 dBm into a device of 20 dB: +10 dBm at port 2.
    analyzer = f"[analyzer]\nsource_dbm = -10.0\nport2_compression_dbm = {limit}\nport2_damage_dbm = {damage}\n"
    device = '[[device]]\nname = "d"\nkind = "amplifier"\n[[device.sweep]]\nfile = "x.s2p"\n'
    sheet = bench(tmp_path / "b", {"x.s2p": (FREQUENCY, single_tuned(FREQUENCY))}, analyzer + device)
    finding = next(f for f in analyse(sheet).devices[0].findings if f.code == "receiver-near-limit")
    assert finding.severity == severity


def test_a_level_near_the_limit_is_quiet_where_the_same_drive_was_swept_with_more_output_pad(tmp_path):
    analyzer = "[analyzer]\nsource_dbm = -10.0\nport2_compression_dbm = 12.0\nport2_damage_dbm = 30.0\n"
    pads = "[pads.d]\nloss_db = 10.0\n[pads.e]\nloss_db = 1.5\n"
    device = '[[device]]\nname = "d"\nkind = "amplifier"\n[[device.sweep]]\nfile = "x.s2p"\n'

    def near(pad, db):
        sweeps = {"x.s2p": single_tuned(FREQUENCY), "y.s2p": single_tuned(FREQUENCY, 10.0 * 10 ** (-db / 20))}
        entry = f'[[device.sweep]]\nfile = "y.s2p"\noutput_pads = ["{pad}"]\n'
        named = {name: (FREQUENCY, s21) for name, s21 in sweeps.items()}
        found = analyse(bench(tmp_path / pad, named, analyzer + device + entry, pads)).devices[0].findings
        return {finding.sweep for finding in found if finding.code == "receiver-near-limit"}

    assert near("d", 10.0) == set()  # y: 0 dBm at port 2, out of the receiver's reach
    assert near("e", 1.5) == {"x.s2p"}  # y: 8.5 dBm, not near the limit itself but not out of the receiver's reach


def test_inputs_are_never_changed(tmp_path):
    copy = tmp_path / "bench"
    shutil.copytree(SAMPLE, copy)

    def state():
        return {p: (p.read_bytes(), p.stat().st_mtime_ns) for p in sorted(copy.rglob("*")) if p.is_file()}

    before = state()
    analyse(load_sheet(copy), trials=50)
    assert state() == before


def test_a_sweep_of_the_turned_device_completes_all_four_parameters(tmp_path):
    # A two-port swept one way each way through reflecting measured pads: exact removal, against the device itself.
    rng = np.random.default_rng(8)

    def smooth(level):
        u = np.linspace(-1, 1, FREQUENCY.size)
        return level * np.exp(1j * (rng.uniform(0, 6) + rng.uniform(-1, 1) * u)) * (1 + 0.2 * u)

    device = np.array([[smooth(0.3), smooth(0.05)], [smooth(4.0), smooth(0.4)]])
    pads = [np.array([[smooth(0.06), smooth(0.5)], [smooth(0.5), smooth(0.05)]]) for _ in range(2)]
    folder = tmp_path / "b"
    folder.mkdir()
    for name, pad in zip(("p.s2p", "q.s2p"), pads, strict=True):
        (folder / name).write_text(format_sweep(Sweep(name, FREQUENCY, pad)), encoding="utf-8")
    turned = device[::-1, ::-1]
    for name, inside in (("forward.s2p", device), ("turned.s2p", turned)):
        shown = cascade(cascade(pads[0], inside), pads[1])
        shown[0, 1] = shown[1, 1] = 0
        (folder / name).write_text(format_sweep(Sweep(name, FREQUENCY, shown)), encoding="utf-8")
    (folder / "bench.toml").write_text(
        'version = 1\n[pads.p]\nfile = "p.s2p"\n[pads.q]\nfile = "q.s2p"\n[analyzer]\nsource_dbm = -40\n'
        '[[device]]\nname = "d"\nkind = "amplifier"\ndesign_frequency = "21 MHz"\n'
        "[device.targets]\nstability_mu = { min = 1 }\n"
        '[[device.sweep]]\nfile = "forward.s2p"\nreversed = "turned.s2p"\ninput_pads = ["p"]\noutput_pads = ["q"]\n',
        encoding="utf-8",
    )
    result = analyse(load_sheet(folder), trials=100).devices[0]
    assert_allclose(result.sweeps[0].sweep.s, device, rtol=0, atol=1e-9)
    at = int(np.argmin(np.abs(FREQUENCY - 21e6)))
    near = stability(device)
    for key, expected in (("stability_k", near.k), ("stability_mu", near.mu)):
        assert_allclose(result.figures[key].value, np.interp(21e6, FREQUENCY, expected), rtol=1e-4, atol=0)
    assert_allclose(result.figures["reverse_isolation"].value, -20 * np.log10(abs(device[0, 1, at])), rtol=0, atol=0.01)
    assert "joined-sweep" in codes(result)


def test_stability_is_refused_where_s12_was_not_measured(tmp_path):
    sweep = '[device.targets]\nstability_mu = { min = 1 }\n[[device.sweep]]\nfile = "x.s2p"\n'
    sheet = bench(tmp_path / "b", {"x.s2p": (FREQUENCY, single_tuned(FREQUENCY))}, SHEET + sweep)
    device = analyse(sheet, trials=50).devices[0]
    assert device.figures["stability_mu"].value is None
    assert device.targets[0].verdict == "undecided"
    assert any(f.code == "one-path" and "stability_mu" in f.message for f in device.findings)


def test_what_noise_adds_to_a_peak_is_taken_out(tmp_path):
    # The highest point of a noisy flat top reads high, and trials that add noise again read it higher still, by about
    # as much: left in, the middle of the interval would lie half a standard uncertainty above the value.
    zeros, poles, gain = signal.buttap(4)
    clean = 10.0 * signal.freqs_zpk(zeros, poles, gain, 2.0 * (FREQUENCY - 21.4e6) / 1.2e6)[1]
    sheet = (
        "[analyzer]\nsource_dbm = -10.0\nreading_db = 0.0\nport_match_db = 80\ndirectivity_db = 80\n"
        '[[device]]\nname = "d"\nkind = "filter"\ndesign_frequency = "21.4 MHz"\n[[device.sweep]]\nfile = "x.s2p"\n'
    )
    above = []
    for seed in range(12):
        rng = np.random.default_rng(seed)
        noise = 0.3 / np.sqrt(2.0) * (rng.normal(size=401) + 1j * rng.normal(size=401))
        made = bench(tmp_path / str(seed), {"x.s2p": (FREQUENCY, clean + noise)}, sheet)
        peak = analyse(made).devices[0].figures["peak_gain"]
        above.append((0.5 * (peak.low + peak.high) - peak.value) / peak.standard_uncertainty)
    assert np.mean(above) < 0.25
