"""The next sweeps: only pads of the stock, no level above a limit, and each settles what the session left open."""

import importlib.util
import re
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.advice import reference_finding
from benchtool.pad_stock import Line, in_effect_taken, port2_limit_dbm, possible_lines
from benchtool.pads import PadBank
from benchtool.planning import plan_next
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


def gain_unseen(study, drive_dbm, low_db=None):
    """What a device may have in gain beyond what its sweeps show: what the reference reads low, up to its output."""
    known = study.onset.reference.reads_low_db.high
    low_db = low_db if low_db is not None else np.inf if known is None else known
    table = study.table
    most = np.max(table.drive_dbm + table.gain_db) + max(0.0, drive_dbm - np.max(table.drive_dbm))
    return min(low_db, max(0.0, most - drive_dbm - np.max(table.gain_db)))


def test_a_compressed_device_may_give_what_its_output_gave():
    # Gain that reads 12 dB low at the reference comes back at lower drive: the level must be counted with it.
    made, study, _ = planned(3, "output")
    analyzer = Analyzer(source_dbm=SOURCE_DBM, source_tolerance_db=0.5, port2_compression_dbm=-20.0)
    sheet = made.sheet.model_copy(update={"analyzer": analyzer})
    bank, table = PadBank.of(sheet), study.table
    plain = {(x.input_pads, x.output_pads) for x in possible_lines(sheet, bank, made.entries, table, 0.0)}
    wary = list(possible_lines(sheet, bank, made.entries, table, 12.0))
    assert wary and len(wary) < len(plain)
    for line in wary:
        truly = line.drive + np.max(table.gain_db) + gain_unseen(study, line.drive, 12.0)
        lost = sum(sheet.pads[pad].loss_db for pad in line.output_pads)
        assert truly - lost + 0.5 <= -20.0


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
        if "in the device's place" in sweep.settles:
            gain = -made.sheet.pads[study.verdict.pads[0].name].loss_db
        assert_allclose(sweep.drive_dbm, SOURCE_DBM - into, rtol=0, atol=1e-9)  # dBm
        assert_allclose(sweep.port2_dbm, SOURCE_DBM - into + gain - out, rtol=0, atol=1e-9)
        in_place = "in the device's place" in sweep.settles
        doubt = 0.5 + 0.3 * len(pads) * (not in_place) + (0.0 if in_place else gain_unseen(study, sweep.drive_dbm))
        assert_allclose(sweep.headroom_db, limit - sweep.port2_dbm - doubt, rtol=0, atol=1e-9)
        assert sweep.headroom_db >= 0.0
        assert any("power rating" in caution for caution in sweep.cautions)
        assert sweep.settles


def test_damage_limit_keeps_ten_decibels_away():
    made, study, _ = planned(3, "clean")
    analyzer = Analyzer(source_dbm=SOURCE_DBM, source_tolerance_db=0.5, port2_damage_dbm=0.0)
    sheet = made.sheet.model_copy(update={"analyzer": analyzer})
    assert port2_limit_dbm(sheet) == -10.0
    lines = list(possible_lines(sheet, PadBank.of(sheet), made.entries, study.table, 0.0))
    assert lines and all(line.port2 + line.doubt_db <= -10.0 for line in lines)
    # Some line the stock allows must have been refused, or the limit was never felt.
    free = made.sheet.model_copy(update={"analyzer": analyzer.model_copy(update={"port2_damage_dbm": 60.0})})
    assert len(list(possible_lines(free, PadBank.of(free), made.entries, study.table, 0.0))) > len(lines)


def test_no_stated_limit_keeps_to_the_levels_of_the_session():
    made, study, _ = planned(3, "clean")
    sheet = made.sheet.model_copy(update={"analyzer": Analyzer(source_dbm=SOURCE_DBM)})
    highest = float(np.max(study.table.drive_dbm + study.table.gain_db - study.table.output_loss_db[:, None]))
    lines = list(possible_lines(sheet, PadBank.of(sheet), made.entries, study.table, 0.0))
    assert lines and all(line.port2 <= highest for line in lines)
    plan = plan_next(sheet, PadBank.of(sheet), made.entries, study)
    assert all(any("no limit of port 2" in caution for caution in sweep.cautions) for sweep in plan)


def test_receiver_overload_asks_for_output_pad_at_the_same_drive():
    for seed in range(40):
        made, study, plan = planned(seed, "receiver")
        if study.verdict.code == "cause-unclear" and study.verdict.probabilities["receiver-overload"] > 0.1:
            break
    else:
        pytest.fail("no bench whose receiver is in question")
    drives = np.mean(study.table.drive_dbm, axis=1)
    relief = next(sweep for sweep in plan if "by the receiver" in sweep.settles)
    assert_allclose(relief.drive_dbm, np.max(drives), rtol=0, atol=1e-9)  # dBm
    assert len(relief.output_pads) > 1 and made.entries[-1].output_pads == ("c10",)


def test_receiver_that_was_relieved_already_is_not_relieved_again():
    made, study, plan = first_with("receiver", "receiver-overload")
    assert made.entries[-1].output_pads != ("c10",) and study.verdict.confidence >= 0.95
    assert not any("receiver" in sweep.settles for sweep in plan)


@pytest.mark.parametrize("cause", ["output", "input", "pad", "receiver"])
def test_no_line_in_effect_already_swept_is_proposed(cause):
    def losses(made, line):
        return [sum(made.sheet.pads[pad].loss_db for pad in side) for side in (line.input_pads, line.output_pads)]

    seen = 0
    for seed in range(8):
        made, _study, plan = planned(seed, cause)
        for sweep in plan:
            if "in the device's place" in sweep.settles or "again, twice" in sweep.settles:
                continue
            seen += 1
            apart = [np.abs(np.subtract(losses(made, sweep), losses(made, entry))) for entry in made.entries]
            assert all(np.max(each) > 0.5 for each in apart), (seed, sweep)
    assert seen > 0


def test_equal_total_pads_are_one_line_in_effect():
    made, _study, _plan = planned(3, "clean")
    bank = PadBank.of(made.sheet)
    entry = made.entries[0].model_copy(update={"input_pads": ("b10", "a20"), "output_pads": ("c10", "d10")})

    def taken(into, out, **update):
        return in_effect_taken(
            Line(into, out, 0.0, 0.0, 0.0, 0.0), [entry, entry.model_copy(update=update)], bank, made.design_hz
        )

    assert taken(("b10", "a20"), ("c10", "a10"))  # another pad of 10 dB
    assert not taken(("b10", "a20"), ("c10", "a10", "a3"))
    assert not taken(("b10", "a20", "a3"), ("c10", "d10"))


def test_gain_foretold_at_a_drive_already_swept_is_what_was_read_there():
    # A device limiting at its input reads the same at the same drive, whatever law and 1 dB point are guessed.
    compared = 0
    for seed in range(60):
        _, study, plan = planned(seed, "input")
        drives = np.mean(study.table.drive_dbm, axis=1)
        for sweep in plan:
            at = re.search(r"([\d.]+) dB if the device limits at its input", sweep.settles)
            same = np.flatnonzero(np.abs(drives - sweep.drive_dbm) < 0.01)
            if at and same.size == 1:
                assert_allclose(float(at[1]), study.table.design_gain_db[same[0]], rtol=0, atol=0.006)  # dB, as printed
                compared += 1
    assert compared >= 2


def test_gain_foretold_for_a_pad_that_is_off_is_what_its_true_loss_makes_of_it():
    # The device's gain is what the sweeps read with the pad's true loss taken out; a line through the pad reads it low
    # by what the pad loses beyond its stated value, for that is what the sheet takes out.
    through, past = 0, 0
    for seed in range(80):
        made, study, plan = planned(seed, "pad")
        for sweep in plan:
            said = re.search(r"([\d.]+) dB if pad (\w+) is off", sweep.settles)
            if said is None:
                continue
            name, table = said[2], study.table
            off = next(r.value for r in study.verdict.rivals if r.cause == "pad-value" and r.about == name)
            pad = next(pad for pad in table.pads if pad.name == name)
            true_gain = np.mean(table.design_gain_db - pad.reads * off)
            calibrated = (*made.sheet.calibration.input_pads, *made.sheet.calibration.output_pads)
            added = (*sweep.input_pads, *sweep.output_pads).count(name) - calibrated.count(name)
            assert_allclose(float(said[1]), true_gain - added * off, rtol=0, atol=0.006)  # dB, as printed
            through, past = through + (added != 0), past + (added == 0)
    assert through >= 1
    assert past >= 1


def test_sure_pad_is_measured_by_itself_and_nothing_else_is_told_apart():
    made, study, plan = first_with("pad", "pad-value-suspect")
    assert study.verdict.confidence >= 0.95
    name = study.verdict.pads[0].name
    assert f"measure pad {name} as a .s2p file" in plan[0].settles
    assert (plan[0].input_pads, plan[0].output_pads) == (("b10",), ("c10",))
    loss = made.sheet.pads[name].loss_db
    assert_allclose(plan[0].port2_dbm, SOURCE_DBM - 10.0 - loss - 10.0, rtol=0, atol=1e-9)  # dBm
    assert not any("which cause" in sweep.settles for sweep in plan)


@pytest.mark.parametrize(
    ("high", "severity", "said"),
    [
        (0.09, "note", "reads low by no more than 0.09 dB"),
        (0.15, "note", "may read low by up to 0.15 dB"),
        (0.25, "caution", "may read low by up to 0.25 dB"),
    ],
)
def test_unproven_reference_is_as_grave_as_what_it_may_read_low(high, severity, said):
    _, study, _ = planned(3, "clean")
    low = replace(study.onset.reference.reads_low_db, value=0.0, low=0.0, high=high)
    onset = replace(study.onset, reference=replace(study.onset.reference, proven=False, reads_low_db=low))
    finding = reference_finding(onset, study.verdict, ())
    assert (finding.code, finding.severity) == ("drive-unproven", severity)
    assert said in finding.message


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
    assert "again" in plan[0].settles and len(plan) == 1  # nothing else is worth a sweep before it repeats
    unproven = replace(study.onset.reference, proven=False)
    finding = reference_finding(replace(study.onset, reference=unproven), study.verdict, plan)
    assert finding.advice.startswith(f"sweep {line.name} again, its line unchanged")


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
    assert "0.05 to 0.40 dB" in finding.message and lower.input_pads[-1] in finding.advice
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
