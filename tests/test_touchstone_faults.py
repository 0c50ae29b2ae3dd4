"""Broken Touchstone files: each gives one line with the place, what stands there and what to do about it."""

import os
from pathlib import Path

import pytest

from benchtool import touchstone
from benchtool.errors import SweepFileError
from benchtool.touchstone import parse_sweep, read_sweep

FAULTS = Path(__file__).parent / "faults"

DELETE_ROW = "sweep again, or delete the row"
EXPORT_TWO_PORT = "export a two-port sweep (.s2p) with S11, S21, S12 and S22"
POINTS_AND_BLANKS = "export with decimal points, and blanks between the numbers"
WRITE_R = "write the reference impedance: 'R 50'"
SORT = "sort the rows by frequency, or split joined sweeps into one file each"
SAVE_ALL = "sweep again and save all of the file"
NOISE_LAST = "put all network rows above the noise block, or delete the row"
OPTION_LINE = "write an option line such as '# MHz S RI R 50'"

CASES = [
    ("binary.s2p", None, None, "the file is binary, not text", "export the sweep as a Touchstone .s2p file"),
    ("blank_lost.s2p", 4, 2, "'0.112-0.134' is not a number", DELETE_ROW),
    ("dashes.s2p", 5, 4, "'--' is not a number", DELETE_ROW),
    ("empty.s2p", None, None, "the file is empty (0 bytes)", "sweep again and save, or copy the file again"),
    (
        "five_numbers_or_noise.s2p",
        3,
        None,
        "5 numbers in the row, where a two-port row has 9: two parameters, or a noise block alone",
        EXPORT_TWO_PORT,
    ),
    ("four_port.s2p", 4, None, "8 numbers in the row, where a two-port row has 9: a four-port file", EXPORT_TWO_PORT),
    ("infinite.s2p", 5, 4, "'-INF' is not a finite number", DELETE_ROW),
    (
        "keyword_in_data.s2p",
        3,
        None,
        "the keyword '[Network Data]' in a file that does not begin with [Version]",
        "begin the file with '[Version] 2.0' if it is of version 2; else delete the line",
    ),
    ("long_row.s2p", 5, None, "10 numbers in the row, where a two-port row has 9", DELETE_ROW),
    ("nan.s2p", 5, 3, "'nan' is not a finite number", DELETE_ROW),
    ("negative_frequency.s2p", 3, 1, "the frequency '-20.0' is negative", DELETE_ROW),
    (
        "no_finite_s.s2p",
        4,
        None,
        "the Z parameters of this row have no finite S parameters",
        "check the kind and format in the option line, or delete the row",
    ),
    (
        "no_option_line.s2p",
        2,
        None,
        "data before any option line, so the frequency unit and the format are unknown",
        "write an option line such as '# MHz S RI R 50' above the data, as the analyzer was set",
    ),
    ("no_rows.s2p", None, None, "no data rows after the option line", SAVE_ALL),
    ("noise_falls_back.s2p", 11, 1, "the frequency '19' falls back, below the row above", SORT),
    ("noise_row_short.s2p", 11, None, "4 numbers in a row of the noise block, which has 5", NOISE_LAST),
    ("not_a_number.s2p", 6, 4, "'OVL' is not a number", DELETE_ROW),
    (
        "not_touchstone.s2p",
        1,
        None,
        "'Date,Gain' is neither a comment, an option line nor a number",
        "begin the file with an option line such as '# MHz S RI R 50', and comments with '!'",
    ),
    (
        "one_port.s1p",
        None,
        None,
        "by its name (.s1p) this file has 1 port, and only two-port sweeps can be used",
        EXPORT_TWO_PORT,
    ),
    ("one_port.s2p", 3, None, "3 numbers in the row, where a two-port row has 9: a one-port file", EXPORT_TWO_PORT),
    ("only_comments.s2p", None, None, "nothing but comments and blank lines", SAVE_ALL),
    (
        "option_line_below_data.s2p",
        2,
        None,
        "data before any option line, so the frequency unit and the format are unknown",
        "if the option line in line 8 is of this sweep, move it above the data",
    ),
    ("overload.s2p", 5, 4, "'OVL' is not a number", DELETE_ROW),
    ("r_complex.s2p", 2, None, "the reference impedance R 50+j3 is not a positive number of ohms", WRITE_R),
    ("r_negative.s2p", 2, None, "the reference impedance R -50 is not a positive number of ohms", WRITE_R),
    ("r_without_value.s2p", 2, None, "R has no value after it", WRITE_R),
    ("r_zero.s2p", 2, None, "the reference impedance R 0 is not a positive number of ohms", WRITE_R),
    (
        "repeats_other_numbers.s2p",
        6,
        1,
        "the frequency '21.0' repeats the row above with other numbers",
        "delete one of the two rows, or split joined sweeps",
    ),
    ("row_after_noise.s2p", 11, None, "9 numbers in a row of the noise block, which has 5", NOISE_LAST),
    (
        "row_on_option_line.s2p",
        2,
        None,
        "10 numbers after R, where a two-port has one or 2",
        "write the option line on a line of its own",
    ),
    (
        "second_sweep.s2p",
        11,
        1,
        "the frequency '20.0' repeats line 3 with other numbers",
        "delete one of the two rows, or split joined sweeps",
    ),
    ("segments_overlap.s2p", 7, 1, "the frequency '20.75' falls back, below the row above", SORT),
    ("short_row.s2p", 5, None, "8 numbers in the row, where a two-port row has 9", DELETE_ROW),
    ("thousands_or_decimals.s2p", 3, 1, "'20,000' has a comma", POINTS_AND_BLANKS),
    ("three_port.s2p", 3, None, "7 numbers in the row, where a two-port row has 9: a three-port file", EXPORT_TWO_PORT),
    ("too_large.s2p", 7, 4, "'1e999' is too large", DELETE_ROW),
    (
        "two_units.s2p",
        2,
        None,
        "the option line gives the frequency unit twice",
        "keep the one that the analyzer was set to",
    ),
    ("unknown_option.s2p", 2, None, "'THz' is not a word of the option line", OPTION_LINE),
    (
        "version_2_four_ports.s2p",
        3,
        None,
        "'4' ports, and only two-port sweeps can be used",
        "export a two-port sweep with S11, S21, S12 and S22",
    ),
    (
        "version_2_information_open.s2p",
        6,
        None,
        "[Begin Information] without an end",
        "write [End Information] below the block",
    ),
    ("version_2_keyword_open.s2p", 13, None, "'[End' has no closing bracket", "write keywords in square brackets"),
    (
        "version_2_keyword_twice.s2p",
        7,
        None,
        "the keyword '[Matrix Format]' stands twice",
        "keep the one that is true; if two files were joined here, split them",
    ),
    (
        "version_2_keyword_unknown.s2p",
        6,
        None,
        "'[Temperature]' is no keyword of Touchstone version 2",
        "delete it, or export the sweep as Touchstone version 1",
    ),
    (
        "version_2_matrix_unknown.s2p",
        6,
        None,
        "'Diagonal' is no matrix format",
        "write Full, Lower or Upper, as the rows are",
    ),
    (
        "version_2_mixed_mode.s2p",
        6,
        None,
        "[Mixed-Mode Order] with differential or common modes, which are not those of two ports",
        "export single-ended parameters",
    ),
    ("version_2_no_network.s2p", None, None, "no keyword [Network Data], so no rows", SAVE_ALL),
    (
        "version_2_no_option_line.s2p",
        1,
        None,
        "no option line, so the frequency unit and the format are unknown",
        "write an option line such as '# MHz S RI R 50' below [Version], as the analyzer was set",
    ),
    (
        "version_2_no_order.s2p",
        5,
        None,
        "no keyword [Two-Port Data Order], so S21 and S12 cannot be told apart",
        "write '[Two-Port Data Order] 21_12' or '12_21', as the rows are",
    ),
    ("version_2_no_rows.s2p", 6, None, "no rows below [Network Data]", SAVE_ALL),
    (
        "version_2_noise_count_text.s2p",
        6,
        None,
        "[Number of Noise Frequencies] 'two' is not a whole number",
        "write how many there are",
    ),
    (
        "version_2_one_reference.s2p",
        6,
        None,
        "1 value after [Reference], where a two-port has 2",
        "write one impedance for each port: '[Reference] 50 50'",
    ),
    (
        "version_2_order_unknown.s2p",
        4,
        None,
        "'22_11' is no data order of two ports",
        "write 21_12 or 12_21, as the rows are",
    ),
    (
        "version_2_row_on_keyword.s2p",
        6,
        None,
        "'20.0 0.012 -0.134 8.201 …' on the line of [Network Data]",
        "put it on the next line",
    ),
    ("version_2_row_short.s2p", 9, None, "8 numbers in the row, where a row of this file has 9", DELETE_ROW),
    (
        "version_2_text_below_end.s2p",
        14,
        None,
        "text below [End]",
        "if two files were joined here, split them; else delete it",
    ),
    (
        "version_3.s2p",
        1,
        None,
        "'3.0' is no version of Touchstone that has keywords",
        "write 2.0 or 2.1, as the file was written",
    ),
    (
        "version_below_option_line.s2p",
        2,
        None,
        "the keyword '[Version] 2.0' in a file that does not begin with [Version]",
        "begin the file with '[Version] 2.0' if it is of version 2; else delete the line",
    ),
    (
        "wrapped_rows.s2p",
        3,
        None,
        "5 numbers in the row, where a two-port row has 9: it goes on in the next line",
        "write each row on one line",
    ),
    (
        "z_two_references.s2p",
        2,
        None,
        "Z parameters normalised to two reference impedances, which has no one reading",
        "export S parameters, or version 2",
    ),
]


@pytest.mark.parametrize("strict", [False, True], ids=["tolerant", "strict"])
@pytest.mark.parametrize(("file", "line", "column", "found", "remedy"), CASES, ids=[case[0] for case in CASES])
def test_each_broken_file_gives_its_place_fault_and_remedy(file, line, column, found, remedy, strict):
    path = FAULTS / file
    with pytest.raises(SweepFileError) as caught:
        read_sweep(path, strict=strict)
    error = caught.value
    place = f"{path}" + (f":{line}" if line else "") + (f" (column {column})" if column else "")
    assert str(error) == f"{place}: {found}; {remedy}"
    assert (error.path, error.line, error.column) == (path, line, column)
    assert (error.found, error.remedy) == (found, remedy)


NAMES_A_LINE = ("option_line_below_data.s2p", "second_sweep.s2p")


@pytest.mark.parametrize(
    "case", [case for case in CASES if case[1] and case[0] not in NAMES_A_LINE], ids=lambda case: case[0]
)
def test_line_numbers_hold_with_other_line_ends_and_more_comments(case):
    file, line, column, found, remedy = case
    text = (FAULTS / file).read_bytes().decode()
    for moved, new in ((0, text.replace("\n", "\r\n")), (0, text.replace("\n", "\r")), (2, "\n! more\n" + text)):
        with pytest.raises(SweepFileError) as caught:
            parse_sweep(new.encode(), name=file)
        assert (caught.value.line, caught.value.column) == (line + moved, column)
        assert str(caught.value).endswith(f": {found}; {remedy}")


HEAD = "# MHz S RI R 50\n"
ROW = "0.1 0.2 3.5 -0.4 0.05 0.06 -0.7 0.08"


@pytest.mark.parametrize(
    ("data", "message"),
    [
        (f"# R MHz\n1 {ROW}\n", "x.s2p:1: the reference impedance R MHz is not a positive number of ohms; "),
        (f"# MHz S RI R 50 75 90\n1 {ROW}\n", "x.s2p:1: 3 numbers after R, where a two-port has one or 2; "),
        (f"# MHz S RI R 50 0\n1 {ROW}\n", "x.s2p:1: the reference impedance R 0 is not a positive number of ohms; "),
        (f"# MHz S R 50 GHx\n1 {ROW}\n", "x.s2p:1: 'GHx' is not a word of the option line; "),
        (f"# MHz\x0bS RI R 50\n1 {ROW}\n", "x.s2p:1: 'MHz\\x0bS' is not a word of the option line; "),
        (f"# MHz S S\n1 {ROW}\n", "x.s2p:1: the option line gives the kind of parameter twice; "),
        (f"# MA DB\n1 {ROW}\n", "x.s2p:1: the option line gives the number format twice; "),
        (f"# R 50 R 50\n1 {ROW}\n", "x.s2p:1: the option line gives the reference impedance twice; "),
        (f"{HEAD}1e306 {ROW}\n", "x.s2p:2 (column 1): the frequency '1e306' is too large; check the unit "),
        (f"{HEAD}1 {ROW}\n1_0 {ROW}\n", "x.s2p:3 (column 1): '1_0' is not a number; "),
        (f"{HEAD}1 {ROW}\n٢ {ROW}\n", "x.s2p:3 (column 1): '٢' is not a number; "),
        (f"{HEAD}1 {ROW}\n0x10 {ROW}\n", "x.s2p:3 (column 1): '0x10' is not a number; "),
        (f"{HEAD}1 {ROW}\ntrue {ROW}\n", "x.s2p:3 (column 1): 'true' is not a number; "),
        (f"{HEAD}1 {ROW}\n2 {ROW}\n3 ! {ROW}\n", "x.s2p:4: 1 number in the row, where a two-port row has 9; "),
        (f"{HEAD}1 {ROW}\n2 \x1b[31m {ROW}\n", "x.s2p:3 (column 2): '\\x1b[31m' is not a number; "),
        (f"{HEAD}{'7' * 400} {ROW}\n", f"x.s2p:2 (column 1): '{'7' * 24}…' is too large; "),
        (f"{HEAD}1 {ROW.replace('3.5', '7' * 400)}\n", f"x.s2p:2 (column 4): '{'7' * 24}…' is too large; "),
        (f"# MHz S DB\n1 9999 0 {ROW[8:]}\n", "x.s2p:2: the S parameters of this row have no finite S parameters; "),
        (f"{HEAD}# GHz\n", "x.s2p: no data rows after the option line; "),
        (f"[Number of Ports] 2\n{HEAD}1 {ROW}\n", "x.s2p:1: the keyword '[Number of Ports]' before any [Version]; "),
        (f"[version] 2.1 ! new\n{HEAD}1 {ROW}\n", "x.s2p:3: '1' is neither a comment, an option line nor a keyword; "),
        ("\n\n\n", "x.s2p: nothing but comments and blank lines; "),
        (f"{HEAD}1 {ROW}\n".encode("utf-16")[:-1], "x.s2p: the text begins as UTF-16 and breaks off; "),
        (f"{HEAD}1 {ROW}\n\0".encode("utf-16"), "x.s2p: the file is binary, not text; "),
        (f"{HEAD}1 {ROW}\n".encode() + bytes(7), "x.s2p: the file is binary, not text; "),
    ],
)
def test_other_faults(data, message):
    with pytest.raises(SweepFileError) as caught:
        parse_sweep(data if isinstance(data, bytes) else data.encode(), name="x.s2p")
    assert str(caught.value).startswith(message)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("odd", ["0.1234567890123456,0.2", "true", "null", "[0.1]", '"0.1"', "Infinity", "NaN"])
def test_what_is_a_value_elsewhere_is_no_number_among_long_ones(odd):
    value = "0.12345678901234567"
    good = "".join(f"{f}.0000 {' '.join([value] * 8)}\n" for f in range(40))
    # the comma would make two numbers of one, nine in all
    bad = " ".join([value] * (6 if "," in odd else 7) + [odd])
    with pytest.raises(SweepFileError, match=r"^x\.s2p:42( \(column \d\))?: '"):
        parse_sweep(f"# Hz S RI\n{good}40.0 {bad}\n".encode(), name="x.s2p")


@pytest.mark.parametrize("word", ["null", "true", "false", "NaN", "Infinity", "[1]", '"1"', "{}", ","])
@pytest.mark.parametrize("place", range(20))
def test_no_word_of_json_joins_or_fills_rows(word, place):
    # Two rows on one line with a word between, or in place of a number: never a sweep, whatever reads the numbers.
    rows = [f"{1 + k} 0.1 0 0.2 0 0.3 0 0.4 0" for k in range(4)]
    words = f"{rows[0]} {rows[1]}".split()
    words.insert(place, word)
    for changed in (words, [*words[:place], *words[place + 1 :][1:]]):
        text = "# MHz S RI R 50\n" + "\n".join([" ".join(changed), *rows[2:]]) + "\n"
        with pytest.raises(SweepFileError):
            parse_sweep(text.encode(), name="x.s2p")


@pytest.mark.parametrize("file", ["a.s1p", "a.S3P", "a.s4p", "a.s12p"])
def test_rows_of_another_number_of_ports_are_told_by_the_name(file):
    with pytest.raises(SweepFileError, match=f"by its name \\({Path(file).suffix}\\) this file has "):
        parse_sweep(f"{HEAD}1 {ROW[:8]}\n2 {ROW[:8]}\n".encode(), name=file)


@pytest.mark.parametrize("file", ["a.s2p", "a.S2P", "a.txt", "a", "a.sp", "a.snp"])
def test_other_names_are_taken_for_two_ports(file):
    assert parse_sweep(f"{HEAD}1 {ROW}\n".encode(), name=file).full


def test_missing_file(tmp_path):
    path = tmp_path / "absent.s2p"
    with pytest.raises(SweepFileError) as caught:
        read_sweep(path)
    assert str(caught.value) == f"{path}: no such file; check the name and the folder"


def test_folder(tmp_path):
    with pytest.raises(SweepFileError) as caught:
        read_sweep(tmp_path)
    assert str(caught.value) == f"{tmp_path}: this is a folder, not a file; name a .s2p file in it"


def test_pipe_is_not_waited_for(tmp_path):
    if not hasattr(os, "mkfifo"):
        pytest.skip("no named pipes here")
    os.mkfifo(tmp_path / "pipe.s2p")
    with pytest.raises(SweepFileError, match="this is a device or a pipe, not a file; save the sweep to a file first"):
        read_sweep(tmp_path / "pipe.s2p")


def test_file_that_may_not_be_read(tmp_path, monkeypatch):
    path = tmp_path / "locked.s2p"
    path.write_text(f"{HEAD}1 {ROW}\n")

    def refuse(self):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "read_bytes", refuse)
    with pytest.raises(SweepFileError) as caught:
        read_sweep(path)
    assert str(caught.value) == f"{path}: the file may not be read; give yourself the right to read it"


def test_absurd_size_is_refused_before_reading(tmp_path, monkeypatch):
    path = tmp_path / "huge.s2p"
    with path.open("wb") as file:
        file.truncate(touchstone._LARGEST_BYTES + 1)  # takes no room on disk
    monkeypatch.setattr(Path, "read_bytes", lambda self: pytest.fail("read"))
    with pytest.raises(SweepFileError, match="the file has 67 MB, more than any sweep; check that it is a sweep"):
        read_sweep(path)


@pytest.mark.parametrize("name", ["a\0b.s2p", "n" * 5000])
def test_names_no_file_can_have(name):
    with pytest.raises(SweepFileError, match="the file cannot be read "):
        read_sweep(name)
