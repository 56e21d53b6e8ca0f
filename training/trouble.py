"""Unlabelled trouble in history: whole stretches that tables should not learn as normal.

A stretch is left out of the tables where held-out surprise, smoothed over time, lies far
beyond what the same source usually shows. It is never left out of the levels: its alerts
count there, and what the rate would be without it is stated beside.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scoring.sustained import sustain
from training.crossfit import HeldOut
from training.rows import Rows

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Smoothed surprise is far beyond the usual from its median and this many times the way
# from there to its 84 % point (one standard deviation, were it normal).
FAR_SPREADS = 6.0
# At most this share of a source's records is left out, the most surprising stretches first.
MOST_LEFT_OUT = 0.05
# Surprise is smoothed over this many usual intervals; a stretch begins and ends where it
# has fallen to this share of the way to the limit.
SMOOTH_STEPS, EDGE_SHARE = 15.0, 0.5
# One record adds no more than this many times the limit before smoothing, so that a
# single glitch is no stretch.
MOST_OF_ONE = 4.0


@dataclass(frozen=True)
class Stretch:
    """A stretch of one source's history: first and last time in ns, records, peak in nats."""

    source: str
    start_ns: int
    end_ns: int
    n_records: int
    peak: float


def find_trouble(own: Rows, source: str, held_out: HeldOut) -> list[Stretch]:
    """Return the stretches of one source that its tables should not use, in time order."""
    sample = _sampled_surprise(held_out)
    if not len(sample):
        return []
    middle = float(np.median(sample))
    smooth = np.concatenate([s for _, s in _smoothed(own, held_out, middle, np.inf)])
    low, high = np.quantile(smooth, [0.5, 0.84])
    limit = float(low + FAR_SPREADS * max(high - low, 1e-6))
    cap = limit * MOST_OF_ONE
    found: list[Stretch] = []
    edge = low + EDGE_SHARE * (limit - low)
    times = np.concatenate([t for t, _ in _smoothed(own, held_out, middle, cap)])
    smooth = np.concatenate([s for _, s in _smoothed(own, held_out, middle, cap)])
    for first, last in _runs(smooth > edge):
        peak = float(smooth[first : last + 1].max())
        if peak > limit:
            found.append(
                Stretch(source, int(times[first]), int(times[last]), last - first + 1, peak)
            )
    return _within_share(found, len(times))


def as_left_out(stretches: list[Stretch]) -> Ints:
    """Return stretches as (n, 2) first and last times in ns, as Rows takes them."""
    return np.array([(s.start_ns, s.end_ns) for s in stretches], dtype=np.int64).reshape(-1, 2)


def _sampled_surprise(held_out: HeldOut) -> Floats:
    surprise = held_out.surprise(0, held_out.n_records)
    surprise = surprise[~np.isnan(surprise)]
    return surprise[:: max(1, len(surprise) // 50_000)]


def _smoothed(own: Rows, held_out: HeldOut, middle: float, cap: float) -> list[tuple[Ints, Floats]]:
    """Return times and smoothed surprise above its median, of records that were scored."""
    out, start, last_ns, value = [], 0, -1, 0.0
    for chunk in own.chunks():
        beyond = held_out.surprise(start, start + len(chunk.times_ns)) - middle
        # What is left out already is not found again, nor does it count in the limit.
        beyond[~chunk.kept] = np.nan
        start += len(chunk.times_ns)
        smooth, _, last_ns, value = sustain(
            chunk.times_ns, beyond, last_ns, value, 0.0, SMOOTH_STEPS * own.step_s, own.step_s, cap
        )
        there = ~np.isnan(beyond)
        out.append((chunk.times_ns[there], smooth[there]))
    return out


def _runs(mask: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """Return first and last index of every run of True."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], mask, [False]]).astype(np.int8)))
    return [(int(a), int(b) - 1) for a, b in edges.reshape(-1, 2)]


def _within_share(found: list[Stretch], n_records: int) -> list[Stretch]:
    kept, left = [], int(MOST_LEFT_OUT * n_records)
    for stretch in sorted(found, key=lambda s: -s.peak):
        if stretch.n_records <= left:
            kept.append(stretch)
            left -= stretch.n_records
    return sorted(kept, key=lambda s: s.start_ns)
