"""Sustained: the exponentially weighted mean of a source's excess, over time passed.

It starts at the usual value, decays to it over gaps, and takes from one record no more
than `cap`, so that one glitch of any size cannot raise it over its level.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@njit(cache=True, nogil=True)
def sustain(
    times_ns: NDArray[np.int64],
    excess: Floats,
    last_ns: int,
    before: float,
    usual: float,
    tau_s: float,
    step_s: float,
    cap: float,
) -> tuple[Floats, NDArray[np.bool_], int, float]:
    """Return sustained after each record (n,), which came late, and the new last time and value.

    excess: (n,) nats, NaN = not judged, which leaves sustained alone.
    last_ns: time of the source's last record, or -1 for none; before: sustained then.
    A late record is shown the standing value and does not change it.
    """
    n = excess.shape[0]
    out, late = np.empty(n), np.zeros(n, np.bool_)
    value = usual if last_ns < 0 else before
    usual_weight = 1.0 - math.exp(-step_s / tau_s)
    for r in range(n):
        if last_ns >= 0 and times_ns[r] <= last_ns:
            late[r] = True
            out[r] = value
            continue
        passed_s = step_s if last_ns < 0 else (times_ns[r] - last_ns) * 1e-9
        # Time beyond the usual interval is a gap, over which nothing was seen.
        if passed_s > step_s:
            value = usual + (value - usual) * math.exp(-(passed_s - step_s) / tau_s)
        last_ns = times_ns[r]
        x = excess[r]
        if x == x:
            weight = min(usual_weight, 1.0 - math.exp(-passed_s / tau_s))
            value += weight * (min(x, cap) - value)
        out[r] = value
    return out, late, last_ns, value
