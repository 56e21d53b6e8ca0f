"""Intervals do what they are for: they hold as often as they say, and widen with clusters."""

from __future__ import annotations

import math

import numpy as np
import pytest

from training.intervals import count_to_come, dispersion_of, rate_limits, wilson


@pytest.mark.parametrize("size", [1, 4])
def test_a_count_to_come_lies_inside_as_often_as_it_says(size: int) -> None:
    rng = np.random.default_rng(8)
    # Events in clusters of `size`: variance over mean is the size.
    seen = size * rng.poisson(20.0, 4000)
    coming = size * rng.poisson(40.0, 4000)
    limits = [count_to_come(float(x), 30.0, 60.0, dispersion=size) for x in seen]
    inside = [low <= y <= high for (low, high), y in zip(limits, coming, strict=True)]
    assert 0.945 <= np.mean(inside) <= 0.985


def test_clusters_widen_both_intervals() -> None:
    for middle, single, clustered in (
        (3.0, rate_limits(30.0, 10.0), rate_limits(30.0, 10.0, 5.0)),
        (30.0, count_to_come(30.0, 10.0, 10.0), count_to_come(30.0, 10.0, 10.0, 5.0)),
    ):
        assert clustered[0] < single[0] < middle < single[1] < clustered[1]


def test_without_time_or_trials_nothing_is_known() -> None:
    assert rate_limits(0.0, 0.0) == (0.0, math.inf)
    assert count_to_come(0.0, 0.0, 5.0) == (0.0, math.inf)
    assert wilson(0, 0) == (0.0, 1.0)


def test_dispersion_is_variance_over_mean_and_never_below_one() -> None:
    assert dispersion_of(np.array([0, 8, 0, 8])) == pytest.approx(64 / 3 / 4)
    assert dispersion_of(np.array([3, 3, 3])) == 1.0
    assert dispersion_of(np.array([0, 0])) == 1.0
    assert dispersion_of(np.array([5])) == 1.0
