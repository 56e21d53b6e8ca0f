"""Work comes back in order, and counts add up to whole numbers whoever adds them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from scoring.bins import BinTable
from tests.each_alone import EachAlone
from tests.learned import fleet_table, pump_records
from tests.spools import spool_of
from training.fit import fit
from training.hands import HERE, Counted, added
from training.reader import PairReader, Wanted
from training.rows import Rows


def counted(*numbers: int) -> Counted:
    """Return two counts."""
    return [(np.array(numbers, dtype=np.int64), len(numbers)), (np.array([[7]]), 1)]


def test_counts_are_added_place_by_place() -> None:
    (first, n), (second, m) = added([counted(1, 2), counted(10, 20), counted(100, 200)])
    assert first.tolist() == [111, 222]
    assert (n, m, second.tolist()) == (6, 3, [[21]])
    assert first.dtype == np.int64


def test_counts_go_beyond_32_bits() -> None:
    ((total, _), _) = added([counted(2**33), counted(2**33)])
    assert total.tolist() == [2**34]


def test_this_process_works_item_by_item_and_in_order() -> None:
    done: list[int] = []

    def work(item: int) -> int:
        done.append(item)
        return item * item

    results = HERE.each(work, [3, 1, 2])
    assert next(results) == 9
    assert done == [3]
    assert list(results) == [1, 4]
    assert HERE.groups([5, 5, 5]) == [[0, 1, 2]]
    ((total, _), _) = HERE.total(counted, [1, 2, 3])
    assert total.tolist() == [6]


@pytest.mark.parametrize("by_fold", [True, False])
def test_counts_and_samples_do_not_depend_on_who_reads_what(tmp_path: Path, by_fold: bool) -> None:
    sources = {name: pump_records(300 + 70 * k, k) for k, name in enumerate("abcd")}
    left_out = {"b": np.array([[1_767_225_600_000_000_000, 1_767_229_200_000_000_000]])}
    with spool_of(sources, folder=tmp_path) as spool:
        plain = Rows(spool, fleet_table(), spool.sources, 60.0, left_out)
        other = Rows(spool, fleet_table(), spool.sources, 60.0, left_out, EachAlone())
        for mine, theirs in zip(plain.sample((0, 2)), other.sample((0, 2)), strict=True):
            assert np.array_equal(mine, theirs, equal_nan=True)
        fine = fit(plain).fine
        table = BinTable.of(tuple(node.bins for node in fine))
        width = max(node.n_bins for node in fine)
        same = [np.arange(node.n_bins, dtype=np.uint8) for node in fine]
        wanted = [Wanted(same, np.array([0, 1]), np.array([1, 4]), width)]
        ((mine, n),) = PairReader(plain, (0, 1, 2), table).count(wanted, by_fold)
        ((theirs, m),) = PairReader(other, (0, 1, 2), table).count(wanted, by_fold)
        assert np.array_equal(mine, theirs)
        assert n == m > 0
        assert mine.sum() > 0
