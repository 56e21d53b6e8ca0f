"""What a service needs, by its parts: processor a record, disk a record, memory a source.

The sizes in deploy/README.md are these figures times what a site has. Processor time is
the service's own, so that a machine that is busy with other things does not spoil it.
"""

from __future__ import annotations

import os
import re
import sqlite3
import sys
import tempfile
from contextlib import closing
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import orjson
import psycopg
import pytest

from scoring.artefact import read_model, write_model
from tests.bench.http_client import post, run
from tests.bench.test_bench_http import N_BATCH, Maker, cpu_s, make_model, resident_mb, server
from tests.conftest import ROOT
from tests.service_postgres import cluster

N_MEMBERS = (20, 220)
N_NEW_SOURCES = 20_000


@dataclass
class Sizes:
    """The figures of one run."""

    one_per_core: float = 0.0
    many_per_core: float = 0.0
    bytes_per_record: float = 0.0
    mb_idle: float = 0.0
    kb_per_source: float = 0.0
    kb_per_member: float = 0.0

    def lines(self, store: str) -> str:
        """Return the figures as text."""
        return (
            f"{store}: {self.one_per_core:.0f} records a second and core one by one, "
            f"{self.many_per_core:.0f} by the thousand; {self.bytes_per_record:.0f} bytes each; "
            f"{self.mb_idle:.0f} MB at rest, {self.kb_per_source:.1f} KB a source more"
            + (f", {self.kb_per_member:.0f} KB a member of its own" if self.kb_per_member else "")
            + "\n"
        )


def per_core(port: int, pid: int, bodies: list[bytes], n_records: int) -> float:
    """Return how many records are stored per processor second of the service."""
    before = cpu_s(pid)
    found = run(port, [post(port, "/records", body) for body in bodies], 8)
    assert set(found.statuses) == {200}, found.statuses
    return len(bodies) * n_records / (cpu_s(pid) - before)


def new_sources(rows: Any, n: int) -> list[bytes]:
    """Return arrays in which each record is the first of another source."""
    maker = Maker(rows)
    items = [maker.record(0, 1) | {"source": f"new-{i}"} for i in range(n)]
    return [orjson.dumps(items[at : at + 500]) for at in range(0, n, 500)]


def measure(folder: Path, url: str = "") -> Sizes:
    """Return the figures of one kind of store."""
    found = Sizes()
    _, rows = make_model(folder / "model")
    words: list[str | Path] = [sys.executable, ROOT / "oddbranch.py", "serve", "--port", "0"]
    words += ["--model", folder / "model", "--data", folder / "data"]
    limits = {"ODDBRANCH_LIMITS__N_SOURCES": "1000000", "ODDBRANCH_STORE__URL": url}
    os.environ.update({key: value for key, value in limits.items() if value})
    try:
        with server(words, ROOT) as (port, pid, _):
            maker = Maker(rows)
            per_core(port, pid, maker.ones(200), 1)
            found.mb_idle = resident_mb(pid)
            found.one_per_core = per_core(port, pid, maker.ones(3000), 1)
            found.many_per_core = per_core(port, pid, maker.many(40), N_BATCH)
            found.bytes_per_record = _stored_bytes(folder, url) / (3200 + 40 * N_BATCH)
            before = resident_mb(pid)
            per_core(port, pid, new_sources(rows, N_NEW_SOURCES), 500)
            found.kb_per_source = (resident_mb(pid) - before) * 1000 / N_NEW_SOURCES
    finally:
        for key in limits:
            os.environ.pop(key, None)
    return found


def _stored_bytes(folder: Path, url: str) -> int:
    if not url:
        # Pages that are still in the log are counted, the log itself is not.
        with closing(sqlite3.connect(folder / "data" / "records.sqlite3")) as store:
            pages, size = (
                store.execute(f"PRAGMA {k}").fetchone()[0] for k in ("page_count", "page_size")
            )
        return int(pages * size)
    with psycopg.connect(url) as connection:
        row = connection.execute("SELECT pg_total_relation_size('record')").fetchone()
    assert row is not None
    return int(row[0])


def kb_per_member(folder: Path) -> float:
    """Return what another member of its own takes once it is loaded."""
    model, _ = make_model(folder / "model")
    sizes = []
    for n in N_MEMBERS:
        members = {f"s{i}": replace(model.fleet, source=f"s{i}") for i in range(n)}
        path = folder / f"model-{n}"
        write_model(replace(model, members=members), path)
        assert len(read_model(path).members) == n
        words: list[str | Path] = [sys.executable, ROOT / "oddbranch.py", "serve", "--port", "0"]
        words += ["--model", path, "--data", folder / f"data-{n}"]
        with server(words, ROOT) as (_, pid, _):
            sizes.append(resident_mb(pid))
    return (sizes[1] - sizes[0]) * 1000 / (N_MEMBERS[1] - N_MEMBERS[0])


@pytest.mark.bench
def test_the_parts_of_a_size_are_what_the_words_say() -> None:
    with tempfile.TemporaryDirectory(prefix="oddbranch-sizes-") as name:
        folder = Path(name)
        sqlite = measure(folder)
        sqlite.kb_per_member = kb_per_member(folder / "members")
        sys.stdout.write(sqlite.lines("SQLite"))
        with cluster() as database:
            (folder / "postgres").mkdir()
            postgres = measure(folder / "postgres", database.new_database())
            sys.stdout.write(postgres.lines("PostgreSQL"))
    told = (ROOT / "deploy" / "README.md").read_text(encoding="utf-8")
    # The arithmetic there may err by a half, not by more.
    for label, figure in (
        ("records a second and core, SQLite", sqlite.many_per_core),
        ("records a second and core, PostgreSQL", postgres.many_per_core),
        ("bytes a record, SQLite", sqlite.bytes_per_record),
        ("bytes a record, PostgreSQL", postgres.bytes_per_record),
        ("KB a source", sqlite.kb_per_source),
        ("KB a member", sqlite.kb_per_member),
    ):
        met = re.search(rf"^\| {re.escape(label)}[^|]*\| ([\d ]+) \|", told, re.MULTILINE)
        assert met, label
        assert figure == pytest.approx(float(met[1].replace(" ", "")), rel=0.5), label
