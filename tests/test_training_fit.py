"""One density from rows: what it reads, which edges it finds, tables that agree."""

from __future__ import annotations

import itertools
import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from scoring.bins import BinTable
from scoring.channels import ChannelTable
from scoring.density import surprise_of
from scoring.kernels import evidence_rows
from scoring.tree import Tree
from tests.spools import START_NS, gaussian_tree, measurements, spool_of, states, times
from training.crossfit import member_of
from training.fit import Density, by_mass, fit, fit_regimes
from training.rows import Rows

Floats = NDArray[np.float64]
S = 1_000_000_000


def fit_of(values: Floats, table: ChannelTable | None = None, **more: Any) -> Density:
    """Return the density of one source's records."""
    with spool_of({"a": values}) as spool:
        return fit(Rows(spool, table or measurements(values.shape[1]), ("a",), 60.0), **more)


def edges_of(density: Density) -> list[tuple[int, int]]:
    """Return the edges of the plain tree."""
    return [(int(a), int(b)) for a, b in density.parts[-1].tree.edges]


def a_chain(n: int = 1200, seed: int = 1) -> Floats:
    """Return records of a chain c0 - c1 - c2 - c3."""
    return gaussian_tree(np.random.default_rng(seed), n, [(0, 1), (1, 2), (2, 3)], 0.8)


@pytest.fixture(scope="module")
def chain() -> Density:
    """Return the density of a chain."""
    return fit_of(a_chain())


def agrees(tree: Tree) -> None:
    """Check that every table has its channels' marginals as sums."""
    for (a, b), table in zip(tree.edges.tolist(), tree.log_ratios, strict=True):
        p, q = np.exp(tree.log_marginals[a]), np.exp(tree.log_marginals[b])
        joint = np.exp(table) * np.outer(p, q)
        np.testing.assert_allclose(joint.sum(axis=1), p, rtol=1e-9)
        np.testing.assert_allclose(joint.sum(axis=0), q, rtol=1e-9)


def test_a_chain_is_found_and_every_table_agrees_with_its_marginals(chain: Density) -> None:
    assert edges_of(chain) == [(0, 1), (1, 2), (2, 3)]
    agrees(chain.parts[0].tree)
    assert np.all(chain.parts[0].tree.nats > 0.3)


def test_another_order_of_channels_gives_the_same_tree_and_surprise(chain: Density) -> None:
    order = [2, 0, 3, 1]
    values = a_chain()
    other = fit_of(np.ascontiguousarray(values[:, order]))
    named = {frozenset((order[a], order[b])) for a, b in edges_of(other)}
    assert named == {frozenset(e) for e in edges_of(chain)}
    fresh = a_chain(200, seed=2)
    ours = surprise_of(member_of("a", chain), BinTable.of(chain.bins).rows(fresh))
    theirs = surprise_of(
        member_of("a", other), BinTable.of(other.bins).rows(np.ascontiguousarray(fresh[:, order]))
    )
    np.testing.assert_allclose(ours, theirs, rtol=1e-6)


def test_another_unit_gives_the_same_surprise(chain: Density) -> None:
    scale, shift = np.array([1000.0, 0.01, 1.0, 3.0]), np.array([5.0, -2.0, 0.0, 1e3])
    other = fit_of(a_chain() * scale + shift)
    fresh = a_chain(200, seed=2)
    ours = surprise_of(member_of("a", chain), BinTable.of(chain.bins).rows(fresh))
    theirs = surprise_of(member_of("a", other), BinTable.of(other.bins).rows(fresh * scale + shift))
    np.testing.assert_allclose(ours, theirs, rtol=1e-6)


def test_folds_that_are_not_given_are_not_read() -> None:
    values = a_chain()
    with spool_of({"a": values}) as spool:
        rows = Rows(spool, measurements(4), ("a",), 60.0)
        fold = rows.blocks("a").fold(times(len(values)))
        wanted = fit(rows, (0, 1, 3, 4))
    values[fold == 2] = 1e6
    found = fit_of(values, folds=(0, 1, 3, 4))
    for ours, theirs in zip(found.bins, wanted.bins, strict=True):
        np.testing.assert_array_equal(ours.borders, theirs.borders)
    for one, other in zip(
        found.parts[0].tree.log_ratios, wanted.parts[0].tree.log_ratios, strict=True
    ):
        np.testing.assert_array_equal(one, other)


def test_stretches_left_out_of_tables_are_not_read() -> None:
    values = a_chain()
    values[300:340] = 1e6
    out = {"a": np.array([[START_NS + 300 * 60 * S, START_NS + 339 * 60 * S]])}
    with spool_of({"a": values}) as spool:
        density = fit(Rows(spool, measurements(4), ("a",), 60.0, out))
    assert max(float(b.borders.max()) for b in density.bins) < 100
    assert edges_of(density) == [(0, 1), (1, 2), (2, 3)]


def test_a_density_like_another_keeps_its_edges_and_choices(chain: Density) -> None:
    rng = np.random.default_rng(5)
    other = fit_of(rng.normal(size=(600, 4)), like=chain)
    assert edges_of(other) == edges_of(chain)
    assert other.plain.choice == chain.plain.choice
    agrees(other.parts[0].tree)


def test_the_site_forbids_and_requires_edges() -> None:
    say = {"forbid": [["c1", "c0"]], "require": [["c3", "c0"]]}
    edges = edges_of(fit_of(a_chain(), measurements(4, edges=say)))
    assert (0, 1) not in edges
    assert (0, 3) in edges
    assert len(edges) == 3


def test_a_constant_channel_stays_as_a_node_without_an_edge() -> None:
    values = a_chain()
    values[:, 2] = 7.5
    density = fit_of(values)
    assert not [e for e in edges_of(density) if 2 in e]
    assert len(density.bins) == 4
    row = BinTable.of(density.bins).rows(np.array([[0.0, 0.0, 7.6, 0.0]]))
    assert surprise_of(member_of("a", density), row)[0] > math.log(1200)


def test_channels_that_have_nothing_to_do_with_each_other_get_no_edge() -> None:
    # Records a minute apart, every channel slow: a walk that is drawn back.
    rng = np.random.default_rng(6)
    values = rng.normal(size=(3000, 3))
    for r in range(1, 3000):
        values[r] = 0.9 * values[r - 1] + 0.4 * values[r]
    assert edges_of(fit_of(values)) == []


def test_missing_readings_leave_the_rest_of_their_record_in_use() -> None:
    values = a_chain(4000)
    rng = np.random.default_rng(7)
    values[rng.random(values.shape) < 0.3] = np.nan
    density = fit_of(values)
    assert edges_of(density) == [(0, 1), (1, 2), (2, 3)]
    agrees(density.parts[0].tree)


def test_channels_never_read_together_get_no_edge() -> None:
    values = a_chain(1000)
    values[::2, 0] = np.nan
    values[1::2, 1:] = np.nan
    assert edges_of(fit_of(values)) == [(1, 2), (2, 3)]


def test_a_channel_never_read_is_no_obstacle() -> None:
    values = a_chain(1000)
    values[:, 3] = np.nan
    assert edges_of(fit_of(values)) == [(0, 1), (1, 2)]


def test_states_and_measurements_go_together() -> None:
    rng = np.random.default_rng(8)
    state = (rng.random(3000) < 0.4).astype(float)
    flow = np.where(state == 1, 10.0, 200.0) + 5 * rng.normal(size=3000)
    other = (rng.random(3000) < np.where(state == 1, 0.9, 0.2)).astype(float)
    table = measurements(1).model_copy(
        update={"channel": (*measurements(1).channel, *states(2, 2).channel)}
    )
    density = fit_of(np.column_stack([flow, state, other]), table)
    assert edges_of(density) == [(0, 1), (1, 2)]
    agrees(density.parts[0].tree)


@pytest.mark.parametrize("n_bins", [4, 10, 24])
def test_bins_that_weigh_edges_are_unions_of_about_equal_mass(chain: Density, n_bins: int) -> None:
    for node in chain.fine:
        coarse, into = by_mass(node, n_bins)
        assert set(np.diff(into.astype(int))) <= {0, 1}
        np.testing.assert_allclose(
            coarse.marginal, np.bincount(into, weights=node.marginal), rtol=1e-12
        )
        assert len(coarse.scores) == len(coarse.marginal) - 1
        assert n_bins - 1 <= len(coarse.marginal) <= n_bins
        assert coarse.marginal.max() < 1.6 / n_bins


def test_regimes_and_the_rest_are_one_density() -> None:
    rng = np.random.default_rng(9)
    n = 4000
    pump = rng.choice(3, n, p=[0.55, 0.43, 0.02])
    valve = np.where(rng.random(n) < 0.9, pump % 2, rng.integers(0, 2, n))
    alarm = np.where(rng.random(n) < 0.8, valve ^ (pump == 0), rng.integers(0, 2, n))
    values = np.column_stack([pump, valve, alarm]).astype(float)
    with spool_of({"a": values}) as spool:
        rows = Rows(spool, states(3, 2, 2), ("a",), 60.0)
        density = fit_regimes(rows, fit(rows), (0,))
    # The third word is rare and left to the plain tree.
    assert sorted(density.regimes) == [(0,), (1,)]
    member = member_of("a", density)
    everything = np.array(
        list(itertools.product(*(range(b.n_bins) for b in density.bins))), dtype=np.uint8
    )
    assert math.fsum(np.exp(-surprise_of(member, everything))) == pytest.approx(1.0, abs=1e-9)
    share = np.exp(-surprise_of(member, everything[everything[:, 0] == 0])).sum()
    assert share == pytest.approx((pump == 0).mean(), abs=0.01)
    for part in density.parts:
        agrees(part.tree) if part.key is None else evidence_rows(part.tree.arrays, everything)


def test_many_channels_leave_room_for_the_commonest_regimes_alone(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    rng = np.random.default_rng(10)
    state = rng.choice(3, 3000, p=[0.2, 0.5, 0.3]).astype(float)
    values = np.column_stack([state, rng.integers(0, 2, 3000)])
    monkeypatch.setattr("training.fit.MAX_REGIME_NODES", 4)
    with spool_of({"a": values}) as spool:
        rows = Rows(spool, states(3, 2), ("a",), 60.0)
        density = fit_regimes(rows, fit(rows), (0,))
    assert list(density.regimes) == [(1,), (2,)]
