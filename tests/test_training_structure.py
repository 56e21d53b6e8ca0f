"""Which edges are taken: heaviest first, ties by order, the site's say, weights that pay."""

from __future__ import annotations

import math

import networkx as nx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.special import ndtri

from tests.spools import gaussian_tree
from tests.strategies import SEEDS
from training.structure import (
    CoarseNode,
    edge_weights,
    spanning_forest,
    suzuki_weight,
)

Floats = NDArray[np.float64]


def random_weights(seed: int, n: int, ties: bool) -> Floats:
    """Return a symmetric matrix of weights, some of them not above nought."""
    rng = np.random.default_rng(seed)
    weights = rng.integers(-2, 4, (n, n)).astype(float) if ties else rng.normal(size=(n, n))
    return np.asarray(np.triu(weights, 1) + np.triu(weights, 1).T)


@given(SEEDS, st.integers(1, 9), st.booleans())
def test_the_forest_is_as_heavy_as_networkx_finds(seed: int, n: int, ties: bool) -> None:
    weights = random_weights(seed, n, ties)
    graph = nx.Graph()
    graph.add_nodes_from(range(n))
    graph.add_edges_from(
        (a, b, {"weight": weights[a, b]})
        for a in range(n)
        for b in range(a + 1, n)
        if weights[a, b] > 0
    )
    wanted = nx.maximum_spanning_tree(graph, algorithm="prim")
    edges = spanning_forest(weights)
    assert nx.is_forest(nx.Graph([*edges, *((k, k + n) for k in range(n))]))
    assert len(edges) == wanted.number_of_edges()
    total = sum(weights[a, b] for a, b in edges)
    assert total == pytest.approx(wanted.size(weight="weight"), rel=1e-12)


def test_equal_weights_are_cut_by_channel_order() -> None:
    assert spanning_forest(np.ones((4, 4))) == [(0, 1), (0, 2), (0, 3)]
    weights = np.ones((4, 4))
    weights[2, 3] = weights[3, 2] = 2.0
    assert spanning_forest(weights) == [(0, 1), (0, 2), (2, 3)]


def test_an_edge_must_weigh_more_than_the_least() -> None:
    weights = np.array([[0.0, 0.5, 0.0], [0.5, 0.0, 0.1], [0.0, 0.1, 0.0]])
    assert spanning_forest(weights) == [(0, 1), (1, 2)]
    assert spanning_forest(weights, least=0.1) == [(0, 1)]


def test_channels_whose_weights_are_nought_stay_without_an_edge() -> None:
    assert spanning_forest(np.zeros((3, 3))) == []


@given(SEEDS, st.integers(3, 8), st.data())
def test_required_edges_are_taken_and_forbidden_ones_never(
    seed: int, n: int, data: st.DataObject
) -> None:
    weights = random_weights(seed, n, ties=False)
    pairs = [(a, b) for a in range(n) for b in range(a + 1, n)]
    graph = nx.Graph()
    graph.add_nodes_from(range(n))
    required = []
    for a, b in data.draw(st.lists(st.sampled_from(pairs), max_size=4, unique=True)):
        if not nx.has_path(graph, a, b):
            graph.add_edge(a, b)
            required.append((b, a))
    rest = [p for p in pairs if p[::-1] not in required]
    forbidden = frozenset(data.draw(st.lists(st.sampled_from(rest), max_size=4, unique=True)))
    edges = spanning_forest(weights, tuple(required), forbidden)
    assert {(min(p), max(p)) for p in required} <= set(edges)
    assert not forbidden & set(edges)
    assert nx.is_forest(nx.Graph([*edges, (n, n + 1)]))
    # Nothing that may be added and pays was left out.
    found = nx.Graph(edges)
    found.add_nodes_from(range(n))
    for a, b in rest:
        if weights[a, b] > 0 and (a, b) not in forbidden:
            assert nx.has_path(found, a, b)


def test_suzukis_penalty_is_half_a_logarithm_for_each_free_cell() -> None:
    # Suzuki 1993: J = I - (a - 1)(b - 1) ln n / 2n. 400 records, exactly independent.
    counts = np.full((2, 2), 100)
    assert suzuki_weight(counts) == pytest.approx(-math.log(400) / 800, rel=1e-12)
    # A word that never occurs has no cell to pay for.
    padded = np.zeros((4, 3), dtype=np.int64)
    padded[:2, :2] = counts
    assert suzuki_weight(padded) == pytest.approx(suzuki_weight(counts), rel=1e-12)
    assert suzuki_weight(np.zeros((2, 2), dtype=np.int64)) == -math.inf
    assert suzuki_weight(np.diag([50, 50])) == pytest.approx(
        math.log(2) - math.log(100) / 200, rel=1e-12
    )


def coarse(values: Floats, n_bins: int = 8) -> tuple[list[CoarseNode], NDArray[np.uint8]]:
    """Return even normal bins of columns, and the columns binned."""
    borders = ndtri(np.arange(1, n_bins) / n_bins)
    nodes = [CoarseNode(borders, np.full(n_bins, 1 / n_bins), False)] * values.shape[1]
    return nodes, np.searchsorted(borders, values.T).astype(np.uint8)


def fold_counts(
    columns: NDArray[np.uint8], left: NDArray[np.int64], right: NDArray[np.int64], width: int
) -> NDArray[np.int64]:
    """Return counts of pairs for five blocks of records, the last row and column empty."""
    counts = np.zeros((5, len(left), width + 1, width + 1), dtype=np.int64)
    for f, part in enumerate(np.array_split(columns, 5, axis=1)):
        for p, (a, b) in enumerate(zip(left, right, strict=True)):
            np.add.at(counts[f, p], (part[a], part[b]), 1)
    return counts


def test_edges_that_are_there_pay_and_those_that_are_not_do_not() -> None:
    rng = np.random.default_rng(7)
    values = gaussian_tree(rng, 4000, [(0, 1), (1, 2), (0, 3)], 0.6)
    values[:, 3] = rng.normal(size=4000)
    nodes, columns = coarse(values)
    left, right = np.triu_indices(4, 1)
    weights, doubt = edge_weights(fold_counts(columns, left, right, 8), left, right, nodes)
    np.testing.assert_array_equal(weights, weights.T)
    # Exact gain of a Gaussian pair: -ln(1 - r^2) / 2 = 0.223 nats; bins lose a little.
    assert 0.17 < weights[0, 1] < 0.25
    assert 0.17 < weights[1, 2] < 0.25
    assert 0.03 < weights[0, 2] < 0.10
    assert np.all(weights[3, :3] < 3 * doubt[3, :3])
    assert spanning_forest(np.where(weights > 3 * doubt, weights, -1.0)) == [(0, 1), (1, 2)]


def test_a_pair_never_read_together_weighs_nothing() -> None:
    nodes, _ = coarse(np.zeros((1, 2)))
    left, right = np.triu_indices(2, 1)
    counts = np.zeros((5, 1, 9, 9), dtype=np.int64)
    counts[:, :, :, 8] = 7
    weights, _ = edge_weights(counts, left, right, nodes)
    assert weights[0, 1] == 0.0


def test_two_states_are_weighed_with_the_penalty() -> None:
    nodes = [CoarseNode(np.zeros(0), np.array([0.5, 0.4, 0.1]), True)] * 2
    counts = np.zeros((5, 1, 4, 4), dtype=np.int64)
    counts[:, 0, 0, 0], counts[:, 0, 1, 1] = 50, 40
    weights, doubt = edge_weights(counts, np.array([0]), np.array([1]), nodes)
    assert weights[0, 1] == pytest.approx(suzuki_weight(np.diag([250, 200])), rel=1e-12)
    assert doubt[0, 1] == 0.0
