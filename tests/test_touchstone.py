"""Good Touchstone files: published examples, every form the standard allows, and another reader's numbers."""

import hashlib
import itertools
import os
from pathlib import Path

import numpy as np
import pytest
import skrf
from numpy.testing import assert_allclose, assert_array_equal

from benchtool.errors import RequestError, SweepFileError
from benchtool.model import PARAMETERS, NoiseBlock, Sweep
from benchtool.touchstone import format_sweep, parse_sweep, read_sweep

ROW = "0.1 0.2 3.5 -0.4 0.05 0.06 -0.7 0.08"
UNITS_HZ = {"Hz": 1.0, "kHz": 1e3, "MHz": 1e6, "GHz": 1e9}


def parse(text: str, **options) -> Sweep:
    return parse_sweep(text.encode(), name="stage.s2p", **options)


def degrees(magnitude, angle):
    return magnitude * np.exp(1j * np.deg2rad(angle))


# Touchstone File Format Specification, Rev. 1.1, EIA/IBIS Open Forum, 2002: the printed examples. -------------------


def test_printed_hybrid_example_in_one_ohm():
    sweep = parse("# kHz H MA R 1\n2 .95 -26 3.57 157 .04 76 .66 -14\n")
    assert_array_equal(sweep.frequency_hz, [2000.0])
    assert sweep.reference_ohm == (1.0, 1.0)
    # the S form was worked out with scikit-rf, to the digits given
    assert_allclose(sweep.s11, [-0.019976 - 0.183973j], atol=6e-7)
    assert_allclose(sweep.s21, [2.227207 - 0.281998j], atol=6e-7)
    assert_allclose(sweep.s12, [-0.000783 + 0.025142j], atol=6e-7)
    assert_allclose(sweep.s22, [0.193072 + 0.065096j], atol=6e-7)


def test_printed_symmetric_example_is_kept_as_measured_and_says_so():
    sweep = parse(
        "# GHz S RI R 50.0\n"
        "1.0000 0.3926 -0.1211 -0.0003 -0.0021 -0.0003 -0.0021 0.3926 -0.1211\n"
        "2.0000 0.3517 -0.3054 -0.0096 -0.0298 -0.0096 -0.0298 0.3517 -0.3054\n"
        "10.000 0.3419 0.3336 -0.0134 0.0379 -0.0134 0.0379 0.3419 0.3336\n"
    )
    assert_array_equal(sweep.frequency_hz, [1e9, 2e9, 10e9])
    assert_array_equal(sweep.s11, [0.3926 - 0.1211j, 0.3517 - 0.3054j, 0.3419 + 0.3336j])
    assert_array_equal(sweep.s21, [-0.0003 - 0.0021j, -0.0096 - 0.0298j, -0.0134 + 0.0379j])
    assert_array_equal(sweep.s12, sweep.s21)
    assert_array_equal(sweep.s22, sweep.s11)
    assert sweep.full
    assert [finding.code for finding in sweep.findings] == ["symmetric-file"]


def test_printed_noise_example_with_a_bare_option_line():
    sweep = parse(
        "! NETWORK PARAMETERS\n#\n2 .95 -26 3.57 157 .04 76 .66 -14\n22 .60 -144 1.30 40 .14 40 .56 -85\n"
        "! NOISE PARAMETERS\n4 .7 .64 69 .38\n18 2.7 .46 -33 .40\n"
    )
    assert_array_equal(sweep.frequency_hz, [2e9, 22e9])
    assert_allclose(sweep.s21[0], -3.286202 + 1.394910j, atol=6e-7)
    assert_allclose(sweep.s12[1], degrees(0.14, 40), rtol=1e-14)
    assert sweep.noise is not None
    assert_array_equal(sweep.noise.frequency_hz, [4e9, 18e9])
    assert_array_equal(sweep.noise.nf_min_db, [0.7, 2.7])
    assert_allclose(sweep.noise.gamma_opt, [degrees(0.64, 69), degrees(0.46, -33)], rtol=1e-14)
    assert_allclose(sweep.noise.rn_ohm, [19.0, 20.0], rtol=1e-14)


# Option lines ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("order", list(itertools.permutations(["kHz", "S", "RI", "R 75"])))
def test_option_tokens_stand_in_any_order(order):
    sweep = parse(f"# {' '.join(order)}\n7 {ROW}\n")
    assert_array_equal(sweep.frequency_hz, [7e3])
    assert sweep.reference_ohm == (75.0, 75.0)
    assert_array_equal(sweep.s21, [3.5 - 0.4j])


@pytest.mark.parametrize(
    "said", [c for n in range(5) for c in itertools.combinations(["kHz", "Z", "RI", "R 75"], n)], ids=" ".join
)
def test_each_missing_option_has_its_default(said):
    given = parse(f"#{' '.join(said)}\n7 {ROW}\n")
    full = [*said]
    for one, default in (("kHz", "GHz"), ("Z", "S"), ("RI", "MA"), ("R 75", "R 50")):
        if one not in said:
            full.append(default)
    spelled_out = parse(f"# {' '.join(full)}\n7 {ROW}\n")
    assert_array_equal(given.frequency_hz, [7e3 if "kHz" in said else 7e9])
    assert_array_equal(given.s, spelled_out.s)
    assert given.reference_ohm == spelled_out.reference_ohm == ((75.0, 75.0) if "R 75" in said else (50.0, 50.0))


@pytest.mark.parametrize(
    "line",
    [
        "# MHz S RI R 50",
        "#MHz S RI R 50",
        "# mhz s ri r 50",
        "  \t# MHZ\tS  RI R 5e1",
        "# MHz S RI R 50 ! as set",
        "# RI MHz",
    ],
)
def test_option_line_spellings(line):
    sweep = parse(f"! header\n\n{line}\n21.4 {ROW}\n")
    assert_array_equal(sweep.frequency_hz, [21.4e6])
    assert_array_equal(sweep.s11, [0.1 + 0.2j])
    assert sweep.reference_ohm == (50.0, 50.0)


def test_decibels_are_of_amplitude_and_angles_in_degrees():
    sweep = parse("# MHz S DB\n1 -20 90 40 -180 -60 0 -6 45\n")
    assert_allclose(sweep.s[:, :, 0], [[0.1j, 1e-3], [-100.0, 10**-0.3 * degrees(1, 45)]], rtol=1e-14, atol=2e-14)


# Pozar, Microwave Engineering, 4th ed., examples 12.1 and 12.2, in the order S11 S21 S12 S22.
POZAR = np.array(
    [
        [degrees(0.38, -158), degrees(3.50, 80), degrees(0.11, 54), degrees(0.40, -43)],
        [degrees(0.869, -159), degrees(4.250, 61), degrees(0.031, -9), degrees(0.507, -117)],
    ]
)
FORMATS = {
    "RI": lambda v: (v.real, v.imag),
    "MA": lambda v: (abs(v), np.angle(v, deg=True)),
    "DB": lambda v: (20 * np.log10(abs(v)), np.angle(v, deg=True)),
}


def write_rows(option_line: str, form: str, values) -> str:
    rows = [[f, *(float(x) for v in row for x in FORMATS[form](v))] for f, row in zip((1.5, 2.5), values, strict=True)]
    return f"{option_line}\n" + "\n".join(" ".join(map(repr, row)) for row in rows) + "\n"


# scikit-rf 2.2 multiplies every kind by R, which is right for Z alone: other kinds are compared in 1 ohm, where the
# normalisation has no part, and by its conversions below.
@pytest.mark.parametrize("unit", UNITS_HZ)
@pytest.mark.parametrize("form", FORMATS)
@pytest.mark.parametrize(("kind", "ohm"), [("S", 75), ("Z", 75), ("S", 1), ("Z", 1), ("Y", 1), ("G", 1), ("H", 1)])
def test_every_kind_format_and_unit_reads_as_in_scikit_rf(tmp_path, kind, ohm, form, unit):
    file = tmp_path / "device.s2p"
    file.write_text(write_rows(f"# {unit} {kind} {form} R {ohm}", form, POZAR))
    sweep, other = read_sweep(file), skrf.Network(str(file))
    assert_allclose(sweep.s.transpose(2, 0, 1), other.s, rtol=1e-12, atol=0)
    assert_allclose(sweep.frequency_hz, np.array([1.5, 2.5]) * UNITS_HZ[unit], rtol=1e-15, atol=0)
    assert sweep.reference_ohm == (ohm, ohm)
    if kind == "S":
        assert_allclose(sweep.s21, POZAR[:, 1], rtol=1e-13, atol=0)


@pytest.mark.parametrize("form", FORMATS)
@pytest.mark.parametrize("kind", "YZGH")
def test_normalised_parameters_convert_as_in_scikit_rf(kind, form):
    matrix = POZAR.reshape(2, 2, 2).transpose(0, 2, 1)  # normalised to 75 ohm, as version 1 has them
    scale = {
        "Z": np.full((2, 2), 75.0),
        "Y": np.full((2, 2), 1 / 75),
        "H": np.array([[75, 1], [1, 1 / 75]]),
        "G": np.array([[1 / 75, 1], [1, 75]]),
    }[kind]
    expected = getattr(skrf.network, f"{kind.lower()}2s")(matrix * scale, 75)
    sweep = parse(write_rows(f"# MHz {kind} {form} R 75", form, POZAR))
    assert_allclose(sweep.s.transpose(2, 0, 1), expected, rtol=1e-12, atol=0)


@pytest.mark.parametrize("kind", "YZGH")
def test_parameters_other_than_s_are_those_of_a_known_circuit(kind):
    # A π of 2 mS, 10 mS (series) and 5 mS in 50 Ω, normalised as version 1 wants it; its S by nodal analysis.
    y = np.array([[0.6, -0.5], [-0.5, 0.75]])  # times 50 ohm
    s = (np.eye(2) - y) @ np.linalg.inv(np.eye(2) + y)
    h = np.array([[1, -y[0, 1]], [y[1, 0], np.linalg.det(y)]]) / y[0, 0]
    given = {"Y": y, "Z": np.linalg.inv(y), "H": h, "G": np.linalg.inv(h)}[kind]
    numbers = " ".join(f"{float(value)!r} 0" for value in given.T.ravel())
    sweep = parse(f"# MHz {kind} RI R 50\n1 {numbers}\n2 {numbers}\n")
    assert_allclose(sweep.s[:, :, 1], s, rtol=1e-14, atol=0)


# Text forms --------------------------------------------------------------------------------------------------------

PLAIN = f"! 400 kHz wide\n# MHz S RI R 50\n1 {ROW}\n2 {ROW}\n3.5 {ROW}\n"


@pytest.mark.parametrize(
    "data",
    [
        PLAIN.encode(),
        b"\xef\xbb\xbf" + PLAIN.encode(),
        PLAIN.replace("\n", "\r\n").encode(),
        PLAIN.replace("\n", "\r").encode(),
        PLAIN.replace("\n", "\n\n  \n").encode(),
        PLAIN.replace(" ", "\t").replace("#\t", "\t #").encode(),
        PLAIN.replace("\n", "\n    ").encode(),
        PLAIN.replace("\n", "   \n").encode(),
        PLAIN.rstrip("\n").encode(),
        PLAIN.replace("08\n", "08 ! noisy, see #3 and [Note]\n").encode(),
        PLAIN.replace("\n2 ", "\n! between 1, 2 # MHz\n2 ").encode(),
        PLAIN.replace("kHz wide", "kHz ± 2 µ").encode("latin-1"),
        PLAIN.replace("kHz wide", "kHz ± 2 µ").encode("utf-8"),
        PLAIN.replace("1 0.1", "+1.0E+00 +1.e-1").encode(),
        PLAIN.replace("0.05", ".05").replace("3.5 ", "03.50e0 ").encode(),
        PLAIN.replace("\n2 ", "\n# MHz S RI R 50\n2 ").encode(),
    ],
)
def test_the_same_sweep_in_other_clothes(data):
    sweep = parse_sweep(data, name="stage.s2p", strict=True)
    assert_array_equal(sweep.frequency_hz, [1e6, 2e6, 3.5e6])
    assert_array_equal(sweep.s, parse(PLAIN).s)
    assert_array_equal(sweep.s[:, :, 0], [[0.1 + 0.2j, 0.05 + 0.06j], [3.5 - 0.4j, -0.7 + 0.08j]])
    assert sweep.findings == ()
    assert sweep.noise is None


@pytest.mark.parametrize("first", ["2", "3.5"], ids=["below the highest frequency", "at the highest frequency"])
def test_noise_block_starts_below_or_at_the_highest_frequency(first):
    sweep = parse(PLAIN + f"{first} 1.1 0.3 64 0.4\n9 1.2 0.3 60 0.4\n")
    assert_array_equal(sweep.s, parse(PLAIN).s)
    assert sweep.noise is not None
    assert_array_equal(sweep.noise.frequency_hz, [float(first) * 1e6, 9e6])


def test_five_numbers_at_a_higher_frequency_are_a_short_row_and_no_noise():
    with pytest.raises(SweepFileError, match=r":6: 5 numbers in the row, where a two-port row has 9"):
        parse(PLAIN + "4.5 1.1 0.3 64 0.4\n")


def test_a_contradicting_second_option_line_is_ignored_with_a_finding_and_refused_when_strict():
    text = PLAIN.replace("\n2 ", "\n# GHz S MA R 50\n2 ")
    sweep = parse(text)
    assert_array_equal(sweep.s, parse(PLAIN).s)
    (finding,) = sweep.findings
    assert (finding.code, finding.severity, finding.sweep) == ("file-mended", "caution", "stage.s2p")
    assert finding.message == (
        "stage.s2p: line 4: a second option line that differs from the first; it was ignored, as the standard says"
    )
    with pytest.raises(SweepFileError, match=r"^stage\.s2p:4: a second option line that differs from the first; "):
        parse(text, strict=True)


def test_a_single_row_is_a_sweep():
    sweep = parse(f"# MHz S RI\n0 {ROW}\n")
    assert sweep.s.shape == (2, 2, 1)
    assert_array_equal(sweep.frequency_hz, [0.0])


# Files -------------------------------------------------------------------------------------------------------------


def test_what_a_sweep_says_of_its_file(tmp_path):
    file = tmp_path / "Stage 2 Ω.S2P"
    file.write_bytes(PLAIN.encode())
    sweep = read_sweep(str(file))
    assert sweep.name == "Stage 2 Ω.S2P"
    assert sweep.path == file
    assert sweep.sha256 == hashlib.sha256(PLAIN.encode()).hexdigest()
    assert sweep.measured == PARAMETERS
    assert read_sweep(file, name="low/stage2").name == "low/stage2"


def _carried_by_scikit_rf() -> list[Path]:
    return sorted((Path(skrf.__file__).parent / "data").glob("*.s2p"))


def _real_folder() -> Path:
    beside = Path(__file__).resolve().parents[2] / "shared" / "real"
    return Path(os.environ.get("BENCHTOOL_REAL", beside))


def test_scikit_rf_carries_files_to_compare():
    assert len(_carried_by_scikit_rf()) >= 9


@pytest.mark.parametrize("file", _carried_by_scikit_rf(), ids=lambda file: file.name)
def test_files_carried_by_scikit_rf_read_to_the_same_numbers(file):
    sweep, other = read_sweep(file), skrf.Network(str(file))
    assert_allclose(sweep.frequency_hz, other.f, rtol=1e-15, atol=0)
    assert_allclose(sweep.s.transpose(2, 0, 1), other.s, rtol=1e-12, atol=0)
    assert_array_equal(other.z0, np.broadcast_to(sweep.reference_ohm, other.z0.shape))
    assert sweep.full


@pytest.mark.parametrize("file", ["fet.s2p", "resonator_36mm.s2p"])
def test_real_sweeps_read_to_the_same_numbers_as_in_scikit_rf(file):
    path = _real_folder() / file
    if not path.exists():
        pytest.skip("the real sweeps are not here")
    sweep, other = read_sweep(path), skrf.Network(str(path))
    assert_allclose(sweep.frequency_hz, other.f, rtol=1e-15, atol=0)
    assert_allclose(sweep.s.transpose(2, 0, 1), other.s, rtol=1e-12, atol=0)
    assert sweep.full and sweep.findings == ()


# Writing -----------------------------------------------------------------------------------------------------------


def test_written_text_is_plain_and_reads_in_scikit_rf(tmp_path):
    text = format_sweep(parse(PLAIN.replace("R 50", "R 75")), comments=["made here", "two\nlines", ""])
    assert text.splitlines()[:6] == [
        "! made here",
        "! two",
        "! lines",
        "!",
        "# Hz S RI R 75",
        "! Hz  S11  S21  S12  S22, real and imaginary",
    ]
    assert text.splitlines()[6] == f"1000000.0 {ROW}"
    file = tmp_path / "corrected.s2p"
    file.write_text(text)
    assert_array_equal(skrf.Network(str(file)).s, parse(PLAIN).s.transpose(2, 0, 1))


def test_noise_block_is_written_too():
    noise = NoiseBlock(np.array([1e6, 9e6]), np.array([1.1, 2.0]), np.array([0.3 + 0.4j, -0.1j]), np.array([20.0, 7.0]))
    sweep = parse(PLAIN)
    again = parse(format_sweep(Sweep("n", sweep.frequency_hz, sweep.s, noise=noise)))
    assert again.noise is not None
    assert_array_equal(again.s, sweep.s)
    assert_array_equal(again.noise.frequency_hz, noise.frequency_hz)
    assert_array_equal(again.noise.nf_min_db, noise.nf_min_db)
    assert_allclose(again.noise.gamma_opt, noise.gamma_opt, rtol=1e-15, atol=1e-16)
    assert_allclose(again.noise.rn_ohm, noise.rn_ohm, rtol=1e-15, atol=0)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"reference_ohm": (50.0, 300.0)}, "50 ohm at port 1 and 300 ohm at port 2"),
        ({"s": np.full((2, 2, 1), np.nan)}, "not finite"),
        ({"s": np.zeros((2, 2, 0)), "frequency_hz": np.zeros(0)}, "no points"),
        ({"noise": NoiseBlock(np.array([2e6]), np.ones(1), np.ones(1), np.ones(1))}, "noise block"),
    ],
)
def test_what_the_format_cannot_hold_is_refused(change, message):
    whole = {"name": "stage", "frequency_hz": np.array([1e6]), "s": np.ones((2, 2, 1))}
    assert format_sweep(Sweep(**whole))
    with pytest.raises(RequestError, match=message):
        format_sweep(Sweep(**(whole | change)))
