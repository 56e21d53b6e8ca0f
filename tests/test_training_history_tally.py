"""Counts of bad rows, and the list of them."""

from __future__ import annotations

import csv
from pathlib import Path

import pytest

from training.history.options import BadHistory
from training.history.tally import BROKEN_TIME, TEXT, Tally


def test_every_bad_row_is_listed_with_file_line_reason_and_detail(tmp_path: Path) -> None:
    with Tally(tmp_path / "bad.csv") as tally:
        tally.reject(Path("h.csv"), 7, TEXT, "'flow' reads 'a, b'")
        tally.reject(Path("h.csv"), 9, BROKEN_TIME, "x" * 1000)
    with (tmp_path / "bad.csv").open(newline="") as file:
        heading, first, second = csv.reader(file)
    assert heading == ["file", "line", "reason", "detail"]
    assert first == ["h.csv", "7", TEXT, "'flow' reads 'a, b'"]
    assert len(second[3]) == 160


def test_the_list_is_there_when_nothing_was_bad(tmp_path: Path) -> None:
    Tally(tmp_path / "bad.csv").close()
    assert (tmp_path / "bad.csv").read_text() == "file,line,reason,detail\n"


def test_a_list_that_cannot_be_written_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadHistory, match="cannot be written: No such file or directory"):
        Tally(tmp_path / "no" / "bad.csv")


def test_the_first_row_of_each_reason_is_kept_in_words() -> None:
    tally = Tally()
    tally.reject("h.csv", 2, TEXT, "one")
    tally.reject("h.csv", 3, TEXT, "two")
    assert tally.first == {TEXT: "h.csv, line 2: one"}
    assert tally.rejected[TEXT] == tally.n_rejected == 2


def test_half_bad_is_let_pass_and_more_is_refused_with_the_commonest_reason() -> None:
    tally = Tally()
    tally.n_rows = 4
    tally.reject("h.csv", 2, TEXT, "one")
    tally.reject("h.csv", 3, TEXT, "two")
    tally.refuse_if_mostly_bad("h.csv")
    tally.reject("h.csv", 4, BROKEN_TIME, "three")
    with pytest.raises(
        BadHistory,
        match="h.csv: 3 of 4 rows cannot be used, 2 of them for 'text in a measurement'; the first "
        "is h.csv, line 2: one",
    ):
        tally.refuse_if_mostly_bad("h.csv")
