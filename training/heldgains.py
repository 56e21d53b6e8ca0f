"""What one pair's table gains on folds of time that it did not see.

The measure that edges are weighed by, and bins, masses and shares chosen by.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from training.shapes import pair_shape
from training.tables import shaped_joint

Floats = NDArray[np.float64]

# Sweeps of raking while tables are compared: what is left to rake then is far below the
# differences between choices.
ROUGH_SWEEPS = 6


@njit(cache=True, nogil=True)
def held_out_shapes(
    counts: Floats,
    left: Floats,
    right: Floats,
    left_scores: Floats,
    right_scores: Floats,
    given: float = np.nan,
) -> Floats:
    """Return the shape of one pair's table made without each fold, (n_folds, n, m)."""
    n_folds, n, m = counts.shape
    shapes = np.empty((n_folds, n, m))
    seen = np.empty((n, m))
    for f in range(n_folds):
        _but_fold(counts, f, seen)
        shape = pair_shape(seen, left, right, left_scores, right_scores, given)
        for i in range(n):
            for j in range(m):
                shapes[f, i, j] = shape[i, j]
    return shapes


# Plain loops here and below: array expressions compile ten times as long, and whoever learns
# for the first time waits for that.
@njit(cache=True, nogil=True)
def _but_fold(counts: Floats, fold: int, seen: Floats) -> None:
    """Fill seen (n, m) with the counts of all folds but one; -1 leaves out none."""
    n_folds, n, m = counts.shape
    for i in range(n):
        for j in range(m):
            total = 0.0
            for f in range(n_folds):
                if f != fold:
                    total += counts[f, i, j]
            seen[i, j] = total


@njit(cache=True, nogil=True)
def gathered(counts: NDArray[Any], pair: int, n: int, m: int) -> Floats:
    """Return one pair's counts, (n_folds, n, m), from (n_folds, n_pairs, width, width)."""
    cells = np.empty((counts.shape[0], n, m))
    for f in range(counts.shape[0]):
        for i in range(n):
            for j in range(m):
                cells[f, i, j] = counts[f, pair, i, j]
    return cells


@njit(cache=True, nogil=True)
def best_mass(gains: Floats) -> int:
    """Return which mass gains most over all folds under the first share."""
    best, most = 0, -np.inf
    for k in range(gains.shape[1]):
        total = 0.0
        for f in range(gains.shape[0]):
            total += gains[f, k, 0]
        if total > most:
            best, most = k, total
    return best


@njit(cache=True, nogil=True)
def held_out_gains(
    counts: Floats, shapes: Floats, left: Floats, right: Floats, masses: Floats, shares: Floats
) -> Floats:
    """Return what one pair's table gains on folds that it did not see, in nats.

    counts: (n_folds, n, m) records per cell; shapes: as held_out_shapes gives them.
    Tables are made from the other folds, for each weight of the shape and each share.
    Returns (n_folds, n_masses, n_shares), sums over the fold's records of
    ln(joint / (left * right)).
    """
    n_folds, n, m = counts.shape
    seen, shape = np.empty((n, m)), np.empty((n, m))
    gains = np.zeros((n_folds, masses.shape[0], shares.shape[0]))
    for f in range(n_folds):
        _but_fold(counts, f, seen)
        for i in range(n):
            for j in range(m):
                shape[i, j] = shapes[f, i, j]
        for k in range(masses.shape[0]):
            joint = shaped_joint(seen, shape, masses[k], 0.0, left, right, ROUGH_SWEEPS)
            for i in range(n):
                for j in range(m):
                    if counts[f, i, j] > 0.0:
                        ratio = joint[i, j] / (left[i] * right[j])
                        for s in range(shares.shape[0]):
                            gains[f, k, s] += counts[f, i, j] * math.log(
                                (1.0 - shares[s]) * ratio + shares[s]
                            )
    return gains
