"""Damaged files: each ends in a sweep or one fault, and what reads without a finding is what stands in the file."""

import importlib.util
import time
import tracemalloc
from collections import Counter
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from benchtool.errors import SweepFileError
from benchtool.touchstone import parse_sweep

_spec = importlib.util.spec_from_file_location("fuzz_touchstone", Path(__file__).with_name("fuzz_touchstone.py"))
assert _spec is not None and _spec.loader is not None
fuzz = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(fuzz)

CASES = 800


def test_sound_files_read_as_in_the_slow_reader():
    files = fuzz.seeds()
    assert len(files) >= 20
    assert {fuzz.outcome(data) for data in files} == {"sweep"}


def test_damaged_files_end_in_a_sweep_or_one_fault_and_change_nothing_in_silence():
    ends = Counter(fuzz.outcome(data) for data in fuzz.damaged(CASES, seed=11))
    assert min(ends["sweep"], ends["mended"], ends["fault"]) > CASES // 20, ends


@settings(deadline=None, database=None, max_examples=200)
@given(st.integers(0, 2**32), st.binary(max_size=6), st.floats(0, 1))
def test_any_bytes_put_anywhere_change_nothing_in_silence(seed, scrap, place):
    data = next(fuzz.damaged(1, seed))
    at = int(place * len(data))
    fuzz.outcome(data[:at] + scrap + data[at:])


def test_the_slow_reader_does_not_agree_with_everything():
    data = fuzz.seeds()[-2]
    with pytest.raises(AssertionError, match=r"S11|frequencies"):
        fuzz._check_same(data.replace(b"0.", b"0.9", 1), parse_sweep(data, name="x.s2p"))


HEAD = b"# MHz S RI R 50\n"
ROW = b" 0.1 0.2 3.5 -0.4 0.05 0.06 -0.7 0.08\n"
VERSION_2 = b"[Version] 2.0\n# MHz S RI R 50\n[Number of Ports] 2\n[Two-Port Data Order] 21_12\n"
MB = 1_000_000

HUGE = {
    "one line of numbers": (HEAD + b"1" + ROW + b"2 " * (25 * MB), "a line of 50.0 million characters"),
    "one line of letters": (b"z" * (50 * MB), "a line of 50.0 million characters, longer than any row"),
    "one number": (HEAD + b"7" * (50 * MB) + ROW, "a line of 50.0 million characters"),
    "option line": (b"#" + b" MHz" * (12 * MB), "a line of 48.0 million characters"),
    "brackets": (b"[Version] 2.0\n" + b"[\n" * (20 * MB), "'[' has no closing bracket"),
    "information": (b"[Version] 2.0\n[Begin Information]\n" + b"[x]\n" * (5 * MB), "without an end"),
    "promise": (
        VERSION_2 + b"[Number of Frequencies] 1000000000000\n[Network Data]\n1" + ROW + b"[End]\n",
        None,
    ),
    "many digits promised": (
        VERSION_2 + b"[Number of Frequencies] " + b"9" * 5000 + b"\n[Network Data]\n1" + ROW,
        "whole",
    ),
    "one comment": (HEAD + b"! " + b"x" * (50 * MB) + b"\n1" + ROW, None),
    "rows of one": (HEAD + b"1\n" * (20 * MB), "1 number in the row"),
    "option lines": (HEAD + b"#\n" * (20 * MB), "more than 100 option lines"),
    "marks": (HEAD + (b"1" + b" nan" * 8 + b"\n") * 40_000, "'nan' is not a finite number"),
    "too large": (HEAD * (5 * MB), "the file has 80 MB, more than any sweep"),
}


@pytest.mark.parametrize("case", HUGE)
def test_huge_things_take_no_more_memory_than_some_copies_of_the_file(case):
    data, found = HUGE[case]
    tracemalloc.start()
    begun = time.perf_counter()
    try:
        if found is None:
            assert parse_sweep(data, name="x.s2p").s.shape == (2, 2, 1)
        else:
            with pytest.raises(SweepFileError, match=found.replace("[", r"\[")):
                parse_sweep(data, name="x.s2p")
        taken = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert taken < 10 * len(data) + MB
    assert time.perf_counter() - begun < 20
