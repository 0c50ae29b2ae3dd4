"""The next sweeps: only pads of the stock, no level above a limit, and each settles what the session left open."""

import importlib.util
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.pad_stock import port2_limit_dbm, possible_lines
from benchtool.pads import PadBank
from benchtool.planning import plan_next, reference_finding
from benchtool.sheet import Analyzer

BENCHMARKS = Path(__file__).parent / "benchmarks"
SOURCE_DBM = -8.0


def load_benches():
    sys.path.insert(0, str(BENCHMARKS))
    try:
        spec = importlib.util.spec_from_file_location("bench_compression", BENCHMARKS / "bench_compression.py")
        module = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(module)
    finally:
        sys.path.remove(str(BENCHMARKS))
    return module


BENCHES = load_benches()


def planned(seed, cause, snr=45.0):
    made = BENCHES.make_bench(seed, cause)
    study = BENCHES.study(made)
    return made, study, plan_next(made.sheet, PadBank.of(made.sheet), made.entries, study, snr)


def first_with(cause, code, seeds=range(60)):
    """The first bench of a cause that the tool names so."""
    for seed in seeds:
        made, study, plan = planned(seed, cause)
        if study.verdict.code == code:
            return made, study, plan
    pytest.fail(f"no bench with {code}")


@pytest.mark.parametrize("cause", ["clean", "output", "input", "pad", "receiver", "noise", "drift"])
@pytest.mark.parametrize("seed", [3, 14])
def test_no_plan_passes_a_limit_or_the_stock(cause, seed):
    made, study, plan = planned(seed, cause)
    assert len(plan) <= 3
    limit = made.sheet.analyzer.port2_compression_dbm
    for sweep in plan:
        pads = (*sweep.input_pads, *sweep.output_pads)
        assert len(set(pads)) == len(pads) and set(pads) <= set(made.sheet.pads)
        assert sweep.input_pads[0] == "b10" and sweep.output_pads[0] == "c10"  # calibrated pads stay, at the analyzer
        into = sum(made.sheet.pads[pad].loss_db for pad in sweep.input_pads)
        out = sum(made.sheet.pads[pad].loss_db for pad in sweep.output_pads)
        gain = float(np.max(study.table.gain_db))
        assert_allclose(sweep.drive_dbm, SOURCE_DBM - into, rtol=0, atol=1e-9)  # dBm
        assert_allclose(sweep.port2_dbm, SOURCE_DBM - into + gain - out, rtol=0, atol=1e-9)
        doubt = 0.5 + 0.3 * len(pads)
        assert_allclose(sweep.headroom_db, limit - sweep.port2_dbm - doubt, rtol=0, atol=1e-9)
        assert sweep.headroom_db >= 0.0
        assert any("power rating" in caution for caution in sweep.cautions)
        assert sweep.settles


def test_damage_limit_keeps_ten_decibels_away():
    made, study, _ = planned(3, "clean")
    analyzer = Analyzer(source_dbm=SOURCE_DBM, source_tolerance_db=0.5, port2_damage_dbm=0.0)
    sheet = made.sheet.model_copy(update={"analyzer": analyzer})
    assert port2_limit_dbm(sheet) == -10.0
    lines = list(possible_lines(sheet, PadBank.of(sheet), made.entries, study.table))
    assert lines and all(line.port2 + line.doubt_db <= -10.0 for line in lines)
    # Some line the stock allows must have been refused, or the limit was never felt.
    free = made.sheet.model_copy(update={"analyzer": analyzer.model_copy(update={"port2_damage_dbm": 60.0})})
    assert len(list(possible_lines(free, PadBank.of(free), made.entries, study.table))) > len(lines)


def test_no_stated_limit_keeps_to_the_levels_of_the_session():
    made, study, _ = planned(3, "clean")
    sheet = made.sheet.model_copy(update={"analyzer": Analyzer(source_dbm=SOURCE_DBM)})
    highest = float(np.max(study.table.drive_dbm + study.table.gain_db - study.table.output_loss_db[:, None]))
    lines = list(possible_lines(sheet, PadBank.of(sheet), made.entries, study.table))
    assert lines and all(line.port2 <= highest for line in lines)
    plan = plan_next(sheet, PadBank.of(sheet), made.entries, study)
    assert all(any("no limit of port 2" in caution for caution in sweep.cautions) for sweep in plan)


def test_receiver_overload_asks_for_output_pad_at_the_same_drive():
    made, _study, plan = first_with("receiver", "receiver-overload")
    strongest = max(made.entries, key=lambda entry: -sum(made.sheet.pads[p].loss_db for p in entry.input_pads))
    assert plan[0].input_pads == strongest.input_pads
    assert len(plan[0].output_pads) > 1
    assert "receiver" in plan[0].settles


def test_input_or_pad_asks_for_a_line_on_which_the_two_differ():
    made, _study, plan = first_with("input", "input-limited-or-pad")
    split = next(sweep for sweep in plan if "which cause" in sweep.settles)
    taken = {(entry.input_pads, entry.output_pads) for entry in made.entries}
    assert (split.input_pads, split.output_pads) not in taken
    assert "limits at its input" in split.settles and "is off" in split.settles


def test_drift_asks_for_the_reference_again():
    made, study, plan = first_with("drift", "reference-not-repeating")
    line = next(entry for entry in made.entries if entry.name == study.onset.reference.file)
    assert (plan[0].input_pads, plan[0].output_pads) == (line.input_pads, line.output_pads)
    assert "again" in plan[0].settles


def test_unproven_reference_asks_for_less_drive_and_says_how_much_it_reads_low():
    made, study, _ = first_with("output", "output-limited")
    low = replace(study.onset.reference.reads_low_db, value=0.2, low=0.05, high=0.4)
    proof = replace(study.onset.reference, proven=False, reads_low_db=low)
    study = replace(study, onset=replace(study.onset, reference=proof))
    now = float(np.mean(study.table.drive_dbm[study.table.files.index(proof.file)]))
    bank = PadBank.of(made.sheet)
    plan = plan_next(made.sheet, bank, made.entries, study, 45.0)
    lower = next(sweep for sweep in plan if "small-signal" in sweep.settles)
    assert lower.drive_dbm < now - 1.0
    finding = reference_finding(study.onset, study.verdict, plan)
    assert finding.code == "drive-unproven"
    assert "0.20 dB (0.05 to 0.40 dB)" in finding.message and lower.input_pads[-1] in finding.advice
    noisy = plan_next(made.sheet, bank, made.entries, study, 31.0)
    quiet = next(sweep for sweep in noisy if "small-signal" in sweep.settles)
    assert any("noise will outweigh" in caution for caution in quiet.cautions)


def test_proven_reference_is_said_to_be():
    _, study, plan = planned(3, "clean")
    assert reference_finding(study.onset, study.verdict, plan).code == "drive-proven"


def test_wide_onset_asks_for_a_drive_near_it():
    for seed in range(80):
        _, study, plan = planned(seed, "input")
        estimate = study.onset.input_p1db_dbm
        wide = estimate.bound is None and estimate.high is not None and estimate.high - estimate.low > 4.0
        near = [sweep for sweep in plan if "1 dB point, now" in sweep.settles]
        if wide and near:
            drives = np.mean(study.table.drive_dbm, axis=1)
            assert abs(near[0].drive_dbm - estimate.value) < 10.0
            assert np.min(np.abs(drives - near[0].drive_dbm)) > 1.5
            return
    pytest.fail("no bench left its 1 dB point wide")


def test_unknown_source_level_gives_no_levels_and_says_so():
    made, study, _ = planned(3, "input")
    entries = [entry.model_copy(update={"source_dbm": None}) for entry in made.entries]
    sheet = made.sheet.model_copy(update={"analyzer": Analyzer()})
    table = replace(study.table, levels_known=False, drive_dbm=study.table.drive_dbm - SOURCE_DBM)
    plan = plan_next(sheet, PadBank.of(sheet), entries, replace(study, table=table))
    for sweep in plan:
        assert sweep.drive_dbm is None and sweep.port2_dbm is None and sweep.headroom_db is None
        assert any("source level is not known" in caution for caution in sweep.cautions)


def test_a_single_sweep_asks_for_ten_decibels_less_drive():
    made = BENCHES.make_bench(2, "clean")
    made.entries, made.sweeps = made.entries[-1:], made.sweeps[-1:]
    study = BENCHES.study(made)
    plan = plan_next(made.sheet, PadBank.of(made.sheet), made.entries, study, 45.0)
    now = float(study.table.drive_dbm[0, 0])
    assert_allclose(plan[0].drive_dbm, now - 10.0, rtol=0, atol=1e-9)  # dBm: a10 is in stock
    assert "small-signal" in plan[0].settles
