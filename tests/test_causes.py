"""Causes of a gain change told apart, and the onset of compression, on benches whose truth is known."""

import importlib.util
import re
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.cause_findings import cause_finding
from benchtool.causes import find_cause, set_aside
from benchtool.compression_study import onset_figures, study_compression
from benchtool.drive_table import DriveTable, PadDoubt, drive_table
from benchtool.limiting import Law
from benchtool.onset import estimate_onset
from benchtool.onset_belief import Allowances, log_likelihood

BENCHMARKS = Path(__file__).parent / "benchmarks"
AT_HZ = 21.4e6
NODES = np.linspace(20.4e6, 22.4e6, 15)
SHAPE_DB = 30.0 - 10.0 * np.log10(1.0 + ((NODES - AT_HZ) / 0.2e6) ** 2)


def load(name):
    sys.path.insert(0, str(BENCHMARKS))
    try:
        spec = importlib.util.spec_from_file_location(name, BENCHMARKS / f"{name}.py")
        module = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(module)
    finally:
        sys.path.remove(str(BENCHMARKS))
    return module


def pad(name, loss, reads, drives, width=0.3):
    return PadDoubt(name, loss, width / np.sqrt(3.0), np.array(reads, float), np.array(drives, float))


def table(drives, drop=None, *, offsets=None, output_pads=None, pads=(), u=0.05, noise=0.02, source=0.5, limit=10.0):
    """A table of noise-free sweeps: drops (k, j), flat offsets (k,), doubts as a good bench has them."""
    k = len(drives)
    drop = np.zeros((k, NODES.size)) if drop is None else np.broadcast_to(drop, (k, NODES.size))
    gain = SHAPE_DB - drop + (0.0 if offsets is None else np.array(offsets, float)[:, None])
    out = np.full(k, 10.0) if output_pads is None else np.array(output_pads, float)
    return DriveTable(
        files=tuple(f"s{i}.s2p" for i in range(k)),
        lines=tuple((-8.0, (f"{d:g}",), (f"{o:g}",)) for d, o in zip(drives, out, strict=True)),
        at_hz=AT_HZ,
        frequency_hz=NODES,
        gain_db=gain,
        noise_db=np.full(gain.shape, noise),
        buried=np.zeros(k),
        drive_dbm=np.repeat(np.array(drives, float)[:, None], NODES.size, axis=1),
        output_loss_db=out,
        design_gain_db=gain[:, 7],
        design_noise_db=np.full(k, noise / 3),
        design_phase_deg=np.linspace(0.0, 2.0 * (k - 1), k),
        reading_u_db=np.full(k, u),
        pads=tuple(pads),
        source_half_width_db=source,
        port2_compression_dbm=limit,
        levels_known=True,
    )


def limited(drives, p1db, law, follows):
    drives = np.array(drives, float)[:, None]
    return law.drop_past_p1db(drives + (SHAPE_DB if follows == "output" else 0.0 * SHAPE_DB) - p1db)


DRIVES = (-48.0, -38.0, -28.0, -18.0)
LADDER = (
    pad("a20", 20.0, [-1, -1, 0, 0], [-1, -1, 0, 0]),
    pad("a10", 10.0, [-1, 0, -1, 0], [-1, 0, -1, 0]),
)


@pytest.mark.parametrize("law", [Law("rapp", 0.9), Law("rapp", 2.4), Law("rapp", 4.0), Law("tanh"), Law("cubic")])
def test_output_limited(law):
    seen = table(DRIVES, limited(DRIVES, 5.0, law, "output"), pads=LADDER, limit=20.0)
    verdict = find_cause(seen)
    assert verdict.code == "output-limited" and verdict.confidence > 0.95
    rival = verdict.rivals[0]
    assert_allclose(rival.value, 5.0, rtol=0, atol=0.3)  # dBm at the output
    finding = cause_finding(seen, verdict)
    assert finding.code == "output-limited" and "s3.s2p" in finding.message


@pytest.mark.parametrize("law", [Law("rapp", 3.0), Law("rapp", 5.0), Law("cubic")])
@pytest.mark.parametrize("drives", [(-56.0, -52.0, -50.0), (-54.0, -53.0, -52.0, -51.0, -50.0), (-60.0, -55.0, -50.0)])
@pytest.mark.parametrize("depth", [0.0, 0.5, 1.0, 2.0, 3.0, 4.0])
def test_a_hard_knee_is_not_passed_over(law, drives, depth):
    # Narrower than the first nodes of a search lie apart: wherever it falls between them, it is found.
    p1db = drives[-1] + 30.0 - depth
    verdict = find_cause(table(drives, limited(drives, p1db, law, "output"), limit=60.0))
    rival = next(rival for rival in verdict.rivals if rival.cause == "output-limited")
    assert verdict.probabilities["output-limited"] > 0.9
    assert_allclose(rival.value, p1db, rtol=0, atol=0.5)  # dBm at the output


@pytest.mark.parametrize("law", [Law("rapp", 1.2), Law("tanh"), Law("cubic")])
def test_input_limited_with_four_drives(law):
    seen = table(DRIVES, limited(DRIVES, -28.0, law, "input"), pads=LADDER)
    verdict = find_cause(seen)
    assert verdict.code == "input-limited"
    assert_allclose(sum(verdict.probabilities.values()), 1.0, rtol=1e-9, atol=0)


def test_two_flat_sweeps_say_input_or_pad():
    two = (-38.0, -18.0)
    pads = (pad("a20", 20.0, [-1, 0], [-1, 0]),)
    seen = table(two, offsets=[0.0, -2.0], pads=pads)
    verdict = find_cause(seen)
    assert verdict.code == "input-limited-or-pad"
    assert_allclose(verdict.pads[0].value_db, 18.0, rtol=0, atol=0.05)  # dB, read 2 dB high with the pad in
    finding = cause_finding(seen, verdict)
    assert "a20" in finding.message and "limits" in finding.message


def test_same_change_upward_is_no_limiting():
    two = (-38.0, -18.0)
    verdict = find_cause(table(two, offsets=[0.0, 2.0], pads=(pad("a20", 20.0, [-1, 0], [-1, 0]),)))
    assert verdict.probabilities["input-limited"] < 0.01
    assert verdict.code == "cause-unclear"  # pad or drift: two sweeps cannot tell


@pytest.mark.parametrize("off", [-2.0, 1.5, 3.0])
def test_pad_seen_in_two_sweeps_is_named_and_measured(off):
    seen = table(DRIVES, offsets=[-off, -off, 0.0, 0.0], pads=LADDER)
    verdict = find_cause(seen)
    assert verdict.code == "pad-value-suspect"
    best = verdict.pads[0]
    assert best.name == "a20" and best.stated_db == 20.0
    assert best.low_db < 20.0 + off < best.high_db
    assert_allclose(best.value_db, 20.0 + off, rtol=0, atol=0.15)


def test_receiver_is_told_by_output_pads():
    drives, out = (-38.0, -28.0, -18.0, -18.0), (10.0, 10.0, 10.0, 20.0)
    level = np.array(drives)[:, None] + SHAPE_DB - np.array(out)[:, None]
    drop = Law("rapp", 2.0).drop_past_p1db(level - 0.0)
    pads = (pad("a20", 20.0, [-1, 0, 0, 0], [-1, 0, 0, 0]), pad("d10", 10.0, [0, 0, 0, -1], [0, 0, 0, 0]))
    verdict = find_cause(table(drives, drop, output_pads=out, pads=pads, limit=-1.0))
    assert verdict.code == "receiver-overload"


def test_receiver_and_output_are_alike_when_output_pads_are():
    drives = (-38.0, -28.0, -18.0)
    drop = limited(drives, 10.0, Law("rapp", 2.0), "output")
    verdict = find_cause(table(drives, drop, limit=-1.0))
    assert verdict.code == "cause-unclear"
    assert min(verdict.probabilities["receiver-overload"], verdict.probabilities["output-limited"]) > 0.02


def test_sweep_taken_again_that_differs_did_not_repeat():
    drives = (-38.0, -38.0, -18.0)
    seen = table(drives, offsets=[0.0, 1.2, 0.1])
    verdict = find_cause(seen)
    assert verdict.code == "reference-not-repeating"
    assert verdict.odd_sweep == "s1.s2p"
    assert "s0.s2p and s1.s2p" in cause_finding(seen, verdict).message


def test_clean_bench_is_quiet_and_noise_is_named():
    seen = table(DRIVES, pads=LADDER, offsets=[0.1, -0.05, 0.05, 0.0])
    verdict = find_cause(seen)
    assert verdict.code == "clean" and cause_finding(seen, verdict) is None
    noisy = replace(seen, buried=np.array([0.5, 0.0, 0.0, 0.0]))
    verdict = find_cause(noisy)
    assert verdict.code == "noise-limited"
    assert "50%" in cause_finding(noisy, verdict).message


def test_two_causes_at_once_are_not_given_one_name():
    drop = limited(DRIVES, 5.0, Law("rapp", 2.0), "output")
    verdict = find_cause(table(DRIVES, drop, offsets=[3.0, 3.0, 0.0, 0.0], pads=LADDER, limit=20.0))
    assert verdict.code == "cause-unclear"


def test_two_causes_name_the_one_that_leads_and_its_misfit():
    drop = limited(DRIVES, 5.0, Law("rapp", 2.0), "output")
    seen = table(DRIVES, drop, offsets=[3.0, 3.0, 0.0, 0.0], pads=LADDER, limit=20.0)
    verdict = find_cause(seen)
    leads, p = max(verdict.probabilities.items(), key=lambda item: item[1])
    said = cause_finding(seen, verdict).message
    assert leads == "output-limited" and p > 0.9
    best = next(rival for rival in verdict.rivals if rival.cause == leads)
    assert f"that the device limits at its output is by far the likeliest ({p:.2f}), but no single cause" in said
    assert f"χ² {best.chi2:.0f} over 45 readings" in said


def test_changes_are_said_in_words():
    lower = table(DRIVES, limited(DRIVES, 5.0, Law("rapp", 2.0), "output"), pads=LADDER, limit=20.0)
    said = cause_finding(lower, find_cause(lower)).message
    assert "s3.s2p reads 5.98 dB lower than s0.s2p at 21.4 MHz and" in said and "dB lower at" in said
    assert "the drop follows the level at its output" in said
    higher = table(DRIVES, offsets=[-2.0, -2.0, 0.0, 0.0], pads=LADDER)
    said = cause_finding(higher, find_cause(higher)).message
    assert "reads 2.00 dB higher than s0.s2p" in said
    flat = table(DRIVES, limited(DRIVES, -28.0, Law("rapp", 1.2), "input"), pads=LADDER)
    said = cause_finding(flat, find_cause(flat)).message
    assert "1 dB point near −2" in said and not re.search(r"-\d", said)  # a real minus sign


def overloaded(drives, out):
    level = np.array(drives)[:, None] + SHAPE_DB - np.array(out)[:, None]
    pads = (
        pad("a20", 20.0, [-float(d < -30.0) for d in drives], [-float(d < -30.0) for d in drives]),
        pad("d10", 10.0, [-float(o > 10.0) for o in out], [0.0] * len(drives)),
    )
    drop = Law("rapp", 2.0).drop_past_p1db(level)
    return table(drives, drop, output_pads=out, pads=pads, limit=-1.0)


def test_overloaded_receiver_names_the_sweep_to_trust():
    seen = overloaded((-38.0, -28.0, -18.0, -18.0), (10.0, 10.0, 10.0, 20.0))
    finding = cause_finding(seen, find_cause(seen))
    assert finding.sweep == "s2.s2p"
    assert finding.advice == "trust s3.s2p, swept with 10 dB more output pad at the same drive"


def test_overloaded_receiver_asks_for_pad_where_none_was_tried():
    seen = overloaded((-38.0, -28.0, -18.0, -18.0), (10.0, 10.0, 10.0, 20.0)).only([0, 1, 2])
    told = replace(find_cause(overloaded((-38.0, -28.0, -18.0, -18.0), (10.0, 10.0, 10.0, 20.0))), code=None)
    finding = cause_finding(seen, replace(told, code="receiver-overload"))
    assert finding.advice.startswith("sweep again with 10 dB more output pad and enter it")


def test_too_little_output_pad_is_not_trusted_nor_asked_for_again():
    told = find_cause(overloaded((-38.0, -28.0, -18.0, -18.0), (10.0, 10.0, 10.0, 20.0)))
    seen = overloaded((-38.0, -28.0, -18.0, -18.0), (10.0, 10.0, 10.0, 12.0))
    advice = cause_finding(seen, replace(told, code="receiver-overload")).advice
    assert advice.startswith("take figures from a sweep with less level at port 2: s3.s2p had not enough output pad")


def measured_bench(seed, cause="clean"):
    bench = load("bench_compression")
    made = bench.make_bench(seed, cause)
    measured, bank = bench.measure(made)
    return made, drive_table(measured, made.entries, made.sheet, bank, made.design_hz)


def test_mismatch_cancels_between_sweeps_of_one_line_and_is_no_noise_of_nodes():
    met = set()
    for seed in range(40):
        made, seen = measured_bench(seed)
        assert seen.mismatch
        by_name = {entry.name: entry for entry in made.entries}
        lines = [by_name[file] for file in seen.files]
        for form in seen.mismatch:
            c = form.covariance
            assert np.all(np.linalg.eigvalsh(c) > -1e-12)
            for a, b in zip(*np.triu_indices(seen.sweeps, 1), strict=True):
                same = (lines[a].input_pads == lines[b].input_pads, lines[a].output_pads == lines[b].output_pads)
                met.add(same)
                left = c[a, a] + c[b, b] - 2.0 * c[a, b]
                if all(same):
                    assert_allclose(left, 0.0, rtol=0, atol=1e-12)  # dB²
                elif not any(same):
                    assert_allclose(left, c[a, a] + c[b, b], rtol=1e-9, atol=0)
        # Node noise is what the receiver adds, and ripple of 0.02 dB; mismatch of some 0.2 dB is not in it.
        assert np.min(seen.noise_db) < 0.03
        if len(met) == 4:
            return
    assert {(True, True), (False, True), (True, False)} <= met


def follow_the_output_tank(seen):
    """What mismatch a tuned port of unknown size may give: patterns that are not flat and not nothing at the design."""
    return [form for form in seen.mismatch if np.ptp(form.pattern) > 0.02 and form.at_design != 0.0]


def test_resonant_mismatch_of_the_output_is_as_large_as_assumed_and_cancels_where_output_pads_are_alike():
    u = 20.0 / np.log(10.0) / np.sqrt(2.0) * 10.0 ** (-30.5 / 20.0) * 10.0 ** (-3.0 / 20.0)  # dB: port and output
    alike = different = 0
    for seed in range(40):
        made, seen = measured_bench(seed)
        if not any(entry.input_pads == ("b10",) for entry in made.entries):
            continue  # without an unpadded sweep the input is not known either
        by_name = {entry.name: entry for entry in made.entries}
        padded = np.array([len(by_name[file].output_pads) > 1 for file in seen.files])
        forms = follow_the_output_tank(seen)
        assert forms
        for form in forms:
            own = np.diag(form.covariance)
            assert_allclose(own[~padded], u**2, rtol=1e-6, atol=0)  # dB²
            if np.any(padded):
                different += 1
                assert np.min(own[padded]) > 1.5 * u**2  # d10 reflects more than the port behind 10 dB
                assert_allclose(form.between[np.ix_(padded, padded)], np.max(own) + u**2, rtol=1e-6, atol=0)
            else:
                alike += 1
                assert_allclose(form.between, 0.0, rtol=0, atol=1e-12)
    assert alike >= 3 and different >= 3


def test_resonant_patterns_have_the_size_of_a_tank_of_one_circuit_or_of_two():
    # |1/(1 + jx)|² is the selectivity in power of one circuit, and its root where two share the selectivity: the mean.
    for seed in range(12):
        made, seen = measured_bench(seed)
        sweep = next(sweep for sweep in made.sweeps if sweep.name == seen.files[0])
        entry = next(entry for entry in made.entries if entry.name == seen.files[0])
        added = sum(made.sheet.pads[name].loss_db for name in (*entry.input_pads[1:], *entry.output_pads[1:]))
        peak_db = 20.0 * np.log10(np.max(np.abs(sweep.s21))) + added
        level = 10.0 ** ((seen.gain_db[0] - peak_db) / 10.0)
        found = sum(form.pattern**2 for form in follow_the_output_tank(seen))
        assert_allclose(found, 0.5 * (level + np.sqrt(level)), rtol=0, atol=0.01)


def test_one_sweep_says_nothing():
    assert find_cause(table((-30.0,))) is None
    onset = estimate_onset(table((-30.0,)), "s0.s2p")
    assert onset.basis == "none" and onset.input_p1db_dbm.value is None and not onset.reference.proven


def test_cubic_third_order_intercept_gives_p1db():
    # Input P1dB lies 9.6357 dB below the input third-order intercept (cubic law, closed form).
    drives = tuple(np.arange(-40.0, -17.9, 2.0))
    drop = limited(drives, -11.0 - 9.6357, Law("cubic"), "input")
    onset = estimate_onset(table(drives, drop, u=0.005, noise=0.003, source=0.0), "s0.s2p")
    assert onset.basis == "interpolated"
    assert_allclose(onset.input_p1db_dbm.value, -20.6357, rtol=0, atol=0.1)  # dBm


def test_output_p1db_is_input_p1db_plus_gain_less_one():
    drives = tuple(np.arange(-40.0, -17.9, 2.0))
    drop = limited(drives, -24.0, Law("rapp", 2.0), "input")
    onset = estimate_onset(table(drives, drop, u=0.005, noise=0.003, source=0.0), "s0.s2p")
    assert_allclose(
        onset.output_p1db_dbm.value,
        onset.input_p1db_dbm.value + onset.small_signal_gain_db.value - 1.0,
        rtol=0,
        atol=0.02,
    )
    figures = onset_figures(onset)
    assert_allclose(figures["input_p1db"].value, -24.0, rtol=0, atol=0.1)
    assert figures["input_p1db"].unit == "dBm" and figures["output_p1db"].low < figures["output_p1db"].value


def test_wide_straddle_gives_an_interval_that_holds_soft_and_hard_knees():
    # 0 and 8 dB down at drives 20 dB apart: p is not fixed, so both knees must lie inside.
    two = (-38.0, -18.0)
    found = []
    for p in (0.8, 4.5):
        law = Law("rapp", p)
        p1db = -18.0 - float(law.excess_over_p1db(8.0))
        onset = estimate_onset(table(two, limited(two, p1db, law, "input")), "s0.s2p")
        assert onset.basis == "fitted"
        assert onset.input_p1db_dbm.low < p1db < onset.input_p1db_dbm.high
        found.append(onset.input_p1db_dbm)
    assert found[0].high - found[0].low > 3.0


def test_uncompressed_sweeps_give_a_bound():
    onset = estimate_onset(table((-48.0, -38.0, -28.0)), "s0.s2p")
    assert onset.basis == "bound" and onset.input_p1db_dbm.bound == "at least"
    # The highest drive, -28 dBm, agrees within 0.07 dB: every law would show its 1 dB point there, and even a hard
    # limiter (p = 5) shows nothing 6 dB below it.
    assert -28.0 < onset.input_p1db_dbm.value < -22.0
    assert onset.safe_drive_dbm.low < onset.input_p1db_dbm.value
    assert onset.reference.proven


def test_bound_falls_with_doubt():
    sure = estimate_onset(table((-38.0, -28.0), u=0.02), "s0.s2p").input_p1db_dbm.value
    unsure = estimate_onset(table((-38.0, -28.0), u=0.5), "s0.s2p").input_p1db_dbm.value
    assert unsure < sure - 1.0


def test_bound_moves_as_smoothly_as_the_doubt():
    # Not in steps of the grid that 1 dB points are looked for on, which is a decibel wide.
    doubts = np.linspace(0.10, 0.11, 6)
    bounds = [estimate_onset(table((-38.0, -28.0), u=u), "s0.s2p").input_p1db_dbm.value for u in doubts]
    steps = -np.diff(bounds)
    assert np.all(steps > 0.0)
    assert np.max(steps) < 3.0 * np.min(steps)


@pytest.mark.parametrize("u", [0.02, 0.05, 0.1, 0.2, 0.5])
@pytest.mark.parametrize("drives", [(-38.0, -28.0), (-48.0, -38.0, -28.0), (-38.0, -33.0)])
def test_bound_is_where_a_fine_grid_has_it(monkeypatch, drives, u):
    # The likelihood bends where it crosses the limit: a chord between two nodes would give too high a bound.
    bound = estimate_onset(table(drives, u=u), "s0.s2p").input_p1db_dbm.value
    monkeypatch.setattr("benchtool.onset_belief._GRIDS", (6001, 81))
    fine = estimate_onset(table(drives, u=u), "s0.s2p").input_p1db_dbm.value
    assert_allclose(bound, fine, rtol=0, atol=0.025)  # dB; a chord is up to 0.06 off


def test_suspect_pad_leaves_the_onset_open():
    two = (-38.0, -18.0)
    seen = table(two, offsets=[0.0, -2.0], pads=(pad("a20", 20.0, [-1, 0], [-1, 0]),))
    taken = estimate_onset(seen, "s0.s2p")
    open_ = estimate_onset(seen, "s0.s2p", allow=Allowances({"a20": 6.0}))
    assert taken.basis == "fitted" and open_.basis == "bound"
    assert open_.input_p1db_dbm.value < taken.input_p1db_dbm.value


def test_reference_that_reads_low_is_said_to():
    drives = (-30.0, -20.0)
    drop = limited(drives, -26.0, Law("rapp", 1.5), "input")
    proof = estimate_onset(table(drives, drop), "s0.s2p").reference
    truth = float(Law("rapp", 1.5).drop_past_p1db(np.array(-4.0)))
    assert not proof.proven
    assert proof.reads_low_db.low < truth < proof.reads_low_db.high


def test_points_and_curve():
    drives = (-40.0, -30.0, -24.0, -18.0)
    law = Law("rapp", 2.0)
    onset = estimate_onset(table(drives, limited(drives, -24.0, law, "input")), "s0.s2p")
    for point, drive in zip(onset.points, drives, strict=True):
        drop = float(law.drop_past_p1db(np.array(drive + 24.0)))
        assert point.compression_db.low - 0.01 <= drop <= point.compression_db.high + 0.01
        assert_allclose(point.uncompressed_gain_db, 30.0, rtol=0, atol=0.35)
    assert_allclose(onset.points[3].phase_change_deg.value, 6.0, rtol=0, atol=1e-9)
    assert_allclose(onset.points[3].phase_deg_per_db, 2.0 / 6.0, rtol=1e-9, atol=0)
    low, middle, high = onset.curve_gain_db
    assert np.all(low <= middle) and np.all(middle <= high) and np.all(np.diff(middle) <= 0.02)


def test_many_copies_go_through_in_one_call():
    seen = table(DRIVES, limited(DRIVES, -28.0, Law("rapp", 2.0), "input"), pads=LADDER)
    drop = np.array([np.zeros(4), seen.design_gain_db[0] - seen.design_gain_db])
    copies = seen.design_gain_db + np.linspace(-0.2, 0.2, 6).reshape(2, 3, 1) * np.arange(4)
    whole, gain, _ = log_likelihood(seen, copies, drop, np.zeros_like(drop))
    one, gain_one, _ = log_likelihood(seen, copies[1, 2], drop, np.zeros_like(drop))
    assert whole.shape == gain.shape == (2, 3, 2)
    assert_allclose(whole[1, 2], one, rtol=1e-12, atol=0)
    assert_allclose(gain[1, 2], gain_one, rtol=1e-12, atol=0)


def test_random_benches_short():
    bench = load("bench_compression")
    found = bench.run(28, 5000)
    right = found["told"] + found["cannot"]
    good = sum(count for (_, ok), count in right.items() if ok)
    assert good >= 15 and good >= 0.9 * sum(right.values())
    assert not any(found["alarms"])
    held = [one for law in found["cover"].values() for one in law] + found["bounds"]
    assert len(held) >= 5 and np.mean(held) >= 0.85


def test_study_of_a_bench_from_its_files():
    bench = load("bench_compression")
    made = bench.make_bench(1, "output")
    study = bench.study(made)
    assert study.verdict.code == "output-limited"
    estimate = study.onset.input_p1db_dbm
    assert estimate.low < made.input_p1db_dbm < estimate.high
    assert [f.code for f in study.findings] == ["output-limited"]
    assert study_compression is bench.study_compression


def test_pad_value_from_files_holds_what_the_pad_truly_loses():
    bench = load("bench_compression")
    named = 0
    for seed in range(40):
        made = bench.make_bench(seed, "pad")
        verdict = bench.study(made).verdict
        if verdict.code != "pad-value-suspect" or bench.can_tell(made) is not True:
            continue
        suspect = verdict.pads[0]
        truth = made.pad_losses_db[suspect.name]
        assert abs(truth - suspect.stated_db) > 0.5 and abs(suspect.value_db - truth) < 0.5
        named += 1
    assert named >= 3


def test_signs_of_pads_in_the_table_of_real_sweeps():
    bench = load("bench_compression")
    for seed in range(20):
        made = bench.make_bench(seed, "output")
        study = bench.study(made)
        by_name = {entry.name: entry for entry in made.entries}
        entries = [by_name[file] for file in study.table.files]
        for doubt in study.table.pads:
            into = np.array([doubt.name in entry.input_pads for entry in entries], float)
            added = np.array(
                [doubt.name in (*entry.input_pads[1:], *entry.output_pads[1:]) for entry in entries], float
            )
            np.testing.assert_array_equal(doubt.drives, -into)  # more loss, less drive
            np.testing.assert_array_equal(doubt.reads, -added)  # more loss than is taken out: gain reads low
        assert np.all(np.diff(study.table.drive_dbm[:, 0]) >= 0.0)


def test_pad_in_front_of_a_saturated_device_does_not_bear_on_its_gain():
    # A decibel more loss than stated is a decibel less drive, and a decibel less compression: the reading stays. So a
    # pad's tolerance excuses an odd reading of a linear device, not of a saturated one.
    three = (-38.0, -28.0, -18.0)
    doubted = table(three, pads=(pad("a10", 10.0, [0, -1, 0], [0, -1, 0], width=2.0),))
    odd = np.array([30.0, 29.0, 30.0])
    linear = np.zeros((1, 3))
    saturated = np.array([[0.0, 1.0, 0.0]])
    excused, _, _ = log_likelihood(doubted, odd, np.zeros((1, 3)), linear)
    refused, _, _ = log_likelihood(doubted, odd, np.zeros((1, 3)), saturated)
    without, _, _ = log_likelihood(table(three), odd, np.zeros((1, 3)), linear)
    assert excused > refused + 100.0
    assert_allclose(refused, without, rtol=1e-9, atol=0)


def test_doubt_about_the_source_and_a_common_pad_widens_the_onset_by_its_own_width():
    drives = tuple(np.arange(-40.0, -17.9, 2.0))
    drop = limited(drives, -24.0, Law("rapp", 2.0), "input")
    k = len(drives)
    always = (pad("b10", 10.0, [0] * k, [-1] * k, width=1.0),)
    for pads, source, half in (((), 1.0, 1.0), (always, 0.0, 1.0)):
        found = estimate_onset(table(drives, drop, u=0.003, noise=0.003, source=source, pads=pads), "s0.s2p")
        width = found.input_p1db_dbm.high - found.input_p1db_dbm.low
        # A rectangular quantity of ± 1 dB lies in the middle 95 % of its width.
        assert_allclose(width, 2.0 * 0.95 * half, rtol=0.06, atol=0)


def test_change_beyond_tolerance_is_not_called_clean_though_it_is_still_possible():
    two = (-38.0, -18.0)
    pads = (pad("a20", 20.0, [-1, 0], [-1, 0]),)
    quiet = find_cause(table(two, offsets=[0.0, -0.25], pads=pads))
    loud = find_cause(table(two, offsets=[0.0, -0.75], pads=pads))
    assert quiet.code == "clean"
    assert loud.code != "clean" and 0.001 < loud.probabilities["clean"] < 0.5


def test_sweeps_are_set_aside_by_what_the_cause_explains():
    def aside(seen, reference):
        return dict(set_aside(seen, find_cause(seen), reference))

    restless = table((-38.0, -38.0, -18.0), offsets=[0.0, 1.2, 0.1])
    assert aside(restless, "s0.s2p") == {"s1.s2p": "did not repeat"}
    off = table(DRIVES, offsets=[-2.0, -2.0, 0.0, 0.0], pads=LADDER)
    assert aside(off, "s2.s2p") == {"s0.s2p": "pad a20 suspect", "s1.s2p": "pad a20 suspect"}
    verdict = find_cause(off)
    # 1.5 dB more than the pad accounts for, and the sweep is compressed as well.
    more = replace(off, gain_db=off.gain_db - np.array([[0.0], [1.5], [0.0], [0.0]]))
    assert dict(set_aside(more, verdict, "s2.s2p")) == {"s0.s2p": "pad a20 suspect"}
    limits = table(DRIVES, limited(DRIVES, 5.0, Law("rapp", 2.4), "output"), pads=LADDER, limit=20.0)
    assert aside(limits, "s0.s2p") == {}
