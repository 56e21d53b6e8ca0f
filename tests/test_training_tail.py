"""A tail goes on from what was seen, carefully: few peaks say nothing of its shape."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from training.tail import LEAST_PEAKS, SHAPE_BOUNDS, Tail, fit_tail

tails = st.builds(
    Tail,
    threshold=st.floats(-5, 50),
    scale=st.floats(0.1, 20),
    shape=st.floats(*SHAPE_BOUNDS),
    n_peaks=st.just(30),
    highest=st.just(60.0),
)


@given(tails, st.floats(1.0, 1e4))
def test_a_level_is_passed_as_often_as_it_was_asked_for(tail: Tail, ratio: float) -> None:
    assert tail.share_above(tail.level(ratio)) == pytest.approx(1 / ratio, rel=1e-6)


@given(tails, st.floats(1.0, 1e4), st.floats(1.0, 10.0))
def test_a_stricter_budget_never_lowers_the_level(tail: Tail, ratio: float, more: float) -> None:
    assert tail.level(ratio * more) >= tail.level(ratio) >= tail.threshold


def test_few_peaks_make_an_exponential_tail_with_their_mean() -> None:
    peaks = np.linspace(11.0, 15.0, LEAST_PEAKS - 1)
    tail = fit_tail(peaks, 10.0)
    assert tail.shape == 0.0
    assert tail.scale == pytest.approx(3.0)
    assert tail.highest == 15.0


def test_the_shape_stays_where_a_few_dozen_peaks_can_prove_it() -> None:
    wild = 10.0 + np.geomspace(0.1, 1e6, 40)
    assert fit_tail(wild, 10.0).shape == SHAPE_BOUNDS[1]
    ends = 10.0 + np.linspace(0.9, 1.0, 40)
    assert fit_tail(ends, 10.0).shape == SHAPE_BOUNDS[0]


def test_a_tail_that_ends_is_never_passed_beyond_its_end() -> None:
    tail = Tail(10.0, 2.0, -0.4, 30, 14.0)
    assert tail.share_above(10.0 + 2.0 / 0.4 + 0.1) == 0.0
