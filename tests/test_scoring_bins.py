"""Binning: the kernel against a plain search, and what never shares a bin."""

from __future__ import annotations

import math
from bisect import bisect_right

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scoring.bins import GROUP, MAX_BINS, MISSING, Bins, BinTable
from tests.strategies import SOME

BORDERS = st.lists(
    st.floats(-1e6, 1e6, allow_nan=False).map(lambda x: round(x, 3)), max_size=40, unique=True
).map(sorted)
READINGS = st.floats(allow_nan=True, allow_infinity=False)


def slow_bin(value: float, bins: Bins) -> int:
    """Return the bin of one reading: the twin of the kernel."""
    if math.isnan(value):
        return MISSING
    if bins.n_words:
        return min(max(int(value), 0), bins.n_words)
    return bisect_right(bins.borders.tolist(), value)


@SOME
@given(st.lists(BORDERS, min_size=1, max_size=4), st.data())
def test_the_kernel_equals_a_plain_search(borders: list[list[float]], data: st.DataObject) -> None:
    bins = tuple(Bins(np.array(b, dtype=float)) for b in borders)
    # Readings on a border and just beside it are drawn often.
    near = [x for b in borders for x in b] or [0.0]
    reading = st.one_of(
        READINGS,
        st.sampled_from(near),
        st.sampled_from(near).map(lambda x: float(np.nextafter(x, -np.inf))),
    )
    values = np.array(
        data.draw(
            st.lists(
                st.lists(reading, min_size=len(bins), max_size=len(bins)), min_size=1, max_size=6
            )
        )
    )
    table = BinTable.of(bins)
    wanted = [[slow_bin(v, b) for v, b in zip(row, bins, strict=True)] for row in values.tolist()]
    assert table.rows(values).tolist() == wanted
    assert table.columns(values).T.tolist() == wanted


@pytest.mark.parametrize("n_borders", [0, 1, GROUP - 1, GROUP, GROUP + 1, 3 * GROUP, MAX_BINS - 1])
def test_every_count_of_borders_reaches_every_bin(n_borders: int) -> None:
    bins = Bins(np.arange(float(n_borders)))
    values = np.arange(-0.5, n_borders)[:, None]
    assert BinTable.of((bins,)).rows(values)[:, 0].tolist() == list(range(n_borders + 1))
    assert bins.n_bins == n_borders + 1


def test_a_word_has_its_bin_and_words_never_seen_share_the_last() -> None:
    bins = Bins(np.zeros(0), n_words=3)
    values = np.array([[0.0], [1.0], [2.0], [3.0], [77.0], [np.nan]])
    assert BinTable.of((bins,)).rows(values)[:, 0].tolist() == [0, 1, 2, 3, 3, MISSING]
    assert bins.n_bins == 4


def test_intervals_meet_and_are_open_at_the_ends() -> None:
    bins = Bins(np.array([1.0, 2.5]))
    assert [bins.interval(k) for k in range(3)] == [
        *((-math.inf, 1.0), (1.0, 2.5), (2.5, math.inf)),
    ]


def test_more_bins_than_a_byte_holds_are_refused() -> None:
    with pytest.raises(ValueError, match="251 bins in one channel; at most 250"):
        BinTable.of((Bins(np.arange(250.0)),))
