"""Many channels: the forest of candidates is the one that weighing every pair would give."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

import training.candidates as candidates_module
from tests.test_training_structure import coarse, fold_counts
from training.candidates import gain_bounds, heaviest_forest
from training.structure import (
    LEAST_ERRORS,
    CoarseNode,
    Laid,
    edge_weights,
    pair_weights,
    spanning_forest,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
N_CHANNELS = 14


def history(seed: int, n: int, loose: float) -> tuple[list[CoarseNode], NDArray[np.int64]]:
    """Return nodes and counts of all pairs: a tree, loosely or tightly bound, a state, an outsider.

    loose: spread of what a channel has of its own.
    """
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(n, N_CHANNELS))
    for child in range(1, N_CHANNELS - 1):
        parent = int(rng.integers(0, child))
        values[:, child] = np.tanh(values[:, parent]) + loose * values[:, child]
    nodes, columns = coarse(values / values.std(axis=0))
    columns[3] //= 4
    nodes = [*nodes]
    nodes[3] = CoarseNode(np.zeros(0), np.bincount(columns[3], minlength=3) / n + 1e-9, True)
    columns[columns.shape[0] - 2, ::7] = 8
    return nodes, fold_counts(columns, *np.triu_indices(N_CHANNELS, 1), 8)


@pytest.mark.parametrize("loose", [0.4, 2.0])
@pytest.mark.parametrize("n", [300, 3000])
def test_no_pair_gains_more_than_its_bound(n: int, loose: float) -> None:
    nodes, counts = history(1, n, loose)
    left, right = np.triu_indices(N_CHANNELS, 1)
    bounds, about = gain_bounds(counts, left, right, Laid.of(nodes))
    weights, _ = edge_weights(counts, left, right, nodes)
    assert np.all(weights[left, right] <= bounds)
    assert np.all(about < bounds)
    # A bound that is far off would save nothing.
    assert np.abs(about - weights[left, right]).max() < 0.2


@pytest.mark.parametrize("first", [0, 1])
@pytest.mark.parametrize("loose", [0.4, 2.0, 50.0])
@pytest.mark.parametrize("n", [300, 3000])
def test_the_forest_is_that_of_all_pairs(
    n: int, loose: float, first: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(candidates_module, "FIRST_A_CHANNEL", first)
    for seed in range(5):
        nodes, counts = history(seed, n, loose)
        left, right = np.triu_indices(N_CHANNELS, 1)
        weights, doubt = edge_weights(counts, left, right, nodes)
        paying = np.where(weights > LEAST_ERRORS * doubt, weights, -1.0)
        found, edges = heaviest_forest(counts, left, right, nodes)
        assert edges == spanning_forest(paying)
        for edge in edges:
            assert found[edge] == weights[edge]


def test_the_site_has_its_say() -> None:
    nodes, counts = history(2, 1000, 0.4)
    left, right = np.triu_indices(N_CHANNELS, 1)
    weights, doubt = edge_weights(counts, left, right, nodes)
    paying = np.where(weights > LEAST_ERRORS * doubt, weights, -1.0)
    say = ((13, 0), (5, 2)), frozenset(spanning_forest(paying)[:2])
    _, edges = heaviest_forest(counts, left, right, nodes, *say)
    assert edges == spanning_forest(paying, *say)
    assert {(0, 13), (2, 5)} <= set(edges)


def test_few_pairs_are_weighed_where_channels_are_tightly_bound(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    asked: list[int] = []

    def counting(counts: NDArray[np.int64], left: Ints, right: Ints, laid: Laid) -> object:
        asked.append(len(left))
        return pair_weights(counts, left, right, laid)

    monkeypatch.setattr(candidates_module, "FIRST_A_CHANNEL", 0)
    monkeypatch.setattr(candidates_module, "pair_weights", counting)
    nodes, counts = history(3, 3000, 0.4)
    left, right = np.triu_indices(N_CHANNELS, 1)
    heaviest_forest(counts, left, right, nodes)
    assert sum(asked) < len(left) / 2
