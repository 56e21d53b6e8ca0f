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
    out, late = np.empty(len(excess)), np.empty(len(excess), np.bool_)
    last_ns, value = _fill(times_ns, excess, last_ns, before, usual, tau_s, step_s, cap, out, late)
    return out, late, last_ns, value


@njit(cache=True, nogil=True)
def _fill(
    times_ns: NDArray[np.int64],
    excess: Floats,
    last_ns: int,
    before: float,
    usual: float,
    tau_s: float,
    step_s: float,
    cap: float,
    out: Floats,
    late: NDArray[np.bool_],
) -> tuple[int, float]:
    """Fill `out` and `late` with what `sustain` returns, and return the rest of it."""
    value = usual if last_ns < 0 else before
    usual_weight = 1.0 - math.exp(-step_s / tau_s)
    for r in range(excess.shape[0]):
        late[r] = last_ns >= 0 and times_ns[r] <= last_ns
        if late[r]:
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
    return last_ns, value


@njit(cache=True, nogil=True)
def sustain_runs(
    times_ns: NDArray[np.int64],
    excess: Floats,
    start: NDArray[np.int64],
    last_ns: NDArray[np.int64],
    value: Floats,
    usual: Floats,
    tau_s: float,
    step_s: float,
    cap: float,
    out: Floats,
    late: NDArray[np.bool_],
) -> None:
    """Do what `sustain` does for the records of several sources, one after the other.

    times_ns, excess, out, late: (n,). start: (n_runs + 1,) where each source's records begin.
    last_ns, value: (n_runs,) last time and value before, and then after, the records. usual:
    (n_runs,).
    """
    for k in range(last_ns.shape[0]):
        use = slice(start[k], start[k + 1])
        last_ns[k], value[k] = _fill(
            times_ns[use], excess[use], last_ns[k], value[k], usual[k], tau_s, step_s, cap,
            out[use], late[use],
        )  # fmt: skip
