"""Peaks over threshold against a textbook's figures and another library's fit."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import genpareto

from training.tail import Tail, fit_tail, negative_log_likelihood

# Daily rain in south-west England 1914-62, 17,531 days, 152 of them over 30 mm: Coles, An
# Introduction to Statistical Modeling of Extreme Values (2001), example 4.4.1; scale 7.44,
# shape 0.184 as printed (from memory), more digits recomputed from the ismev data. The
# data themselves are not part of this project, so its fit is not repeated here.
RAIN = Tail(threshold=30.0, scale=7.440, shape=0.1845, n_peaks=152, highest=86.6)
N_DAYS = 17_531


@pytest.mark.parametrize(("years", "level"), [(10, 65.95), (50, 92.32), (100, 106.33)])
def test_return_levels_of_the_daily_rain(years: int, level: float) -> None:
    ratio = years * 365 * RAIN.n_peaks / N_DAYS
    assert RAIN.level(ratio) == pytest.approx(level, abs=0.1)
    assert RAIN.share_above(level) == pytest.approx(1 / ratio, rel=0.01)


@pytest.mark.parametrize(("shape", "n"), [(0.25, 400), (0.0, 150), (-0.25, 150)])
def test_the_fit_is_another_librarys(shape: float, n: int) -> None:
    peaks = 30.0 + genpareto.rvs(shape, scale=7.4, size=n, random_state=np.random.default_rng(3))
    ours = fit_tail(peaks, 30.0)
    theirs = genpareto.fit(peaks - 30.0, floc=0.0)
    # Its simplex search stops early; ours must be at least as likely, and close.
    assert negative_log_likelihood(peaks - 30.0, ours.scale, ours.shape) <= (
        genpareto.nnlf(theirs, peaks - 30.0) + 1e-6
    )
    assert (ours.shape, ours.scale) == pytest.approx((theirs[0], theirs[2]), abs=0.01)


def test_likelihood_and_tail_are_another_librarys() -> None:
    over = np.array([0.2, 1.0, 3.5])
    for shape in (0.3, 0.0, -0.2):
        expected = genpareto.nnlf((shape, 0.0, 2.0), over)
        assert negative_log_likelihood(over, 2.0, shape) == pytest.approx(expected, rel=1e-12)
        tail = Tail(10.0, 2.0, shape, 3, 13.5)
        assert tail.share_above(13.5) == pytest.approx(genpareto.sf(3.5, shape, scale=2.0))
        assert tail.level(20.0) == pytest.approx(10 + genpareto.ppf(0.95, shape, scale=2.0))
