"""Levels from held-out time: how often each level would have been crossed, in episodes.

A level is the lowest such that it and every higher one keep to the alarm budget and to
a limit on the time in alert. Beyond the highest value seen it goes on along the tail,
and no further than ten times the held-out span can speak for.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scoring.model import Levels, Member
from training.crossfit import Followed, HeldOut, follow
from training.rows import Rows

Floats = NDArray[np.float64]

S_PER_DAY = 86_400.0
# Exceedances closer than this many usual intervals are one episode.
EPISODE_STEPS = 30.0
# No source may spend more than this share of its time in alert.
MAX_TIME_SHARE = 0.01
# A level may lie as far beyond the data as this many held-out spans speak for.
MAX_REACH = 10.0
# Values of the level that are tried.
N_TRIED = 160
# Rounds in which level and cap settle to each other.
ROUNDS = 3


@dataclass(frozen=True)
class Curve:
    """Episodes over level, from held-out records of all sources.

    levels: (n,) rising. episodes, time_share: (n,) count and share of records above.
    days: source-days that were held out. tail: mean excess of episode maxima over the
    highest tenth, for going beyond the data.
    """

    levels: Floats
    episodes: Floats
    time_share: Floats
    days: float
    tail: float

    def lowest(self, per_source_day: float) -> float:
        """Return the lowest level that, with every higher one, keeps to the budget."""
        allowed = per_source_day * self.days
        bad = (self.episodes > allowed) | (self.time_share > MAX_TIME_SHARE)
        last_bad = int(np.flatnonzero(bad)[-1]) if bad.any() else -1
        if last_bad + 1 < len(self.levels):
            level = float(self.levels[last_bad + 1])
        else:
            level = float(self.levels[-1])
        if allowed < 1.0:
            # Less than one episode may be expected in all of the held-out time: the tail
            # is followed on, by the span that the budget asks for.
            reach = min(1.0 / max(allowed, 1e-9), MAX_REACH)
            level = max(level, float(self.levels[-1])) + self.tail * math.log(reach)
        return level


@njit(cache=True, nogil=True)
def count_episodes(
    times_ns: NDArray[np.int64],
    values: Floats,
    levels: Floats,
    gap_ns: int,
    last_ns: NDArray[np.int64],
    episodes: Floats,
    above: Floats,
) -> None:
    """Add to `episodes` and `above` what each level would have seen in these records.

    last_ns: (n_levels,) time of the last record above, carried from chunk to chunk.
    """
    for r in range(values.shape[0]):
        x = values[r]
        for k in range(levels.shape[0]):
            if not x > levels[k]:
                break
            if times_ns[r] - last_ns[k] > gap_ns:
                episodes[k] += 1.0
            last_ns[k] = times_ns[r]
            above[k] += 1.0


def measure(
    streams: Iterable[Iterator[Followed]], which: str, step_s: float, levels: Floats
) -> Curve:
    """Return the curve of episodes over level. which: "excess" or "sustained"."""
    episodes, above = np.zeros(len(levels)), np.zeros(len(levels))
    n_records, top = 0, []
    gap_ns = int(EPISODE_STEPS * step_s * 1e9)
    for stream in streams:
        last_ns = np.full(len(levels), np.iinfo(np.int64).min // 2)
        for part in stream:
            values = part.excess if which == "excess" else part.sustained
            judged = ~np.isnan(part.excess)
            count_episodes(
                part.times_ns[judged], values[judged], levels, gap_ns, last_ns, episodes, above
            )
            n_records += int(judged.sum())
            if judged.any():
                top.append(np.sort(values[judged])[-50:])
    best = np.sort(np.concatenate(top or [np.zeros(1)]))[::-1][:30]
    tail = float(max(best.mean() - best[-1], 0.1)) if len(best) > 1 else 1.0
    share = above / max(n_records, 1)
    return Curve(levels, episodes, share, n_records * step_s / S_PER_DAY, tail)


def tried_levels(streams: Iterable[Iterator[Followed]], which: str) -> Floats:
    """Return levels to try: the upper part of what was seen, and the highest value."""
    sample: list[Floats] = []
    high = -math.inf
    for stream in streams:
        for part in stream:
            values = (part.excess if which == "excess" else part.sustained)[~np.isnan(part.excess)]
            if len(values):
                high = max(high, float(values.max()))
                sample.append(values[:: max(1, len(values) // 4000)])
    if not sample:
        return np.array([1.0])
    low = float(np.quantile(np.concatenate(sample), 0.9))
    return np.linspace(low, max(high, low + 1e-6), N_TRIED)


def set_levels(
    rows: Rows,
    members: dict[str, Member],
    held_out: dict[str, HeldOut],
    start: Levels,
    alerts_per_day: float,
) -> tuple[Levels, dict[str, Member], dict[str, Curve]]:
    """Return levels that keep to the budget, members with their usual sustained, curves.

    alerts_per_day: over all of these sources. Half of the budget is for records, half for
    sustained.
    """
    n_sources = max(len(members), 1)
    per_source_day = alerts_per_day / n_sources / 2

    def streams(levels: Levels) -> Iterator[Iterator[Followed]]:
        return (follow(rows, members[s], held_out[s], levels) for s in members)

    levels = start
    tried = tried_levels(streams(levels), "excess")
    records = measure(streams(levels), "excess", levels.step_s, tried)
    levels = replace(levels, record=records.lowest(per_source_day))
    members = {s: _usual_sustained(rows, m, held_out[s], levels) for s, m in members.items()}
    weight = 1.0 - math.exp(-levels.step_s / levels.tau_s)
    curve = records
    for _ in range(ROUNDS):
        tried = tried_levels(streams(levels), "sustained")
        curve = measure(streams(levels), "sustained", levels.step_s, tried)
        level = curve.lowest(per_source_day)
        usual = min(m.usual.sustained for m in members.values())
        # From the usual value, one record can lift sustained to just under its level.
        cap = usual + 0.95 * (level - usual) / weight
        levels = replace(levels, sustained=level, cap=cap)
    return levels, members, {"record": records, "sustained": curve}


def _usual_sustained(rows: Rows, member: Member, held_out: HeldOut, levels: Levels) -> Member:
    """Return the member with the mean of capped excess as its usual sustained value."""
    total, n = 0.0, 0
    for part in follow(rows, member, held_out, levels):
        judged = part.excess[~np.isnan(part.excess)]
        total += float(np.minimum(judged, levels.record).sum())
        n += len(judged)
    return replace(member, usual=replace(member.usual, sustained=total / max(n, 1)))
