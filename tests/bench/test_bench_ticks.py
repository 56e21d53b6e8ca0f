"""What the passing of time costs: silence and shelves are looked for every few seconds.

A source that is looked at must cost little beside a record that is stored, by processor
time of the same run; PostgreSQL's are read from the database at every look.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import orjson
import pytest

from service.scoring_engine import load_engine
from tests.bench.test_bench_http import Maker, make_model
from tests.service_http import Api, running
from tests.service_postgres import cluster

N_SOURCES, DAY_NS = 2000, 86_400 * 10**9
# Looking at a source beside storing one record of a thousand.
LIMIT = 1.0


@contextmanager
def a_fleet(folder: Path, url: str, clock_ns: Callable[[], int]) -> Iterator[tuple[Api, float]]:
    """Serve many sources that have sent a record each; yield the cost of storing one, in s."""
    _, rows = make_model(folder / "model")
    maker = Maker(rows)

    def bodies() -> list[bytes]:
        items = [maker.record(0, 1) | {"source": f"station-{i}"} for i in range(N_SOURCES)]
        return [orjson.dumps(items[at : at + 1000]) for at in range(0, N_SOURCES, 1000)]

    first, second = bodies(), bodies()
    with running(folder, load=load_engine, clock_ns=clock_ns, store={"url": url}) as api:
        for body in first:
            assert api.post(body).status_code == 200
        before = time.process_time()
        for body in second:
            assert api.post(body).status_code == 200
        yield api, (time.process_time() - before) / N_SOURCES


def cost_of_ticks(api: Api, n: int) -> float:
    """Return processor seconds of this process for looking at one source, the least of n looks."""
    costs = []
    for _ in range(n):
        before = time.process_time()
        api.call(api.service.tick())
        costs.append(time.process_time() - before)
    return min(costs) / N_SOURCES


def measure(folder: Path, url: str) -> tuple[float, float]:
    """Print what a look costs while all send and while all are silent; return both, in records."""
    ahead_ns = [0]
    with a_fleet(folder, url, lambda: time.time_ns() + ahead_ns[0]) as (api, record_s):
        usual = cost_of_ticks(api, 5)
        ahead_ns[0] = 2 * DAY_NS
        api.call(api.service.tick())
        n_silent = len(api.get("/alerts?state=open&limit=1000").json()["items"])
        assert n_silent == 1000, "all fell silent, and a page shows a thousand"
        silent = cost_of_ticks(api, 5)
    name = "PostgreSQL" if url else "SQLite"
    sys.stdout.write(
        f"{name}, a look at one source: {usual * 1e6:.1f} us, while all are silent "
        f"{silent * 1e6:.1f} us; a record stored {record_s * 1e6:.1f} us\n"
    )
    return usual / record_s, silent / record_s


@pytest.mark.bench
def test_a_look_at_a_source_costs_little_beside_a_record(tmp_path: Path) -> None:
    with cluster() as database:
        found = [*measure(tmp_path / "postgresql", database.new_database())]
        found += measure(tmp_path / "sqlite", "")
    assert max(found) < LIMIT


if __name__ == "__main__":
    import tempfile

    test_a_look_at_a_source_costs_little_beside_a_record(Path(tempfile.mkdtemp()))
