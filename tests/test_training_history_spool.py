"""History on disk: in time order, once, without what was excluded, as often as one likes."""

from __future__ import annotations

import random
from pathlib import Path

import numpy as np
import pytest

from tests.histories import DATA, a_table, write
from training.history import delimited, spool
from training.history.options import BadHistory, HistoryOptions
from training.history.spool import Spool, spool_history

HEAD = "time,source,flow,pump\n"
FLOW = {"name": "flow"}


def line(second: int, source: str = "a", flow: float = 1.0) -> str:
    """Return one record as a line."""
    return f"2026-12-01T04:{second // 60:02d}:{second % 60:02d}Z,{source},{flow},running\n"


def flows(kept: Spool, source: str, n_rows: int = 65_536) -> list[float]:
    """Return the first channel of all records of a source."""
    return [float(x) for _, values in kept.chunks(source, n_rows) for x in values[:, 0]]


def test_records_come_back_in_chunks_per_source_and_as_often_as_asked(tmp_path: Path) -> None:
    text = HEAD + "".join(line(i, "ab"[i % 2], i) for i in range(25))
    with spool_history([write(tmp_path, text)], a_table(), HistoryOptions()) as kept:
        assert kept.sources == ("a", "b")
        assert [kept.n_records(source) for source in kept.sources] == [13, 12]
        for _ in range(2):
            chunks = list(kept.chunks("a", 5))
            assert [len(times) for times, _ in chunks] == [5, 5, 3]
            assert flows(kept, "a", 5) == list(range(0, 25, 2))
        times_ns = np.concatenate([times for times, _ in kept.chunks("b", 7)])
        assert np.all(np.diff(times_ns) == 2_000_000_000)
        assert kept.first_last_ns("b") == (times_ns[0], times_ns[-1])


@pytest.mark.parametrize("order", ["shuffled", "backwards", "files swapped"])
def test_any_order_of_rows_comes_back_in_time_order(
    tmp_path: Path, order: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(delimited, "BLOCK_BYTES", 500)
    monkeypatch.setattr(spool, "MAX_WAITING_BYTES", 400)
    lines = [line(i, "a", i) for i in range(200)]
    if order == "shuffled":
        random.Random(3).shuffle(lines)
    elif order == "backwards":
        lines.reverse()
    else:
        lines = lines[100:] + lines[:100]
    paths = [
        write(tmp_path, HEAD + "".join(part), f"{i}.csv")
        for i, part in enumerate((lines[:100], lines[100:]))
    ]
    with spool_history(paths, a_table(), HistoryOptions()) as kept:
        assert flows(kept, "a", 30) == list(range(200))
        assert kept.report.n_records == {"a": 200}


@pytest.mark.parametrize("shuffled", [False, True])
def test_of_two_rows_with_one_time_the_first_read_is_kept(tmp_path: Path, shuffled: bool) -> None:
    lines = [line(0, "a", 1), line(0, "b", 2), line(10, "a", 3), line(10, "a", 4), line(20, "a", 5)]
    if shuffled:
        lines = [lines[4], *lines[:4]]
    rejected = tmp_path / "bad.csv"
    path = write(tmp_path, HEAD + "".join(lines))
    with spool_history([path], a_table(), HistoryOptions(), rejected=rejected) as kept:
        assert flows(kept, "a") == [1.0, 3.0, 5.0]
        assert dict(kept.report.rejected) == {"time twice": 1}
    number = 6 if shuffled else 5
    assert rejected.read_text().splitlines()[1] == (
        f"{path},{number},time twice,source 'a' has this time already"
    )


def test_the_report_says_what_became_of_every_row() -> None:
    table = a_table(
        {"name": "flow", "span": [0, 1000]},
        {"name": "pump", "kind": "state", "words": ["running", "stopped"]},
    )
    with spool_history([DATA / "bad_rows.csv"], table, HistoryOptions()) as kept:
        report = kept.report
    # A pressure of inf is no matter to a table that does not watch the pressure.
    assert report.rejected == {
        "broken time": 1,
        "text in a measurement": 1,
        "wrong number of cells": 1,
        "no source": 1,
        "time without an offset": 1,
        "time twice": 1,
    }
    assert report.n_rows == 20
    assert report.n_records == {"alder-bank": 14}
    assert report.outside_span == {"flow": 1}
    assert report.unknown_words == {"pump": 1}
    assert (report.first_ns, report.last_ns) == (1793692800000000000, 1793692838000000000)


def test_excluded_periods_are_left_out_and_counted_by_reason(tmp_path: Path) -> None:
    text = HEAD + "".join(line(i, source, i) for i in range(10) for source in "ab")
    exclude = write(
        tmp_path,
        "source,start,end,reason\n"
        "a,2026-12-01T04:00:02Z,2026-12-01T04:00:05Z,pump renewed\n"
        ",2026-12-01T04:00:08Z,2026-12-01T05:00:00Z,outage\n",
        "exclude.csv",
    )
    path = write(tmp_path, text)
    with spool_history([path], a_table(), HistoryOptions(), exclude=exclude) as kept:
        assert flows(kept, "a") == [0, 1, 5, 6, 7]
        assert flows(kept, "b") == list(range(8))
        assert kept.report.excluded == {"pump renewed": 3, "outage": 4}


def test_nothing_left_is_refused(tmp_path: Path) -> None:
    exclude = write(
        tmp_path,
        "source,start,end,reason\n,2000-01-01T00:00:00Z,2100-01-01T00:00:00Z,all\n",
        "exclude.csv",
    )
    path = write(tmp_path, HEAD + line(0))
    with pytest.raises(BadHistory, match="no record is left to use: every row is in an excluded"):
        spool_history([path], a_table(), HistoryOptions(), exclude=exclude)
    with pytest.raises(BadHistory, match="no record is left to use: a heading and no rows"):
        spool_history([write(tmp_path, HEAD)], a_table(), HistoryOptions())


def test_a_mostly_bad_history_is_refused_and_leaves_nothing_behind(tmp_path: Path) -> None:
    path = write(tmp_path, HEAD + line(0) + "never,a,1,running\n" * 2)
    folder = tmp_path / "spools"
    folder.mkdir()
    with pytest.raises(BadHistory, match="2 of 3 rows cannot be used, 2 of them for 'broken time'"):
        spool_history([path], a_table(), HistoryOptions(), folder=folder)
    assert not list(folder.iterdir())


def test_a_closed_spool_leaves_nothing_behind(tmp_path: Path) -> None:
    folder = tmp_path / "spools"
    folder.mkdir()
    path = write(tmp_path, HEAD + line(0))
    with spool_history([path], a_table(), HistoryOptions(), folder=folder) as kept:
        assert len(list(folder.iterdir())) == 1
    kept.close()
    assert not list(folder.iterdir())


def test_one_row_read_twice_from_two_files_is_one_record(tmp_path: Path) -> None:
    first = write(tmp_path, HEAD + line(0) + line(10), "1.csv")
    second = write(tmp_path, HEAD + line(10) + line(20), "2.csv")
    with spool_history([first, second], a_table(FLOW), HistoryOptions()) as kept:
        assert kept.n_records("a") == 3
        assert kept.report.first["time twice"].startswith(f"{second}, line 2")
