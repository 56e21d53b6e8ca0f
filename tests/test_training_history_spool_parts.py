"""Files read one by one and joined are the history that one process reads."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from scoring.channels import ChannelTable, parse_channels
from training.hands import HERE, Here, Item, Result
from training.history.options import BadHistory, HistoryOptions
from training.history.spool import Spool, spool_history
from training.history.spool_parts import parts_read_by

Row = tuple[int | None, str | None, float | None]

TABLE: ChannelTable = parse_channels(
    {"channel": [{"name": "flow", "unit": "m3/h", "span": [0.0, 100.0]}]}, "test"
)
SECOND = 1_000_000_000
SCHEMA = pa.schema(
    [("time", pa.timestamp("ns", tz="UTC")), ("source", pa.string()), ("flow", pa.float64())]
)


def write(path: Path, rows: Sequence[Row], **more: Any) -> Path:
    """Write a Parquet file of (second, source, flow)."""
    cells = [
        {"time": None if s is None else s * SECOND, "source": name, "flow": flow}
        for s, name, flow in rows
    ]
    pq.write_table(pa.Table.from_pylist(cells, SCHEMA), path, **more)
    return path


def both(folder: Path, exclude: Path | None = None) -> tuple[Spool, Spool]:
    """Return the history read by one process, and in parts."""
    fill = parts_read_by(HERE, TABLE, HistoryOptions())
    return (
        spool_history([folder], TABLE, HistoryOptions(), exclude=exclude),
        spool_history([folder], TABLE, HistoryOptions(), exclude=exclude, fill=fill),
    )


def assert_same(folder: Path, exclude: Path | None = None) -> Spool:
    """Hold the two ways against each other, in chunks that cross files; return the second."""
    one, parts = both(folder, exclude)
    with one:
        assert parts.sources == one.sources
        assert parts.report == one.report
        for source in one.sources:
            assert parts.first_last_ns(source) == one.first_last_ns(source)
            for mine, theirs in zip(one.chunks(source, 7), parts.chunks(source, 7), strict=True):
                assert np.array_equal(mine[0], theirs[0])
                assert np.array_equal(mine[1], theirs[1], equal_nan=True)
    return parts


def pieces(spool: Spool) -> list[str]:
    """Return the names of the files that hold a spool's rows."""
    return sorted(path.name for path in spool.place.iterdir())


def test_files_in_any_order_are_one_history_with_one_report(tmp_path: Path) -> None:
    write(tmp_path / "b.parquet", [(s, "mill", float(s)) for s in range(20)])
    later: list[Row] = [(s, "mill", float(s)) for s in range(20, 31)]
    bad: list[Row] = [(None, "mill", 1.0), (40, None, 1.0), (41, "lane", 500.0)]
    write(tmp_path / "a.parquet", later + bad + [(s, "lane", None) for s in range(50, 53)])
    write(tmp_path / "c.parquet", [(s, "lane", 2.0) for s in range(60, 70)])
    with assert_same(tmp_path) as parts:
        assert parts.n_records("mill") == 31
        assert parts.report.outside_span["flow"] == 1
        assert sum(parts.report.rejected.values()) == 2
        # One file a source is left, and nothing of the pieces.
        assert len(pieces(parts)) == 2


def test_excluded_periods_are_left_out_of_parts_too(tmp_path: Path) -> None:
    folder = tmp_path / "data"
    folder.mkdir()
    write(folder / "a.parquet", [(s, "mill", float(s)) for s in range(10)])
    write(folder / "b.parquet", [(s, "mill", float(s)) for s in range(10, 20)])
    exclude = tmp_path / "exclude.csv"
    exclude.write_text(
        "source,start,end,reason\nmill,1970-01-01T00:00:05Z,1970-01-01T00:00:12Z,overhaul\n",
        encoding="utf-8",
    )
    with assert_same(folder, exclude) as parts:
        assert parts.report.excluded["overhaul"] >= 7
        assert parts.report.excluded_of.total() == parts.report.excluded.total()


@pytest.mark.parametrize(
    ("first", "second"),
    [(range(20), range(10, 30)), (range(20), range(19, 30)), ([3, 1, 2], [5, 6])],
    ids=["overlap", "one time twice", "out of order"],
)
def test_what_must_be_looked_at_together_is_read_by_one(
    tmp_path: Path, first: Sequence[int], second: Sequence[int]
) -> None:
    write(tmp_path / "a.parquet", [(s, "mill", float(s)) for s in first])
    write(tmp_path / "b.parquet", [(s, "mill", -1.0 + s / 2) for s in second])
    with assert_same(tmp_path) as parts:
        assert pieces(parts) == ["0.rows"]


def test_a_file_that_a_worker_does_not_see_is_refused(tmp_path: Path) -> None:
    @dataclass(frozen=True)
    class Elsewhere(Here):
        def each(self, work: Callable[[Item], Result], items: Sequence[Item]) -> Iterator[Result]:
            away = tmp_path / "a.parquet"
            away.rename(tmp_path / "away")
            yield from super().each(work, items)

    path = write(tmp_path / "a.parquet", [(1, "mill", 1.0)])
    fill = parts_read_by(Elsewhere(), TABLE, HistoryOptions())
    with pytest.raises(BadHistory, match=r"a.parquet: a worker does not see it; history must"):
        spool_history([path], TABLE, HistoryOptions(), fill=fill)


def test_text_files_are_read_by_one(tmp_path: Path) -> None:
    write(tmp_path / "a.parquet", [(s, "mill", float(s)) for s in range(10)])
    text = "time,source,flow\n1970-01-01T00:01:00Z,mill,3\n"
    (tmp_path / "b.csv").write_text(text, encoding="utf-8")
    with assert_same(tmp_path) as parts:
        assert parts.n_records("mill") == 11


def test_a_file_that_cannot_be_read_is_refused_in_the_same_words(tmp_path: Path) -> None:
    write(tmp_path / "a.parquet", [(s, "mill", float(s)) for s in range(10)])
    pq.write_table(pa.table({"time": ["1970-01-01T00:00:30Z"]}), tmp_path / "b.parquet")
    says = []
    for fill in (None, parts_read_by(HERE, TABLE, HistoryOptions())):
        with pytest.raises(BadHistory, match="no column 'flow'") as caught:
            spool_history([tmp_path], TABLE, HistoryOptions(), fill=fill)
        says.append(str(caught.value))
    assert says[0] == says[1]
