"""Many pairs of levels over one stream of excess at once, by the machine that raises alerts.

Every pair has its own cap and so its own sustained. What is kept of a source between two
calls is a few numbers a pair, so that streams of any length need no more memory.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scoring import alert_kernel as kernel
from scoring.alert_kernel import CLEARED, HELD, OPEN, RAISED, RECORD, follow_levels
from scoring.alert_rules import level_knobs
from scoring.alert_settings import AlertSettings
from scoring.model import Levels

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# One record can lift sustained this share of the way from usual to its level: a glitch of
# any size leaves it under its level even where it was nearly half way up before.
CAP_SHARE = 0.5
# Rows that go through the kernel at once: bounds the room for what it finds.
_N_ROWS = 4096


def cap_of(sustained: Floats, usual: float, tau_s: float, step_s: float) -> Floats:
    """Return the most that one record may add, so that one alone never reaches the level.

    sustained: (n,) levels. usual: the lowest resting value of any source, nats.
    """
    weight = 1.0 - math.exp(-step_s / tau_s)
    return np.asarray(usual + CAP_SHARE * (sustained - usual) / weight)


@dataclass(frozen=True, slots=True)
class Pairs:
    """Level pairs: record, sustained and cap, (n_pairs,) nats each; inf for none."""

    record: Floats
    sustained: Floats
    cap: Floats

    def __len__(self) -> int:
        return len(self.record)


@dataclass(frozen=True, slots=True)
class Marks:
    """What one stretch of records raised and cleared, in order of time.

    pair, row: (m,) which pair of levels, which record of the stretch. raised: (m,) True
    where an alert was raised, False where one was cleared. peak: (m,) of a cleared one the
    highest excess (highest sustained where the pair has no record level), else NaN.
    """

    pair: Ints
    row: Ints
    raised: NDArray[np.bool_]
    peak: Floats


class _Source:
    """What is kept of one source: sustained and the alert machine's clocks, a pair each."""

    def __init__(self, knobs: Floats, usual: float) -> None:
        self.usual, self.last_ns = usual, -1
        self.knobs = knobs
        self.sustained = np.full(len(knobs), usual)
        self.ints = np.tile(kernel.new_ints(0), (len(knobs), 1))
        self.peak = np.full(len(knobs), -np.inf)


class Sweep:
    """Follows any number of sources under all pairs.

    n_over: (n_pairs,) records that held an alert, off-delays not counted. n_judged: records
    that were judged.
    """

    def __init__(self, pairs: Pairs, levels: Levels, settings: AlertSettings) -> None:
        self.pairs, self._levels, self._settings = pairs, levels, settings
        self.n_over = np.zeros(len(pairs), dtype=np.int64)
        self.n_judged = 0
        self._sources: dict[str, _Source] = {}

    def add(self, source: str, usual: float, times_ns: Ints, excess: Floats) -> Marks:
        """Follow one source's next records.

        usual: where its sustained rests. times_ns (n,): a record that is not after the last
        one is left out, as the scorer leaves it out. excess (n,): NaN = not judged.
        """
        if source not in self._sources:
            self._sources[source] = _Source(self._knobs(usual), usual)
        self.n_judged += int((~np.isnan(excess)).sum())
        starts = range(0, max(len(excess), 1), _N_ROWS)
        parts = [self._part(source, times_ns, excess, start) for start in starts]
        marks = np.concatenate([marks for marks, _ in parts])
        peaks = np.concatenate([peaks for _, peaks in parts])
        return Marks(marks[:, 0], marks[:, 1], marks[:, 2] == RAISED, peaks)

    def still_open(self) -> tuple[Ints, Floats]:
        """Return pairs with an alert that still stands, one entry a source, and its peak."""
        pairs, peaks = [], []
        for source in self._sources.values():
            at = np.flatnonzero(source.ints[:, OPEN] != 0)
            pairs.append(at)
            peaks.append(source.peak[at])
        empty = np.zeros(0)
        return np.concatenate([empty.astype(np.int64), *pairs]), np.concatenate([empty, *peaks])

    def _knobs(self, usual: float) -> Floats:
        """Return what the alert machine wants to know of each pair, (n_pairs, n_knobs)."""
        pairs = zip(self.pairs.record, self.pairs.sustained, strict=True)
        levels = (replace(self._levels, record=r, sustained=s) for r, s in pairs)
        return np.stack([level_knobs(one, self._settings, usual) for one in levels])

    def _part(self, name: str, times_ns: Ints, excess: Floats, start: int) -> tuple[Ints, Floats]:
        source, levels = self._sources[name], self._levels
        rows = slice(start, start + _N_ROWS)
        # A pair raises at most every second record, and clears as often.
        n_room = min(_N_ROWS, len(excess)) * len(self.pairs)
        found, peaks = np.empty((n_room, 3), dtype=np.int64), np.full(n_room, np.nan)
        n_found, source.last_ns = _follow(
            times_ns[rows],
            excess[rows],
            self.pairs.cap,
            source.knobs,
            source.usual,
            levels.tau_s,
            levels.step_s,
            source.last_ns,
            source.sustained,
            source.ints,
            source.peak,
            self.n_over,
            found,
            peaks,
        )
        kept = found[:n_found].copy()
        kept[:, 1] += start
        return kept, peaks[:n_found].copy()


@njit(cache=True, nogil=True)
def _follow(
    times_ns: Ints,
    excess: Floats,
    cap: Floats,
    knobs: Floats,
    usual: float,
    tau_s: float,
    step_s: float,
    last_ns: int,
    sustained: Floats,
    ints: Ints,
    peak: Floats,
    n_over: Ints,
    found: Ints,
    peaks: Floats,
) -> tuple[int, int]:
    """Advance all pairs; fill found (m, 3) with pair, row, mark; return how many, last time.

    sustained, peak (n_pairs,) and ints (n_pairs, N_INTS) are changed in place. What sustained
    does is scoring.sustained.sustain for each pair; the weights are worked out once.
    """
    n_found = 0
    usual_weight = 1.0 - math.exp(-step_s / tau_s)
    for r in range(times_ns.shape[0]):
        if last_ns >= 0 and times_ns[r] <= last_ns:
            continue
        passed_s = step_s if last_ns < 0 else (times_ns[r] - last_ns) * 1e-9
        last_ns = times_ns[r]
        fade = math.exp(-(passed_s - step_s) / tau_s) if passed_s > step_s else 1.0
        weight = min(usual_weight, 1.0 - math.exp(-passed_s / tau_s))
        x = excess[r]
        for k in range(cap.shape[0]):
            value = sustained[k]
            if fade < 1.0:
                value = usual + (value - usual) * fade
            if x == x:
                value += weight * (min(x, cap[k]) - value)
                mark = follow_levels(times_ns[r], x, value, knobs[k], ints[k])
                if mark == RAISED or mark == CLEARED:  # noqa: SIM109 - a tuple is no constant here
                    found[n_found, 0] = k
                    found[n_found, 1] = r
                    found[n_found, 2] = mark
                    if mark == CLEARED:
                        peaks[n_found] = peak[k]
                        peak[k] = -np.inf
                    n_found += 1
                if ints[k, OPEN] != 0:
                    peak[k] = max(peak[k], value if knobs[k, RECORD] == np.inf else x)
                    if ints[k, HELD] == times_ns[r]:
                        n_over[k] += 1
            sustained[k] = value
    return n_found, last_ns
