"""Blocks of time: every record in one fold, no near neighbour on both sides."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.spools import START_NS, times
from training.blocks import DAY_NS, GUARD_STEPS, MOST_DAYS_IN_RUN, N_FOLDS, Blocks

S = 1_000_000_000


def blocks_of(n: int, step_s: float = 60.0) -> Blocks:
    """Return the blocks of n records."""
    at = times(n, step_s)
    return Blocks.of(int(at[0]), int(at[-1]), n, step_s)


@given(st.integers(1, 5000), st.sampled_from([1.0, 60.0, 3600.0]))
def test_every_record_has_one_block_and_its_fold(n: int, step_s: float) -> None:
    blocks, at = blocks_of(n, step_s), times(n, step_s)
    number = blocks.number(at)
    assert number.min() >= 0
    assert number.max() < blocks.n_blocks
    assert np.all(np.diff(number) >= 0)
    np.testing.assert_array_equal(blocks.fold(at), number // blocks.n_in_run % N_FOLDS)


@pytest.mark.parametrize(("n", "step_s"), [(400, 1.0), (3000, 60.0), (50_000, 60.0)])
def test_each_fold_has_about_its_share(n: int, step_s: float) -> None:
    shares = np.bincount(blocks_of(n, step_s).fold(times(n, step_s)), minlength=N_FOLDS) / n
    assert np.all(np.abs(shares - 1 / N_FOLDS) < 0.05)


@pytest.mark.parametrize(("n", "step_s"), [(400, 1.0), (3000, 60.0), (50_000, 60.0)])
def test_no_record_that_is_scored_has_a_near_neighbour_in_another_fold(
    n: int, step_s: float
) -> None:
    blocks, at = blocks_of(n, step_s), times(n, step_s)
    fold, clear = blocks.fold(at), blocks.clear(at)
    guard_s = blocks.guard_ns / S
    assert 0 < guard_s <= GUARD_STEPS * step_s
    for r in np.flatnonzero(clear)[::7]:
        near = np.abs(at - at[r]) < blocks.guard_ns
        assert np.all(fold[near] == fold[r])
    assert clear.mean() > 0.75


def test_a_long_history_is_cut_by_days() -> None:
    blocks = blocks_of(30 * 24, 3600.0)
    assert blocks.n_blocks == 30
    assert abs(blocks.length_ns - DAY_NS) < 0.01 * DAY_NS


@pytest.mark.parametrize(
    ("days", "n_in_run"), [(5, 1), (12, 2), (30, 6), (34, 7), (90, 7), (365, 7)]
)
def test_days_in_a_row_go_to_one_fold_a_fifth_of_the_history_at_most_a_week(
    days: int, n_in_run: int
) -> None:
    blocks = blocks_of(days * 24, 3600.0)
    assert blocks.n_in_run == n_in_run
    fold = blocks.fold(times(days * 24, 3600.0))
    assert set(fold.tolist()) == set(range(N_FOLDS))
    changes = np.flatnonzero(np.diff(fold)) + 1
    run_days = np.diff(changes) / 24
    assert np.all(run_days <= MOST_DAYS_IN_RUN + 0.1)


def test_one_record_is_one_block_of_time() -> None:
    blocks = Blocks.of(START_NS, START_NS, 1, 60.0)
    assert blocks.number(np.array([START_NS])).tolist() == [0]
