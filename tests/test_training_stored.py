"""Records come out of a real service's store as they went in."""

from __future__ import annotations

import math
import sqlite3
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from scoring.channels import ChannelTable
from service import pipeline
from service.store import database, tables
from tests.histories import a_table
from tests.service_http import NOW_NS, START_S, Api, record, running
from training import stored
from training.history.exclusions import Exclusion
from training.history.spool import Spool
from training.stored import BadStore, Store, Window, spool_stored

MINUTE_NS = 60 * 10**9
START_NS = START_S * 10**9
EVER = Window(0, 2**62)

# The stand-in's channels in another order, a word moved and one more, one channel left
# out, and one that the stand-in does not know.
TABLE = a_table(
    {"name": "pump", "kind": "state", "words": ["off duty", "stopped", "running"]},
    {"name": "speed"},
    {"name": "flow", "span": [0, 300]},
    {"name": "humidity"},
    {"name": "gate", "kind": "state", "words": ["shut", "open"]},
    step_s=60,
)


@pytest.fixture
def api(tmp_path: Path) -> Iterator[Api]:
    """Run a service over the stand-in model."""
    with running(tmp_path) as found:
        yield found


def spooled(folder: Path, table: ChannelTable = TABLE, window: Window = EVER, **more: Any) -> Spool:
    """Return what the store of a service in this folder holds."""
    with closing(Store(folder / "data")) as store:
        return spool_stored(store, table, window, **more)


def values_of(spool: Spool, source: str) -> NDArray[np.float64]:
    """Return all values of a source."""
    return np.concatenate([values for _, values in spool.chunks(source)])


def minutes_of(spool: Spool, source: str) -> list[int]:
    """Return all times of a source, in minutes after the first record's hour."""
    return [int(t - START_NS) // MINUTE_NS for times, _ in spool.chunks(source) for t in times]


def test_readings_come_back_in_the_order_of_the_table(tmp_path: Path, api: Api) -> None:
    api.post([record(0, "a", flow=120.0, speed=1450.0, pump="stopped"), record(0, "b", flow=7.0)])
    with spooled(tmp_path) as spool:
        assert spool.sources == ("a", "b")
        nan = math.nan
        np.testing.assert_equal(values_of(spool, "a"), [[1, 1450, 120, nan, nan]])
        np.testing.assert_equal(values_of(spool, "b"), [[2, 1450, 7, nan, nan]])
        assert spool.report.n_rows == 2


@pytest.mark.parametrize(
    ("readings", "column", "value"),
    [
        ({"flow": None}, 2, math.nan),
        ({"flow": {"value": 5.0, "quality": "bad"}}, 2, math.nan),
        ({"flow": {"value": 5.0, "quality": "uncertain"}}, 2, 5.0),
        ({"flow": 350.0}, 2, math.nan),
        ({"pump": "off duty"}, 0, 0),
        ({"pump": "turning back"}, 0, 3),
        ({"pump": None}, 0, math.nan),
        ({"humidity": 40.5}, 3, 40.5),
        ({"humidity": "wet"}, 3, math.nan),
        ({"gate": "open"}, 4, 1),
        ({"gate": "ajar"}, 4, 2),
        ({"gate": 1}, 4, math.nan),
    ],
)
def test_what_the_serving_model_did_not_know_is_read_by_the_new_table(
    tmp_path: Path, api: Api, readings: dict[str, Any], column: int, value: float
) -> None:
    assert api.post(record(0, "a", **readings)).status_code == 200
    with spooled(tmp_path) as spool:
        np.testing.assert_equal(values_of(spool, "a")[0, column], value)


def test_readings_that_count_as_missing_are_counted_by_channel(tmp_path: Path, api: Api) -> None:
    api.post([record(0, flow=350.0), record(1, flow={"value": 5.0, "quality": "bad"})])
    api.post([record(2, pump="turning back")])
    with spooled(tmp_path) as spool:
        report = spool.report
        assert (report.outside_span, report.bad_quality) == ({"flow": 1}, {"flow": 1})
        assert report.unknown_words == {"pump": 1}


def test_a_channel_that_was_stored_as_another_kind_is_missing(tmp_path: Path, api: Api) -> None:
    api.post(record(0, "a"))
    table = a_table({"name": "pump"}, {"name": "flow", "kind": "state", "words": ["low", "high"]})
    with spooled(tmp_path, table) as spool:
        assert np.isnan(values_of(spool, "a")).all()


def test_late_records_are_sorted_in_and_records_ahead_of_the_clock_left_out(
    tmp_path: Path, api: Api
) -> None:
    ahead = round((NOW_NS - START_NS) / MINUTE_NS) + 30
    api.post([record(5, "a"), record(3, "a"), record(4, "a"), record(ahead, "a")])
    with spooled(tmp_path) as spool:
        assert minutes_of(spool, "a") == [3, 4, 5]


def test_a_window_is_the_last_days_before_the_newest_record(tmp_path: Path, api: Api) -> None:
    api.post([record(minute, "a") for minute in range(20)])
    with closing(Store(tmp_path / "data")) as store:
        window = store.newest(5 / 1440)
        assert window == Window(START_NS + 14 * MINUTE_NS, START_NS + 19 * MINUTE_NS)
        assert store.n_rows(window) == 20
    with spooled(tmp_path, window=window) as spool:
        assert minutes_of(spool, "a") == [14, 15, 16, 17, 18, 19]


def test_excluded_periods_are_left_out(tmp_path: Path, api: Api) -> None:
    api.post([record(minute, "a") for minute in range(4)])
    period = Exclusion("a", START_NS + MINUTE_NS, START_NS + 3 * MINUTE_NS, "cleaning")
    with spooled(tmp_path, exclusions=(period,)) as spool:
        assert minutes_of(spool, "a") == [0, 3]
        assert spool.report.excluded == {"cleaning": 2}


def test_many_pages_give_every_record_once(
    tmp_path: Path, api: Api, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(stored, "_PAGE_ROWS", 7)
    for minute in range(0, 60, 10):
        api.post([record(minute + i, source) for i in range(10) for source in ("a", "b")])
    with spooled(tmp_path) as spool:
        assert minutes_of(spool, "a") == minutes_of(spool, "b") == list(range(60))


def test_only_records_that_arrived_late_enough_are_looked_at(tmp_path: Path) -> None:
    clock = [NOW_NS]
    with running(tmp_path, clock_ns=lambda: clock[0]) as api:
        for _ in range(9):
            api.post([record((clock[0] - START_NS) / MINUTE_NS - 1, "a")])
            clock[0] += 60 * MINUTE_NS
    with closing(Store(tmp_path / "data")) as store:
        newest = store.newest(2.5 / 24)
        assert store.n_rows(newest) == 3


def test_the_store_of_a_stopped_service_is_read_and_left_as_it_was(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        api.post([record(0, "a"), record(1, "a")])
    path = tmp_path / "data" / stored.DATABASE_FILE
    before = path.read_bytes()
    with spooled(tmp_path) as spool:
        assert minutes_of(spool, "a") == [0, 1]
    assert path.read_bytes() == before


def test_a_folder_without_a_store_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadStore, match=r"records.sqlite3: no such file; is this the service's"):
        Store(tmp_path)


def test_a_store_of_another_make_is_refused_by_what_it_lacks(tmp_path: Path) -> None:
    with closing(sqlite3.connect(tmp_path / stored.DATABASE_FILE)) as connection:
        connection.execute("CREATE TABLE record (id INTEGER, source_id INTEGER)")
    with pytest.raises(BadStore, match=r"has no layout.id, layout.channels; it is no store"):
        Store(tmp_path)


def test_a_file_that_is_no_database_is_refused(tmp_path: Path) -> None:
    (tmp_path / stored.DATABASE_FILE).write_text("not a database, only a long line\n" * 100)
    with pytest.raises(BadStore, match="cannot be read: file is not a database"):
        Store(tmp_path)


def test_an_empty_store_is_refused(tmp_path: Path, api: Api) -> None:
    with closing(Store(tmp_path / "data")) as store, pytest.raises(BadStore, match="no records"):
        store.newest(28)


def test_a_window_without_records_is_refused(tmp_path: Path, api: Api) -> None:
    api.post(record(0, "a"))
    with pytest.raises(BadStore, match="no record of the days asked for"):
        spooled(tmp_path, window=Window(START_NS + 1, START_NS + 2))


def test_what_is_relied_on_is_what_the_service_has() -> None:
    assert stored.DATABASE_FILE == database.DATABASE_FILE
    assert stored.FLAG_AHEAD == tables.FLAG_AHEAD
    assert stored.AHEAD_NS == pipeline.AHEAD_NS
    for name, columns in stored.COLUMNS.items():
        assert set(columns) <= set(tables.metadata.tables[name].columns.keys())
