"""Files appear whole or not at all; names become file names; what is written is what was found."""

from pathlib import Path

import pytest

from benchtool.errors import OutputError
from benchtool.export import file_stem, prepare_folder, unique_stems, write_whole


def test_a_file_is_replaced_whole(tmp_path):
    path = tmp_path / "x.json"
    write_whole(path, b"one")
    write_whole(path, b"two")
    assert path.read_bytes() == b"two"
    assert [p.name for p in tmp_path.iterdir()] == ["x.json"]


def test_a_write_that_fails_leaves_the_old_file(tmp_path, monkeypatch):
    path = tmp_path / "x.json"
    write_whole(path, b"old")

    def full(_handle):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("benchtool.whole_files.os.fsync", full)
    with pytest.raises(OutputError, match="cannot be written \\(No space left on device\\); free the disk"):
        write_whole(path, b"new")
    assert path.read_bytes() == b"old"
    assert [p.name for p in tmp_path.iterdir()] == ["x.json"]


def test_a_folder_that_is_not_there_is_a_fault(tmp_path):
    with pytest.raises(OutputError):
        write_whole(tmp_path / "nowhere" / "x", b"")


def test_a_file_in_the_way_of_the_folder_is_a_fault(tmp_path):
    (tmp_path / "x").write_bytes(b"")
    with pytest.raises(OutputError, match="cannot be made"):
        prepare_folder(tmp_path / "x")


@pytest.mark.parametrize(
    ("name", "stem"),
    [
        ("stage 2", "stage 2"),
        ("a/b\\c:d", "a_b_c_d"),
        ("..", "device"),
        ("tab\there\x00", "tab_here_"),
        ("Verstärker λ 中", "Verstärker λ 中"),
        ('what? *"<>|', "what_ _____"),
    ],
)
def test_stems(name, stem):
    assert file_stem(name) == stem


def test_long_names_are_cut_to_what_file_systems_take():
    assert len(file_stem("中" * 300).encode()) <= 100


def test_stems_differ_even_where_case_does_not_count():
    assert unique_stems(["A", "a", "A", "results"]) == ["A", "a (2)", "A (3)", "results (2)"]


def test_stem_stays_in_its_folder():
    for name in ("../../etc", "/abs", "a\\..\\b"):
        assert Path(file_stem(name)).name == file_stem(name)
