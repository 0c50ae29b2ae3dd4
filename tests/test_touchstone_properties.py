"""What always holds: writing then reading is the identity, and any bytes give a sweep or one clear fault."""

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal

from benchtool.errors import SweepFileError
from benchtool.model import PARAMETERS, Sweep
from benchtool.touchstone import format_sweep, parse_sweep

quick = settings(deadline=None, database=None, max_examples=150)
finite = st.floats(allow_nan=False, allow_infinity=False)
frequencies = st.lists(st.floats(0, 1e15), min_size=1, max_size=8, unique=True).map(sorted)


@st.composite
def sweeps(draw, value=finite):
    frequency_hz = draw(frequencies)
    numbers = draw(st.lists(value, min_size=8 * len(frequency_hz), max_size=8 * len(frequency_hz)))
    s = np.array(numbers).view(np.complex128).reshape(2, 2, -1)
    reference = draw(st.floats(1e-3, 1e6))
    return Sweep("any", np.array(frequency_hz), s, reference_ohm=(reference, reference))


def read_back(sweep: Sweep) -> Sweep:
    return parse_sweep(format_sweep(sweep).encode(), name="any.s2p")


def bits(array):
    return np.ascontiguousarray(array).view(np.uint64)


@quick
@given(sweeps())
def test_reading_what_was_written_gives_every_measured_number_to_the_bit(sweep):
    again = read_back(sweep)
    assert_array_equal(bits(again.frequency_hz + 0.0), bits(sweep.frequency_hz + 0.0))  # no difference in -0.0 Hz
    assert again.reference_ohm == sweep.reference_ohm
    for parameter in PARAMETERS:
        column = int(parameter[1]) - 1, int(parameter[2]) - 1
        if parameter in again.measured:
            assert_array_equal(bits(again.s[column]), bits(sweep.s[column]))
        else:
            assert not again.s[column].any()


@quick
@given(sweeps(st.sampled_from([0.0, 0.5, 2.0])))
@example(Sweep("matched, with gain", np.array([0.0]), np.array([[[0.0], [2.0]], [[2.0], [0.0]]])))
def test_writing_and_reading_a_second_time_changes_nothing(sweep):
    once = read_back(sweep)
    twice = read_back(once)
    assert_array_equal(twice.s, once.s)
    assert twice.measured == once.measured


def outcome(data: bytes):
    """Return the sweep in the bytes, or the line that says why there is none."""
    try:
        sweep = parse_sweep(data, name="x.s2p")
    except SweepFileError as error:
        message = str(error)
        return message if len(message.splitlines()) == 1 and message.startswith("x.s2p") else pytest.fail(message)
    assert np.isfinite(sweep.s).all()
    assert sweep.s.shape == (2, 2, len(sweep.frequency_hz))
    assert (np.diff(sweep.frequency_hz) > 0).all()
    return sweep


@quick
@given(st.binary(max_size=300))
def test_any_bytes_give_a_sweep_or_one_fault(data):
    outcome(data)


SCRAPS = [
    "#",
    "MHz",
    "S",
    "Z",
    "G",
    "RI",
    "DB",
    "R",
    "50",
    "0",
    "-1",
    "1e400",
    "1e308",
    "nan",
    "1,5",
    "[",
    "!",
    "é",
    "\x1c",
]
scrap = st.sampled_from(
    [*SCRAPS, "0.123456789012345", "\x85", "\u2028", "true", "null", "]", '"', "\t", "1_0", "+.5", "-"]
)
lines = st.lists(scrap, max_size=10).map(" ".join)
ends = st.sampled_from(["\n", "\r\n", "\r", "\n\n"])


@quick
@given(st.sampled_from(["", "# MHz S RI R 50", "# Y DB"]), st.lists(lines, max_size=6), ends)
def test_any_scraps_of_the_format_give_a_sweep_or_one_fault(first, rest, end):
    outcome(end.join([first, *rest]).encode())


number = st.one_of(
    st.sampled_from(
        ["0", "1", "-0", "+1", ".5", "5.", "1E3", "007", "1e-400", "nan", "1,5", "1_0", "0x1", "true", "1.2.3"]
    ),
    finite.map(repr),
    finite.map(lambda value: f"{value:.18e}"),
)
tails = st.lists(st.sampled_from(["", " ", "\t", " ! note"]), min_size=3, max_size=3)


@quick
@given(
    st.lists(st.lists(number, min_size=8, max_size=9), min_size=3, max_size=3),
    tails,
    st.sampled_from([" ", "  ", "\t"]),
)
def test_rows_read_at_once_are_rows_read_line_by_line(rows, tails, blank):
    text = "# Hz S RI R 50\n"
    for frequency, (row, tail) in enumerate(zip(rows, tails, strict=True), 1):
        text += blank.join([str(frequency), *row[:8]]) + tail + "\n"
    at_once = outcome(text.encode())
    # the same option line again makes the reader go line by line; it stands last, so that no line moves
    by_line = outcome((text + "# Hz S RI R 50\n").encode())
    if isinstance(at_once, str) or isinstance(by_line, str):
        assert at_once == by_line
    else:
        assert_array_equal(at_once.s, by_line.s)
        assert at_once.measured == by_line.measured


@pytest.mark.parametrize("digits", [3, 9, 17])
def test_numbers_are_exact_whatever_their_length(digits):
    rng = np.random.default_rng(7)
    rows = [
        [f"{value:.{digits}e}" for value in row]
        for row in rng.normal(size=(50, 8)) * 10.0 ** rng.integers(-9, 9, (50, 8))
    ]
    text = "# Hz S RI R 50\n" + "".join(f"{n} {' '.join(row)}\n" for n, row in enumerate(rows))
    sweep = parse_sweep(text.encode(), name="x.s2p")
    exact = np.array([[float(token) for token in row] for row in rows])
    assert_array_equal(sweep.s.transpose(2, 1, 0).reshape(50, 4).view(np.float64), exact)
