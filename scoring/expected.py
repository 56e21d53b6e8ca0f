"""What a channel should have read: the shortest interval that holds 95 % of its belief."""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# The share of the belief that an expected interval holds.
EXPECTED_SHARE = 0.95


@njit(cache=True, nogil=True)
def _reach(p: Floats, borders: Floats, first: int, target: float) -> float:
    """Return x such that the bins from border `first` up to x hold `target`; inf if none."""
    mass = 0.0
    for b in range(first + 1, borders.shape[0]):
        if mass + p[b] >= target:
            part = (target - mass) / p[b] if p[b] > 0.0 else 1.0
            return float(borders[b - 1] + part * (borders[b] - borders[b - 1]))
        mass += p[b]
    return np.inf


@njit(cache=True, nogil=True)
def _reach_down(p: Floats, borders: Floats, last: int, target: float) -> float:
    """Return x such that the bins from x up to border `last` hold `target`; -inf if none."""
    mass = 0.0
    for b in range(last, 0, -1):
        if mass + p[b] >= target:
            part = (target - mass) / p[b] if p[b] > 0.0 else 1.0
            return float(borders[b] - part * (borders[b] - borders[b - 1]))
        mass += p[b]
    return -np.inf


@njit(cache=True, nogil=True)
def _middle(p: Floats, borders: Floats) -> float:
    """Return the median of the belief, interpolated; the nearest border if it lies beyond."""
    if p[0] >= 0.5:
        return float(borders[0])
    x = _reach(p, borders, 0, 0.5 - float(p[0]))
    return float(borders[-1]) if x == np.inf else x


@njit(cache=True, nogil=True)
def _closed(p: Floats, borders: Floats) -> tuple[float, float]:
    """Return the shortest interval between closed ends; both infinite if they hold too little.

    The shortest interval of a stepwise density has a border at one of its ends. As the one
    end moves up from border to border, so does the other.
    """
    n = borders.shape[0]
    mass = np.zeros(n)
    for k in range(1, n):
        mass[k] = mass[k - 1] + p[k]
    low, high, width = -np.inf, np.inf, np.inf
    b = 1
    for k in range(n):
        while b < n and mass[b] - mass[k] < EXPECTED_SHARE:
            b += 1
        if b >= n:
            break
        part = (EXPECTED_SHARE - (mass[b - 1] - mass[k])) / p[b]
        x = borders[b - 1] + part * (borders[b] - borders[b - 1])
        if x - borders[k] < width:
            low, high, width = borders[k], x, x - borders[k]
    b = n - 1
    for k in range(n - 1, -1, -1):
        while b > 0 and mass[k] - mass[b - 1] < EXPECTED_SHARE:
            b -= 1
        if b <= 0:
            break
        part = (EXPECTED_SHARE - (mass[k] - mass[b])) / p[b]
        y = borders[b] - part * (borders[b] - borders[b - 1])
        if borders[k] - y < width:
            low, high, width = y, borders[k], borders[k] - y
    return low, high


@njit(cache=True, nogil=True)
def _steps(n: float, resolution: float) -> float:
    """Return n steps of a resolution as an instrument sends them: three of 0.1 are 0.3.

    Their product is 0.30000000000000004, and a reading of 0.3 would lie outside of its interval.
    """
    per_unit = round(1.0 / resolution)
    if per_unit >= 1.0 and abs(per_unit * resolution - 1.0) < 1e-9:
        return n / per_unit
    return n * resolution


@njit(cache=True, nogil=True)
def shortest_interval(p: Floats, borders: Floats, resolution: float) -> tuple[float, float, float]:
    """Return low, high and best of a belief over bins, in the channel's unit.

    p: (n_borders + 1,) summing to 1; the density is even inside a bin. borders: rising.
    resolution: 0 if unknown; low and high are rounded outward to it.
    A side that has to reach into an outermost bin is open: -inf or inf.
    """
    n = borders.shape[0]
    if n == 0:
        return -np.inf, np.inf, np.nan
    best = _middle(p, borders)
    low, high = _closed(p, borders)
    if high == np.inf:
        # The closed bins hold too little, so at least one side is open.
        if p[0] >= p[n] and p[0] < EXPECTED_SHARE:
            high = _reach(p, borders, 0, EXPECTED_SHARE - float(p[0]))
        elif p[0] >= EXPECTED_SHARE:
            high = borders[0]
        elif p[n] >= EXPECTED_SHARE:
            low = borders[n - 1]
        else:
            low = _reach_down(p, borders, n - 1, EXPECTED_SHARE - float(p[n]))
    if resolution > 0.0:
        # A hair inside, so that a border that is a multiple already stays where it is.
        if low > -np.inf:
            low = _steps(math.floor(low / resolution + 1e-6), resolution)
        if high < np.inf:
            high = _steps(math.ceil(high / resolution - 1e-6), resolution)
        best = _steps(round(best / resolution), resolution)
        best = min(max(best, low), high)
    return low, high, best
