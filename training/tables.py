"""From counts to a joint table: shaped, raked to both marginals, with an independent share.

joint ~ (counts + mass * shape) / (n + mass), raked by iterative proportional fitting
(Deming & Stephan 1940, Ann. Math. Stat. 11(4), 427-444) to the two channels' one
marginal each, then mixed with a small independent share.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# Raking stops when every row sum agrees with its marginal to this relative error ...
RAKE_ERROR = 1e-13
# ... or after this many sweeps; shaped tables need about ten.
MAX_SWEEPS = 500


@njit(cache=True, nogil=True)
def rake(joint: Floats, left: Floats, right: Floats, most: int = MAX_SWEEPS) -> int:
    """Scale `joint` in place until its sums are the marginals `left` and `right`.

    joint: (n, m) positive. left: (n,), right: (m,) positive, each summing to 1.
    most: sweeps at the most. Returns the number of sweeps.
    """
    n, m = joint.shape
    column = np.empty(m)
    for sweep in range(most):
        column[:] = 0.0
        worst = 0.0
        for i in range(n):
            total = 0.0
            for j in range(m):
                total += joint[i, j]
            factor = left[i] / total
            worst = max(worst, abs(factor - 1.0))
            for j in range(m):
                joint[i, j] *= factor
                column[j] += joint[i, j]
        for j in range(m):
            column[j] = right[j] / column[j]
        for i in range(n):
            for j in range(m):
                joint[i, j] *= column[j]
        if worst < RAKE_ERROR:
            return sweep + 1
    return most


@njit(cache=True, nogil=True)
def shaped_joint(
    counts: Floats,
    shape: Floats,
    mass: float,
    share: float,
    left: Floats,
    right: Floats,
    most: int = MAX_SWEEPS,
) -> Floats:
    """Return the joint table of one pair, (n, m), with the given marginals.

    counts: (n, m) records per cell. shape: (n, m) summing to about 1, positive.
    mass: weight of the shape in records. share: independent share, 0 to 1. most: sweeps
        of raking at the most.
    """
    n, m = counts.shape
    joint = np.empty((n, m))
    total = mass
    for i in range(n):
        for j in range(m):
            total += counts[i, j]
    for i in range(n):
        for j in range(m):
            # The floor keeps a cell that underflowed from turning the raking into 0 / 0.
            joint[i, j] = max((counts[i, j] + mass * shape[i, j]) / total, 1e-300)
    rake(joint, left, right, most)
    for i in range(n):
        total = 0.0
        for j in range(m):
            total += joint[i, j]
        # A pair that goes together almost without exception rakes slowly. What its rows still
        # lack is as good as independent, and far below the share: columns stay as they are.
        lacks = left[i] - total
        if abs(lacks) > 0.1 * share * left[i]:
            lacks = 0.0
        for j in range(m):
            joint[i, j] = (1.0 - share) * (joint[i, j] + lacks * right[j]) + (
                share * left[i] * right[j]
            )
    return joint


@njit(cache=True, nogil=True)
def log_ratio(joint: Floats, left: Floats, right: Floats) -> Floats:
    """Return ln(joint / (left * right)), (n, m) nats."""
    out = np.empty(joint.shape)
    for i in range(joint.shape[0]):
        for j in range(joint.shape[1]):
            out[i, j] = math.log(joint[i, j]) - math.log(left[i]) - math.log(right[j])
    return out


@njit(cache=True, nogil=True)
def mutual_information(joint: Floats, left: Floats, right: Floats) -> float:
    """Return the mutual information of a joint table with these marginals, nats; 0 ln 0 = 0."""
    total = 0.0
    for i in range(joint.shape[0]):
        for j in range(joint.shape[1]):
            if joint[i, j] > 0.0:
                total += joint[i, j] * (
                    math.log(joint[i, j]) - math.log(left[i]) - math.log(right[j])
                )
    return total
