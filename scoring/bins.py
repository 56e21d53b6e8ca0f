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


# A reading's place on an even grid over the middle borders says how many borders lie below its
# cell; so many at the most are left to compare. Measured on 71 borders: 2.4 ns a reading,
# against 3.7 ns by groups alone and 27 ns for a binary search.
N_CELLS, MOST_LEFT = 256, 4
# The rest, outside the grid and where borders crowd, is searched in groups of so many: one pass
# over the groups' last borders, one inside the group. All passes are plain counts that the
# compiler turns into vector code.
GROUP = 8
_BY_GROUPS = 255
# Puts any reading, however far out, into the first cell or an outer one.
NO_GRID = (0.0, 1e-300)
# Below this many readings, about 5 ms on one core, waking the other cores costs more than it saves.
FEW = 1 << 20


@dataclass(frozen=True, slots=True)
class BinTable:
    """The bins of all nodes, laid out for the kernel.

    borders: (n_nodes, width), each row filled up with NaN, which no reading reaches.
    lasts: (n_nodes, width / GROUP), the last border of each group.
    grid: (n_nodes, 2), the grid's lower end and cells per unit.
    cells: (n_nodes, N_CELLS + 2), borders below each cell, or _BY_GROUPS; the outer two stand
        for what lies outside of the grid.
    n_words: (n_nodes,), 0 for a measurement.
    """

    borders: Floats
    lasts: Floats
    grid: Floats
    cells: BinRows
    n_words: NDArray[np.int64]

    @classmethod
    def of(cls, bins: tuple[Bins, ...]) -> BinTable:
        """Lay out the bins of all nodes; raises ValueError over MAX_BINS."""
        most = max(b.n_bins for b in bins)
        if most > MAX_BINS:
            raise ValueError(f"{most} bins in one channel; at most {MAX_BINS}")
        width = GROUP * (1 + max(len(b.borders) for b in bins) // GROUP)
        # Comparing the last few of a cell may look past a row's own borders.
        borders = np.full((len(bins), width + GROUP), np.nan)
        grid = np.zeros((len(bins), 2))
        cells = np.full((len(bins), N_CELLS + 2), _BY_GROUPS, dtype=np.uint8)
        for node, b in enumerate(bins):
            borders[node, : len(b.borders)] = b.borders
            grid[node], cells[node] = _grid_of(b.borders)
        n_words = np.array([b.n_words for b in bins], dtype=np.int64)
        lasts = np.ascontiguousarray(borders[:, GROUP - 1 : width : GROUP])
        return cls(borders, lasts, grid, cells, n_words)

    @property
    def _laid_out(self) -> tuple[Floats, Floats, Floats, BinRows, NDArray[np.int64]]:
        return self.borders, self.lasts, self.grid, self.cells, self.n_words

    def rows(self, values: Floats) -> BinRows:
        """Return (n, n_nodes) uint8 bin numbers of (n, n_nodes) readings, NaN = missing."""
        rows = np.empty(values.shape, dtype=np.uint8)
        fill_rows(values, *self._laid_out, rows)
        return rows

    def columns(self, values: Floats) -> BinRows:
        """Return the same as `rows`, as (n_nodes, n) columns, on all cores; offline."""
        if values.size < FEW:
            return np.ascontiguousarray(self.rows(values).T)
        return bin_columns(values, *self._laid_out)


def _grid_of(borders: Floats) -> tuple[tuple[float, float], BinRows]:
    """Return a node's row of `grid` and of `cells`; see BinTable."""
    cells = np.full(N_CELLS + 2, _BY_GROUPS, dtype=np.uint8)
    n = len(borders)
    if n <= MOST_LEFT:
        cells[:] = 0
        return NO_GRID, cells
    # Beyond the range borders lie far apart; the grid is for where most readings are.
    low, high = float(borders[n // 10]), float(borders[n - 1 - n // 10])
    per_unit = N_CELLS / (high - low)
    if not np.isfinite(per_unit):
        return NO_GRID, cells
    edges = low + np.arange(N_CELLS + 1) / per_unit
    # A grain on either side, since a reading's cell is known but to rounding.
    grain = 1e-6 / per_unit
    below = np.searchsorted(borders, edges[:-1] - grain, side="right")
    left = np.searchsorted(borders, edges[1:] + grain, side="right") - below
    cells[1:-1] = np.where(left <= MOST_LEFT, below, _BY_GROUPS)
    return (low, per_unit), cells


# Rows that are binned node by node: cutting a node's part out of the arrays costs some ten
# nanoseconds each, which for single readings would be more than binning them.
STRIP = 256


@njit(cache=True, nogil=True)
def _bin_node(
    values: Floats,
    n_words: int,
    borders: Floats,
    lasts: Floats,
    grid: Floats,
    cells: BinRows,
    out: BinRows,
) -> None:
    """Fill out (n,) with the bins of one node's readings; a border belongs to the bin above.

    values: (n,), NaN = missing. borders, lasts, grid, cells: the node's rows of BinTable.
    """
    low, per_unit = grid[0], grid[1]
    for r in range(values.shape[0]):
        value = values[r]
        if value != value:
            out[r] = MISSING
            continue
        if n_words > 0:
            out[r] = min(max(int(value), 0), n_words)
            continue
        place = min(max((value - low) * per_unit + 1.0, 0.0), N_CELLS + 1.0)
        number = np.uint64(cells[np.uint64(place)])
        if number != np.uint64(_BY_GROUPS):
            first = number
            for k in range(np.uint64(MOST_LEFT)):
                number += np.uint64(value >= borders[first + k])
            out[r] = number
            continue
        number = np.uint64(0)
        for k in range(np.uint64(lasts.shape[0])):
            number += np.uint64(value >= lasts[k])
        first = number * np.uint64(GROUP)
        number = first
        for k in range(np.uint64(GROUP)):
            number += np.uint64(value >= borders[first + k])
        out[r] = number


@njit(cache=True, nogil=True)
def fill_rows(
    values: Floats,
    borders: Floats,
    lasts: Floats,
    grid: Floats,
    cells: BinRows,
    n_words: NDArray[np.int64],
    rows: BinRows,
) -> None:
    """Fill rows (n, n_nodes) with the bin numbers of rows of readings.

    values: (n, n_nodes), NaN = missing; a state holds the number of its word.
    borders, lasts, grid, cells, n_words: see BinTable.
    """
    n, n_nodes = values.shape
    for first in range(0, n, STRIP):
        use = slice(first, min(first + STRIP, n))
        for i in range(n_nodes):
            _bin_node(
                values[use, i], n_words[i], borders[i], lasts[i], grid[i], cells[i], rows[use, i]
            )


@njit(cache=True, parallel=True)
def bin_columns(
    values: Floats,
    borders: Floats,
    lasts: Floats,
    grid: Floats,
    cells: BinRows,
    n_words: NDArray[np.int64],
) -> BinRows:
    """Return bin numbers as columns, (n_nodes, n) uint8, on all cores; for offline use."""
    n, n_nodes = values.shape
    columns = np.empty((n_nodes, n), dtype=np.uint8)
    for i in prange(n_nodes):
        _bin_node(values[:, i], n_words[i], borders[i], lasts[i], grid[i], cells[i], columns[i])
    return columns
