"""Parquet in batches, by the number of the row."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from tests.histories import a_table, read, rows, write
from training.history import columnar
from training.history.columnar import ColumnarFile
from training.history.options import BadHistory
from training.history.tally import Tally

TIMES = pd.date_range("2026-12-01T04:00:00Z", periods=4, freq="10s")


def parquet(folder: Path, **columns: object) -> Path:
    """Write a Parquet file of some columns."""
    path = folder / "history.parquet"
    pd.DataFrame(columns).to_parquet(path, index=False)
    return path


def test_typed_columns_are_read_as_their_text_would_be(tmp_path: Path) -> None:
    path = parquet(
        tmp_path,
        time=TIMES,
        source=pd.Categorical(["a", "a", "b", None]),
        flow=[1.5, None, np.inf, 4.0],
        pump=["running", None, "stopped", "running"],
    )
    assert rows(read(path)) == [
        (1, "2026-12-01T04:00:00", "a", [1.5, 0.0], ""),
        (2, "2026-12-01T04:00:10", "a", [None, None], ""),
        (3, "2026-12-01T04:00:20", "b", [None, None], "infinite number"),
        (4, "2026-12-01T04:00:30", "", [None, None], "no source"),
    ]


@pytest.mark.parametrize("column", [[1, 0, 1, 0], [True, False, True, False], [1.0, 0.0, 1.0, 0.0]])
def test_numbers_and_truths_are_words_of_a_state(tmp_path: Path, column: list[object]) -> None:
    path = parquet(tmp_path, time=TIMES, pump=column)
    words = ["false", "true"] if column[0] is True else ["0", "1"]
    table = a_table({"name": "pump", "kind": "state", "words": words})
    (batch,) = read(path, table)
    assert batch.values[:, 0].tolist() == [1, 0, 1, 0]


def test_stamps_without_zone_need_one(tmp_path: Path) -> None:
    path = parquet(tmp_path, time=TIMES.tz_localize(None), flow=[1, 2, 3, 4], pump=["running"] * 4)
    with pytest.raises(BadHistory, match="no offset from UTC; .* --zone"):
        read(path)


def test_stamps_in_other_units_and_zones_are_the_same_instants(tmp_path: Path) -> None:
    there = TIMES.tz_convert("Europe/Lisbon").as_unit("ms")
    path = parquet(tmp_path, time=there, flow=[1, 2, 3, 4], pump=["running"] * 4)
    assert rows(read(path))[0][1] == "2026-12-01T04:00:00"


def test_a_column_without_numbers_is_refused_by_name(tmp_path: Path) -> None:
    path = parquet(tmp_path, time=TIMES, flow=[[1.0]] * 4, pump=["running"] * 4)
    with pytest.raises(BadHistory, match="column 'flow': list.* is no number"):
        read(path)


def test_batches_are_bounded_and_their_bytes_add_up(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(columnar, "N_BATCH_ROWS", 3)
    path = parquet(tmp_path, time=TIMES, flow=[1, 2, 3, 4])
    batches = list(ColumnarFile(path).batches(["flow"]))
    assert [batch.lines.tolist() for batch in batches] == [[1, 2, 3], [4]]
    assert sum(batch.n_bytes for batch in batches) == path.stat().st_size


def test_a_damaged_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadHistory, match="cannot be read as Parquet"):
        ColumnarFile(write(tmp_path, b"PAR1 and no more"))


def test_a_file_damaged_in_the_middle_is_refused(tmp_path: Path) -> None:
    path = parquet(tmp_path, time=TIMES, flow=[1.0, 2.0, 3.0, 4.0], pump=["running"] * 4)
    content = bytearray(path.read_bytes())
    content[4:200] = bytes(196)
    path.write_bytes(content)
    with pytest.raises(BadHistory, match="cannot be read to its end"):
        read(path, tally=Tally())
