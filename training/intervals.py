"""Limits for shares and counts: how far a few trials, or a few alerts, can be trusted.

Wilson 1927 and Clopper & Pearson 1934 for shares (NIST/SEMATECH e-Handbook 7.2.4.1), Garwood
1936 for a rate, and the ratio of two counts for what is still to come.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import betainc, gammaincinv, ndtri
from scipy.stats import beta

# The share that an interval covers unless said.
CONFIDENCE: Final = 0.95


def wilson(n_hits: int, n_trials: int, confidence: float = CONFIDENCE) -> tuple[float, float]:
    """Return Wilson's limits for a share, 0 to 1 without trials.

    For tables of many shares: on average over shares it covers what it says.
    """
    if n_trials == 0:
        return 0.0, 1.0
    z = float(ndtri(0.5 + confidence / 2))
    p, spread = n_hits / n_trials, z * z / n_trials
    middle = (p + spread / 2) / (1 + spread)
    half = math.sqrt(spread * (p * (1 - p) + spread / 4)) / (1 + spread)
    # At the ends rounding may leave a grain below 0 or above 1.
    return max(middle - half, 0.0), min(middle + half, 1.0)


def clopper_pearson(
    n_hits: int, n_trials: int, confidence: float = CONFIDENCE
) -> tuple[float, float]:
    """Return the exact limits for a share, which cover at least what they say."""
    tail = (1.0 - confidence) / 2
    low = float(beta.ppf(tail, n_hits, n_trials - n_hits + 1)) if n_hits else 0.0
    high = float(beta.ppf(1 - tail, n_hits + 1, n_trials - n_hits)) if n_hits < n_trials else 1.0
    return low, high


def rate_limits(
    count: float, time: float, dispersion: float = 1.0, confidence: float = CONFIDENCE
) -> tuple[float, float]:
    """Return limits for the rate behind `count` events in `time`, per unit of time.

    Garwood 1936 for a Poisson count. dispersion: variance over mean of counts, 1 for
    Poisson; a count that comes in clusters of that size says as much as count / dispersion
    single events.
    """
    if time <= 0:
        return 0.0, math.inf
    tail, n = (1.0 - confidence) / 2, count / dispersion
    low = float(gammaincinv(n, tail)) if n > 0 else 0.0
    high = float(gammaincinv(n + 1.0, 1.0 - tail))
    return low * dispersion / time, high * dispersion / time


def count_to_come(
    count: float,
    time: float,
    time_to_come: float,
    dispersion: float = 1.0,
    confidence: float = CONFIDENCE,
) -> tuple[float, float]:
    """Return the interval in which the count of `time_to_come` will lie.

    count: events seen in `time`. Given the sum of both counts, the one to come is binomial
    with the share of its time (Nelson, Applied Life Data Analysis, 1982, section 6.1): the
    limits are the counts that would make the seen one just credible. dispersion: as in
    `rate_limits`.
    """
    if time <= 0:
        return 0.0, math.inf
    tail, seen = (1.0 - confidence) / 2, count / dispersion
    share = time_to_come / (time + time_to_come)
    # Chances of a count of at least, and of at most, y, given the sum: binomial sums as
    # incomplete beta functions, which also take counts that are not whole.
    high = _root(lambda y: tail - float(betainc(y, seen + 1.0, share)))
    low = _root(lambda y: float(betainc(seen, y + 1.0, 1.0 - share)) - tail) if seen > 0 else 0.0
    return low * dispersion, high * dispersion


def _root(rising: Callable[[float], float]) -> float:
    """Return where a rising function passes zero, 0 if it starts above."""
    start, high = 1e-9, 1.0
    if rising(start) >= 0:
        return 0.0
    while rising(high) < 0:
        high *= 2.0
    return float(brentq(rising, start, high))


def dispersion_of(counts: NDArray[np.int64]) -> float:
    """Return variance over mean of counts of equal stretches of time, at least 1."""
    if len(counts) < 2 or counts.sum() == 0:
        return 1.0
    return max(1.0, float(counts.var(ddof=1) / counts.mean()))
