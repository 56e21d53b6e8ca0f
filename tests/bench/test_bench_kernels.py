"""The kernels' budgets, as ratios to general-purpose libraries inside one run.

Counting runs on all cores beside numpy.bincount, which has one; binning and scoring run on
one core, as they do for a record that arrives.
"""

from __future__ import annotations

import time

import numpy as np
import pytest
from numba import get_num_threads
from numpy.typing import NDArray
from sklearn.ensemble import IsolationForest

from scoring.density import removal_of, surprise_of
from scoring.model import Model
from scoring.scorer import Scorer
from tests.bench.table import best_seconds, heading, line
from tests.spools import gaussian_tree, measurements, spool_of, times
from training.counts import count_pairs
from training.learn import learn_model
from training.settings import LearnSettings

pytestmark = pytest.mark.bench

Floats = NDArray[np.float64]

N_CHANNELS, N_BINS = 24, 16
EDGES = [((k - 1) // 2, k) for k in range(1, N_CHANNELS)]


@pytest.fixture(scope="module", autouse=True)
def _printed() -> None:
    heading()


@pytest.fixture(scope="module")
def model() -> Model:
    """Return a model of 24 channels as learning makes it."""
    values = gaussian_tree(np.random.default_rng(1), 10_000, EDGES, 0.8)
    with spool_of({"a": values}) as spool:
        return learn_model(spool, measurements(N_CHANNELS), LearnSettings()).model


def fresh(n: int) -> Floats:
    """Return records that no model has seen."""
    return gaussian_tree(np.random.default_rng(2), n, EDGES, 0.8)


def test_counting_all_pairs() -> None:
    rng = np.random.default_rng(3)
    columns = rng.integers(0, N_BINS, (N_CHANNELS, 1_000_000), dtype=np.uint8)
    left, right = np.triu_indices(N_CHANNELS, 1)
    counts = np.zeros((len(left), N_BINS, N_BINS), dtype=np.int64)
    # numpy gets its columns as it likes them, one of each pair multiplied beforehand.
    wide = columns.astype(np.intp)
    first = wide * N_BINS
    found = np.zeros((len(left), N_BINS * N_BINS), dtype=np.int64)

    def ours() -> None:
        counts[:] = 0
        count_pairs(columns, left, right, N_BINS, counts)

    def numpys() -> None:
        for p, (a, b) in enumerate(zip(left, right, strict=True)):
            found[p] = np.bincount(first[a] + wide[b], minlength=N_BINS * N_BINS)

    ours()
    mine, theirs = best_seconds(ours, numpys)
    # Two cores that are free do in one second what took two of processor time.
    own_processor, its_processor = best_seconds(ours, numpys, clock=time.process_time, n_rounds=3)
    free = its_processor / own_processor * get_num_threads()
    np.testing.assert_array_equal(counts.reshape(found.shape), found)
    n_cells = 1_000_000 * len(left)
    line("counting: ours, ns a row and pair", f"{mine / n_cells * 1e9:.2f}")
    line("counting: numpy.bincount pair by pair", f"{theirs / n_cells * 1e9:.2f}")
    ratio = theirs / mine
    line("counting 1,000,000 x 24, 16 bins: times as fast", f"{ratio:.1f}", "3.5", ratio >= 3.5)
    what = f"counting: times as fast by processor time, {get_num_threads()} cores free"
    line(what, f"{free:.1f}", "3.5", free >= 3.5)
    assert max(ratio, free) >= 3.5


def test_binning(model: Model) -> None:
    member = model.members["a"]
    values = fresh(20_000)
    columns = [np.ascontiguousarray(values[:, k]) for k in range(N_CHANNELS)]

    def ours() -> NDArray[np.uint8]:
        return member.bin_table.rows(values)

    def numpys() -> list[NDArray[np.intp]]:
        return [
            np.searchsorted(member.bins[k].borders, column, side="right")
            for k, column in enumerate(columns)
        ]

    np.testing.assert_array_equal(ours().T, numpys())
    mine, theirs = best_seconds(ours, numpys, clock=time.thread_time)
    line("binning: ours, ns a reading", f"{mine / values.size * 1e9:.1f}")
    line("binning: numpy.searchsorted", f"{theirs / values.size * 1e9:.1f}")
    line("binning 24 channels, one core: times as fast", f"{theirs / mine:.1f}")
    assert theirs > mine


def test_scoring_arrays(model: Model) -> None:
    member = model.members["a"]
    values = fresh(20_000)
    forest = IsolationForest(n_estimators=100, random_state=0).fit(fresh(10_000))
    scorer = Scorer(model)
    at = times(len(values))

    def surprise() -> object:
        return surprise_of(member, member.bin_table.rows(values))

    def suspects() -> object:
        return removal_of(member, member.bin_table.rows(values), *model.derived_groups)

    def everything() -> object:
        return scorer.score("a", at, values, None)

    def theirs() -> object:
        return forest.score_samples(values)

    for job in (surprise, suspects, everything):
        job()
    plain, named, whole, other = best_seconds(
        surprise, suspects, everything, theirs, clock=time.thread_time
    )
    for what, seconds in (
        ("scoring: surprise alone, ns a reading", plain),
        ("scoring: with every channel's own surprise", named),
        ("scoring: excess, sustained, suspect and what it should have read", whole),
        ("scoring: IsolationForest(100).score_samples", other),
    ):
        line(what, f"{seconds / values.size * 1e9:.1f}")
    alone, with_suspects = other / plain, other / named
    line("scoring, one core, surprise alone: times as fast", f"{alone:.1f}", "20", alone >= 20)
    line(
        "scoring, one core, with suspects: times as fast",
        f"{with_suspects:.1f}",
        "5",
        with_suspects >= 5,
    )
    line("scoring, one core, all that an answer holds: times as fast", f"{other / whole:.1f}")
    assert alone >= 20
    assert with_suspects >= 5


@pytest.mark.parametrize("n_missing", [1, 4])
def test_gaps_cost_a_bounded_factor(model: Model, n_missing: int) -> None:
    member = model.members["a"]
    whole = fresh(5_000)
    gaps = whole.copy()
    rng = np.random.default_rng(4)
    for row in gaps:
        row[rng.choice(N_CHANNELS, n_missing, replace=False)] = np.nan

    def scored(values: Floats) -> object:
        return removal_of(member, member.bin_table.rows(values), *model.derived_groups)

    scored(gaps)
    full, missing = best_seconds(
        lambda: scored(whole), lambda: scored(gaps), clock=time.thread_time
    )
    what = f"scoring with suspects, {n_missing} of 24 readings missing: times as long"
    line(what, f"{missing / full:.1f}")
    assert missing / full < 60
