"""Levels by counting where there is something to count, along the tail beyond."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from training.scale import LEAST_COUNT, N_TAIL, is_fitted, scale_of, threshold_of
from training.tail import LEAST_PEAKS

LEVELS = np.linspace(1.0, 30.0, 30)


def exponential(n: int, seed: int = 0) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    return 1.0 + np.random.default_rng(seed).exponential(4.0, n)


def counts(peaks: np.ndarray[tuple[int], np.dtype[np.float64]]) -> np.ndarray:
    return np.array([(peaks > level).sum() for level in LEVELS])


PEAKS = exponential(200)
TWO_HUNDRED = scale_of(LEVELS, counts(PEAKS), PEAKS[PEAKS > 4.0], 4.0)


def test_a_level_has_no_more_episodes_than_asked_nor_has_any_higher_one() -> None:
    # A lower level may join two episodes: counts fall and rise again.
    episodes = np.array([9, 5, 7, 4, 6, 2, 3, 1, 0, 0])
    scale = scale_of(np.arange(10.0), episodes, np.zeros(0), 0.0)
    for asked, level in ((9, 0.0), (7, 1.0), (6, 3.0), (5, 5.0), (3, 5.0), (2, 7.0), (0.5, 8.0)):
        assert scale.counted(asked) == level
        assert (episodes[int(level) :] <= asked).all()


@given(st.floats(0.01, 300.0), st.floats(1.0, 20.0))
def test_a_stricter_count_never_lowers_the_level(count: float, less: float) -> None:
    assert TWO_HUNDRED.level(count / less) >= TWO_HUNDRED.level(count)


def test_beyond_the_threshold_the_tail_speaks_but_never_below_what_was_counted() -> None:
    peaks = exponential(400)
    episodes = counts(peaks)
    at = threshold_of(episodes)
    threshold = float(LEVELS[at])
    scale = scale_of(LEVELS, episodes, peaks[peaks > threshold], threshold)
    assert scale.n_tail >= N_TAIL
    assert is_fitted(scale)
    assert scale.tail is not None
    # One in ten held-out spans: the law's own level, known here, within a third of its reach.
    truth = 1.0 + 4.0 * np.log(400 / LEAST_COUNT)
    assert scale.level(LEAST_COUNT) == pytest.approx(truth, abs=0.35 * (truth - threshold))
    for count in (0.1, 1.0, 10.0, 50.0):
        assert scale.level(count) >= scale.counted(count)


def test_no_level_goes_further_than_ten_times_the_held_out_span() -> None:
    assert TWO_HUNDRED.level(1e-9) == TWO_HUNDRED.level(LEAST_COUNT) < np.inf


def test_few_episodes_are_no_fit_and_none_at_all_are_the_highest_level() -> None:
    few = exponential(LEAST_PEAKS - 10)
    scale = scale_of(LEVELS, counts(few), few, 1.0)
    assert not is_fitted(scale)
    assert scale.tail is not None
    assert scale.tail.shape == 0.0
    none = scale_of(LEVELS, np.zeros(30, dtype=np.int64), np.zeros(0), 1.0)
    assert none.level(0.5) == LEVELS[0]
    assert not is_fitted(none)


def test_the_threshold_has_enough_episodes_above_it_or_the_most_there_are() -> None:
    assert threshold_of(np.array([100, 80, N_TAIL, 10])) == 2
    assert threshold_of(np.array([3, 5, 5, 1])) == 2
    assert threshold_of(np.array([0, 0])) == 0
