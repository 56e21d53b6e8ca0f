"""A night at size: a service's store of sixty sources every ten seconds, to a published model.

What is printed: what each stage took, by the job's own lines, and processor time and peak
memory of the whole. Sizes can be made smaller by ODDBRANCH_TEST_NIGHT, "sources,days,step_s".
"""

from __future__ import annotations

import os
import re
import resource
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from service.layout import Layout
from service.store.database import Database
from service.store.group import RECORD_COLUMNS, SqliteGroup
from tests.bench.test_bench_http import N_CHANNELS
from tests.conftest import ROOT
from tests.spools import measurements

N_SOURCES, N_DAYS, STEP_S = (
    int(word) for word in os.environ.get("ODDBRANCH_TEST_NIGHT", "60,30,10").split(",")
)
END_S = 1_796_083_200
# Records of all sources that are made and stored at once.
N_CHUNK = 60_000


def write_store(data: Path) -> int:
    """Fill a service's store with records in the order of their arrival; return how many."""
    database = Database(data)
    database.lock()
    database.migrate()
    layout, rng = Layout(measurements(N_CHANNELS).instruments), np.random.default_rng(23)
    parents = [(k - 1) // 3 for k in range(N_CHANNELS)]
    own = rng.normal(size=(N_SOURCES, N_CHANNELS))
    n_times, per_chunk = N_DAYS * 86_400 // STEP_S, max(1, N_CHUNK // N_SOURCES)
    slow = np.zeros(N_SOURCES)
    with database.write.connect() as connection:
        for first in range(0, n_times, per_chunk):
            n = min(per_chunk, n_times - first)
            times_s = END_S - (n_times - first - np.arange(n)) * STEP_S
            values = 0.6 * rng.normal(size=(n, N_SOURCES, N_CHANNELS))
            for k in range(n):
                slow = 0.999 * slow + 0.045 * rng.normal(size=N_SOURCES)
                values[k, :, 0] = slow + np.sin(times_s[k] / 86_400 * 2 * np.pi)
            for child in range(1, N_CHANNELS):
                values[:, :, child] += 0.8 * values[:, :, parents[child]]
            values = np.round(20 * (values + own), 1) + 100
            values[rng.random(values.shape) < 1e-3] = np.nan
            group = database.begin(connection, N_SOURCES)
            assert isinstance(group, SqliteGroup)
            layout_id = group.layout_id("0" * 16, layout)
            states = list(group.sources([f"station-{i:02d}" for i in range(N_SOURCES)]).values())
            ids = [state.id for state in states]
            blobs = values.reshape(-1, N_CHANNELS).tobytes()
            width, rows = 8 * N_CHANNELS, []
            for k, time_s in enumerate(times_s.tolist()):
                for i, source_id in enumerate(ids):
                    at = (k * N_SOURCES + i) * width
                    rows.append(
                        (source_id, time_s * 10**9, time_s * 10**9, "a-1", layout_id, 30.0, 0.1,
                         0.1, 1, 0, 0, None, blobs[at : at + width], None)
                    )  # fmt: skip
            assert len(rows[0]) == len(RECORD_COLUMNS)
            group.insert(list(zip(*rows, strict=True)))
            for state in states:
                state.newest_ns = state.last_ns = int(times_s[-1]) * 10**9
                state.n_records += n
            group.save(states)
            group.commit()
    database.close()
    return n_times * N_SOURCES


def a_night(folder: Path) -> list[str]:
    """Run the job as a user does; print its lines, processor time and peak, and return them."""
    words: list[str | Path] = [sys.executable, ROOT / "oddbranch.py", "nightly"]
    words += ["--config", "nightly.toml"]
    before, began = resource.getrusage(resource.RUSAGE_CHILDREN), time.perf_counter()
    found = subprocess.run(words, cwd=folder, capture_output=True, text=True, check=False)
    seconds, after = time.perf_counter() - began, resource.getrusage(resource.RUSAGE_CHILDREN)
    assert found.returncode == 0, found.stdout + found.stderr
    spent = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    sys.stdout.write(
        f"{found.stdout}{found.stderr}night of {N_SOURCES} sources x {N_DAYS} days x {STEP_S} s: "
        f"{seconds:.0f} s, processor {spent:.0f} s, peak {after.ru_maxrss / 1024:.0f} MB\n"
    )
    sys.stdout.flush()
    return found.stdout.splitlines()


@pytest.mark.soak
def test_a_night_of_sixty_sources_is_measured(tmp_path: Path) -> None:
    began = time.perf_counter()
    n_records = write_store(tmp_path / "data")
    size = (tmp_path / "data" / "records.sqlite3").stat().st_size
    sys.stdout.write(
        f"{n_records:,} records, {size / 1e9:.1f} GB, made in {time.perf_counter() - began:.0f} s\n"
    )
    channels = "\n".join(
        f'[[channel]]\nname = "{c.name}"' for c in measurements(N_CHANNELS).instruments
    )
    (tmp_path / "channels.toml").write_text(f"format = 1\nstep_s = {STEP_S}\n{channels}\n")
    (tmp_path / "nightly.toml").write_text(f"[history]\ndays = {N_DAYS}.0\n")
    a_night(tmp_path)
    # The second has a model in use to be held against, as every later one does.
    lines = a_night(tmp_path)
    assert any(re.search(r"published", line) for line in lines), lines
