"""Pairs counted over rows: by fold or not, on merged bins, of one regime, in one reading."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest
from numpy.typing import NDArray

from scoring.bins import Bins, BinTable
from tests.spools import measurements, spool_of, times
from training.blocks import N_FOLDS
from training.reader import PairReader, Wanted
from training.rows import Chunk, Rows

BORDERS = np.array([-1.0, 0.0, 1.0])
FOLDS = tuple(range(N_FOLDS))
LEFT, RIGHT = np.array([0, 1]), np.array([1, 2])
SAME = [np.arange(4, dtype=np.uint8)] * 3
HALVES = [np.array([0, 0, 1, 1], dtype=np.uint8)] * 3


def values() -> NDArray[np.float64]:
    """Return 900 records of three channels, some readings missing."""
    rng = np.random.default_rng(1)
    found = rng.normal(size=(900, 3))
    found[rng.random(found.shape) < 0.1] = np.nan
    return found


@pytest.fixture(scope="module")
def rows() -> Iterator[Rows]:
    """Return their rows."""
    with spool_of({"a": values()}) as spool:
        yield Rows(spool, measurements(3), ("a",), 60.0)


def reader(rows: Rows, folds: tuple[int, ...] = FOLDS, regime: tuple[int, ...] = ()) -> PairReader:
    """Return a reader on four bins a channel."""
    return PairReader(rows, folds, BinTable.of((Bins(BORDERS),) * 3), regime)


def counted(records: NDArray[np.float64], a: int, b: int) -> NDArray[np.int64]:
    """Return the counts of one pair, a record at a time."""
    out = np.zeros((4, 4), dtype=np.int64)
    for row in records:
        if not np.isnan(row[[a, b]]).any():
            out[tuple(np.searchsorted(BORDERS, row[[a, b]], side="right"))] += 1
    return out


def test_every_fold_is_counted_on_its_own(rows: Rows) -> None:
    ((counts, n_records),) = reader(rows, (0, 3)).count([Wanted(SAME, LEFT, RIGHT, 4)])
    fold = rows.blocks("a").fold(times(900))
    assert n_records == np.isin(fold, (0, 3)).sum()
    assert counts.shape == (2, 2, 5, 5)
    for f, number in enumerate((0, 3)):
        for p, (a, b) in enumerate(zip(LEFT, RIGHT, strict=True)):
            wanted = counted(values()[fold == number], a, b)
            np.testing.assert_array_equal(counts[f, p, :4, :4], wanted)


def test_folds_together_are_their_sum(rows: Rows) -> None:
    wanted = Wanted(SAME, LEFT, RIGHT, 4)
    ((apart, n_apart),) = reader(rows).count([wanted])
    ((together, n_together),) = reader(rows).count([wanted], by_fold=False)
    np.testing.assert_array_equal(together[0], apart.sum(axis=0))
    assert n_together == n_apart == 900


def test_fine_bins_are_counted_as_the_bins_that_hold_them(rows: Rows) -> None:
    asked = [Wanted(SAME, LEFT, RIGHT, 4), Wanted(HALVES, LEFT, RIGHT, 2)]
    (fine, _), (merged, _) = reader(rows).count(asked, by_fold=False)
    sums = fine[0, :, :4, :4].reshape(2, 2, 2, 2, 2).sum(axis=(2, 4))
    np.testing.assert_array_equal(merged[0, :, :2, :2], sums)


def test_regimes_are_counted_in_one_reading(rows: Rows, monkeypatch: pytest.MonkeyPatch) -> None:
    readings = []
    chunks = Rows.chunks

    def counting(self: Rows) -> Iterator[Chunk]:
        readings.append(1)
        return chunks(self)

    monkeypatch.setattr(Rows, "chunks", counting)
    asked = [Wanted(SAME, LEFT, RIGHT, 4, (k,)) for k in range(4)]
    found = reader(rows, regime=(2,)).count(asked, by_fold=False)
    assert len(readings) == 1
    bins = np.searchsorted(BORDERS, values()[:, 2], side="right")
    for k, (counts, n_records) in enumerate(found):
        holds = (bins == k) & ~np.isnan(values()[:, 2])
        assert n_records == holds.sum()
        np.testing.assert_array_equal(counts[0, 0, :4, :4], counted(values()[holds], 0, 1))


def test_stretches_left_out_are_not_counted(rows: Rows) -> None:
    at = times(900)
    out = Rows(rows.spool, rows.table, ("a",), 60.0, {"a": np.array([[at[100], at[199]]])})
    ((counts, n_records),) = reader(out).count([Wanted(SAME, LEFT, RIGHT, 4)], by_fold=False)
    assert n_records == 800
    kept = np.delete(values(), np.s_[100:200], axis=0)
    np.testing.assert_array_equal(counts[0, 0, :4, :4], counted(kept, 0, 1))
