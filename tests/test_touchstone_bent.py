"""Files that bend the standard: mended where they have one reading, with a finding, and refused when read strictly."""

from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_array_equal

from benchtool.errors import SweepFileError
from benchtool.model import PARAMETERS
from benchtool.touchstone import parse_sweep, read_sweep

FAULTS = Path(__file__).parent / "faults"
DELETE_ROW = "sweep again, or delete the row"
EXPORT_TWO_PORT = "export a two-port sweep (.s2p) with S11, S21, S12 and S22"
POINTS_AND_BLANKS = "export with decimal points, and blanks between the numbers"
WRITE_R = "write the reference impedance: 'R 50'"
SORT = "sort the rows by frequency, or split joined sweeps into one file each"
OPTION_LINE = "write an option line such as '# MHz S RI R 50'"
SAVE_AGAIN = "copy or save the file again, or delete the row"
DELETE_ONE = "delete one of the two rows"
TURN_ROUND = "turn the device round and sweep it again if you need them"

# file: what is said of it, and where, what and what to do when it is refused
BENT = {
    "comma_separated.s2p": (
        [("caution", "line 3: commas between the numbers; from there on they were read as blanks")],
        3,
        1,
        "'20.0,0.012,-0.134,8.201,…' has a comma",
        POINTS_AND_BLANKS,
    ),
    "decimal_commas.s2p": (
        [("caution", "line 3: decimal commas; from there on they were read as decimal points")],
        3,
        1,
        "'20,0' has a comma",
        POINTS_AND_BLANKS,
    ),
    "end_of_file_mark.s2p": (
        [("note", "the file ends with an end-of-file mark of old systems; it was left out")],
        None,
        None,
        "the file ends with an end-of-file mark of old systems",
        "delete the last character",
    ),
    "falling.s2p": (
        [("caution", "line 4: the frequency falls from row to row; the rows were sorted")],
        4,
        None,
        "the frequency falls from row to row",
        SORT,
    ),
    "fortran_exponent.s2p": (
        [("caution", "line 4: D for an exponent; from there on it was read as E")],
        4,
        4,
        "'0.8211D+01' has D for its exponent",
        "write E in place of D",
    ),
    "frequency_falls_back.s2p": (
        [("note", "lines 9, 10 and 11: a row repeats an earlier one to the last digit; it was left out")],
        9,
        None,
        "a row repeats an earlier one to the last digit",
        DELETE_ONE,
    ),
    "last_number_cut.s2p": (
        [("caution", "line 8: the file breaks off in its last row; the row was left out")],
        8,
        None,
        "the file breaks off in its last row",
        SAVE_AGAIN,
    ),
    "last_sign_alone.s2p": (
        [("caution", "line 8: the file breaks off in its last row; the row was left out")],
        8,
        None,
        "the file breaks off in its last row",
        SAVE_AGAIN,
    ),
    "option_line_commas.s2p": (
        [("note", "line 2: commas or semicolons in the option line; they were read as blanks")],
        2,
        None,
        "commas or semicolons in the option line",
        OPTION_LINE,
    ),
    "option_line_headings.s2p": (
        [("caution", "line 2: 'freq' and what follows are no words of the option line; they were ignored")],
        2,
        None,
        "'freq' and what follows are no words of the option line",
        OPTION_LINE,
    ),
    "r_without_blank.s2p": (
        [("note", "line 2: 'R50' has no blank after R; it was read as two words")],
        2,
        None,
        "'R50' has no blank after R",
        WRITE_R,
    ),
    "repeated_frequency.s2p": (
        [("note", "line 6: a row repeats an earlier one to the last digit; it was left out")],
        6,
        None,
        "a row repeats an earlier one to the last digit",
        DELETE_ONE,
    ),
    "reverse_dashes.s2p": (
        [("note", "line 3: S12 and S22 with no number in any row; taken as not measured")],
        3,
        None,
        "S12 and S22 with no number in any row",
        TURN_ROUND,
    ),
    "reverse_nan.s2p": (
        [("note", "line 3: S12 and S22 with no number in any row; taken as not measured")],
        3,
        None,
        "S12 and S22 with no number in any row",
        TURN_ROUND,
    ),
    "second_option_line.s2p": (
        [("caution", "line 4: a second option line that differs from the first; it was ignored, as the standard says")],
        4,
        None,
        "a second option line that differs from the first",
        "if two files were joined here, split them; else delete the line",
    ),
    "segments_out_of_order.s2p": (
        [("caution", "line 6: the frequency falls back to another segment; the rows were sorted")],
        6,
        None,
        "the frequency falls back to another segment",
        SORT,
    ),
    "semicolons.s2p": (
        [("caution", "line 3: semicolons; from there on they were read as blanks")],
        3,
        1,
        "'20.0;0.012;-0.134;8.201;…' is not a number",
        DELETE_ROW,
    ),
    "semicolons_decimal_commas.s2p": (
        [
            ("caution", "line 3: semicolons; from there on they were read as blanks"),
            ("caution", "line 3: decimal commas; from there on they were read as decimal points"),
        ],
        3,
        1,
        "'20,0;0,012;-0,134;8,201;…' has a comma",
        POINTS_AND_BLANKS,
    ),
    "truncated.s2p": (
        [("caution", "line 8: the file breaks off in its last row; the row was left out")],
        8,
        None,
        "the file breaks off in its last row",
        SAVE_AGAIN,
    ),
    "two_parameters.s2p": (
        [("note", "line 3: 5 numbers in every row; they were read as frequency, S11 and S21")],
        3,
        None,
        "5 numbers in every row",
        EXPORT_TWO_PORT,
    ),
    "two_port.s1p": (
        [
            (
                "note",
                "the name (.s1p) is not that of a two-port file; the rows are those of a two-port, and were read so",
            )
        ],
        None,
        None,
        "by its name (.s1p) this file has 1 port, and only two-port sweeps can be used",
        EXPORT_TWO_PORT,
    ),
    "utf16.s2p": (
        [("note", "the text is UTF-16; it was read as that")],
        None,
        None,
        "the text is UTF-16",
        "save the file as plain text or UTF-8",
    ),
    "version_2_count_wrong.s2p": (
        [
            (
                "caution",
                "line 5: [Number of Frequencies] says '401' where 6 stand in the file; "
                "those that stand there were read",
            )
        ],
        5,
        None,
        "[Number of Frequencies] says '401' where 6 stand in the file",
        "copy or save the file again; if it is whole, correct the count",
    ),
    "version_2_no_count.s2p": (
        [("note", "no keyword [Number of Frequencies]; the 6 in the file were read")],
        None,
        None,
        "no keyword [Number of Frequencies]",
        "write '[Number of Frequencies] 6'",
    ),
    "version_2_no_end.s2p": (
        [("note", "no keyword [End]; the file was taken to end with its last row")],
        None,
        None,
        "no keyword [End]",
        "write [End] below the last row",
    ),
    "version_2_no_ports.s2p": (
        [("note", "no keyword [Number of Ports]; the rows were read as those of a two-port")],
        None,
        None,
        "no keyword [Number of Ports]",
        "write '[Number of Ports] 2' below the option line",
    ),
}

CUT = {"last_number_cut.s2p", "last_sign_alone.s2p", "truncated.s2p"}
ONE_PATH = {"reverse_dashes.s2p", "reverse_nan.s2p", "two_parameters.s2p"}


def whole() -> tuple[np.ndarray, np.ndarray]:
    """Return what each of the files holds, from the rows as they are meant."""
    step = np.arange(6)
    pairs = [
        (0.012 + step * 0.1, -0.134 + 0 * step),
        (8.201 + step * 0.01, 1.570 + step * 0.001),
        (0.010 + step * 0.001, 0.0020 + step * 0.0001),
        (0.310 + step * 0.001, -0.220 - step * 0.001),
    ]
    s11, s21, s12, s22 = (np.round(real, 4) + 1j * np.round(imag, 4) for real, imag in pairs)
    return np.round(20 + step * 0.5, 1) * 1e6, np.array([[s11, s12], [s21, s22]])


@pytest.mark.parametrize("file", BENT)
def test_a_bent_file_reads_to_what_was_meant_and_says_what_was_done(file):
    sweep = read_sweep(FAULTS / file)
    frequency_hz, s = whole()
    rows = slice(0, 5 if file in CUT else 6)
    assert_array_equal(sweep.frequency_hz, frequency_hz[rows])
    if file in ONE_PATH:
        assert sweep.measured == ("S11", "S21")
        assert_array_equal(sweep.s[:, 0], s[:, 0, rows])
        assert not sweep.s[:, 1].any()
    else:
        assert sweep.measured == PARAMETERS
        assert_array_equal(sweep.s, s[:, :, rows])
    mended = [finding for finding in sweep.findings if finding.code == "file-mended"]
    assert [(finding.severity, finding.message) for finding in mended] == [
        (severity, f"{file}: {message}") for severity, message in BENT[file][0]
    ]
    assert all(finding.sweep == file and finding.advice for finding in mended)


@pytest.mark.parametrize("file", BENT)
def test_a_bent_file_is_refused_when_read_strictly(file):
    _, line, column, found, remedy = BENT[file]
    path = FAULTS / file
    with pytest.raises(SweepFileError) as caught:
        read_sweep(path, strict=True)
    place = f"{path}" + (f":{line}" if line else "") + (f" (column {column})" if column else "")
    assert str(caught.value) == f"{place}: {found}; {remedy}"


HEAD = "# MHz S RI R 50\n"
ROW = "0.1 0.2 3.5 -0.4 0.05 0.06 -0.7 0.08"


def parse(text: str, **options):
    return parse_sweep(text.encode(), name="x.s2p", **options)


def said(text: str) -> list[str]:
    return [finding.message.removeprefix("x.s2p: ") for finding in parse(text).findings]


# What only looks bent, and reads strictly without a word.


@pytest.mark.parametrize(
    "text",
    [
        "! Größe µ\n" + HEAD + f"1 {ROW}\n2 {ROW}\n",
        "".join(f"! comment {n}\n" for n in range(5000)) + HEAD + f"1 {ROW}\n2 {ROW}\n",
        HEAD + f"1 {ROW}\n" + "! comment; with, marks\n" * 5000 + f"2 {ROW}\n",
        HEAD + f"1 {ROW}\n2 {ROW}",
        HEAD + f"1 {ROW}\n2 {ROW} ! as seen",
        HEAD + f"1 {ROW}\n1.5 {ROW}\n2 {ROW}  ",
        HEAD + f"1 0.125 0.5 3.5 1 1 1 1 0.25\n2 0.5 0.5 1 1 1 1 1 0.5\n3 {ROW}",
        f"# MHz S RI R 50 75\n1 {ROW}\n2 {ROW}\n",
    ],
)
def test_forms_that_the_standard_allows_need_no_mending(text):
    for data in (text.encode(), text.encode("latin-1"), text.replace("\n", "\r\n").encode()):
        sweep = parse_sweep(data, name="x.s2p", strict=True)
        assert sweep.findings == ()
        assert_array_equal(sweep.s21, np.full(len(sweep.frequency_hz), 3.5 - 0.4j)) if "0.125" not in text else None


NUMBERS = "0.1 0.2 3.5 -0.4 0.05 0.06 -0.7 "


@pytest.mark.parametrize(
    "ends",
    [
        ("0.80", "0.81", "0.82", "0.83", "0.845"),  # longer, not shorter
        ("0.8", "0.81", "0.82", "0.83", "0.8"),  # as above in one row
        ("0.80", "0.81", "0.82", "0.8"),  # too few rows to tell
        ("8E-1", "8.1E-1", "8.2E-1", "8.3E-1", "8E-1"),
    ],
)
def test_a_last_number_without_line_end_is_whole_where_its_form_says_nothing(ends):
    text = HEAD + "\n".join(f"{f} {NUMBERS}{end}" for f, end in enumerate(ends, 1))
    sweep = parse(text, strict=True)
    assert sweep.findings == ()
    assert_array_equal(sweep.s22.imag, [float(end) for end in ends])


@pytest.mark.parametrize("last", ["0.8", "0.", "0", "-", "8.4E", "8.4E-", "8.4E-0"])
def test_a_last_number_of_another_form_without_line_end_is_cut(last):
    end = "8.40E-01" if "E" in last else "0.84"
    text = HEAD + "".join(f"{f} {NUMBERS}{end}\n" for f in range(1, 6))
    sweep = parse(text + f"6 {NUMBERS}{last}")
    assert_array_equal(sweep.s22.imag, [0.84] * 5)
    assert said(text + f"6 {NUMBERS}{last}") == ["line 7: the file breaks off in its last row; the row was left out"]


@pytest.mark.parametrize("noise", ["2 1.1 0.3 64 0.4", "2 1.1 0.3 64 0.4\n3 1.2 0.3 64 0.4"])
def test_a_noise_block_without_a_last_line_end_is_whole(noise):
    sweep = parse(HEAD + f"1 {ROW}\n2 {ROW}\n{noise}", strict=True)
    assert sweep.findings == ()
    assert sweep.noise is not None and sweep.noise.nf_min_db[0] == 1.1


def test_a_noise_block_that_breaks_off_loses_its_last_row():
    sweep = parse(HEAD + f"1 {ROW}\n2 {ROW}\n1 1.1 0.3 64 0.4\n2 1.2 0.3")
    assert sweep.noise is not None and len(sweep.noise.frequency_hz) == 1
    assert [finding.code for finding in sweep.findings] == ["file-mended"]


# Commas: one reading or none.


@pytest.mark.parametrize(
    ("rows", "reading"),
    [
        ("1,5 {0}\n2,5 {0}\n", "decimal commas"),
        ("1 {0}\n2 {0}\n", "decimal commas"),
        ("1,500 {0}\n2,500 {0}\n", "decimal commas"),
        ("1,5e0 {0}\n2,5E+0 {0}\n", "decimal commas"),
    ],
)
def test_decimal_commas(rows, reading):
    text = HEAD + rows.format(ROW.replace(".", ","))
    plain = HEAD + rows.replace(",", ".").format(ROW)
    assert said(text) == [f"line 2: {reading}; from there on they were read as decimal points"]
    assert_array_equal(parse(text).s, parse(plain).s)
    assert_array_equal(parse(text).frequency_hz, parse(plain).frequency_hz)


@pytest.mark.parametrize("between", [",", ", ", " , ", ";", "; ", "\t;", ",\t"])
@pytest.mark.parametrize("end", ["", "end"])
def test_separators(between, end):
    rows = [f"{f} {ROW}" for f in ("1.5", "2.5")]
    text = HEAD + "".join(between.join(row.split()) + (between if end else "") + "\n" for row in rows)
    assert_array_equal(parse(text).s, parse(HEAD + "\n".join(rows) + "\n").s)
    what = "semicolons" if ";" in between else "commas between the numbers"
    assert said(text) == [f"line 2: {what}; from there on they were read as blanks"]


@pytest.mark.parametrize(
    "text",
    [
        HEAD + "1,000 " + ROW + "\n",  # a comma beside points: a thousand, or one
        HEAD + "1,000 1,000 2,000 3,000 4,000 5,000 6,000 7,000 8,000\n",  # all may set thousands apart
        HEAD + "1 2,3 4,5 6,7 8,9\n2 2,3 4,5 6,7 8,9\n",  # nine numbers, or five
        HEAD + "1,,0.2,0.3,0.4,0.5,0.6,0.7,0.8\n",  # a number is missing
        HEAD + "1 0,1,2 0 0 0 0 0 0 0\n",
    ],
)
def test_commas_with_two_readings_or_none_are_a_fault(text):
    with pytest.raises(SweepFileError):
        parse(text)


def test_a_comma_in_a_comment_mends_nothing():
    text = HEAD + f"1 {ROW} ! one, two; three\n2 {ROW.replace('0.1', '1D-1')}\n"
    assert said(text) == ["line 3: D for an exponent; from there on it was read as E"]
    assert_array_equal(parse(text).s, parse(HEAD + f"1 {ROW}\n2 {ROW}\n").s)


# Order.


def test_segments_are_sorted_and_a_shared_end_written_twice_is_one_row():
    rows = {f: f"{f} {ROW.replace('3.5', str(f))}" for f in (1, 2, 3, 4, 5)}
    order = [3, 4, 5, 1, 2, 3]
    sweep = parse(HEAD + "".join(rows[f] + "\n" for f in order))
    assert_array_equal(sweep.frequency_hz, np.array([1, 2, 3, 4, 5]) * 1e6)
    assert_array_equal(sweep.s21.real, [1, 2, 3, 4, 5])
    assert len([finding for finding in sweep.findings if finding.code == "file-mended"]) == 2


def test_many_lines_are_named_in_few_words():
    rows = f"1 {ROW}\n" * 9 + f"2 {ROW}\n"
    assert said(HEAD + rows)[0].startswith("lines 3, 4, 5 and 5 more: a row repeats an earlier one")


# Names.


@pytest.mark.parametrize("file", ["a.s1p", "a.S3P", "a.s4p", "a.s12p"])
def test_rows_of_nine_numbers_are_a_two_port_whatever_the_name(file):
    text = HEAD + f"1 {ROW}\n2 {ROW}\n"
    (finding,) = parse_sweep(text.encode(), name=file).findings
    assert finding.message == (
        f"{file}: the name ({Path(file).suffix}) is not that of a two-port file; "
        "the rows are those of a two-port, and were read so"
    )
    with pytest.raises(SweepFileError, match="by its name "):
        parse_sweep(text.encode(), name=file, strict=True)


@pytest.mark.parametrize("file", ["a.s4p", "a.s12p"])
def test_one_row_of_nine_numbers_may_be_the_first_of_more_ports(file):
    with pytest.raises(SweepFileError, match="by its name "):
        parse_sweep((HEAD + f"1 {ROW}\n").encode(), name=file)


# Marks for no number, in the reverse columns alone.


@pytest.mark.parametrize("mark", ["nan", "NaN", "inf", "-inf", "OVL", "---", "-", "****", "N/A", "1.#IND"])
def test_marks_in_every_row_of_the_reverse_parameters_are_parameters_not_measured(mark):
    rows = "".join(f"{f} 0.1 0.{f} 2 -3 {mark} {mark} 0.3 0.{f}\n" for f in (1, 2, 3))
    sweep = parse(HEAD + rows)
    assert sweep.measured == ("S11", "S21", "S22")
    assert not sweep.s12.any()
    for other in (rows.replace(f"{mark} {mark}", "7 8", 1), rows.replace("0.2", mark, 1)):
        with pytest.raises(SweepFileError, match=r"^x\.s2p:\d \(column \d\): '.*' is not a "):
            parse(HEAD + other)


def test_a_missing_reverse_path_is_zero_in_decibels_too():
    sweep = parse("# MHz S DB\n1 -20 5 3 7 nan nan nan nan\n2 -21 5 3 7 nan nan nan nan\n")
    assert sweep.measured == ("S11", "S21")
    assert not sweep.s[:, 1].any()


# What no two-port has.


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("# MHz S DB\n1 -20 0 35 0 -60 0 -9 0\n2 -20 0 120 0 -60 0 -9 0\n", "S21 is 120 dB at 2 MHz, line 3, which no"),
        ("# MHz S DB\n1 -20 0 35 0 -60 0 -9 0\n2 21 0 35 0 -60 0 -9 0\n", "S11 is 21 dB at 2 MHz, line 3, which no"),
        ("# MHz S MA\n1 -20 0 3 0 0.1 0 0.1 0\n", "a magnitude is negative in line 2, as only decibels are"),
        (f"# MHz S RI R 0.05\n1 {ROW}\n", "a reference impedance of 0.05 and 0.05 ohm, which no analyzer has"),
        (f"# MHz S RI R 50e3\n1 {ROW}\n", "a reference impedance of 50000 and 50000 ohm, which no analyzer has"),
    ],
)
def test_values_that_no_two_port_has_are_findings(text, found):
    findings = [finding for finding in parse(text, strict=True).findings if finding.code == "impossible-value"]
    assert findings[0].message.startswith(f"x.s2p: {found}")
    assert {finding.severity for finding in findings} == {"caution"}


@pytest.mark.parametrize("text", ["# MHz S DB\n1 -20 0 99 0 -60 0 19 0\n", f"# MHz S RI R 1\n1 {ROW}\n"])
def test_values_that_a_two_port_may_have_are_none(text):
    assert parse(text).findings == ()


def test_every_broken_or_bent_sweep_has_a_case_and_a_word_in_the_readme():
    from_here = {path.name for path in FAULTS.glob("*.s[0-9]p") if not path.stem.startswith("good")}
    readme = (FAULTS / "README.md").read_text(encoding="utf-8")
    assert [file for file in sorted(from_here) if f"`{file}`" not in readme] == []
    other = (Path(__file__).parent / "test_touchstone_faults.py").read_text(encoding="utf-8")
    assert [file for file in sorted(from_here - BENT.keys()) if f'"{file}"' not in other] == []
