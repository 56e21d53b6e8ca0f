"""The budgets of learning: time beside a Bayesian-network library, memory over history, cost.

Memory is the peak of a process of its own. Times of learning are of this machine as it is;
the exponents of the cost curve are of processor time, which another job disturbs less.
"""

from __future__ import annotations

import subprocess
import sys
import time
import warnings
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray

from tests.bench.table import best_seconds, heading, line
from tests.conftest import ROOT
from tests.spools import START_NS, gaussian_tree, measurements, spool_of
from training.counts import count_pairs
from training.learn import learn_model
from training.settings import LearnSettings
from training.structure import CoarseNode, edge_weights, spanning_forest

with warnings.catch_warnings():
    # pgmpy announces its own renamings when it is imported.
    warnings.simplefilter("ignore")
    from pgmpy.estimators import TreeSearch

pytestmark = pytest.mark.bench

N_STATES, N_WORDS = 24, 4


@pytest.fixture(scope="module", autouse=True)
def _printed() -> None:
    heading()


def state_columns(n: int) -> NDArray[np.uint8]:
    """Return columns of states along a random tree, each following its parent mostly."""
    rng = np.random.default_rng(6)
    columns = rng.integers(0, N_WORDS, (N_STATES, n), dtype=np.uint8)
    for child in range(1, N_STATES):
        stays = rng.random(n) < 0.5
        columns[child, stays] = columns[(child - 1) // 2, stays]
    return columns


def ours_from_counts(columns: NDArray[np.uint8]) -> set[frozenset[int]]:
    """Return the tree of state columns, from counting to edges."""
    left, right = np.triu_indices(N_STATES, 1)
    counts = np.zeros((1, len(left), N_WORDS + 1, N_WORDS + 1), dtype=np.int64)
    count_pairs(columns, left, right, N_WORDS + 1, counts[0])
    node = CoarseNode(np.zeros(0), np.full(N_WORDS, 1 / N_WORDS), True)
    with warnings.catch_warnings():
        # One fold has no spread; the doubt of two states is nought anyway.
        warnings.simplefilter("ignore")
        weights, _ = edge_weights(counts, left, right, [node] * N_STATES)
    return {frozenset(edge) for edge in spanning_forest(weights)}


def test_counts_to_tree_beside_pgmpy() -> None:
    columns = state_columns(100_000)
    frame = pd.DataFrame({k: pd.Categorical(columns[k]) for k in range(N_STATES)})

    def theirs() -> set[frozenset[int]]:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            search = TreeSearch(frame, root_node=0, n_jobs=1)
            found = search.estimate(estimator_type="chow-liu", show_progress=False)
        return {frozenset(edge) for edge in found.edges()}

    assert ours_from_counts(columns) == theirs()
    (mine,) = best_seconds(lambda: ours_from_counts(columns), n_rounds=5)
    (other,) = best_seconds(theirs, n_rounds=1)
    ratio = other / mine
    line("24 states x 100,000, counts to tree: ours, s", f"{mine:.3f}")
    line("24 states x 100,000: pgmpy's Chow-Liu search, s", f"{other:.2f}")
    line("24 states x 100,000, counts to tree: times as fast", f"{ratio:.0f}", "100", ratio >= 100)
    assert ratio >= 100


def child(*words: str) -> tuple[float, float, str]:
    """Return seconds and peak MB of a learning process, and what it said before."""
    done = subprocess.run(
        [sys.executable, "-m", "tests.bench.learn_child", *words],
        capture_output=True,
        text=True,
        check=False,
        cwd=ROOT,
        timeout=3000,
    )
    assert done.returncode == 0, done.stderr
    *said, last = done.stdout.splitlines()
    seconds, peak_mb = last.split()
    return float(seconds), float(peak_mb), "; ".join(said)


def write_history(path: Path, n: int, n_channels: int) -> None:
    """Write n records of a tree of channels, a minute apart, a block at a time."""
    rng = np.random.default_rng(7)
    edges = [((k - 1) // 2, k) for k in range(1, n_channels)]
    with path.open("w", encoding="utf-8") as file:
        file.write("time," + ",".join(f"c{k}" for k in range(n_channels)) + "\n")
        for first in range(0, n, 20_000):
            m = min(20_000, n - first)
            at = START_NS + (first + np.arange(m)) * 60 * 1_000_000_000
            stamps = np.datetime_as_string(at.astype("datetime64[ns]"), unit="s")
            values = gaussian_tree(rng, m, edges, 0.8)
            for stamp, row in zip(stamps, values.tolist(), strict=True):
                file.write(f"{stamp}Z," + ",".join(f"{x:.4f}" for x in row) + "\n")


def test_memory_does_not_grow_with_the_history(tmp_path: Path) -> None:
    n, n_channels = 60_000, 8
    channels = tmp_path / "channels.toml"
    channels.write_text(
        "format = 1\nstep_s = 60.0\n"
        + "".join(f'[[channel]]\nname = "c{k}"\n' for k in range(n_channels)),
        encoding="utf-8",
    )
    peaks = []
    for factor in (1, 10):
        history = tmp_path / f"history{factor}.csv"
        write_history(history, factor * n, n_channels)
        seconds, peak_mb, _ = child(
            "files", str(tmp_path / f"model{factor}"), str(history), str(channels)
        )
        peaks.append(peak_mb)
        what = f"learn from {factor * n:,} x {n_channels}: s, peak MB"
        line(what, f"{seconds:.0f}, {peak_mb:.0f}")
    ratio = peaks[1] / peaks[0]
    what = "memory of learn, 10 times the records: ratio of peaks"
    line(what, f"{ratio:.2f}", "1.2", ratio <= 1.2)
    assert ratio <= 1.2


def test_five_hundred_channels() -> None:
    seconds, peak_mb, said = child("wide", "500", "200000")
    line(f"learn 500 channels x 200,000 ({said}): minutes", f"{seconds / 60:.1f}")
    line("learn 500 channels x 200,000: peak MB", f"{peak_mb:.0f}", "4096", peak_mb < 4096)
    assert peak_mb < 4096


def processor_seconds(n: int, n_channels: int) -> float:
    """Return the processor time of one learning."""
    edges = [((k - 1) // 2, k) for k in range(1, n_channels)]
    values = gaussian_tree(np.random.default_rng(8), n, edges, 0.8)
    with spool_of({"a": values}) as spool:
        start = time.process_time()
        learn_model(spool, measurements(n_channels), LearnSettings())
        return time.process_time() - start


def exponent(sizes: list[int], seconds: list[float]) -> float:
    """Return the slope of ln seconds over ln size."""
    return float(np.polyfit(np.log(sizes), np.log(seconds), 1)[0])


def test_cost_over_records_and_channels() -> None:
    processor_seconds(500, 3)
    records, channels = [20_000, 40_000, 80_000, 160_000], [8, 16, 32, 64]
    by_records = [processor_seconds(n, 8) for n in records]
    by_channels = [processor_seconds(4000, d) for d in channels]
    for n, seconds in zip(records, by_records, strict=True):
        line(f"learn {n:,} x 8: processor s", f"{seconds:.1f}")
    for d, seconds in zip(channels, by_channels, strict=True):
        line(f"learn 4,000 x {d}: processor s", f"{seconds:.1f}")
    over_records, over_channels = exponent(records, by_records), exponent(channels, by_channels)
    line("cost over records: exponent", f"{over_records:.2f}")
    line("cost over channels: exponent", f"{over_channels:.2f}")
    # Linear in records; between linear (edges) and square (pairs) in channels.
    assert over_records < 1.2
    assert over_channels < 2.2
