"""A whole history: several files, what each must have, sentences for what it has not."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.histories import a_table, read, rows, write
from training.history import delimited
from training.history.batch import SourceRegister
from training.history.options import BadHistory, HistoryOptions
from training.history.reading import near_name, read_history
from training.history.tally import Tally

ROW = "2026-12-01T04:00:00Z,1,running\n"


def test_files_follow_each_other_and_sources_keep_their_numbers(tmp_path: Path) -> None:
    head = "time,source,flow,pump\n"
    first = write(tmp_path, head + ROW.replace(",", ",a,", 1) + ROW.replace(",", ",b,", 1), "1.csv")
    second = write(
        tmp_path, head + ROW.replace(",", ",c,", 1) + ROW.replace(",", ",a,", 1), "2.csv"
    )
    one, two = read([first, second])
    assert one.source_codes.tolist() == [0, 1]
    assert two.source_codes.tolist() == [2, 0]
    assert two.source_names == ("a", "b", "c")
    assert two.file == second


def test_files_may_have_their_columns_in_any_order(tmp_path: Path) -> None:
    first = write(tmp_path, "time,flow,pump\n" + ROW, "1.csv")
    second = write(tmp_path, "pump;flow;time\nstopped;1,5;2026-12-01T04:00:10Z\n", "2.csv")
    assert [r[3] for r in rows(read([first, second]))] == [[1.0, 0.0], [1.5, 1.0]]


def test_no_time_column_names_what_looks_like_one(tmp_path: Path) -> None:
    path = write(tmp_path, "Time stamp,flow,pump\n" + ROW)
    with pytest.raises(
        BadHistory, match=r"no time column 'time'; what looks .* 'Time stamp': say --time \"Time st"
    ):
        read(path)


def test_no_time_column_at_all_lists_the_columns(tmp_path: Path) -> None:
    path = write(tmp_path, "a,flow,pump\n" + ROW)
    with pytest.raises(BadHistory, match="the columns are 'a', 'flow', 'pump'; name the one"):
        read(path)


def test_a_source_column_that_was_named_must_be_there(tmp_path: Path) -> None:
    path = write(tmp_path, "time,station,flow,pump\n" + ROW.replace(",", ",a,", 1))
    with pytest.raises(BadHistory, match="no source column 'Statoin'; the nearest is 'station'"):
        read(path, source="Statoin")
    assert [batch.source_names for batch in read(path, source="station")] == [("a",)]
    # Unless it was, a history may do without one.
    assert rows(read(path))[0][3] == [1.0, 0.0]


def test_an_absent_channel_names_the_nearest_column(tmp_path: Path) -> None:
    path = write(tmp_path, "time,Flow ,pump\n" + ROW)
    with pytest.raises(BadHistory, match="no column 'flow', which the .*; the nearest is 'Flow'"):
        read(path)


def test_a_channel_left_out_needs_no_column(tmp_path: Path) -> None:
    path = write(tmp_path, "time,flow\n2026-12-01T04:00:00Z,1\n")
    table = a_table({"name": "flow"}, {"name": "remark", "leave_out": True})
    assert read(path, table)[0].values.tolist() == [[1.0]]


def test_local_times_without_a_zone_are_refused_with_the_way_out(tmp_path: Path) -> None:
    path = write(tmp_path, "time,flow,pump\n" + ROW.replace("Z", ""))
    with pytest.raises(BadHistory, match="the times have no offset from UTC; .* --zone Europe/Lis"):
        read(path)


def test_progress_adds_up_to_the_bytes_of_the_files(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    class Count:
        n = 0

        def advance(self, n: int) -> None:
            self.n += n

    monkeypatch.setattr(delimited, "BLOCK_BYTES", 100)
    path, count = write(tmp_path, "time,flow,pump\n" + ROW * 50), Count()
    batches = list(read_history([path], a_table(), HistoryOptions(), Tally(), count))
    assert len(batches) > 10
    assert count.n == path.stat().st_size


def test_a_near_name_does_not_mind_capitals() -> None:
    assert near_name("flow rate", ["FLOW RATE 1", "level"]) == "; the nearest is 'FLOW RATE 1'"
    many = [f"channel {i}" for i in range(20)]
    assert near_name("zzz", many).endswith("'channel 11' and 8 more")


def test_a_register_numbers_sources_once() -> None:
    register = SourceRegister()
    assert [register.code(name) for name in ("b", "a", "b")] == [0, 1, 0]
    assert register.names == ("b", "a")


def test_good_is_where_there_is_no_problem(tmp_path: Path) -> None:
    (batch,) = read(write(tmp_path, "time,flow,pump\n" + ROW + "never,1,running\n"))
    np.testing.assert_array_equal(batch.good, [True, False])
    assert batch.n_rows == 2
