"""Joint tables: sums, the say of counts, shape and share, and raking against a twin."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from numpy.typing import NDArray

from tests.strategies import SEEDS
from training.tables import (
    MAX_SWEEPS,
    RAKE_ERROR,
    log_ratio,
    mutual_information,
    rake,
    shaped_joint,
)

Floats = NDArray[np.float64]


def a_case(seed: int) -> tuple[Floats, Floats, Floats, Floats]:
    """Return counts, shape and two marginals of one random pair."""
    rng = np.random.default_rng(seed)
    n, m = rng.integers(2, 9, 2)
    counts = rng.poisson(rng.random((n, m)) * 10).astype(float)
    shape = rng.random((n, m)) ** 6 + 1e-12
    left, right = rng.dirichlet(np.ones(n) * 2), rng.dirichlet(np.ones(m) * 2)
    return counts, shape / shape.sum(), left + 1e-12, right + 1e-12


def slow_rake(joint: Floats, left: Floats, right: Floats) -> Floats:
    """Return the raked table: rows and columns scaled in turn, for very long."""
    joint = joint.copy()
    for _ in range(20_000):
        joint *= (left / joint.sum(axis=1))[:, None]
        joint *= (right / joint.sum(axis=0))[None, :]
    return joint


@given(SEEDS)
def test_tables_sum_to_both_marginals(seed: int) -> None:
    counts, shape, left, right = a_case(seed)
    joint = shaped_joint(counts, shape, 5.0, 0.001, left, right)
    np.testing.assert_allclose(joint.sum(axis=1), left / left.sum(), rtol=1e-9)
    np.testing.assert_allclose(joint.sum(axis=0), right / right.sum(), rtol=1e-9)
    assert joint.min() > 0


@pytest.mark.parametrize("seed", range(4))
def test_raking_equals_its_slow_twin(seed: int) -> None:
    counts, shape, left, right = a_case(seed)
    left, right = left / left.sum(), right / right.sum()
    joint = (counts + shape) / (counts.sum() + 1)
    wanted = slow_rake(joint, left, right)
    assert rake(joint, left, right) < RAKE_ERROR
    np.testing.assert_allclose(joint, wanted, rtol=1e-8)


def test_raking_keeps_the_cross_ratios() -> None:
    joint = np.array([[4.0, 1.0], [2.0, 3.0]]) / 10
    before = joint[0, 0] * joint[1, 1] / (joint[0, 1] * joint[1, 0])
    rake(joint, np.array([0.3, 0.7]), np.array([0.6, 0.4]))
    after = joint[0, 0] * joint[1, 1] / (joint[0, 1] * joint[1, 0])
    assert after == pytest.approx(before, rel=1e-10)
    np.testing.assert_allclose(joint.sum(axis=0), [0.6, 0.4], rtol=1e-12)


def test_a_table_that_agrees_already_is_left_alone() -> None:
    left, right = np.array([0.25, 0.75]), np.array([0.1, 0.9])
    joint = np.outer(left, right)
    assert rake(joint, left, right, 2) < RAKE_ERROR
    np.testing.assert_allclose(joint, np.outer(left, right), rtol=1e-14)


def test_heavy_shape_gives_the_shape_and_many_counts_give_the_counts() -> None:
    counts, shape, _, _ = a_case(3)
    light, heavy = 1e-6, 1e18
    left, right = shape.sum(axis=1), shape.sum(axis=0)
    np.testing.assert_allclose(
        shaped_joint(counts, shape, heavy, 0.0, left, right), shape, rtol=1e-4
    )
    seen = counts + 1.0
    p = seen / seen.sum()
    found = shaped_joint(seen, shape, light, 0.0, p.sum(axis=1), p.sum(axis=0))
    np.testing.assert_allclose(found, p, rtol=1e-5)


def test_each_option_changes_the_table() -> None:
    counts, shape, left, right = a_case(5)
    plain = shaped_joint(counts, shape, 5.0, 0.001, left, right)
    for mass, share in ((6.0, 0.001), (5.0, 0.01)):
        other = shaped_joint(counts, shape, mass, share, left, right)
        assert np.abs(other / plain - 1).max() > 1e-3


def test_the_independent_share_bounds_what_one_edge_can_say() -> None:
    counts, shape, left, right = a_case(6)
    share = 0.003
    joint = shaped_joint(counts * 0, shape**20 + 1e-290, 1.0, share, left, right)
    ratios = log_ratio(joint, left, right)
    assert ratios.min() >= math.log(share) - 1e-9
    whole = shaped_joint(counts, shape, 5.0, 1.0, left, right)
    np.testing.assert_allclose(whole, np.outer(left, right), rtol=1e-12)


def test_a_pair_without_exceptions_still_agrees_with_its_marginals() -> None:
    # Two words that follow two modes but for one record in thousands; the marginals lie a
    # little beside the counts, which plain raking needs thousands of sweeps to mend.
    counts = np.array([[1800.0, 0.0, 0.0], [0.0, 1200.0, 0.0]]).repeat(20, axis=0) / 20
    left = np.concatenate([np.full(20, 0.6003 / 20), np.full(20, 0.3997 / 20)])
    right = np.array([1800.5, 1200.5, 0.5]) / 3001.5
    shape = np.outer(left, right)
    joint = shaped_joint(counts, shape, 10.0, 1e-7, left, right)
    np.testing.assert_allclose(joint.sum(axis=1), left, rtol=1e-12)
    np.testing.assert_allclose(joint.sum(axis=0), right, rtol=1e-12)
    assert joint.min() > 0


def test_cells_that_underflow_do_not_break_the_raking() -> None:
    shape = np.array([[1.0, 0.0], [0.0, 0.0]])
    half = np.array([0.5, 0.5])
    joint = shaped_joint(np.zeros((2, 2)), shape, 1.0, 0.0, half, half)
    assert np.all(np.isfinite(joint))
    assert joint.sum() == pytest.approx(1.0)


def test_mutual_information_takes_nought_times_its_logarithm_as_nought() -> None:
    half = np.array([0.5, 0.5])
    same = np.diag(half)
    assert mutual_information(same, half, half) == pytest.approx(math.log(2), rel=1e-14)
    assert mutual_information(np.outer(half, half), half, half) == pytest.approx(0.0, abs=1e-15)


@given(SEEDS)
def test_mutual_information_is_the_mean_log_ratio(seed: int) -> None:
    counts, shape, left, right = a_case(seed)
    left, right = left / left.sum(), right / right.sum()
    joint = shaped_joint(counts, shape, 5.0, 0.001, left, right)
    wanted = float((joint * log_ratio(joint, left, right)).sum())
    assert mutual_information(joint, left, right) == pytest.approx(wanted, rel=1e-9, abs=1e-13)
    assert wanted >= -1e-12


def test_newtons_steps_come_to_what_sweeps_come_to() -> None:
    # Two modes that hardly ever mix: 40 sweeps are far from enough, 20,000 are not.
    rng = np.random.default_rng(4)
    counts = np.zeros((12, 9))
    counts[:7, :5], counts[7:, 5:] = rng.poisson(80, (7, 5)), rng.poisson(80, (5, 4))
    joint = (counts + 10 * np.full((12, 9), 1 / 108)) / (counts.sum() + 10)
    left = joint.sum(axis=1) * np.where(np.arange(12) < 7, 1.004, 1.0)
    right = joint.sum(axis=0)
    left, right = left / left.sum(), right / right.sum()
    wanted, swept = slow_rake(joint, left, right), joint.copy()
    assert rake(swept, left, right, MAX_SWEEPS - 1) > 1e-6
    assert rake(joint, left, right) < RAKE_ERROR
    np.testing.assert_allclose(joint, wanted, rtol=1e-9)
