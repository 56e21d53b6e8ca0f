"""Paths, folders and patterns; files known by what is in them."""

from __future__ import annotations

import gzip
from pathlib import Path

import pytest

from tests.histories import write
from training.history.files import find_files, history_n_bytes, is_parquet, open_text_bytes
from training.history.options import BadHistory


def test_a_folder_stands_for_the_histories_below_it_by_name(tmp_path: Path) -> None:
    (tmp_path / "b").mkdir()
    wanted = [write(tmp_path, "x", "a.csv"), write(tmp_path / "b", "x", "c.csv.gz")]
    write(tmp_path, "x", "notes.md")
    assert find_files([tmp_path]) == wanted


def test_a_pattern_stands_for_what_it_matches(tmp_path: Path) -> None:
    first, second = write(tmp_path, "x", "1.csv"), write(tmp_path, "x", "2.csv")
    assert find_files([tmp_path / "*.csv"]) == [first, second]


def test_a_file_named_twice_is_read_once(tmp_path: Path) -> None:
    path = write(tmp_path, "x", "1.csv")
    assert find_files([path, tmp_path, path]) == [path]


def test_a_missing_file_is_refused_with_its_nearest_neighbour(tmp_path: Path) -> None:
    write(tmp_path, "x", "history.csv")
    with pytest.raises(BadHistory, match=r"histroy\.csv: no such file; did you mean .*/history"):
        find_files([tmp_path / "histroy.csv"])


def test_a_missing_folder_is_named(tmp_path: Path) -> None:
    with pytest.raises(BadHistory, match="the folder '.*/no' does not exist"):
        find_files([tmp_path / "no" / "history.csv"])


def test_an_empty_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadHistory, match=r"history\.csv: empty file"):
        find_files([write(tmp_path, "")])


def test_a_folder_without_history_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadHistory, match="no history in this folder; looked for names with .csv"):
        find_files([tmp_path])


def test_a_pattern_without_match_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadHistory, match="no file matches this pattern"):
        find_files([tmp_path / "*.csv"])


def test_no_path_at_all_is_refused() -> None:
    with pytest.raises(BadHistory, match="no file was named"):
        find_files([])


def test_the_size_of_a_history_is_that_of_its_files(tmp_path: Path) -> None:
    write(tmp_path, "x" * 10, "1.csv")
    write(tmp_path, "x" * 32, "2.csv")
    assert history_n_bytes([tmp_path]) == 42


def test_a_file_is_known_by_its_first_bytes_not_by_its_name(tmp_path: Path) -> None:
    assert is_parquet(write(tmp_path, b"PAR1....", "x.csv"))
    packed = write(tmp_path, gzip.compress(b"time\n"), "y.csv")
    with open_text_bytes(packed) as (stream, _):
        assert stream.read() == b"time\n"


def test_a_file_without_the_right_to_read_is_refused(tmp_path: Path) -> None:
    # A folder instead of a file: the system's own words are passed on.
    with (
        pytest.raises(BadHistory, match="cannot be read: Is a directory"),
        open_text_bytes(tmp_path),
    ):
        pass
