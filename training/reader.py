"""Counts of pairs of bins over the records of some rows, all that is wanted in one reading."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scoring.bins import MISSING, BinTable
from training.counts import count_pairs
from training.hands import Counted
from training.rows import Rows

Ints = NDArray[np.int64]

# Bins wait until so many are together: a regime's share of a chunk may be a few rows, and
# opening the tables of 125,000 pairs for them takes longer than counting.
MAX_WAITING_BYTES = 32 * 1024 * 1024


@dataclass(frozen=True)
class Wanted:
    """Counts of pairs: of which records, and on which bins.

    into: for each node the bin that each fine bin is counted as. left, right: (n_pairs,)
    nodes. width: the number that stands for a missing reading; its row and column in the
    counts are not used. key: bins of the regime's nodes that records must have, () for all.
    """

    into: list[NDArray[np.uint8]]
    left: Ints
    right: Ints
    width: int
    key: tuple[int, ...] = ()

    def lookup(self) -> NDArray[np.uint8]:
        """Return (n_nodes, MISSING + 1) what each bin number is counted as."""
        lookup = np.full((len(self.into), MISSING + 1), self.width, dtype=np.uint8)
        for k, target in enumerate(self.into):
            lookup[k, : len(target)] = target
        return lookup


@dataclass(frozen=True)
class PairReader:
    """Counts pairs of bins over some rows and the given folds; regime: nodes that keys are of."""

    rows: Rows
    folds: tuple[int, ...]
    bin_table: BinTable
    regime: tuple[int, ...] = ()

    def count(self, wanted: list[Wanted], by_fold: bool = True) -> Counted:
        """Read the records once; return for each wanted its counts and number of records.

        counts: (n_folds, n_pairs, width + 1, width + 1), one for all folds together unless
        by_fold. Where others have a hand in it, they count parts, and the parts are added.
        """
        readers = [replace(self, rows=part) for part in self.rows.parts()]
        return self.rows.hands.total(partial(_count, wanted=wanted, by_fold=by_fold), readers)

    def count_here(self, wanted: list[Wanted], by_fold: bool) -> Counted:
        """Count as `count` does, in this process."""
        groups = [(fold,) for fold in self.folds] if by_fold else [self.folds]
        lookups = [one.lookup() for one in wanted]
        shapes = [(len(groups), len(o.left), o.width + 1, o.width + 1) for o in wanted]
        counts = [np.zeros(shape, dtype=np.int64) for shape in shapes]
        n_records = [0] * len(wanted)
        waiting = _Waiting(wanted, counts)
        for chunk in self.rows.chunks():
            columns = self.bin_table.columns(chunk.values)
            for k, one in enumerate(wanted):
                keep = chunk.kept.copy()
                for node, bin_number in zip(self.regime if one.key else (), one.key, strict=True):
                    keep &= columns[node] == bin_number
                for g, group in enumerate(groups):
                    use = np.flatnonzero(keep & np.isin(chunk.fold, group))
                    if len(use):
                        waiting.add(k, g, _looked_up(lookups[k], columns, use))
                        n_records[k] += len(use)
        waiting.count()
        return list(zip(counts, n_records, strict=True))


def _count(reader: PairReader, wanted: list[Wanted], by_fold: bool) -> Counted:
    return reader.count_here(wanted, by_fold)


class _Waiting:
    """Columns that wait to be counted, so that each pair's table is opened for many rows."""

    def __init__(self, wanted: list[Wanted], counts: list[NDArray[np.int64]]) -> None:
        self._wanted, self._counts = wanted, counts
        self._parts: dict[tuple[int, int], list[NDArray[np.uint8]]] = {}
        self._n_bytes = 0

    def add(self, k: int, g: int, columns: NDArray[np.uint8]) -> None:
        """Take (n_nodes, n) bins for group g of the k-th wanted."""
        self._parts.setdefault((k, g), []).append(columns)
        self._n_bytes += columns.nbytes
        if self._n_bytes > MAX_WAITING_BYTES:
            self.count()

    def count(self) -> None:
        """Count what waits."""
        for (k, g), parts in self._parts.items():
            one, columns = self._wanted[k], np.concatenate(parts, axis=1)
            count_pairs(columns, one.left, one.right, one.width + 1, self._counts[k][g])
        self._parts, self._n_bytes = {}, 0


@njit(cache=True, nogil=True)
def _looked_up(
    lookup: NDArray[np.uint8], columns: NDArray[np.uint8], use: Ints
) -> NDArray[np.uint8]:
    out = np.empty((columns.shape[0], use.shape[0]), dtype=np.uint8)
    for k in range(columns.shape[0]):
        for r in range(use.shape[0]):
            out[k, r] = lookup[k, columns[k, use[r]]]
    return out
