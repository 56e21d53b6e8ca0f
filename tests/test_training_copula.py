"""Cells of the bivariate normal against 50-digit quadrature, scipy, and what must hold."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import multivariate_normal, norm

from tests.strategies import SEEDS
from training.copula import MAX_CORRELATION, TINY, normal_cells

# The left channel has fewer bins: its open cells hold far cells of the right one.
LEFT = np.array([-1.5, -0.5, 0.0, 0.7, 2.0])
SCORES = np.array([-9.0, -4.0, -1.5, -0.5, 0.0, 0.7, 2.0, 5.0, 10.0])

# Cells by (row, column): the middle, both corners, and ever less likely pairs.
CELLS = [(2, 4), (3, 6), (0, 0), (5, 9), (5, 0), (1, 7), (0, 1)]


def exact_cell(i: int, j: int, r: float) -> mpmath.mpf:
    """Return P(X in cell i, Y in cell j): quadrature at 50 digits of phi(x) P(Y | x)."""
    far = 45
    with mpmath.workdps(50):
        low = mpmath.mpf(float(LEFT[i - 1])) if i > 0 else mpmath.mpf(-far)
        high = mpmath.mpf(float(LEFT[i])) if i < len(LEFT) else mpmath.mpf(far)
        bottom = mpmath.mpf(float(SCORES[j - 1])) if j > 0 else mpmath.mpf(-far)
        top = mpmath.mpf(float(SCORES[j])) if j < len(SCORES) else mpmath.mpf(far)
        rho = mpmath.mpf(r)
        width = mpmath.sqrt(1 - rho * rho)

        def density(x: mpmath.mpf) -> mpmath.mpf:
            a, b = (bottom - rho * x) / width, (top - rho * x) / width
            # The difference on the side of the smaller tail, as erfc keeps its digits there.
            if a > 0:
                inside = mpmath.erfc(a / mpmath.sqrt(2)) - mpmath.erfc(b / mpmath.sqrt(2))
            else:
                inside = mpmath.erfc(-b / mpmath.sqrt(2)) - mpmath.erfc(-a / mpmath.sqrt(2))
            return mpmath.npdf(x) * inside / 2

        # Cut where the mass lies: at the ends of the cell's projection and around the peak.
        cuts = {low, high}
        for y in (bottom, top):
            for k in (-8, -4, -2, 0, 2, 4, 8):
                for middle in (y * rho, y / rho if rho else y):
                    cuts.add(min(max(middle + k * width, low), high))
        for k in (-8, -2, 2, 8):
            cuts.add(min(max(mpmath.mpf(k), low), high))
        return mpmath.quad(density, sorted(cuts), method="gauss-legendre", maxdegree=4)


@pytest.mark.parametrize("r", [-0.97, 0.3, 0.9, 0.99])
def test_cells_agree_with_quadrature_at_50_digits_down_to_1e_30(r: float) -> None:
    cells = normal_cells(LEFT, SCORES, r)
    n_checked = 0
    for i, j in CELLS:
        exact = float(exact_cell(i, j, r))
        if exact > 1e-30:
            assert cells[i, j] == pytest.approx(exact, rel=1e-6, abs=0), (i, j)
            n_checked += 1
    assert n_checked >= 4


@pytest.mark.parametrize("r", [-0.95, -0.4, 0.2, 0.8, 0.98])
def test_cells_above_1e_4_agree_with_scipy(r: float) -> None:
    scores = np.array([-2.0, -1.0, -0.3, 0.4, 1.1, 2.5])
    cells = normal_cells(scores, scores, r)
    ends = np.concatenate([[-40.0], scores, [40.0]])
    for i in range(7):
        for j in range(7):
            wanted = multivariate_normal.cdf(
                [ends[i + 1], ends[j + 1]],
                cov=[[1, r], [r, 1]],
                lower_limit=[ends[i], ends[j]],
                abseps=1e-9,
                releps=1e-9,
            )
            if wanted > 1e-4:
                assert cells[i, j] == pytest.approx(wanted, rel=1e-5, abs=0), (i, j)


@given(SEEDS, st.floats(-0.999, 0.999))
@settings(max_examples=20)
def test_cells_sum_to_the_normal_marginals(seed: int, r: float) -> None:
    rng = np.random.default_rng(seed)
    left, right = (np.sort(rng.normal(0, 2, n)) for n in rng.integers(1, 12, 2))
    cells = normal_cells(left, right, r)
    for axis, scores in ((1, left), (0, right)):
        wanted = np.diff(np.concatenate([[0], norm.cdf(scores), [1]]))
        np.testing.assert_allclose(cells.sum(axis=axis), wanted, atol=1e-9)


def test_no_correlation_is_a_product() -> None:
    cells = normal_cells(SCORES, SCORES[2:7], 0.0)
    one = np.diff(np.concatenate([[0], norm.cdf(SCORES), [1]]))
    other = np.diff(np.concatenate([[0], norm.cdf(SCORES[2:7]), [1]]))
    # norm.cdf itself keeps few digits in the upper tail; compare where it has them.
    np.testing.assert_allclose(cells[:8], np.outer(one, other)[:8], rtol=1e-9)


def test_swapping_the_channels_transposes_and_turning_one_mirrors() -> None:
    cells = normal_cells(SCORES, SCORES[1:6], 0.83)
    big = cells > 1e-30
    swapped = normal_cells(SCORES[1:6], SCORES, 0.83).T
    turned = normal_cells(-SCORES[::-1], SCORES[1:6], -0.83)[::-1]
    np.testing.assert_allclose(swapped[big], cells[big], rtol=1e-6)
    np.testing.assert_allclose(turned[big], cells[big], rtol=1e-9)


@pytest.mark.parametrize("r", [-1.0, 1.0, 0.99999, -5.0])
def test_correlations_at_and_beyond_the_limit_are_held_back(r: float) -> None:
    limit = math.copysign(MAX_CORRELATION, r)
    np.testing.assert_array_equal(
        normal_cells(SCORES, SCORES, r), normal_cells(SCORES, SCORES, limit)
    )


@pytest.mark.parametrize("r", [0.0, 0.9, -MAX_CORRELATION])
def test_every_cell_has_a_finite_logarithm(r: float) -> None:
    far = np.array([-14.0, -8.0, 0.0, 8.0, 14.0, 30.0])
    cells = normal_cells(far, far, r)
    assert cells.min() >= TINY
    assert cells.sum() == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize("shape", [(0, 0), (0, 3), (2, 0)])
def test_a_channel_without_borders_is_one_cell(shape: tuple[int, int]) -> None:
    cells = normal_cells(SCORES[: shape[0]], SCORES[: shape[1]], 0.5)
    assert cells.shape == (shape[0] + 1, shape[1] + 1)
    assert cells.sum() == pytest.approx(1.0, abs=1e-9)
