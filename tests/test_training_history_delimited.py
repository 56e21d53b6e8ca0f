"""Text files of cells: what separates them, how they are written, what is wrong with them."""

from __future__ import annotations

import csv
import gzip
import io
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.histories import write
from training.history import delimited
from training.history.delimited import DelimitedFile, find_separator
from training.history.options import BadHistory, HistoryOptions


def cells_of(path: Path, **options: str) -> list[tuple[int, list[str | None]]]:
    """Return line and cells of every row."""
    file = DelimitedFile(path, HistoryOptions(**options))  # type: ignore[arg-type]
    found = []
    for batch in file.batches(file.names):
        columns = [batch.columns[name].to_pylist() for name in file.names]
        found += [
            (line, [column[i] for column in columns]) for i, line in enumerate(batch.lines.tolist())
        ]
    return found


@pytest.mark.parametrize("separator", [",", ";", "\t", "|"])
def test_the_separator_is_found(tmp_path: Path, separator: str) -> None:
    path = write(tmp_path, f"time{separator}flow\n2026{separator}1\n")
    assert cells_of(path) == [(2, ["2026", "1"])]


def test_decimal_commas_do_not_pass_for_separators() -> None:
    assert find_separator(["time;flow, net;level", "a;1,5;2,5", "b;1,6;2,4"]) == ";"


def test_a_spreadsheets_hint_is_taken(tmp_path: Path) -> None:
    assert cells_of(write(tmp_path, "sep=;\ntime;flow\na;1,5\n")) == [(3, ["a", "1,5"])]


def test_one_column_has_no_separator_and_is_read(tmp_path: Path) -> None:
    assert cells_of(write(tmp_path, "time\na\nb\n")) == [(2, ["a"]), (3, ["b"])]


@pytest.mark.parametrize(
    ("encoding", "mark"),
    [("utf-8", b""), ("utf-8-sig", b""), ("latin-1", b""), ("utf-16", b"")],
)
def test_encodings_are_told_apart(tmp_path: Path, encoding: str, mark: bytes) -> None:
    path = write(tmp_path, mark + "time;Druck °\na;läuft\n".encode(encoding))
    file = DelimitedFile(path, HistoryOptions())
    assert file.names == ("time", "Druck °")
    assert cells_of(path) == [(2, ["a", "läuft"])]


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_any_line_end_is_read(tmp_path: Path, end: str) -> None:
    path = write(tmp_path, end.join(["time,flow", "a,1", "b,2"]))
    assert cells_of(path) == [(2, ["a", "1"]), (3, ["b", "2"])]


def test_packed_text_is_unpacked(tmp_path: Path) -> None:
    assert cells_of(write(tmp_path, gzip.compress(b"time,flow\na,1\n"))) == [(2, ["a", "1"])]


def test_a_damaged_packed_file_is_refused(tmp_path: Path) -> None:
    text = "time,flow\n" + "".join(f"{i},{i * i}\n" for i in range(100_000))
    path = write(tmp_path, gzip.compress(text.encode())[:-2000])
    with pytest.raises(BadHistory, match="cannot be read to its end"):
        cells_of(path)


def test_quoted_headings_and_cells_lose_their_quotes(tmp_path: Path) -> None:
    path = write(tmp_path, '"time","flow, net"\n"a","1"\nb,2\n')
    assert DelimitedFile(path, HistoryOptions()).names == ("time", "flow, net")
    assert cells_of(path) == [(2, ["a", "1"]), (3, ["b", "2"])]


def test_an_open_quote_ends_with_its_line(tmp_path: Path) -> None:
    path = write(tmp_path, 'time,flow\na,"1\nb,2\nc,3\n')
    assert cells_of(path) == [(2, ["a", "1"]), (3, ["b", "2"]), (4, ["c", "3"])]


def test_blank_lines_are_no_rows_and_lines_are_still_counted(tmp_path: Path) -> None:
    path = write(tmp_path, "\n\ntime,flow\n\na,1\n   \nb,2\n\n")
    assert cells_of(path) == [(5, ["a", "1"]), (7, ["b", "2"])]


@pytest.mark.parametrize("quote", ["", '"'])
def test_a_row_with_the_wrong_number_of_cells_keeps_its_place(tmp_path: Path, quote: str) -> None:
    path = write(tmp_path, f"time,flow\na,1\nb\nc,3,4\n{quote}d{quote},5\n")
    file = DelimitedFile(path, HistoryOptions())
    (batch,) = file.batches(["flow"])
    assert batch.columns["flow"].to_pylist() == ["1", None, None, "5"]
    assert batch.n_cells_met == {1: 1, 2: 3}
    assert (batch.n_cells, batch.lines.tolist()) == (2, [2, 3, 4, 5])


def test_columns_without_a_name_are_passed_over(tmp_path: Path) -> None:
    assert cells_of(write(tmp_path, "time,,flow,\na,x,1,\n")) == [(2, ["a", "1"])]


def test_two_columns_of_one_name_are_refused(tmp_path: Path) -> None:
    with pytest.raises(BadHistory, match="column 'flow' stands twice in the heading"):
        DelimitedFile(write(tmp_path, "time,flow,flow\n"), HistoryOptions())


@pytest.mark.parametrize("text", ["\n\n", "   \n"])
def test_a_file_of_blanks_is_empty(tmp_path: Path, text: str) -> None:
    with pytest.raises(BadHistory, match="empty file"):
        DelimitedFile(write(tmp_path, text), HistoryOptions())


def test_a_file_of_bytes_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadHistory, match="is neither text nor Parquet"):
        DelimitedFile(write(tmp_path, b"\x89PNG\0\0\0"), HistoryOptions())


def test_text_without_any_line_break_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(delimited, "BLOCK_BYTES", 100)
    monkeypatch.setattr(delimited, "MAX_LINE_BYTES", 1000)
    with pytest.raises(BadHistory, match="no line break in 1100 bytes"):
        DelimitedFile(write(tmp_path, b"x" * 5000), HistoryOptions())


def test_a_heading_alone_has_no_rows(tmp_path: Path) -> None:
    assert cells_of(write(tmp_path, "time,flow")) == []


CELL = st.text(st.sampled_from('ab1. ,;"é-'), max_size=4)


@given(rows=st.lists(st.lists(CELL, min_size=0, max_size=4), max_size=12), block=st.integers(9, 60))
def test_any_table_is_read_as_the_standard_library_reads_its_lines(
    tmp_path_factory: pytest.TempPathFactory, rows: list[list[str]], block: int
) -> None:
    text = io.StringIO()
    csv.writer(text, lineterminator="\n").writerows([["time", "x", "y"], *rows])
    path = write(tmp_path_factory.mktemp("any"), text.getvalue())
    expected = []
    for line, cells in enumerate(csv.reader(io.StringIO(text.getvalue())), start=1):
        if line > 1 and "".join(cells).strip() + "x" * (len(cells) - 1):
            expected.append((line, [c or None for c in cells] if len(cells) == 3 else [None] * 3))
    with pytest.MonkeyPatch.context() as patch:
        # Blocks of a few bytes: every row meets the end of one somewhere.
        patch.setattr(delimited, "BLOCK_BYTES", block)
        assert cells_of(path, separator=",") == expected


def test_the_bytes_read_add_up_to_the_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(delimited, "BLOCK_BYTES", 64)
    path = write(tmp_path, "time,flow\n" + "a,1\n" * 100)
    file = DelimitedFile(path, HistoryOptions())
    assert sum(batch.n_bytes for batch in file.batches(["flow"])) == path.stat().st_size
