"""Histograms count every reading once, in cells of equal width, bounded in number."""

from __future__ import annotations

import numpy as np

from tests.models import a_model
from training.histograms import N_CELLS, Histograms, shown_range

MEMBER = a_model().members["a"]


def test_cells_are_those_of_numpy_and_what_lies_outside_is_counted() -> None:
    values = np.random.default_rng(1).normal(14.0, 8.0, (5000, 6))
    values[:, 3] = np.random.default_rng(2).integers(0, 4, 5000)
    values[::7, 1] = np.nan
    counted = Histograms(MEMBER, 5000)
    for part in np.array_split(values, 7):
        counted.add(part)
    found = counted.found()
    one = found[1]
    readings = values[~np.isnan(values[:, 1]), 1]
    wanted, _ = np.histogram(readings[readings < one.high], N_CELLS, (one.low, one.high))
    assert one.counts.tolist() == wanted.tolist()
    assert one.below == (readings < one.low).sum() > 0
    assert one.above == (readings >= one.high).sum() > 0
    assert one.counts.sum() + one.below + one.above == len(readings)


def test_words_are_counted_by_word_and_those_never_seen_last() -> None:
    values = np.full((10, 6), np.nan)
    values[:, 3] = [0, 0, 0, 1, 1, 2, 2, 7, 7, np.nan]
    counted = Histograms(MEMBER, 10)
    counted.add(values)
    assert counted.found()[3].counts.tolist() == [3, 2, 4]


def test_many_records_are_thinned_evenly_whatever_the_batches() -> None:
    values = np.arange(300_000, dtype=float)[:, None] % 20 * np.ones((1, 6))
    whole, parts = Histograms(MEMBER, 300_000), Histograms(MEMBER, 300_000)
    whole.add(values)
    for start in range(0, 300_000, 7001):
        parts.add(values[start : start + 7001])
    assert whole.found()[0].counts.tolist() == parts.found()[0].counts.tolist()
    assert whole.found()[0].counts.sum() + whole.found()[0].below == 60_000


def test_one_stray_reading_does_not_widen_the_picture() -> None:
    borders = np.array([0.0, 1.0, 2.0, 3.0, 1000.0])
    low, high = shown_range(borders, np.array([1e-6, 0.3, 0.3, 0.3998, 1e-4, 1e-4]))
    assert -1 < low <= 0
    assert 3 <= high < 4


def test_a_channel_that_never_moves_has_a_range_around_its_value() -> None:
    low, high = shown_range(np.array([5.0]), np.array([0.5, 0.5]))
    assert low < 5.0 < high
