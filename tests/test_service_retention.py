"""Old records go, and what went is on record."""

from __future__ import annotations

from pathlib import Path

from tests.service_http import NOW_NS, Api, record, running

HOUR_NS = 3600 * 10**9


def test_records_older_than_the_age_go_and_it_is_on_record(tmp_path: Path) -> None:
    now_ns = [NOW_NS]
    with running(tmp_path, clock_ns=lambda: now_ns[0], store={"keep_days": 1.0}) as api:
        api.post([record(i) for i in range(3)])
        now_ns[0] += 20 * HOUR_NS
        api.post([record(60 * 19 + i) for i in range(2)])
        now_ns[0] += 5 * HOUR_NS
        api.call(api.service.retention.prune())
        assert len(api.get("/records").json()["items"]) == 2
        (pruned,) = api.get("/pruned").json()["items"]
        assert pruned == {
            "at": "2025-12-02T06:00:00Z", "reason": "age",
            "before": "2025-12-01T06:00:00Z", "records": 3, "alerts": 0, "actions": 0,
        }  # fmt: skip
        # The standing is not made of stored records and stays.
        assert api.get("/sources").json()["items"][0]["records"] == 5


def test_nothing_to_prune_leaves_no_trace(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        api.post(record())
        api.call(api.service.retention.prune())
        assert api.get("/pruned").json()["items"] == []


def test_the_oldest_go_while_the_store_is_too_large(tmp_path: Path) -> None:
    now_ns = [NOW_NS]
    with running(tmp_path, clock_ns=lambda: now_ns[0], store={"keep_mb": 1.0}) as api:
        for start in range(0, 12_000, 1000):
            api.post([record((start + i) / 60) for i in range(1000)])
            now_ns[0] += 10**9
        n_pages = _n_pages(api)
        before = api.service.database.n_bytes_used()
        for _ in range(3):
            api.call(api.service.retention.prune())
        after = api.service.database.n_bytes_used()
        assert before is not None
        assert after is not None
        assert after < before
        assert after < 1.3e6
        assert _n_pages(api) < n_pages, "free pages go back to the file system"
        pruned = api.get("/pruned").json()["items"]
        assert {item["reason"] for item in pruned} == {"size"}
        newest = api.get("/records", params={"newest": True, "limit": 1}).json()["items"]
        assert newest[0]["time"] == "2025-12-01T07:19:59Z"


def _n_pages(api: Api) -> int:
    with api.service.database.read.connect() as connection:
        return int(connection.exec_driver_sql("PRAGMA page_count").scalar_one())


def test_pruning_lets_records_in_between_its_pieces(tmp_path: Path) -> None:
    now_ns = [NOW_NS]
    with running(tmp_path, clock_ns=lambda: now_ns[0], store={"keep_days": 1.0}) as api:
        for start in range(0, 9000, 3000):
            api.post([record((start + i) / 60) for i in range(3000)])
        now_ns[0] += 30 * HOUR_NS
        api.call(api.service.retention.prune())
        assert api.get("/pruned").json()["items"][0]["records"] == 9000
        assert api.post(record(1600)).status_code == 200
