"""The two budgets of the service, as ratios inside one run on this machine's loopback.

One record: requests a second against an endpoint that checks the same body and answers a
constant. A thousand records of 24 channels: records a second against an endpoint that
parses the body with orjson and answers a constant list. Ours are stored on disk before
they are answered. Runs of both alternate, because a busy machine is busy for both.
"""

from __future__ import annotations

import os
import re
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import numpy as np
import orjson
import pytest

from scoring.artefact import write_model
from scoring.bins import Bins
from scoring.channels import parse_channels
from scoring.density import removal_of
from scoring.derived import groups
from scoring.model import Levels, Member, Model, Part, Usual
from tests.bench.http_client import Result, post, run
from tests.conftest import ROOT
from tests.trees import random_tree, sample_rows

N_CHANNELS, N_BINS, N_BATCH = 24, 24, 1000
# Twenty stations as six to sixty of a utility send them: few records of each in a batch.
N_SOURCES = 20
# Sources in one array of a thousand: a forwarder sends what its stations gathered.
N_BATCH_SOURCES = 6
NAMES = [f"channel_{i:02d}" for i in range(N_CHANNELS)]
START_S = 1_764_561_600
ONE_BUDGET, MANY_BUDGET, MANY_AIM = 0.60, 0.20, 0.30


def make_model(folder: Path) -> tuple[Model, np.ndarray]:
    """Write a model of 24 channels and return it with usual rows of bins."""
    table = parse_channels(
        {"step_s": 10.0, "channel": [{"name": name, "unit": "bar"} for name in NAMES]}, "bench"
    )
    edges = [((i - 1) // 2, i) for i in range(1, N_CHANNELS)]
    tree = random_tree(7, [N_BINS] * N_CHANNELS, edges)
    rows = sample_rows(np.random.default_rng(7), tree, 3000)
    bins = tuple(Bins(np.linspace(100, 300, N_BINS - 1)) for _ in NAMES)
    nothing = np.zeros(N_CHANNELS)
    usual = Usual(0.0, 1.0, 0.0, nothing, nothing + 1.0, rows)
    member = Member("", bins, (Part(tree),), usual)
    surprise, own = removal_of(member, rows, *groups(table))
    middle = np.median(own, axis=0)
    usual = replace(
        usual, median=float(np.median(surprise)), high=float(np.quantile(surprise, 0.99)),
        channel_median=middle, channel_spread=np.quantile(own, 0.99, axis=0) - middle + 1e-3,
    )  # fmt: skip
    fleet = replace(member, usual=usual)
    members = {f"mill-lane-{i}": replace(fleet, source=f"mill-lane-{i}") for i in range(N_SOURCES)}
    levels = Levels(30.0, 8.0, 60.0, 150.0, 10.0, 6)
    return write_model(Model(table, members, fleet, levels), folder), rows


class Maker:
    """Makes records that the model finds usual, each source's times rising."""

    def __init__(self, rows: np.ndarray) -> None:
        self.rows = rows
        self.step_s = dict.fromkeys(range(N_SOURCES), START_S)
        self.draw = np.random.default_rng(11)

    def record(self, number: int, n_sources: int) -> dict[str, object]:
        """Return the next record of one of the first sources."""
        source = number % n_sources
        self.step_s[source] += 10
        moment = time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(self.step_s[source]))
        bins = self.rows[self.draw.integers(len(self.rows))].astype(float)
        step = 200 / (N_BINS - 2)
        values = 100 + (bins - 1 + self.draw.random(N_CHANNELS)) * step
        readings = dict(zip(NAMES, np.round(values, 2).tolist(), strict=True))
        return {"source": f"mill-lane-{source}", "time": moment, "readings": readings}

    def ones(self, n: int) -> list[bytes]:
        """Return bodies of one record."""
        return [orjson.dumps(self.record(i, N_SOURCES)) for i in range(n)]

    def many(self, n: int) -> list[bytes]:
        """Return bodies of a thousand records."""
        return [
            orjson.dumps([self.record(i, N_BATCH_SOURCES) for i in range(N_BATCH)])
            for _ in range(n)
        ]


@contextmanager
def server(words: Sequence[str | Path], cwd: Path) -> Iterator[tuple[int, int, float]]:
    """Run a program that says where it serves; yield port, process id, seconds to start."""
    started = time.perf_counter()
    process = subprocess.Popen(words, cwd=cwd, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL)
    assert process.stdout is not None
    found = re.search(rb":(\d+)", process.stdout.readline())
    assert found
    try:
        port = int(found.group(1))
        yield port, process.pid, time.perf_counter() - started
    finally:
        process.terminate()
        process.wait(30)
        process.stdout.close()


@contextmanager
def both(folder: Path) -> Iterator[tuple[int, int, int, Maker]]:
    """Run ours and the bare one; yield their ports, our process id and a maker."""
    _, rows = make_model(folder / "model")
    ours: list[str | Path] = [sys.executable, ROOT / "oddbranch.py", "serve", "--port", "0"]
    ours += ["--model", folder / "model", "--data", folder / "data"]
    bare = [sys.executable, "-m", "tests.bench.bare_app"]
    with server(ours, ROOT) as (port, pid, start_s), server(bare, ROOT) as (bare_port, _, _):
        sys.stdout.write(f"start-up with a warm cache: {start_s:.2f} s\n")
        yield port, bare_port, pid, Maker(rows)


def rate(result: Result, n_records: int = 1) -> float:
    """Return records a second; every answer must be 200."""
    assert set(result.statuses) == {200}, result.statuses
    return result.n_answers * n_records / result.seconds


def measure(n_rounds: int = 5, n_ones: int = 3000, n_many: int = 25) -> tuple[float, float]:
    """Print both ratios with their parts and return them."""
    folder = Path(tempfile.mkdtemp(prefix="oddbranch-bench-"))
    try:
        with both(folder) as (port, bare_port, _, maker):
            one = _ratio(
                "one record", n_rounds, 64, 1,
                lambda: [post(bare_port, "/one", body) for body in maker.ones(n_ones)],
                lambda: [post(port, "/records", body) for body in maker.ones(n_ones)],
                (bare_port, port),
            )  # fmt: skip
            many = _ratio(
                "1,000 x 24", n_rounds, 4, N_BATCH,
                lambda: [post(bare_port, "/many", body) for body in maker.many(n_many)] * 2,
                lambda: [post(port, "/records", body) for body in maker.many(n_many)],
                (bare_port, port),
            )  # fmt: skip
            _half_load(port, maker, n_ones)
    finally:
        shutil.rmtree(folder, ignore_errors=True)
    return one, many


def _ratio(
    name: str,
    n_rounds: int,
    n_connections: int,
    n_records: int,
    make_bare: Callable[[], list[bytes]],
    make_ours: Callable[[], list[bytes]],
    ports: tuple[int, int],
) -> float:
    bare_rates: list[float] = []
    our_rates: list[float] = []
    for _ in range(n_rounds):
        bare_rates.append(rate(run(ports[0], make_bare(), n_connections), n_records))
        our_rates.append(rate(run(ports[1], make_ours(), n_connections), n_records))
    ratios = [ours / bare for ours, bare in zip(our_rates, bare_rates, strict=True)]
    ratio = statistics.median(ratios)
    sys.stdout.write(
        f"{name}: {statistics.median(our_rates):,.0f} records/s stored, "
        f"{statistics.median(bare_rates):,.0f} bare, ratio {ratio:.2f} "
        f"({', '.join(f'{r:.2f}' for r in ratios)})\n"
    )
    sys.stdout.flush()
    return ratio


def _half_load(port: int, maker: Maker, n_ones: int) -> None:
    """Print p50 and p99 at about half of what a full load got through."""
    n_connections = 16
    full = run(port, [post(port, "/records", body) for body in maker.ones(n_ones)], n_connections)
    gap_s = full.seconds / full.n_answers * n_connections
    half = run(port, [post(port, "/records", b) for b in maker.ones(n_ones)], n_connections, gap_s)
    share = rate(half) / rate(full)
    sys.stdout.write(
        f"at {share:.0%} of full load: p50 {half.percentile(0.5) * 1e3:.1f} ms, "
        f"p99 {half.percentile(0.99) * 1e3:.1f} ms\n"
    )


def resident_mb(pid: int) -> float:
    """Return the memory of a process that is its own or shared and in use."""
    fields = Path(f"/proc/{pid}/statm").read_text(encoding="ascii").split()
    return int(fields[1]) * os.sysconf("SC_PAGE_SIZE") / 1e6


def main() -> None:
    """Measure and print."""
    measure()


@pytest.mark.bench
def test_the_service_keeps_up_with_its_budgets() -> None:
    one, many = measure()
    assert one >= ONE_BUDGET
    assert many >= MANY_BUDGET, f"the aim is {MANY_AIM}"


@pytest.mark.soak
def test_memory_stays_flat_over_five_million_records(tmp_path: Path) -> None:
    n_bodies = int(os.environ.get("ODDBRANCH_TEST_SOAK_BATCHES", "5000"))
    with both(tmp_path) as (port, _, pid, maker):
        sizes = []
        for start in range(0, n_bodies, 50):
            bodies = maker.many(min(50, n_bodies - start))
            rate(run(port, [post(port, "/records", body) for body in bodies], 4), N_BATCH)
            sizes.append(resident_mb(pid))
        sys.stdout.write(f"memory in MB after each 50,000 records: {[round(s) for s in sizes]}\n")
    tenth = max(2, len(sizes) // 10)
    # Caches fill in the first tenth; from there on nothing may grow with records.
    assert max(sizes[-tenth:]) < 1.1 * max(sizes[tenth : 2 * tenth]) + 8


if __name__ == "__main__":
    main()
