"""Shapes of pairs: correlations of normal scores from counts, and the copula they give."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import ndtri

from tests.spools import gaussian_tree
from training.copula import normal_cells
from training.shapes import bin_scores, pair_shape, score_correlation


def test_the_correlation_of_scores_is_that_of_the_records() -> None:
    rng = np.random.default_rng(2)
    values = gaussian_tree(rng, 200_000, [(0, 1)], 0.7)
    borders = ndtri(np.arange(1, 24) / 24)
    bins = [np.searchsorted(borders, values[:, k]) for k in range(2)]
    counts = np.bincount(bins[0] * 24 + bins[1], minlength=576).reshape(24, 24).astype(float)
    mean = bin_scores(borders, np.full(24, 1 / 24))
    assert score_correlation(counts, mean, mean) == pytest.approx(0.7, abs=0.01)
    assert score_correlation(counts[::-1], mean, mean) == pytest.approx(-0.7, abs=0.01)


def test_a_channel_that_does_not_move_has_no_correlation() -> None:
    counts = np.array([[5.0, 5.0], [0.0, 0.0]])
    scores = np.array([-1.0, 1.0])
    assert score_correlation(counts, scores, scores) == 0.0
    assert score_correlation(np.zeros((2, 2)), scores, scores) == 0.0


def test_few_records_are_shrunk_towards_independence() -> None:
    scores = np.array([-1.0, 1.0])
    few = score_correlation(np.diag([2.0, 2.0]), scores, scores)
    many = score_correlation(np.diag([2e4, 2e4]), scores, scores)
    assert few < 0.7 < 0.999 < many


def test_mean_scores_lie_inside_their_bins() -> None:
    borders = np.array([-3.0, -1.0, 0.5, 4.0])
    p = np.diff(np.concatenate([[0], [0.001, 0.16, 0.69, 0.99997], [1]]))
    mean = bin_scores(borders, p)
    assert mean[0] < -3 <= mean[1] <= -1 <= mean[2] <= 0.5 <= mean[3] <= 4 < mean[4]


def test_a_pair_of_measurements_has_the_shape_of_its_correlation() -> None:
    borders = np.array([-1.0, 0.0, 1.0])
    p = np.array([0.1587, 0.3413, 0.3413, 0.1587])
    counts = 1000 * normal_cells(borders, borders, 0.6)
    means = bin_scores(borders, p)
    r = score_correlation(counts, means, means)
    found = pair_shape(counts, p, p, borders, borders)
    np.testing.assert_array_equal(found, normal_cells(borders, borders, r))
    given = pair_shape(counts, p, p, borders, borders, -0.3)
    np.testing.assert_array_equal(given, normal_cells(borders, borders, -0.3))


def test_beside_a_state_the_shape_is_the_product_of_the_marginals() -> None:
    borders, none = np.array([-1.0, 0.0, 1.0]), np.zeros(0)
    p, q = np.array([0.1, 0.4, 0.4, 0.1]), np.array([0.7, 0.3])
    found = pair_shape(np.ones((4, 2)), p, q, borders, none)
    np.testing.assert_allclose(found, np.outer(p, q), rtol=1e-15)
