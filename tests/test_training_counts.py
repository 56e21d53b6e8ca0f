"""Counting pairs: against a plain loop, over any split, past 32 bits."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.strategies import SEEDS, SOME
from training.counts import STRIP, count_pairs

Columns = NDArray[np.uint8]


def slow_counts(columns: Columns, left: list[int], right: list[int], width: int) -> list[object]:
    """Return the joint counts of pairs of columns: the twin."""
    counts = [[[0] * width for _ in range(width)] for _ in left]
    for p, (a, b) in enumerate(zip(left, right, strict=True)):
        for x, y in zip(columns[a].tolist(), columns[b].tolist(), strict=True):
            counts[p][x][y] += 1
    return list(counts)


def count(columns: Columns, left: list[int], right: list[int], width: int) -> NDArray[np.int64]:
    """Return counts from nothing."""
    counts = np.zeros((len(left), width, width), dtype=np.int64)
    count_pairs(columns, np.array(left), np.array(right), width, counts)
    return counts


@SOME
@given(SEEDS, st.integers(0, 70), st.integers(1, 6))
def test_counts_equal_a_plain_loop(seed: int, n: int, width: int) -> None:
    rng = np.random.default_rng(seed)
    columns = rng.integers(0, width, (4, n), dtype=np.uint8)
    left, right = [0, 0, 2, 3, 1], [1, 3, 1, 3, 0]
    assert count(columns, left, right, width).tolist() == slow_counts(columns, left, right, width)


@pytest.mark.parametrize("n", [STRIP - 1, STRIP, STRIP + 3, 2 * STRIP + 2])
def test_strips_leave_no_record_out(n: int) -> None:
    rng = np.random.default_rng(n)
    columns = rng.integers(0, 16, (2, n), dtype=np.uint8)
    wanted = np.bincount(columns[0].astype(int) * 16 + columns[1], minlength=256).reshape(16, 16)
    np.testing.assert_array_equal(count(columns, [0], [1], 16)[0], wanted)


@SOME
@given(SEEDS, st.integers(0, 60))
def test_counts_add_up_over_any_split(seed: int, cut: int) -> None:
    rng = np.random.default_rng(seed)
    columns = rng.integers(0, 3, (3, 60), dtype=np.uint8)
    counts = np.zeros((2, 3, 3), dtype=np.int64)
    for part in (columns[:, :cut], columns[:, cut:]):
        count_pairs(np.ascontiguousarray(part), np.array([0, 1]), np.array([2, 0]), 3, counts)
    np.testing.assert_array_equal(counts, count(columns, [0, 1], [2, 0], 3))


def test_counts_go_on_beyond_32_bits() -> None:
    columns = np.zeros((2, 1000), dtype=np.uint8)
    counts = np.full((1, 2, 2), 2**31 - 500, dtype=np.int64)
    for _ in range(3):
        count_pairs(columns, np.array([0]), np.array([1]), 2, counts)
    assert counts[0, 0, 0] == 2**31 + 2500
    assert counts[0, 1, 1] == 2**31 - 500
