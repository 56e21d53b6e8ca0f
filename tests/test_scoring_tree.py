"""The forest: a density without a root, whatever the order of its channels."""

from __future__ import annotations

import math
import pickle

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scoring.kernels import evidence_rows
from scoring.tree import PAD, Tree
from tests.strategies import SEEDS, SOME, trees
from tests.trees import (
    joint_states,
    random_rows,
    random_tree,
    rooted_log_p,
    sizes_of,
    slow_log_p,
    with_gaps,
)


@SOME
@given(trees())
def test_probabilities_over_all_joint_states_sum_to_one(tree: Tree) -> None:
    evidence = evidence_rows(tree.arrays, joint_states(sizes_of(tree)))
    assert math.fsum(np.exp(evidence)) == pytest.approx(1.0, abs=1e-12)


@SOME
@given(trees(), SEEDS)
def test_every_root_gives_the_same_total_also_with_gaps(tree: Tree, seed: int) -> None:
    rng = np.random.default_rng(seed)
    rows = with_gaps(rng, random_rows(rng, sizes_of(tree), 4))
    evidence = evidence_rows(tree.arrays, rows)
    for row, ours in zip(rows.tolist(), evidence, strict=True):
        rooted = [rooted_log_p(tree, row, root) for root in range(tree.n_nodes)]
        assert rooted == pytest.approx([ours] * tree.n_nodes, abs=1e-9, rel=1e-10)


@SOME
@given(trees(), SEEDS, st.data())
def test_another_order_of_channels_changes_nothing(
    tree: Tree, seed: int, data: st.DataObject
) -> None:
    order = np.array(data.draw(st.permutations(range(tree.n_nodes))))
    place = np.argsort(order)
    edges, tables = [], []
    for (a, b), table in zip(tree.edges.tolist(), tree.log_ratios, strict=True):
        left, right = place[a], place[b]
        edges.append((min(left, right), max(left, right)))
        tables.append(table if left < right else np.ascontiguousarray(table.T))
    moved = Tree(
        np.array(edges, dtype=np.int64).reshape(-1, 2),
        tree.nats,
        tuple(tree.log_marginals[k] for k in order),
        tuple(tables),
    )
    rng = np.random.default_rng(seed)
    rows = with_gaps(rng, random_rows(rng, sizes_of(tree), 6))
    np.testing.assert_allclose(
        evidence_rows(moved.arrays, np.ascontiguousarray(rows[:, order])),
        evidence_rows(tree.arrays, rows),
        rtol=1e-10,
        atol=1e-10,
    )


def test_neighbours_share_an_edge() -> None:
    tree = random_tree(1, [2, 3, 2, 4], edges=[(0, 2), (1, 2)])
    assert [tree.neighbours(k) for k in range(4)] == [[2], [2], [0, 1], []]


def test_the_layout_holds_the_same_tables_padded() -> None:
    tree = random_tree(2, [2, 9, 3], edges=[(0, 1), (1, 2)])
    t = tree.arrays
    assert t.marginal.shape[1] == 2 * PAD
    assert t.n_bins.tolist() == [2, 9, 3]
    assert t.start.tolist() == [0, 1, 3, 4]
    assert t.neighbour.tolist() == [1, 0, 2, 1]
    np.testing.assert_array_equal(t.log_ratio[1, :9, :3], tree.log_ratios[1])
    # A slot's ratio is indexed by the bin across, then by the own bin.
    np.testing.assert_allclose(np.log(t.ratio[0, :9, :2]), tree.log_ratios[0].T, atol=1e-14)
    np.testing.assert_allclose(np.log(t.ratio[1, :2, :9]), tree.log_ratios[0], atol=1e-14)
    assert np.all(t.marginal[0, 2:] == 0)


def test_a_forest_without_edges_is_a_product() -> None:
    tree = random_tree(3, [2, 3], edges=[])
    rows = joint_states([2, 3])
    wanted = [slow_log_p(tree, row) for row in rows.tolist()]
    np.testing.assert_allclose(evidence_rows(tree.arrays, rows), wanted, atol=1e-14)


def test_a_tree_goes_to_another_process_without_its_layout_and_scores_there_alike() -> None:
    rng = np.random.default_rng(5)
    tree = random_tree(5, [30] * 6)
    rows = random_rows(rng, sizes_of(tree), 50)
    before = evidence_rows(tree.arrays, rows)
    sent = pickle.dumps(tree)
    there = pickle.loads(sent)
    assert len(sent) < (tree.arrays.ratio.nbytes + tree.arrays.log_ratio.nbytes) / 2
    assert np.array_equal(evidence_rows(there.arrays, rows), before)
