"""Limits of shares against printed tables, and counts to come against a library's exact test."""

from __future__ import annotations

from typing import Literal

import pytest
from scipy.stats import binomtest, chi2

from training.intervals import clopper_pearson, count_to_come, rate_limits, wilson

# Newcombe 1998, Statistics in Medicine 17, 857-872, Table I: 95 % limits after Wilson's
# method without correction and the exact method (limits recomputed from the formulas).
NEWCOMBE = [
    (81, 263, (0.2553, 0.3662), (0.2527, 0.3676)),
    (15, 148, (0.0624, 0.1605), (0.0578, 0.1617)),
    (0, 20, (0.0, 0.1611), (0.0, 0.1684)),
    (1, 29, (0.0061, 0.1718), (0.0009, 0.1776)),
]
# Recomputed from the same formulas.
MORE = [
    (10, 100, (0.0552, 0.1744), (0.0490, 0.1762)),
    (5, 10, (0.2366, 0.7634), (0.1871, 0.8129)),
    (29, 29, (0.8830, 1.0), (0.8806, 1.0)),
    (2, 100, (0.0055, 0.0700), (0.0024, 0.0704)),
    (4, 100, (0.0157, 0.0984), (0.0110, 0.0993)),
]


@pytest.mark.parametrize(("n_hits", "n_trials", "score", "exact"), NEWCOMBE + MORE)
def test_limits_of_a_share_are_the_printed_ones(
    n_hits: int, n_trials: int, score: tuple[float, float], exact: tuple[float, float]
) -> None:
    assert wilson(n_hits, n_trials) == pytest.approx(score, abs=6e-5)
    assert clopper_pearson(n_hits, n_trials) == pytest.approx(exact, abs=6e-5)


def test_exact_limits_of_four_in_twenty() -> None:
    # NIST/SEMATECH e-Handbook of Statistical Methods, 7.2.4.2: 90 % limits.
    assert clopper_pearson(4, 20, 0.90) == pytest.approx((0.071354, 0.401029), abs=1e-6)
    assert wilson(4, 20, 0.90) == pytest.approx((0.09312, 0.37838), abs=1e-5)


def test_wilsons_lower_limit_of_nineteen_in_thirty_eight() -> None:
    # statsmodels' own test of proportions, a value from R.
    assert wilson(19, 38)[0] == pytest.approx(0.348499283643951, abs=1e-12)


@pytest.mark.parametrize(("n_trials", "high"), [(30, 0.09503), (100, 0.02951), (1000, 0.0029912)])
def test_rule_of_three(n_trials: int, high: float) -> None:
    # None of n: the one-sided 95 % limit is 1 - 0.05^(1/n), recomputed.
    assert clopper_pearson(0, n_trials, 0.90)[1] == pytest.approx(high, abs=1e-5)


@pytest.mark.parametrize("count", [0, 1, 7, 60])
def test_limits_of_a_rate_are_garwoods(count: int) -> None:
    # Garwood 1936, Biometrika 28, 437-442, in its usual form by chi-square quantiles.
    low = chi2.ppf(0.025, 2 * count) / 2 if count else 0.0
    high = chi2.ppf(0.975, 2 * count + 2) / 2
    assert rate_limits(count, 4.0) == pytest.approx((low / 4, high / 4), rel=1e-9)


@pytest.mark.parametrize(
    ("count", "time", "to_come"), [(0, 30.0, 60.0), (4, 30.0, 7.0), (57, 30.0, 60.0)]
)
def test_a_count_to_come_is_believed_just_as_long_as_the_exact_test_believes_it(
    count: int, time: float, to_come: float
) -> None:
    # The conditional test of two Poisson rates is a binomial test (Przyborowski &
    # Wilenski 1940); scipy's has the last word on whole counts.
    low, high = count_to_come(count, time, to_come)
    share = to_come / (time + to_come)

    def chance(y: int, side: Literal["less", "greater"]) -> float:
        return float(binomtest(y, y + count, share, alternative=side).pvalue) if y + count else 1.0

    last = int(high)
    assert chance(last, "greater") >= 0.025 > chance(last + 1, "greater")
    first = -int(-low // 1)
    assert chance(first, "less") >= 0.025
    assert first == 0 or chance(first - 1, "less") < 0.025
