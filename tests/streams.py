"""Streams of excess for tests: noise that remembers, now and then a burst."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from scoring.model import Levels
from training.heldexcess import HeldExcess, keep_excess

STEP_NS = 60_000_000_000
START_NS = 1_767_225_600_000_000_000
# Levels that are never passed, with the delays of a one-minute step.
NEVER = Levels(record=1e9, sustained=1e9, cap=1e9, tau_s=900.0, step_s=60.0, least_readings=1)


def times_of(n: int, start_ns: int = START_NS) -> NDArray[np.int64]:
    """Return n times a minute apart."""
    return start_ns + STEP_NS * np.arange(n)


def noise(n: int, seed: int, bursts_per_day: float = 1.0) -> NDArray[np.float64]:
    """Return (n,) excess: autoregressive noise of spread 3 with bursts of random height."""
    rng = np.random.default_rng(seed)
    excess = np.asarray(lfilter([0.8], [1.0, -0.6], 3.0 * rng.standard_normal(n)))
    for at in np.flatnonzero(rng.random(n) < bursts_per_day / 1440):
        long = int(rng.integers(1, 30))
        excess[at : at + long] += 8.0 + rng.exponential(6.0)
    return excess


def held(
    folder: Path, n_sources: int = 3, n: int = 14_400, bursts_per_day: float = 1.0
) -> list[HeldExcess]:
    """Return held-out excess of some sources, ten days each unless said."""
    return [
        keep_excess(
            f"s{k}",
            n,
            [(times_of(n)[i : i + 5000], x[i : i + 5000]) for i in range(0, n, 5000)],
            folder / f"s{k}",
        )
        for k in range(n_sources)
        for x in [noise(n, k, bursts_per_day)]
    ]
