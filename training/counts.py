"""Counting pairs of bins over uint8 columns: the loop that learning spends its time in.

Counts are additive over any split of the records, so they stream, and they are int64:
the records of a large fleet over a year overflow 32 bits.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from training.threads import in_slices

Columns = NDArray[np.uint8]
Counts = NDArray[np.int64]

# Rows counted into one 32-bit table before it is added up: the table stays in the nearest
# cache and the columns' pieces too.
STRIP = 1 << 15
# Below this many rows times pairs, half a millisecond of counting, threads cost more than
# they save.
FEW = 1 << 20


def count_pairs(
    columns: Columns, left: NDArray[np.int64], right: NDArray[np.int64], width: int, counts: Counts
) -> None:
    """Add the joint counts of pairs of columns to `counts`, on all cores.

    columns: (n_columns, n) bins, each below `width`; a row that lacks either bin must be
        numbered width - 1 or above by the caller (see `training.fit`).
    left, right: (n_pairs,) column numbers. counts: (n_pairs, width, width) int64.
    """
    if columns.shape[1] * len(left) < FEW:
        _count(0, len(left), columns, left, right, width, counts)
    else:
        in_slices(len(left), _count, columns, left, right, width, counts)


@njit(cache=True, nogil=True)
def _count(
    start: int,
    stop: int,
    columns: Columns,
    left: NDArray[np.int64],
    right: NDArray[np.int64],
    width: int,
    counts: Counts,
) -> None:
    n = columns.shape[1]
    # Four tables take turns, so that a run of equal pairs does not wait on one cell.
    local = np.empty((4, width * width), np.int32)
    for p in range(start, stop):
        a, b = columns[left[p]], columns[right[p]]
        local[:] = 0
        for first in range(0, n, STRIP):
            last = min(first + STRIP, n)
            whole = first + (last - first) // 4 * 4
            for r in range(first, whole, 4):
                local[0, np.uint64(a[r]) * np.uint64(width) + np.uint64(b[r])] += 1
                local[1, np.uint64(a[r + 1]) * np.uint64(width) + np.uint64(b[r + 1])] += 1
                local[2, np.uint64(a[r + 2]) * np.uint64(width) + np.uint64(b[r + 2])] += 1
                local[3, np.uint64(a[r + 3]) * np.uint64(width) + np.uint64(b[r + 3])] += 1
            for r in range(whole, last):
                local[0, np.uint64(a[r]) * np.uint64(width) + np.uint64(b[r])] += 1
        for i in range(width):
            for j in range(width):
                k = i * width + j
                counts[p, i, j] += np.int64(local[0, k]) + local[1, k] + local[2, k] + local[3, k]
