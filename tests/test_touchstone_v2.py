"""Version 2 files: printed examples, every keyword, two reference impedances, and writing them again."""

from pathlib import Path

import numpy as np
import pytest
import skrf
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from benchtool.errors import RequestError, SweepFileError
from benchtool.model import PARAMETERS, NoiseBlock, Sweep
from benchtool.touchstone import format_sweep, parse_sweep, read_sweep

FAULTS = Path(__file__).parent / "faults"


def parse(text: str, **options) -> Sweep:
    return parse_sweep(text.encode(), name="x.s2p", **options)


def degrees(magnitude, angle):
    return magnitude * np.exp(1j * np.deg2rad(angle))


# Touchstone File Format Specification, Version 2.0, IBIS Open Forum, 2009: the printed two-port example with noise.
# Its network numbers are those of the version 1 example; that the noise resistance stands in ohm is from memory.
PRINTED = """! NOISE PARAMETERS
[Version] 2.0
# GHz S MA R 50
[Number of Ports] 2
[Two-Port Data Order] 21_12
[Number of Frequencies] 2
[Number of Noise Frequencies] 2
[Reference] 50 25.0
[Network Data]
! NETWORK PARAMETERS
2 .95 -26 3.57 157 .04 76 .66 -14
22 .60 -144 1.30 40 .14 40 .56 -85
! NOISE PARAMETERS
[Noise Data]
4 .7 .64 69 19
18 2.7 .46 -33 20
[End]
"""


def test_printed_noise_example():
    sweep = parse(PRINTED, strict=True)
    assert sweep.findings == ()
    assert_array_equal(sweep.frequency_hz, [2e9, 22e9])
    assert sweep.reference_ohm == (50.0, 25.0)
    assert_allclose(sweep.s21[0], -3.286202 + 1.394910j, rtol=0, atol=6e-7)
    assert_allclose(
        sweep.s[:, :, 1], [[degrees(0.6, -144), degrees(0.14, 40)], [degrees(1.3, 40), degrees(0.56, -85)]], rtol=1e-14
    )
    assert sweep.noise is not None
    assert_array_equal(sweep.noise.frequency_hz, [4e9, 18e9])
    assert_array_equal(sweep.noise.nf_min_db, [0.7, 2.7])
    assert_allclose(sweep.noise.gamma_opt, [degrees(0.64, 69), degrees(0.46, -33)], rtol=1e-14)
    assert_array_equal(sweep.noise.rn_ohm, [19.0, 20.0])


def test_the_data_order_says_which_is_s21():
    sweep = parse(PRINTED.replace("21_12", "12_21"))
    assert_allclose(sweep.s12[0], degrees(3.57, 157), rtol=1e-14)
    assert_allclose(sweep.s21[0], degrees(0.04, 76), rtol=1e-14)


def test_s_stays_as_in_the_file_with_two_references_as_in_scikit_rf(tmp_path):
    file = tmp_path / "device.s2p"
    file.write_text(PRINTED)
    sweep, other = read_sweep(file), skrf.Network(str(file))
    assert_allclose(sweep.s.transpose(2, 0, 1), other.s, rtol=1e-12, atol=0)
    assert_array_equal(other.z0.real, np.broadcast_to(sweep.reference_ohm, other.z0.shape))


BASE = """[Version] 2.1
# MHz S RI R 50
[Number of Ports] 2
[Two-Port Data Order] 21_12
[Number of Frequencies] 2
[Network Data]
1 0.1 0.2 3.5 -0.4 0.05 0.06 -0.7 0.08
2 0.1 0.3 3.6 -0.5 0.06 0.07 -0.8 0.09
[End]
"""
S = parse(BASE).s


@pytest.mark.parametrize(
    "text",
    [
        BASE,
        BASE.replace("2.1", "2.0"),
        BASE.lower(),
        BASE.replace("[", "  [").replace("\n", "  ! note [End]\n"),
        BASE.replace("\n", "\r\n"),
        BASE.replace("[Network Data]", "[Reference] 50 50\n[Matrix Format] Full\n[Network Data]"),
        BASE.replace("[Network Data]", "[Reference] 50\n! each port\n  50\n\n[Matrix Format] FULL\n[Network Data]"),
        BASE.replace("R 50\n", "R 75\n").replace("[Network Data]", "[Reference] 50 50\n[Network Data]"),
        BASE.replace(
            "[Network Data]",
            "[Begin Information]\n[Manufacturer] nobody # MHz\n1 2 3, 4\n[Network Data]\n[End Information]\n"
            "[Network Data]",
        ),
        BASE.replace("[Network Data]", "[Mixed-Mode Order] S1 S2\n[Network Data]"),
        BASE.replace("[Network Data]", "[Number of Noise Frequencies] 0\n[Network Data]"),
        BASE.replace("[Network Data]\n", "[Network Data] ! f S11 S21 S12 S22\n\n! more\n"),
        BASE.rstrip("\n"),
        BASE + "\n! made by hand\n",
    ],
)
def test_the_same_sweep_in_other_clothes(text):
    sweep = parse(text, strict=True)
    assert sweep.findings == ()
    assert_array_equal(sweep.frequency_hz, [1e6, 2e6])
    assert_array_equal(sweep.s, S)
    assert sweep.reference_ohm == (50.0, 50.0)


@pytest.mark.parametrize("matrix", ["Lower", "Upper", "lower"])
@pytest.mark.parametrize("order", ["21_12", "12_21"])
def test_triangles_hold_one_transfer_for_both_directions(matrix, order):
    sweep = parse(
        f"[Version] 2.0\n# MHz S RI R 50\n[Number of Ports] 2\n[Two-Port Data Order] {order}\n"
        f"[Matrix Format] {matrix}\n[Number of Frequencies] 2\n[Network Data]\n"
        "1 0.1 0.2 0.3 0.4 0.5 0.6\n2 0.2 0.2 0.3 0.5 0.5 0.6\n[End]\n",
        strict=True,
    )
    assert_array_equal(sweep.s[:, :, 0], [[0.1 + 0.2j, 0.3 + 0.4j], [0.3 + 0.4j, 0.5 + 0.6j]])
    assert sweep.full


# Pozar, Microwave Engineering, 4th ed., examples 12.1 and 12.2, as any other kind between two impedances.
POZAR = np.array(
    [
        [[degrees(0.38, -158), degrees(0.11, 54)], [degrees(3.50, 80), degrees(0.40, -43)]],
        [[degrees(0.869, -159), degrees(0.031, -9)], [degrees(4.250, 61), degrees(0.507, -117)]],
    ]
)


@pytest.mark.parametrize("ohms", [(50.0, 50.0), (50.0, 300.0), (75.0, 12.5)])
@pytest.mark.parametrize("kind", "ZYHG")
def test_parameters_that_are_not_normalised_convert_as_in_scikit_rf(kind, ohms):
    given_matrix = getattr(skrf.network, f"s2{kind.lower()}")(POZAR, np.array(ohms))
    rows = "".join(
        f"{f} " + " ".join(f"{float(part)!r}" for value in matrix.T.ravel() for part in (value.real, value.imag)) + "\n"
        for f, matrix in enumerate(given_matrix, 1)
    )
    text = (
        f"[Version] 2.0\n# MHz {kind} RI R 7\n[Number of Ports] 2\n[Two-Port Data Order] 21_12\n"
        f"[Number of Frequencies] 2\n[Reference] {ohms[0]} {ohms[1]}\n[Network Data]\n{rows}[End]\n"
    )
    assert_allclose(parse(text, strict=True).s.transpose(2, 0, 1), POZAR, rtol=1e-12, atol=0)


def test_missing_noise_and_counts_are_said():
    sweep = parse(BASE.replace("[Network Data]", "[Number of Noise Frequencies] 3\n[Network Data]"))
    assert [finding.message for finding in sweep.findings] == [
        "x.s2p: line 6: [Number of Noise Frequencies] says '3' where 0 stand in the file; "
        "those that stand there were read"
    ]
    noisy = parse(PRINTED.replace("[Number of Noise Frequencies] 2\n", ""))
    assert [finding.message for finding in noisy.findings] == [
        "x.s2p: no keyword [Number of Noise Frequencies]; the 2 in the file were read"
    ]


def test_a_file_that_breaks_off_says_where_and_how_much_is_missing():
    sweep = parse(BASE[: BASE.index("-0.8")])
    assert_array_equal(sweep.s, S[:, :, :1])
    assert [finding.message for finding in sweep.findings] == [
        "x.s2p: line 8: the file breaks off in its last row; the row was left out",
        "x.s2p: no keyword [End]; the file was taken to end with its last row",
        "x.s2p: line 5: [Number of Frequencies] says '2' where 1 stand in the file; those that stand there were read",
    ]


@pytest.mark.parametrize("keyword", ["[Number of  Ports]", "[ Number of Ports]", "[Number\tof Ports ]"])
def test_odd_blanks_in_a_keyword_are_mended(keyword):
    text = BASE.replace("[Number of Ports]", keyword)
    sweep = parse(text)
    assert_array_equal(sweep.s, S)
    assert [(finding.code, finding.severity) for finding in sweep.findings] == [("file-mended", "note")]
    with pytest.raises(SweepFileError, match=r"^x\.s2p:3: odd blanks in the keyword .*; write '\[Number of Ports\]'"):
        parse(text, strict=True)


def test_triangles_need_no_data_order():
    text = BASE.replace("[Two-Port Data Order] 21_12\n", "[Matrix Format] Lower\n").replace(" 0.05 0.06", "")
    sweep = parse(text.replace(" 0.06 0.07", ""))
    assert [finding.code for finding in sweep.findings] == ["file-mended", "one-path"]
    assert_array_equal(sweep.s21, S[1, 0])


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("0.05", "1,5"), "x.s2p:7 (column 6): '1,5' has a comma"),
        (("0.05", "nan"), "x.s2p:7 (column 6): 'nan' is not a finite number"),
        (("2 0.1", "1 0.1"), "x.s2p:8 (column 1): the frequency '1' repeats the row above with other numbers"),
        (("# MHz S RI R 50\n", "# MHz S RI R 50\n# GHz\n"), None),
        (("[Number of Frequencies] 2", "[Number of Frequencies] -2"), "x.s2p:5: [Number of Frequencies] '-2' is not"),
        (("[Number of Frequencies] 2", "[Number of Frequencies] ٢"), "x.s2p:5: [Number of Frequencies] '٢' is not"),
        (("[Network Data]", "[Reference] 50 -75\n[Network Data]"), "x.s2p:6: the reference impedance '-75' is not"),
        (("[End]", "[Noise Data]\n1 2 3 4\n[End]"), "x.s2p:10: 4 numbers in a row of the noise block, which has 5"),
        (("[End]", "[Noise Data]\n2 1 0 0 1\n1 1 0 0 1\n[End]"), "x.s2p:11 (column 1): the frequency '1' falls back"),
        (("[End]", "[Noise Data]\n2 1 OVL 0 1\n[End]"), "x.s2p:10 (column 3): 'OVL' is not a number"),
    ],
)
def test_faults_within_the_sections(change, message):
    text = BASE.replace(*change)
    if message is None:
        assert [finding.code for finding in parse(text).findings] == ["file-mended"]
        return
    with pytest.raises(SweepFileError) as caught:
        parse(text)
    assert str(caught.value).startswith(message)


# Writing -----------------------------------------------------------------------------------------------------------

finite = st.floats(allow_nan=False, allow_infinity=False)


@st.composite
def sweeps(draw):
    frequency_hz = draw(st.lists(st.floats(0, 1e15), min_size=1, max_size=6, unique=True).map(sorted))
    numbers = draw(st.lists(finite, min_size=8 * len(frequency_hz), max_size=8 * len(frequency_hz)))
    s = np.array(numbers).view(np.complex128).reshape(2, 2, -1)
    noise_hz = draw(st.lists(st.floats(0, 1e15), max_size=4, unique=True).map(sorted))
    columns = [draw(st.lists(st.floats(0, 30), min_size=len(noise_hz), max_size=len(noise_hz))) for _ in range(2)]
    noise = NoiseBlock(np.array(noise_hz), columns[0], np.full(len(noise_hz), 0.3j), columns[1]) if noise_hz else None
    return Sweep(
        "any",
        np.array(frequency_hz),
        s,
        reference_ohm=draw(st.tuples(st.floats(1e-3, 1e6), st.floats(1e-3, 1e6))),
        noise=noise,
    )


@settings(deadline=None, database=None, max_examples=150)
@given(sweeps())
def test_reading_what_was_written_gives_every_number_to_the_bit(sweep):
    again = parse(format_sweep(sweep, version=2, comments=["made here"]), strict=True)
    assert again.frequency_hz.tolist() == sweep.frequency_hz.tolist()
    assert again.reference_ohm == sweep.reference_ohm
    for parameter in PARAMETERS:
        place = int(parameter[1]) - 1, int(parameter[2]) - 1
        assert_array_equal(again.s[place], sweep.s[place] if parameter in again.measured else 0 * again.s[place])
    assert (again.noise is None) == (sweep.noise is None)
    if again.noise is not None and sweep.noise is not None:
        assert_array_equal(again.noise.frequency_hz, sweep.noise.frequency_hz)
        assert_array_equal(again.noise.nf_min_db, sweep.noise.nf_min_db)
        assert_array_equal(again.noise.rn_ohm, sweep.noise.rn_ohm)
        assert_allclose(again.noise.gamma_opt, sweep.noise.gamma_opt, rtol=1e-15, atol=1e-16)


def test_both_versions_hold_the_same_and_read_in_scikit_rf(tmp_path):
    sweep = parse(BASE)
    for version in (1, 2):
        file = tmp_path / f"version{version}.s2p"
        file.write_text(format_sweep(sweep, version=version))
        assert_array_equal(skrf.Network(str(file)).s, S.transpose(2, 0, 1))
        assert_array_equal(read_sweep(file, strict=True).s, S)
    assert (tmp_path / "version2.s2p").read_text().splitlines()[:7] == [
        "[Version] 2.0",
        "# Hz S RI R 50",
        "[Number of Ports] 2",
        "[Two-Port Data Order] 21_12",
        "[Number of Frequencies] 2",
        "[Reference] 50.0 50.0",
        "[Matrix Format] Full",
    ]


def test_what_only_version_2_can_hold():
    two = Sweep("stage", np.array([1e6]), np.ones((2, 2, 1)), reference_ohm=(50.0, 300.0))
    with pytest.raises(RequestError, match=r"50 ohm at port 1 and 300 ohm at port 2.*; write version 2"):
        format_sweep(two)
    assert parse(format_sweep(two, version=2)).reference_ohm == (50.0, 300.0)
    noise = NoiseBlock(np.array([2e6]), np.ones(1), np.ones(1), np.ones(1))
    above = Sweep("stage", np.array([1e6]), np.ones((2, 2, 1)), noise=noise)
    with pytest.raises(RequestError, match="write version 2"):
        format_sweep(above)
    assert parse(format_sweep(above, version=2)).noise is not None


def test_the_file_kept_as_an_example_is_sound():
    assert read_sweep(FAULTS / "good_version_2.s2p", strict=True).findings == ()
