"""The shape of a pair's table: the normal copula with the pair's own correlation."""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from training.copula import normal_cells

Floats = NDArray[np.float64]


@njit(cache=True, nogil=True)
def score_correlation(counts: Floats, left: Floats, right: Floats) -> float:
    """Return the correlation of two channels' normal scores from their counts per cell.

    left, right: mean normal score of each bin. 0 where a channel does not move.
    """
    n = sx = sy = sxx = syy = sxy = 0.0
    for i in range(counts.shape[0]):
        for j in range(counts.shape[1]):
            c = counts[i, j]
            n += c
            sx += c * left[i]
            sy += c * right[j]
            sxx += c * left[i] * left[i]
            syy += c * right[j] * right[j]
            sxy += c * left[i] * right[j]
    if n < 3.0:
        return 0.0
    vx, vy = sxx - sx * sx / n, syy - sy * sy / n
    if vx <= 1e-12 * n or vy <= 1e-12 * n:
        return 0.0
    # A few records say little: shrunk as by two more that agree with independence.
    return (sxy - sx * sy / n) / math.sqrt(vx * vy) * n / (n + 2.0)


@njit(cache=True, nogil=True)
def bin_scores(scores: Floats, marginal: Floats) -> Floats:
    """Return the mean normal score of each bin, (n_bins,), from its borders' scores."""
    n = scores.shape[0] + 1
    out = np.empty(n)
    for b in range(n):
        low = math.exp(-0.5 * scores[b - 1] ** 2) if b > 0 else 0.0
        high = math.exp(-0.5 * scores[b] ** 2) if b < n - 1 else 0.0
        mean = (low - high) / math.sqrt(2.0 * math.pi) / max(marginal[b], 1e-300)
        # Beyond the range the marginal need not be the normal's: keep inside the borders.
        if b > 0:
            mean = max(mean, scores[b - 1])
        if b < n - 1:
            mean = min(mean, scores[b])
        out[b] = mean
    return out


@njit(cache=True, nogil=True)
def pair_shape(
    counts: Floats,
    left: Floats,
    right: Floats,
    left_scores: Floats,
    right_scores: Floats,
    given: float = np.nan,
) -> Floats:
    """Return the shape of one pair's table: the normal copula with the counts' correlation.

    given: a correlation that the fleet has settled, NaN to take the counts' own.

    counts: (n, m). left, right: marginals. *_scores: borders' normal scores, empty for a
    state, whose shape is the product of the marginals.
    """
    n, m = counts.shape
    if left_scores.shape[0] + 1 != n or right_scores.shape[0] + 1 != m:
        shape = np.empty((n, m))
        for i in range(n):
            for j in range(m):
                shape[i, j] = left[i] * right[j]
        return shape
    r = given
    if r != r:
        left_means, right_means = bin_scores(left_scores, left), bin_scores(right_scores, right)
        r = score_correlation(counts, left_means, right_means)
    return normal_cells(left_scores, right_scores, r)
