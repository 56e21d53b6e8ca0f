"""Held-out gains: the kernels against slow twins, a fold at a time."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from numpy.typing import NDArray

from tests.strategies import SEEDS
from training.heldgains import (
    ROUGH_SWEEPS,
    best_mass,
    gathered,
    held_out_gains,
    held_out_shapes,
)
from training.shapes import pair_shape
from training.tables import shaped_joint

Floats = NDArray[np.float64]
BORDERS = np.array([-1.0, 0.0, 1.0])
MARGINAL = np.array([0.1587, 0.3413, 0.3413, 0.1587])
MASSES, SHARES = np.array([10.0, 500.0]), np.array([0.1, 0.01, 0.0001])


def fold_counts(seed: int) -> Floats:
    """Return counts of a pair over three folds, some cells empty."""
    rng = np.random.default_rng(seed)
    return rng.poisson(rng.gamma(1.0, 5.0, (4, 4)), (3, 4, 4)).astype(np.float64)


@given(SEEDS)
def test_shapes_come_from_the_other_folds(seed: int) -> None:
    counts = fold_counts(seed)
    found = held_out_shapes(counts, MARGINAL, MARGINAL, BORDERS, BORDERS)
    for fold in range(3):
        seen = np.delete(counts, fold, axis=0).sum(axis=0)
        wanted = pair_shape(seen, MARGINAL, MARGINAL, BORDERS, BORDERS)
        np.testing.assert_array_equal(found[fold], wanted)


@given(SEEDS)
def test_gains_are_log_ratios_of_records_not_seen(seed: int) -> None:
    counts = fold_counts(seed)
    shapes = held_out_shapes(counts, MARGINAL, MARGINAL, BORDERS, BORDERS)
    found = held_out_gains(counts, shapes, MARGINAL, MARGINAL, MASSES, SHARES)
    apart = np.outer(MARGINAL, MARGINAL)
    for fold in range(3):
        seen = np.delete(counts, fold, axis=0).sum(axis=0)
        for k, mass in enumerate(MASSES):
            joint = shaped_joint(seen, shapes[fold], mass, 0.0, MARGINAL, MARGINAL, ROUGH_SWEEPS)
            for s, share in enumerate(SHARES):
                ratio = (1 - share) * joint / apart + share
                wanted = (counts[fold] * np.log(ratio)).sum()
                assert found[fold, k, s] == pytest.approx(wanted, rel=1e-9, abs=1e-9)


def test_the_best_mass_is_that_of_all_folds_together() -> None:
    gains = np.array([[[5.0], [1.0], [3.0]], [[-9.0], [2.0], [1.0]]])
    assert best_mass(gains) == 2
    assert best_mass(gains[:1]) == 0


def test_one_pair_is_taken_out_of_all() -> None:
    counts = np.random.default_rng(1).integers(0, 9, (3, 5, 6, 6))
    np.testing.assert_array_equal(gathered(counts, 2, 4, 5), counts[:, 2, :4, :5])
