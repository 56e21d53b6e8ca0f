"""Peaks over threshold: how often a level would be passed that was hardly ever reached.

Pickands 1975 and Davison & Smith 1990: what lies over a high threshold has a generalised
Pareto law. Formulas after Coles, An Introduction to Statistical Modeling of Extreme
Values (2001), sections 4.2 to 4.4.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize

Floats = NDArray[np.float64]

# Likelihood is regular above -0.5 (Smith 1985); above 0.5 the variance is infinite, which
# a few dozen peaks cannot prove and a level should not lean on.
SHAPE_BOUNDS: Final = (-0.5, 0.5)
# Below this the shape is zero to the last digit that matters, and its formula is the limit.
_ZERO_SHAPE: Final = 1e-9
# Fewer peaks than this say nothing of the shape.
LEAST_PEAKS: Final = 30


@dataclass(frozen=True, slots=True)
class Tail:
    """A fitted tail: P(X > x | X > threshold) = (1 + shape (x - threshold) / scale)^(-1 / shape).

    threshold, scale: in the unit of the peaks. shape: xi, 0 for an exponential tail.
    n_peaks: how many it was fitted on. highest: the largest of them.
    """

    threshold: float
    scale: float
    shape: float
    n_peaks: int
    highest: float

    def level(self, ratio: float) -> float:
        """Return the level that one in `ratio` peaks passes, ratio >= 1.

        Coles (4.13): x_m = u + (sigma / xi) ((m zeta_u)^xi - 1), his m zeta_u our `ratio`.
        """
        if abs(self.shape) < _ZERO_SHAPE:
            return self.threshold + self.scale * math.log(ratio)
        return self.threshold + self.scale / self.shape * math.expm1(self.shape * math.log(ratio))

    def share_above(self, level: float) -> float:
        """Return the share of peaks that pass a level at or above the threshold."""
        over = max(level - self.threshold, 0.0) / self.scale
        if abs(self.shape) < _ZERO_SHAPE:
            return math.exp(-over)
        return float(max(1.0 + self.shape * over, 0.0) ** (-1.0 / self.shape))


def fit_tail(peaks: Floats, threshold: float) -> Tail:
    """Return the tail of largest likelihood for the peaks over a threshold.

    peaks: (n,), each above the threshold. With fewer than LEAST_PEAKS the shape is held at
    zero: the tail is then exponential with the peaks' mean excess.
    """
    over = np.asarray(peaks, dtype=np.float64) - threshold
    assert len(over)
    assert over.min() > 0.0
    mean, highest = float(over.mean()), float(over.max()) + threshold
    if len(over) < LEAST_PEAKS:
        return Tail(threshold, mean, 0.0, len(over), highest)
    best = min(
        (_climb(over / mean, shape) for shape in (-0.2, 0.05, 0.3)), key=lambda found: found[0]
    )
    _, scale, shape = best
    return Tail(threshold, scale * mean, shape, len(over), highest)


def _climb(over: Floats, shape: float) -> tuple[float, float, float]:
    """Return (negative log-likelihood, scale, shape) from one start; over has mean 1."""

    def cost(x: Floats) -> float:
        return negative_log_likelihood(over, math.exp(x[0]), float(x[1]))

    start = (math.log(max(1.0 - shape, 0.1)), shape)
    found = minimize(cost, start, method="L-BFGS-B", bounds=[(-8.0, 8.0), SHAPE_BOUNDS])
    return float(found.fun), math.exp(float(found.x[0])), float(found.x[1])


def negative_log_likelihood(over: Floats, scale: float, shape: float) -> float:
    """Return -ln L of exceedances (n,) under scale and shape; Coles (4.10) and (4.11)."""
    if abs(shape) < _ZERO_SHAPE:
        return len(over) * math.log(scale) + float(over.sum()) / scale
    inside = 1.0 + shape * over / scale
    if inside.min() <= 0.0:
        # Beyond the upper end of a tail that ends: steep, so that the search comes back.
        return 1e6 * (1.0 - float(inside.min()))
    return len(over) * math.log(scale) + (1.0 + 1.0 / shape) * float(np.log(inside).sum())
