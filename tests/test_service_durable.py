"""Nothing acknowledged is lost: killed, full, or with the database gone and back."""

from __future__ import annotations

import itertools
import json
import random
import sqlite3
import threading
import time
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path
from typing import Any

import httpx
import psycopg
import pytest

from service.store.database import Database, StoreRefused
from service.store.tables import source as source_table
from tests.service_http import JSON, Server, record, running, serving
from tests.service_postgres import Cluster, cluster
from tests.small_disk import small_disk


@pytest.fixture(scope="module")
def durable_postgres() -> Iterator[Cluster]:
    with cluster(durable=True) as found:
        yield found


class Sender:
    """Sends one source's records in order and notes what was acknowledged.

    It sends every record again until it is answered, as a forwarder would.
    """

    def __init__(self, source: str, n_batch: int) -> None:
        self.source, self.n_batch = source, n_batch
        self.next = 0
        self.acknowledged: list[dict[str, Any]] = []
        self.url = ""
        self.stopping = False

    def run(self) -> None:
        with httpx.Client(timeout=10) as client:
            while not self.stopping:
                items = [
                    record((self.next + i) / 6, self.source, flow=float((self.next + i) % 300))
                    for i in range(self.n_batch)
                ]
                try:
                    answer = client.post(f"{self.url}/records", json=items)
                except httpx.TransportError:
                    time.sleep(0.02)
                    continue
                if answer.status_code != 200:
                    time.sleep(0.02)
                    continue
                self.acknowledged += answer.json()
                self.next += self.n_batch


def unbroken(folder: Path, senders: list[Sender]) -> dict[str, list[dict[str, Any]]]:
    """Return what one service that nobody disturbs answers to the same records."""
    found = {}
    with running(folder, clock_ns=time.time_ns) as api:
        for sender in senders:
            items = [record(i / 6, sender.source, flow=float(i % 300)) for i in range(sender.next)]
            found[sender.source] = api.post_lines(
                b"".join(json.dumps(item).encode() + b"\n" for item in items)
            )
    return found


def scores(answers: list[dict[str, Any]]) -> list[tuple[Any, ...]]:
    return [(a["time"], a["surprise"], a["excess"], a["sustained"]) for a in answers]


def fetch_all(url: str, source: str) -> list[dict[str, Any]]:
    lines = httpx.get(
        f"{url}/records",
        params={"source": source, "limit": 1000},
        headers={"accept": "application/x-ndjson"},
        timeout=30,
    )
    return [json.loads(line) for line in lines.text.splitlines()]


def standings(path: Path) -> dict[str, tuple[int, bytes]]:
    with closing(sqlite3.connect(path)) as connection:
        rows = connection.execute("SELECT name, last_ns, standing FROM source").fetchall()
    return {name: (last_ns, standing) for name, last_ns, standing in rows}


def _wait_for_load(senders: list[Sender]) -> None:
    """Return once something was acknowledged since the start, so that every kill hits work."""
    before = sum(sender.next for sender in senders)
    end = time.monotonic() + 20
    while sum(sender.next for sender in senders) == before and time.monotonic() < end:
        time.sleep(0.005)


def kill_again_and_again(folder: Path, n_kills: int, seed: int) -> None:
    """Kill a server under load, then compare with a run that nobody disturbed."""
    chance = random.Random(seed)
    senders = [Sender("mill-lane-1", 1), Sender("mill-lane-2", 7), Sender("mill-lane-3", 60)]
    server = Server(folder)
    threads = []
    for sender in senders:
        sender.url = server.url
        threads.append(threading.Thread(target=sender.run))
        threads[-1].start()
    try:
        for _ in range(n_kills):
            _wait_for_load(senders)
            time.sleep(chance.uniform(0.0, 0.3))
            server.kill()
            server = Server(folder)
            for sender in senders:
                sender.url = server.url
        time.sleep(0.3)
    finally:
        for sender in senders:
            sender.stopping = True
        for thread in threads:
            thread.join()
    try:
        wanted = unbroken(folder / "unbroken", senders)
        for sender in senders:
            assert sender.next >= sender.n_batch, "the load was real"
            # What was acknowledged is what an unbroken run acknowledges, each record once.
            assert scores(sender.acknowledged) == scores(wanted[sender.source])
            stored = fetch_all(server.url, sender.source)
            n_known = len(sender.acknowledged)
            # A batch whose answer was lost in the crash may be stored beyond that.
            assert scores(stored[:n_known]) == scores(wanted[sender.source])
            assert len(stored) <= n_known + sender.n_batch
    finally:
        server.stop()
    broken, whole = (
        standings(folder / part / "records.sqlite3") for part in ("data", "unbroken/data")
    )
    for sender in senders:
        if len(fetch_sqlite(folder / "data", sender.source)) == sender.next:
            assert broken[sender.source] == whole[sender.source]


def fetch_sqlite(data: Path, source: str) -> list[Any]:
    with closing(sqlite3.connect(data / "records.sqlite3")) as connection:
        return connection.execute(
            "SELECT time_ns FROM record JOIN source ON source.id = source_id WHERE name = ?",
            (source,),
        ).fetchall()


def test_twenty_kills_under_load_lose_nothing_acknowledged(tmp_path: Path) -> None:
    kill_again_and_again(tmp_path, 20, seed=20)


@pytest.mark.soak
def test_two_hundred_kills_under_load_lose_nothing_acknowledged(tmp_path: Path) -> None:
    kill_again_and_again(tmp_path, 200, seed=200)


def test_a_full_store_refuses_new_records_and_keeps_the_old_ones(tmp_path: Path) -> None:
    with serving(tmp_path, "store.max_pages=60") as server, httpx.Client(timeout=10) as client:
        acknowledged = []
        for i in range(400):
            items = [record((10 * i + k) / 6) for k in range(10)]
            answer = client.post(f"{server.url}/records", json=items)
            if answer.status_code == 503:
                break
            acknowledged += answer.json()
        assert answer.status_code == 503
        assert answer.json()["type"] == "/problems/store-full"
        assert answer.headers["retry-after"] == "60"
        assert len(acknowledged) > 100
        # Known records are still answered, and pages are still read.
        again = client.post(f"{server.url}/records", json=record(0))
        assert again.json()["known"] is True
        assert scores(fetch_all(server.url, "mill-lane-2")) == scores(acknowledged)
        assert client.get(f"{server.url}/health/live").status_code == 200
    # With room again the next record goes on from the standing of the last acknowledged one.
    with serving(tmp_path) as server:
        following = record(len(acknowledged) / 6)
        answer = httpx.post(f"{server.url}/records", json=following)
        stored = fetch_all(server.url, "mill-lane-2")
    assert scores(stored) == scores([*acknowledged, answer.json()])
    with running(tmp_path / "unbroken") as api:
        items = [record(i / 6) for i in range(len(acknowledged) + 1)]
        assert scores(stored) == scores(api.post(items).json())


def _wait_until_full(server: Server, senders: list[Sender]) -> None:
    """Return once records are refused for want of room and no sender gets on."""
    end = time.monotonic() + 60
    before = -1
    # Each look sends a new record: one that is known needs no room.
    for minute in itertools.count():
        assert time.monotonic() < end, "the disk does not fill up"
        now = sum(sender.next for sender in senders)
        if now == before:
            item = record(minute, f"mill-lane-{now}")
            answer = httpx.post(f"{server.url}/records", json=item, timeout=20)
            # A busy machine stands still too.
            if answer.status_code != 200:
                break
        before = now
        time.sleep(0.5)
    assert (answer.status_code, answer.json()["type"]) == (503, "/problems/store-full")
    assert answer.headers["retry-after"] == "60"


def test_kills_on_a_full_disk_lose_nothing_acknowledged(tmp_path: Path) -> None:
    """A small disk of its own, or where none can be mounted the database's own limit."""
    (tmp_path / "data").mkdir()
    senders = [Sender("mill-lane-1", 1), Sender("mill-lane-2", 7), Sender("mill-lane-3", 60)]
    with small_disk(tmp_path / "data", "2m") as resize:
        words = () if resize else ("store.max_pages=100",)
        server = Server(tmp_path, *words)
        threads = [threading.Thread(target=sender.run) for sender in senders]
        for sender, thread in zip(senders, threads, strict=True):
            sender.url = server.url
            thread.start()
        try:
            for _ in range(3):
                _wait_until_full(server, senders)
                server.kill()
                server = Server(tmp_path, *words)
                for sender in senders:
                    sender.url = server.url
            _wait_until_full(server, senders)
            n_full = sum(sender.next for sender in senders)
            assert n_full > 200
            if resize:
                resize("32m")
            else:
                server.stop()
                server = Server(tmp_path)
                for sender in senders:
                    sender.url = server.url
            end = time.monotonic() + 20
            while sum(sender.next for sender in senders) < n_full + 200:
                assert time.monotonic() < end, "with room again nothing is taken"
                time.sleep(0.05)
        finally:
            for sender in senders:
                sender.stopping = True
            for thread in threads:
                thread.join()
            stored = {sender.source: fetch_all(server.url, sender.source) for sender in senders}
            server.stop()
        wanted = unbroken(tmp_path / "unbroken", senders)
        for sender in senders:
            n_known = len(sender.acknowledged)
            assert scores(sender.acknowledged) == scores(wanted[sender.source])
            assert scores(stored[sender.source][:n_known]) == scores(wanted[sender.source])
        found, whole = (
            standings(tmp_path / part / "records.sqlite3") for part in ("data", "unbroken/data")
        )
        for sender in senders:
            if len(fetch_sqlite(tmp_path / "data", sender.source)) == sender.next:
                assert found[sender.source] == whole[sender.source]


def test_two_services_do_not_share_one_data_folder(tmp_path: Path) -> None:
    with (
        running(tmp_path),
        pytest.raises(StoreRefused, match=r"another service writes here.*PostgreSQL"),
        running(tmp_path),
    ):
        pass


def test_a_store_of_a_later_version_is_refused(tmp_path: Path) -> None:
    database = Database(tmp_path)
    database.migrate()
    with database.write.begin() as connection:
        connection.exec_driver_sql("UPDATE alembic_version SET version_num = '999'")
    with pytest.raises(StoreRefused, match=r"version 999, this program knows up to"):
        database.migrate()
    database.close()


def test_a_file_that_is_no_store_is_refused(tmp_path: Path) -> None:
    (tmp_path / "records.sqlite3").write_bytes(b"nonsense" * 2000)
    database = Database(tmp_path)
    with pytest.raises(StoreRefused, match=r"records\.sqlite3: cannot be opened"):
        database.migrate()
    database.close()


def test_a_failing_migration_leaves_no_table_behind(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    database = Database(tmp_path)

    def fail(*_words: Any, **_more: Any) -> None:
        raise RuntimeError("power cut")

    with monkeypatch.context() as patch:
        patch.setattr("alembic.op.create_index", fail)
        with pytest.raises(RuntimeError, match="power cut"):
            database.migrate()
    with database.read.connect() as connection:
        tables = connection.exec_driver_sql(
            "SELECT name FROM sqlite_master WHERE name NOT LIKE 'alembic%' AND name NOT LIKE "
            "'sqlite%'"
        ).all()
    assert tables == []
    database.migrate()
    with database.read.connect() as connection:
        assert connection.execute(source_table.select()).all() == []
    database.close()


def test_postgresql_killed_and_back_loses_nothing_acknowledged(
    tmp_path: Path, durable_postgres: Cluster
) -> None:
    url = durable_postgres.new_database()
    sender = Sender("mill-lane-1", 5)
    with serving(tmp_path, f'store.url="{url}"') as server:
        sender.url = server.url
        thread = threading.Thread(target=sender.run)
        thread.start()
        try:
            for _ in range(3):
                time.sleep(0.4)
                durable_postgres.kill()
                answer = httpx.post(
                    f"{server.url}/records", json=record(0, "mill-lane-9"), timeout=20
                )
                assert answer.status_code == 503
                assert answer.headers["retry-after"] == "5"
                durable_postgres.start()
            before = sender.next
            end = time.monotonic() + 20
            while sender.next < before + 50 and time.monotonic() < end:
                time.sleep(0.05)
        finally:
            sender.stopping = True
            thread.join()
        assert sender.next >= before + 50
        stored = fetch_all(server.url, "mill-lane-1")
    wanted = unbroken(tmp_path / "unbroken", [sender])["mill-lane-1"]
    assert scores(sender.acknowledged) == scores(wanted)
    assert scores(stored[: len(wanted)]) == scores(wanted)


def test_two_replicas_fed_in_turn_give_what_one_would(
    tmp_path: Path, durable_postgres: Cluster
) -> None:
    url = durable_postgres.new_database()
    items = [record(i / 6, flow=float(7 * i % 300)) for i in range(120)]
    with serving(tmp_path / "a", f'store.url="{url}"') as first:
        with serving(tmp_path / "b", f'store.url="{url}"') as second, httpx.Client() as client:
            answers = []
            for i in range(0, len(items), 3):
                server = (first, second)[i // 3 % 2]
                answers += client.post(f"{server.url}/records", json=items[i : i + 3]).json()
            known = client.post(f"{first.url}/records", json=items[0]).json()
        stored = fetch_all(first.url, "mill-lane-2")
    with running(tmp_path / "one") as api:
        wanted = api.post(items).json()
        one = standings(tmp_path / "one" / "data" / "records.sqlite3")
    assert answers == wanted
    assert known["known"] is True
    assert scores(stored) == scores(wanted)
    with psycopg.connect(url) as connection:
        row = connection.execute("SELECT name, last_ns, standing FROM source").fetchone()
    assert row is not None
    assert {row[0]: (row[1], bytes(row[2]))} == one


def test_two_replicas_at_once_keep_one_order(tmp_path: Path, durable_postgres: Cluster) -> None:
    url = durable_postgres.new_database()
    with serving(tmp_path / "a", f'store.url="{url}"') as first:
        with serving(tmp_path / "b", f'store.url="{url}"') as second:
            senders = [Sender("mill-lane-1", 3), Sender("mill-lane-1", 3)]
            # Both send the same records; one of them is told that they are known.
            threads = []
            for sender, server in zip(senders, (first, second), strict=True):
                sender.url = server.url
                threads.append(threading.Thread(target=sender.run))
                threads[-1].start()
            time.sleep(1.5)
            for sender in senders:
                sender.stopping = True
            for thread in threads:
                thread.join()
        stored = fetch_all(first.url, "mill-lane-1")
    longer = max(senders, key=lambda sender: sender.next)
    wanted = unbroken(tmp_path / "one", [longer])["mill-lane-1"]
    assert len(stored) == longer.next > 50
    assert scores(stored) == scores(wanted)
    for sender in senders:
        assert scores(sender.acknowledged) == scores(wanted[: sender.next])


def test_a_stopped_service_stores_what_waits(tmp_path: Path) -> None:
    with serving(tmp_path) as server:
        answer = httpx.post(f"{server.url}/records", json=record(0), headers=JSON)
        assert answer.status_code == 200
        server.stop()
        assert '"event":"stopped"' in server.log_text()
    assert len(fetch_sqlite(tmp_path / "data", "mill-lane-2")) == 1
