"""What a night learns from: a window and files, less what people and alerts say of it."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.histories import a_table, write
from tests.service_http import NOW_NS, START_S, Api, record, running
from tests.stored_alerts import put_alert
from training.changes import Change
from training.chosen import Chosen, Wanted, choose
from training.history.exclusions import Exclusion
from training.history.spool import Spool
from training.nightly_settings import HistoryWanted
from training.stored import DATABASE_FILE, BadStore, Store

START_NS, MINUTE_NS = START_S * 10**9, 60 * 10**9
TABLE = a_table({"name": "flow"}, {"name": "power"}, step_s=60)
# The last ten of sixty minutes are the judge's.
HISTORY, JUDGE_DAYS = HistoryWanted(days=1.0, join_alerts_h=0.0), 10 / 1440


@pytest.fixture
def api(tmp_path: Path) -> Iterator[Api]:
    """Run a service with an hour of records of two sources."""
    with running(tmp_path) as found:
        found.post([record(minute, source) for minute in range(60) for source in ("a", "b")])
        yield found


def chosen(folder: Path, **more: Any) -> Chosen:
    """Return what a night would take."""
    wanted = Wanted(history=more.pop("history", HISTORY), judge_days=JUDGE_DAYS, **more)
    with closing(Store(folder / "data")) as store:
        return choose(store, TABLE, wanted)


def minutes(spool: Spool, source: str) -> list[int]:
    """Return a source's times in minutes after the first."""
    if source not in spool.sources:
        return []
    return [int(t - START_NS) // MINUTE_NS for times, _ in spool.chunks(source) for t in times]


def at(minute: float) -> int:
    """Return a minute's time."""
    return round(START_NS + minute * MINUTE_NS)


@pytest.mark.usefixtures("api")
def test_the_newest_days_are_kept_for_the_judge(tmp_path: Path) -> None:
    with chosen(tmp_path) as found:
        assert minutes(found.learning, "a") == list(range(50))
        assert minutes(found.held, "b") == list(range(50, 60))
        assert found.cut_ns == at(49)
        assert (found.n_records, found.hours, found.n_in_alert) == (100, 1, 0)
        assert not found.left_out


@pytest.mark.usefixtures("api")
def test_real_alerts_out_of_service_maintenance_and_changes_leave_everything(
    tmp_path: Path,
) -> None:
    put_alert(tmp_path / "data", "a", at(10), at(14), "real")
    put_alert(tmp_path / "data", "a", at(55), None, "real")
    service = {"start": "2025-12-01T04:20:00Z", "end": "2025-12-01T04:22:00Z", "reason": "pump"}
    still = {"start": "2025-12-01T04:57:00Z", "end": None, "reason": "valve"}
    with closing(sqlite3.connect(tmp_path / "data" / DATABASE_FILE)) as store, store:
        for source, said in (("b", service), ("b", still)):
            store.execute(
                "INSERT INTO action (at_ns, who, what, source, alert, comment, details) "
                "VALUES (0, '', 'out_of_service', ?, '', '', ?)",
                (source, json.dumps(said)),
            )
    cleaning = Exclusion("", at(30), at(32), "cleaning")
    change = Change("b", at(5), "new meter", at(6))
    with chosen(tmp_path, exclusions=(cleaning,), changes=(change,)) as found:
        a, b = minutes(found.learning, "a"), minutes(found.learning, "b")
        assert a == [m for m in range(50) if m not in (10, 11, 12, 13, 14, 30, 31)]
        assert b == [m for m in range(5, 50) if m not in (20, 21, 30, 31)]
        assert minutes(found.held, "a") == [50, 51, 52, 53, 54]
        assert minutes(found.held, "b") == [50, 51, 52, 53, 54, 55, 56]
        assert dict(found.left_out) == {
            "alert labelled real": 10, "cleaning": 4, "out of service: pump": 2,
            "out of service: valve": 3, "before a change: new meter": 5,
        }  # fmt: skip


@pytest.mark.usefixtures("api")
def test_unlabelled_alerts_are_stretches_and_nuisance_is_neither(tmp_path: Path) -> None:
    put_alert(tmp_path / "data", "a", at(10), at(14))
    put_alert(tmp_path / "data", "a", at(15), at(16))
    put_alert(tmp_path / "data", "b", at(10), at(20), "nuisance")
    put_alert(tmp_path / "data", "b", at(40), at(45), kind="silent")
    with chosen(tmp_path) as found:
        assert found.in_alert["a"].tolist() == [[at(10), at(14)], [at(15), at(16)]]
        assert "b" not in found.in_alert
        assert found.n_in_alert == 7
        assert found.unlabelled_for_long == []
        assert found.n_records == 100
        assert [alert.label for alert in found.alerts] == ["", "nuisance", "", ""]
    put_alert(tmp_path / "data", "b", at(20), at(33))
    with chosen(tmp_path) as found:
        assert found.unlabelled_for_long == ["b"]
    joined = HistoryWanted(days=1.0, join_alerts_h=1 / 60)
    with chosen(tmp_path, history=joined) as found:
        assert found.in_alert["a"].tolist() == [[at(10), at(16)]]


@pytest.mark.usefixtures("api")
def test_alerts_of_a_declared_change_are_no_trouble(tmp_path: Path) -> None:
    for since, until in ((8, 9), (12, 20), (40, 44)):
        put_alert(tmp_path / "data", "a", at(since), at(until), model=f"m{since}")
    put_alert(tmp_path / "data", "b", at(12), at(20), model="m12")
    change = Change("a", at(10), "new meter", at(30))
    # The last alert was raised by a model that knows the new meter, the first was before.
    known = {("m12", "a"): at(0), ("m40", "a"): at(10)}
    with chosen(tmp_path, changes=(change,), learned_from=lambda *names: known.get(names)) as found:
        assert found.in_alert["a"].tolist() == [[at(8), at(9)], [at(40), at(44)]]
        assert found.in_alert["b"].tolist() == [[at(12), at(20)]]
    # Of models that are no longer kept: what was raised until the change was declared.
    with chosen(tmp_path, changes=(change,)) as found:
        assert found.in_alert["a"].tolist() == [[at(8), at(9)], [at(40), at(44)]]


@pytest.mark.usefixtures("api")
def test_files_are_added_and_what_stands_in_both_counts_once(tmp_path: Path) -> None:
    lines = ["time,source,flow,power"]
    for day, minute in ((1, 0), (1, 1), (30, 0)):
        lines.append(f"2025-11-{day:02}T04:{minute:02}:00Z,old,1,2")
    lines += ["2025-12-01T04:03:00Z,a,7,7", "2025-12-01T04:55:00Z,c,7,7"]
    path = write(tmp_path, "\n".join(lines) + "\n")
    with chosen(tmp_path, files=(str(path),)) as found:
        assert found.learning.n_records("old") == 3
        assert minutes(found.learning, "a") == list(range(50))
        values = np.concatenate([v for _, v in found.learning.chunks("a")])
        assert values[3].tolist() == [7.0, 7.0]
        # A file's newest records are the judge's as well.
        assert minutes(found.held, "c") == [55]


def test_a_window_of_the_store_ends_at_its_newest_record(tmp_path: Path, api: Api) -> None:
    api.post([record(minute, "c") for minute in range(-120, 0)])
    with chosen(tmp_path, history=HistoryWanted(days=0.1)) as found:
        assert found.window.until_ns == at(59)
        assert minutes(found.learning, "c") == list(range(-85, 0))


def test_a_store_with_gaps_keeps_them(tmp_path: Path) -> None:
    gap = [m for m in range(60) if not 20 <= m < 45]
    with running(tmp_path) as api:
        api.post([record(m, "a", power=None if m % 2 else 30.0) for m in gap])
    with chosen(tmp_path) as found:
        assert minutes(found.learning, "a") == [m for m in gap if m < 50]
        values = np.concatenate([v for _, v in found.learning.chunks("a")])
        assert np.isnan(values[:, 1]).tolist() == [m % 2 == 1 for m in gap if m < 50]


def test_times_are_utc_whatever_offset_they_came_with(tmp_path: Path) -> None:
    # One hour in which a local clock was put back: 02:30 comes twice, an hour apart.
    summer, winter = "2025-10-26T02:30:00+02:00", "2025-10-26T02:30:00+01:00"
    with running(tmp_path) as api:
        for text in (summer, winter):
            api.post({**record(0, "a"), "time": text})
    with chosen(tmp_path) as found:
        times = [t for spool in (found.learning, found.held) for t, _ in _all(spool)]
        assert [t // 10**9 for t in times] == [1761438600, 1761442200]


def test_records_ahead_of_the_clock_move_neither_window_nor_judge(tmp_path: Path) -> None:
    ahead = (NOW_NS - START_NS) / MINUTE_NS + 600
    with running(tmp_path) as api:
        api.post([record(minute, "a") for minute in range(60)])
        api.post(record(ahead, "a"))
    with chosen(tmp_path) as found:
        assert found.window.until_ns == at(59)
        assert minutes(found.held, "a") == list(range(50, 60))


def _all(spool: Spool) -> Iterator[tuple[int, list[float]]]:
    for source in spool.sources:
        for times, values in spool.chunks(source):
            yield from zip(times.tolist(), values.tolist(), strict=True)


def test_an_empty_store_is_refused(tmp_path: Path) -> None:
    with running(tmp_path), pytest.raises(BadStore, match="holds no records yet"):
        chosen(tmp_path)
