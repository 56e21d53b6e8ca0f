"""Members with a tree for each regime, against sums over every joint state."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scoring.bins import MISSING, BinRows
from scoring.density import belief_of, removal_of, surprise_of
from scoring.model import Member
from tests.strategies import SEEDS, SOME, members
from tests.trees import (
    hidden,
    joint_states,
    random_member,
    random_rows,
    slow_member_evidence,
    with_gaps,
)


def sizes(member: Member) -> list[int]:
    """Return the bins of each node."""
    return [b.n_bins for b in member.bins]


def some_rows(member: Member, seed: int, n: int = 5) -> BinRows:
    """Return rows, the first whole, the others with gaps, also in the regime."""
    rng = np.random.default_rng(seed)
    rows = random_rows(rng, sizes(member), n)
    rows[1:] = with_gaps(rng, rows[1:], 0.4)
    if member.regime:
        rows[1, list(member.regime)] = MISSING
    return rows


@SOME
@given(members())
def test_a_member_is_a_density_over_all_joint_states(member: Member) -> None:
    surprise = surprise_of(member, joint_states(sizes(member)))
    assert math.fsum(np.exp(-surprise)) == pytest.approx(1.0, abs=1e-11)


@SOME
@given(members(), SEEDS)
def test_surprise_sums_over_the_regimes_that_may_hold(member: Member, seed: int) -> None:
    rows = some_rows(member, seed)
    wanted = [-slow_member_evidence(member, row) for row in rows.tolist()]
    np.testing.assert_allclose(surprise_of(member, rows), wanted, rtol=1e-9, atol=1e-9)


@SOME
@given(members(), SEEDS, st.data())
def test_removal_equals_the_difference_of_two_sums(
    member: Member, seed: int, data: st.DataObject
) -> None:
    n = len(member.bins)
    n_instruments = data.draw(st.integers(max(1, len(member.regime)), n))
    groups: list[list[int]] = [[] for _ in range(n_instruments)]
    for node in range(n_instruments, n):
        groups[data.draw(st.integers(0, n_instruments - 1))].append(node)
    start = np.cumsum([0] + [len(g) for g in groups]).astype(np.int64)
    nodes = np.array([k for g in groups for k in g], dtype=np.int64)
    rows = some_rows(member, seed)
    surprise, own = removal_of(member, rows, start, nodes)
    np.testing.assert_allclose(surprise, surprise_of(member, rows), rtol=1e-12, atol=1e-12)
    for r, row in enumerate(rows):
        whole = slow_member_evidence(member, row.tolist())
        for i in range(n_instruments):
            if row[i] == MISSING:
                assert np.isnan(own[r, i])
                continue
            rest = slow_member_evidence(member, hidden(row, i, *groups[i]).tolist())
            assert own[r, i] == pytest.approx(rest - whole, rel=1e-8, abs=1e-8)


@SOME
@given(members(), SEEDS, st.data())
def test_beliefs_sum_over_the_regimes_that_may_hold(
    member: Member, seed: int, data: st.DataObject
) -> None:
    node = data.draw(st.integers(0, len(member.bins) - 1))
    for row in some_rows(member, seed):
        joint = []
        for b in range(sizes(member)[node]):
            filled = row.copy()
            filled[node] = b
            joint.append(math.exp(slow_member_evidence(member, filled.tolist())))
        wanted = np.array(joint) / sum(joint)
        np.testing.assert_allclose(belief_of(member, row, node), wanted, atol=1e-9)


def test_a_regime_changes_what_is_expected_of_the_rest() -> None:
    member = random_member(4, [2, 3, 3], regime=(0,), keys=[(0,)], states=(0,))
    first, second = (
        belief_of(member, np.array([b, 0, MISSING], dtype=np.uint8), 2) for b in (0, 1)
    )
    assert np.abs(first - second).max() > 0.01
