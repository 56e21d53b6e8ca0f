"""Choices by held-out density: what little and much history ask for, and merging of counts."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from numpy.typing import NDArray

from tests.spools import gaussian_tree, measurements, spool_of
from tests.strategies import SEEDS
from training.choices import LEAST_RECORDS_A_BIN, N_BINS, Choice, merge_counts
from training.fit import fit
from training.rows import Rows

Floats = NDArray[np.float64]


def choice_of(values: Floats) -> Choice:
    """Return what a fit of some records chose."""
    with spool_of({"a": values}) as spool:
        return fit(Rows(spool, measurements(values.shape[1]), ("a",), 60.0)).plain.choice


def bent(n: int) -> Floats:
    """Return a pair that no correlation describes: y follows the square of x."""
    rng = np.random.default_rng(4)
    x = rng.normal(size=n)
    return np.column_stack([x, x**2 + 0.3 * rng.normal(size=n)])


def test_normal_pairs_keep_a_heavy_shape() -> None:
    values = gaussian_tree(np.random.default_rng(1), 600, [(0, 1), (1, 2)], 0.8)
    assert np.all(choice_of(values).mass >= 1000)


def test_with_much_history_counts_win_where_the_shape_is_wrong() -> None:
    few, many = choice_of(bent(300)), choice_of(bent(20_000))
    assert many.mass[0] <= 250
    # As a share of all the weight the shape falls.
    assert many.mass[0] / 20_000 < few.mass[0] / 300
    assert many.n_bins > few.n_bins


def test_rows_that_follow_no_rule_ask_for_a_larger_independent_share() -> None:
    rng = np.random.default_rng(2)
    clean = gaussian_tree(rng, 8000, [(0, 1)], 0.97)
    odd = clean.copy()
    at = rng.random(8000) < 0.05
    odd[at, 1] = rng.permutation(odd[at, 1])
    assert choice_of(odd).share > choice_of(clean).share


def test_bins_with_hardly_a_record_each_are_not_tried() -> None:
    # Two channels that have nothing to do with each other.
    values = np.random.default_rng(3).normal(size=(41, 2))
    channels = measurements(2, edges={"require": [["c0", "c1"]]})
    with spool_of({"a": values}) as spool:
        density = fit(Rows(spool, channels, ("a",), 60.0))
    assert density.plain.choice.n_bins == N_BINS[0]
    assert N_BINS[1] * LEAST_RECORDS_A_BIN > 41
    assert density.plain.tree.nats[0] < 0.1


def test_the_choice_says_how_each_number_of_bins_compared() -> None:
    choice = choice_of(bent(2000))
    assert [one.n_bins for one in choice.tried] == list(N_BINS)
    best = max(choice.tried, key=lambda one: float(one.by_share.sum(axis=0).max()))
    assert best.n_bins == choice.n_bins


def test_many_edges_are_asked_in_part_and_each_gets_its_own_mass(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    rng = np.random.default_rng(5)
    values = np.hstack([gaussian_tree(rng, 3000, [(0, 1), (1, 2)], 0.8), bent(3000)])
    all_asked = choice_of(values)
    monkeypatch.setattr("training.choices.MOST_ASKED", 2)
    some_asked = choice_of(values)
    assert [one.by_mass.shape for one in some_asked.tried] == [(2, 6)] * len(N_BINS)
    assert some_asked.n_bins in N_BINS
    # The bent pair wants its counts, whoever was asked for the bins.
    assert len(some_asked.mass) == len(all_asked.mass) == 3
    assert some_asked.mass.argmin() == all_asked.mass.argmin() == 2
    assert some_asked.mass[2] <= 250 < 1000 <= some_asked.mass[:2].min()


@given(SEEDS)
def test_merged_counts_are_sums_over_the_union(seed: int) -> None:
    rng = np.random.default_rng(seed)
    fine = rng.integers(1, 7, 3)
    counts = rng.integers(0, 5, (2, 2, 8, 8))
    left, right = np.array([0, 1]), np.array([2, 0])
    into = [np.sort(rng.integers(0, 3, n)).astype(np.uint8) for n in fine]
    merged = merge_counts(counts, into, left, right, 4)
    wanted = np.zeros((2, 2, 4, 4))
    for f in range(2):
        for e in range(2):
            for i, to_row in enumerate(into[left[e]]):
                for j, to_column in enumerate(into[right[e]]):
                    wanted[f, e, to_row, to_column] += counts[f, e, i, j]
    np.testing.assert_array_equal(merged, wanted)


@pytest.mark.parametrize("n", [60, 3000])
def test_no_edge_leaves_nothing_to_weigh(n: int) -> None:
    choice = choice_of(np.column_stack([np.full(n, 1.0), np.full(n, 2.0)]))
    assert len(choice.mass) == 0
    assert choice.n_bins in N_BINS
