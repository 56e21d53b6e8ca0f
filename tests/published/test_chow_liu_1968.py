"""The worked example of the paper that the tree is from.

C. K. Chow, C. N. Liu, "Approximating discrete probability distributions with dependence
trees", IEEE Trans. Inf. Theory 14(3), 462-467, 1968. The joint and the printed figures are
from memory; the joint gives every printed mutual information. The six-digit values were
computed from it beforehand, independently of this code.
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.published.exact import (
    chow_liu,
    divergence,
    exact_tree,
    expected_surprise,
    probabilities,
    weights_of,
)
from tests.published.networks import entropy, labelled_trees, single
from training.structure import spanning_forest

JOINT = np.array(
    [.10, .10, .05, .05, 0, 0, .10, .05, .05, .10, 0, 0, .05, .05, .15, .15]
).reshape(2, 2, 2, 2)  # fmt: skip

# Nats: as printed, and computed. X1 to X4 are 0 to 3 here.
MUTUAL = {
    (0, 1): (0.079, 0.079433),
    (0, 2): (0.00005, 0.000051),
    (0, 3): (0.0051, 0.005059),
    (1, 2): (0.189, 0.188994),
    (1, 3): (0.0051, 0.005059),
    (2, 3): (0.0051, 0.005059),
}
BEST = [[(0, 1), (0, 3), (1, 2)], [(0, 1), (1, 2), (1, 3)], [(0, 1), (1, 2), (2, 3)]]
# The paper's table of the tree with X4 hung on X1, to three places (from memory).
TABLE = (
    *(.130, .104, .037, .030, .015, .012, .068, .055),
    *(.053, .064, .015, .018, .033, .040, .149, .179),
)  # fmt: skip


def test_marginals_are_those_of_the_paper() -> None:
    ones = [single(JOINT, k)[1] for k in range(4)]
    np.testing.assert_allclose(ones, [0.55, 0.55, 0.55, 0.50], atol=1e-12)


def test_mutual_informations_are_those_of_the_paper() -> None:
    weights = weights_of(JOINT)
    for (a, b), (printed, computed) in MUTUAL.items():
        assert weights[a, b] == pytest.approx(computed, abs=5e-7)
        assert weights[a, b] == pytest.approx(printed, abs=5e-4)


def test_exactly_three_of_the_sixteen_trees_are_best() -> None:
    weights = weights_of(JOINT)
    totals = {tuple(tree): sum(weights[a, b] for a, b in tree) for tree in labelled_trees(4)}
    assert len(totals) == 16
    top = max(totals.values())
    assert top == pytest.approx(0.273487, abs=5e-7)
    assert sorted(list(t) for t, x in totals.items() if x > top - 1e-9) == BEST


def test_the_tie_is_cut_by_the_order_of_channels() -> None:
    # Rounded, so that the three equal weights are equal to the last bit.
    assert spanning_forest(np.round(weights_of(JOINT), 12)) == BEST[0]
    order = [3, 2, 1, 0]
    turned = np.round(weights_of(JOINT.transpose(order)), 12)
    assert spanning_forest(turned) == [(0, 1), (1, 2), (2, 3)]
    assert [tuple(e) for e in chow_liu(JOINT).edges.tolist()] in BEST


@pytest.mark.parametrize("edges", BEST)
def test_each_of_the_three_comes_equally_near(edges: list[tuple[int, int]]) -> None:
    tree = exact_tree(JOINT, edges)
    assert divergence(tree, JOINT) == pytest.approx(0.095187, abs=5e-7)
    # The paper prints 0.094 (from memory).
    assert divergence(tree, JOINT) == pytest.approx(0.094, abs=2e-3)
    assert expected_surprise(tree, JOINT) == pytest.approx(2.757564 - 0.273487, abs=1e-6)


def test_independent_channels_come_less_near() -> None:
    tree = exact_tree(JOINT, [])
    assert divergence(tree, JOINT) == pytest.approx(0.368674, abs=5e-7)
    assert divergence(tree, JOINT) == pytest.approx(0.364, abs=5e-3)
    assert entropy(JOINT) == pytest.approx(2.388890, abs=5e-7)


def test_the_table_of_the_paper_comes_out() -> None:
    found = probabilities(exact_tree(JOINT, BEST[0]), JOINT)
    np.testing.assert_allclose(found.reshape(-1), TABLE, atol=6e-4)
    assert found.sum() == pytest.approx(1.0, abs=1e-12)
