"""Discretised channels: where the borders of each bin lie, and the binning kernel.

A measurement's bins are the intervals between rising borders; the first and the
last are open. A state has one bin a word and a last one for a word never seen.
Bin numbers are uint8 and `MISSING` marks a reading that is not there.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

Floats = NDArray[np.float64]
BinRows = NDArray[np.uint8]

# The number that stands for "no reading" in rows of bins.
MISSING = 255
# One number is taken by MISSING, so this many bins at the most.
MAX_BINS = 250


@dataclass(frozen=True, slots=True)
class Bins:
    """The bins of one node.

    borders: (n_borders,), strictly rising, in the channel's unit; empty for a state.
    n_words: number of words of a state, 0 for a measurement.
    """

    borders: Floats
    n_words: int = 0

    @property
    def n_bins(self) -> int:
        """How many bins there are, the open ones and the never-seen word included."""
        return self.n_words + 1 if self.n_words else len(self.borders) + 1

    def interval(self, number: int) -> tuple[float, float]:
        """Return low and high border of one bin; infinite on an open side."""
        low = self.borders[number - 1] if number > 0 else -math.inf
        high = self.borders[number] if number < len(self.borders) else math.inf
        return float(low), float(high)


# Borders are searched in groups of this many: one pass over the groups' last borders, one
# inside the group. Both passes are plain counts that the compiler turns into vector code,
# which measured 6 ns a reading against 27 ns for a binary search on 60 borders.
GROUP = 8
# Below this many readings, about 5 ms on one core, waking the other cores costs more than it saves.
FEW = 1 << 20


@dataclass(frozen=True, slots=True)
class BinTable:
    """The bins of all nodes, laid out for the kernel.

    borders: (n_nodes, width), each row filled up with NaN, which no reading reaches.
    lasts: (n_nodes, width / GROUP), the last border of each group.
    n_words: (n_nodes,), 0 for a measurement.
    """

    borders: Floats
    lasts: Floats
    n_words: NDArray[np.int64]

    @classmethod
    def of(cls, bins: tuple[Bins, ...]) -> BinTable:
        """Lay out the bins of all nodes; raises ValueError over MAX_BINS."""
        most = max(b.n_bins for b in bins)
        if most > MAX_BINS:
            raise ValueError(f"{most} bins in one channel; at most {MAX_BINS}")
        width = GROUP * (1 + max(len(b.borders) for b in bins) // GROUP)
        borders = np.full((len(bins), width), np.nan)
        for node, b in enumerate(bins):
            borders[node, : len(b.borders)] = b.borders
        n_words = np.array([b.n_words for b in bins], dtype=np.int64)
        return cls(borders, np.ascontiguousarray(borders[:, GROUP - 1 :: GROUP]), n_words)

    def rows(self, values: Floats) -> BinRows:
        """Return (n, n_nodes) uint8 bin numbers of (n, n_nodes) readings, NaN = missing."""
        return bin_rows(values, self.borders, self.lasts, self.n_words)

    def columns(self, values: Floats) -> BinRows:
        """Return the same as `rows`, as (n_nodes, n) columns, on all cores; offline."""
        if values.size < FEW:
            return np.ascontiguousarray(self.rows(values).T)
        return bin_columns(values, self.borders, self.lasts, self.n_words)


# Flat borders and unsigned offsets: a slice a reading costs a reference count, which measured
# 11 ns a reading against 6 ns.
@njit(cache=True, nogil=True, inline="always")
def _bin_of(
    value: float,
    node: int,
    borders: Floats,
    lasts: Floats,
    width: np.uint64,
    n_groups: np.uint64,
) -> np.uint64:
    """Return the bin of a reading that is there; a border belongs to the bin above it."""
    first, number = np.uint64(node) * n_groups, np.uint64(0)
    for k in range(n_groups):
        number += np.uint64(value >= lasts[first + k])
    number *= np.uint64(GROUP)
    first = np.uint64(node) * width + number
    for k in range(np.uint64(GROUP)):
        number += np.uint64(value >= borders[first + k])
    return number


@njit(cache=True, nogil=True)
def _other(value: float, n_words: int) -> int:
    """Return the bin of a missing reading, or of a state's word."""
    if value != value:
        return MISSING
    return min(max(int(value), 0), n_words)


@njit(cache=True, nogil=True)
def bin_rows(values: Floats, borders: Floats, lasts: Floats, n_words: NDArray[np.int64]) -> BinRows:
    """Return the bin numbers of rows of readings.

    values: (n, n_nodes), NaN = missing; a state holds the number of its word.
    borders, lasts, n_words: see BinTable.
    Returns (n, n_nodes) uint8.
    """
    n, n_nodes = values.shape
    width, n_groups = np.uint64(borders.shape[1]), np.uint64(lasts.shape[1])
    flat, ends = borders.reshape(-1), lasts.reshape(-1)
    rows = np.empty((n, n_nodes), dtype=np.uint8)
    for r in range(n):
        for i in range(n_nodes):
            value = values[r, i]
            if value != value or n_words[i] > 0:
                rows[r, i] = _other(value, n_words[i])
            else:
                rows[r, i] = _bin_of(value, i, flat, ends, width, n_groups)
    return rows


@njit(cache=True, parallel=True)
def bin_columns(
    values: Floats, borders: Floats, lasts: Floats, n_words: NDArray[np.int64]
) -> BinRows:
    """Return bin numbers as columns, (n_nodes, n) uint8, on all cores; for offline use."""
    n, n_nodes = values.shape
    width, n_groups = np.uint64(borders.shape[1]), np.uint64(lasts.shape[1])
    flat, ends = borders.reshape(-1), lasts.reshape(-1)
    columns = np.empty((n_nodes, n), dtype=np.uint8)
    for i in prange(n_nodes):
        for r in range(n):
            value = values[r, i]
            if value != value or n_words[i] > 0:
                columns[i, r] = _other(value, n_words[i])
            else:
                columns[i, r] = _bin_of(value, i, flat, ends, width, n_groups)
    return columns
