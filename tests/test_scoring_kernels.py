"""The tight loops against slow twins over every joint state, and at the ends of the range."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows
from scoring.kernels import belief_row, evidence_rows, removal_rows
from scoring.tree import Tree
from tests.strategies import SEEDS, SOME, trees
from tests.trees import (
    hidden,
    random_rows,
    random_tree,
    sizes_of,
    slow_evidence,
    tree_of,
    with_gaps,
)
from training.tables import rake

NO_GROUPS = np.zeros(0, dtype=np.int64)


def alone(n: int) -> NDArray[np.int64]:
    """Return the group starts of n instruments from which nothing is derived."""
    return np.zeros(n + 1, dtype=np.int64)


def some_rows(tree: Tree, seed: int, n: int = 5) -> BinRows:
    """Return rows with gaps, the first without any and the last with nothing read."""
    rng = np.random.default_rng(seed)
    rows = random_rows(rng, sizes_of(tree), n)
    rows[1:] = with_gaps(rng, rows[1:], 0.4)
    rows[-1] = MISSING
    return rows


@SOME
@given(trees(), SEEDS)
def test_evidence_equals_the_sum_over_every_completion(tree: Tree, seed: int) -> None:
    rows = some_rows(tree, seed)
    wanted = [slow_evidence(tree, row) for row in rows.tolist()]
    np.testing.assert_allclose(evidence_rows(tree.arrays, rows), wanted, rtol=1e-11, atol=1e-11)


@SOME
@given(trees(), SEEDS)
def test_own_surprise_is_what_removal_takes_away(tree: Tree, seed: int) -> None:
    rows = some_rows(tree, seed)
    n = tree.n_nodes
    evidence, own = removal_rows(tree.arrays, rows, alone(n), NO_GROUPS)
    np.testing.assert_allclose(evidence, evidence_rows(tree.arrays, rows), rtol=1e-12, atol=1e-12)
    for r, row in enumerate(rows):
        for i in range(n):
            if row[i] == MISSING:
                assert np.isnan(own[r, i])
                continue
            rest = slow_evidence(tree, hidden(row, i).tolist())
            wanted = rest - slow_evidence(tree, row.tolist())
            assert own[r, i] == pytest.approx(wanted, rel=1e-9, abs=1e-9)


@SOME
@given(trees(most_nodes=6, most_bins=3), SEEDS, st.data())
def test_what_is_derived_from_an_instrument_is_removed_with_it(
    tree: Tree, seed: int, data: st.DataObject
) -> None:
    n = tree.n_nodes
    n_instruments = data.draw(st.integers(1, n))
    derived = st.lists(st.integers(n_instruments, n - 1), unique=True, max_size=3)
    groups = [data.draw(derived) if n_instruments < n else [] for _ in range(n_instruments)]
    start = np.cumsum([0] + [len(g) for g in groups]).astype(np.int64)
    nodes = np.array([k for g in groups for k in g], dtype=np.int64)
    rows = some_rows(tree, seed)
    _, own = removal_rows(tree.arrays, rows, start, nodes)
    for r, row in enumerate(rows):
        for i in range(n_instruments):
            if row[i] == MISSING:
                assert np.isnan(own[r, i])
                continue
            rest = slow_evidence(tree, hidden(row, i, *groups[i]).tolist())
            wanted = rest - slow_evidence(tree, row.tolist())
            assert own[r, i] == pytest.approx(wanted, rel=1e-9, abs=1e-9)


@SOME
@given(trees(), SEEDS, st.data())
def test_beliefs_equal_the_normalised_joint(tree: Tree, seed: int, data: st.DataObject) -> None:
    node = data.draw(st.integers(0, tree.n_nodes - 1))
    for row in some_rows(tree, seed):
        hidden_row = hidden(row, node)
        belief = belief_row(tree.arrays, hidden_row, node)
        joint = []
        for b in range(sizes_of(tree)[node]):
            hidden_row[node] = b
            joint.append(math.exp(slow_evidence(tree, hidden_row.tolist())))
        np.testing.assert_allclose(belief[: len(joint)], np.array(joint) / sum(joint), atol=1e-11)
        assert np.all(belief[len(joint) :] == 0)


@SOME
@given(trees(), SEEDS)
def test_a_batch_equals_one_by_one(tree: Tree, seed: int) -> None:
    rows = some_rows(tree, seed)
    start = alone(tree.n_nodes)
    evidence, own = removal_rows(tree.arrays, rows, start, NO_GROUPS)
    single = [
        removal_rows(tree.arrays, rows[r : r + 1], start, NO_GROUPS) for r in range(len(rows))
    ]
    assert evidence.tolist() == [float(e[0]) for e, _ in single]
    np.testing.assert_array_equal(own, np.concatenate([o for _, o in single]))
    assert evidence_rows(tree.arrays, rows).tolist() == [
        float(evidence_rows(tree.arrays, rows[r : r + 1])[0]) for r in range(len(rows))
    ]


def a_star(ratios: list[NDArray[np.float64]], rare: float) -> Tree:
    """Return a star around node 0 whose tables have about these ratios, and agree.

    ratios: ln ratio by (centre bin, neighbour bin), one table a neighbour, (3, 3); the
    channels' bins 1 and 2 have the probability `rare`.
    """
    p = np.array([1 - 2 * rare, rare, rare])
    joints = [np.exp(table) * np.outer(p, p) for table in ratios]
    for joint in joints:
        rake(joint, p, p)
    edges = [(0, k + 1) for k in range(len(ratios))]
    return tree_of([p] * (len(ratios) + 1), edges, joints)


def exact_star(tree: Tree, row: list[int]) -> mpmath.mpf:
    """Return p(what is read) of a star by 60-digit arithmetic."""
    with mpmath.workdps(60):
        centre = range(len(tree.log_marginals[0])) if row[0] == MISSING else [row[0]]
        total = mpmath.mpf(0)
        for c in centre:
            term = mpmath.exp(mpmath.mpf(tree.log_marginals[0][c]))
            for k, table in enumerate(tree.log_ratios):
                b, marginal = row[k + 1], tree.log_marginals[k + 1]
                bins = range(len(marginal)) if b == MISSING else [b]
                term *= mpmath.fsum(
                    mpmath.exp(mpmath.mpf(marginal[x]) + mpmath.mpf(table[c, x])) for x in bins
                )
            total += term
        return total


def check_star(tree: Tree, row: list[int]) -> None:
    """Check evidence and every removal of one row of a star against 60-digit arithmetic."""
    rows = np.array([row], dtype=np.uint8)
    evidence, own = removal_rows(tree.arrays, rows, alone(tree.n_nodes), NO_GROUPS)
    exact = exact_star(tree, row)
    assert evidence[0] == pytest.approx(float(mpmath.log(exact)), rel=1e-11)
    assert evidence_rows(tree.arrays, rows)[0] == pytest.approx(evidence[0], rel=1e-12)
    for i, b in enumerate(row):
        if b != MISSING:
            rest = exact_star(tree, [MISSING if k == i else x for k, x in enumerate(row)])
            wanted = float(mpmath.log(rest) - mpmath.log(exact))
            assert own[0, i] == pytest.approx(wanted, rel=1e-9, abs=1e-9)


@pytest.mark.parametrize("centre", ["first", "last", "missing"])
def test_a_star_of_20_in_their_last_bins_half_missing_is_exact(centre: str) -> None:
    # As learned tables are: rare outer bins that go together.
    tree = random_tree(5, [24] * 21, edges=[(0, k) for k in range(1, 21)], rare=1e-30)
    row = [{"first": 0, "last": 23, "missing": MISSING}[centre]]
    row += [23 if k % 2 else MISSING for k in range(20)]
    check_star(tree, row)


# Tables without an independent share, harsher than any that learning makes: products of
# their ratios leave the float range on the way and come back.
HARSH = [
    ("all impossible", [-60.0] * 40),
    ("all certain", [50.0] * 40),
    ("impossible first, then certain", [-60.0] * 20 + [50.0] * 28),
    ("through the last digits, then back", [-17.9] * 40 + [25.0] * 40),
    ("certain first, then impossible", [50.0] * 28 + [-60.0] * 20),
    ("just below the range, then back", [-29.8] * 25 + [20.0] * 25),
]


@pytest.mark.parametrize(("what", "nats"), HARSH)
@pytest.mark.parametrize("gaps", [False, True])
def test_products_that_leave_the_float_range_are_exact(
    what: str, nats: list[float], gaps: bool
) -> None:
    # The centre's bins 1 and 2 pull against each other; bin 0 stays where it is.
    tables = [np.array([[0.0] * 3, [0.0, x, x], [0.0, -x / 3, -x / 3 + 1]]) for x in nats]
    tree = a_star(tables, rare=1e-26)
    row = [1] + [1 + k % 2 for k in range(len(nats))]
    if gaps:
        row[3::7] = [MISSING] * len(row[3::7])
        check_star(tree, [MISSING, *row[1:]])
    check_star(tree, row)


def test_a_chain_of_missing_nodes_between_far_readings_is_exact() -> None:
    # Thirty hidden nodes that each pass on almost nothing.
    n, stay = 32, 1e-20
    joint = np.array([[0.5 - stay / 2, stay / 2], [stay / 2, 0.5 - stay / 2]])
    table = np.log(joint / 0.25)
    even = np.full(2, math.log(0.5))
    edges = np.array([(k, k + 1) for k in range(n - 1)])
    tree = Tree(edges, np.ones(n - 1), (even,) * n, (table,) * (n - 1))
    row = np.full((1, n), MISSING, dtype=np.uint8)
    row[0, [0, -1]] = 0, 1
    # p(ends differ) of a symmetric chain: (1 - (1 - 2 s)^k) / 2 with s = P(a step differs).
    with mpmath.workdps(60):
        step = 1 - 2 * mpmath.mpf(math.exp(float(table[0, 1]))) / 2
        wanted = float(mpmath.log((1 - step ** (n - 1)) / 4))
    assert evidence_rows(tree.arrays, row)[0] == pytest.approx(wanted, rel=1e-9)
