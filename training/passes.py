"""Passes over the held-out excess of all sources, which levels ask for, by whoever does the work.

A source's excess is followed whole by one of them. What comes back are whole numbers, which are
added in any order, or numbers of one source each, which are put together in the order of the
sources: levels do not depend on who followed what.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from functools import partial
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.alert_settings import AlertSettings
from scoring.model import Levels
from scoring.sustained import sustain
from training.hands import HERE, Counted, Hands
from training.heldexcess import HeldExcess
from training.sweep import Marks, Pairs, Sweep

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

DAY_NS: Final = 86_400_000_000_000
# What a single record may add to where sustained rests is cut off here.
_CAP_QUANTILE: Final = 0.999
# A record under hundreds of pairs of levels, some 8 us in all, is as much work as so many that
# are counted, so that sources are followed in smaller parts than they are counted in.
_WORTH: Final = 4

# Some sources' excess, with the stretches of each that are passed over.
Group = list[tuple[HeldExcess, Ints | None]]
NewSweep = Callable[[], Sweep]


@dataclass(frozen=True)
class Raised:
    """What pairs of levels would have raised.

    by_day: (n_pairs, n_days) episodes. n_over: (n_pairs,) records that held an alert.
    n_judged: records that were judged. n_hidden: more would have been, but were passed over.
    """

    by_day: Ints
    n_over: Ints
    n_judged: int
    n_hidden: int

    def __add__(self, other: Raised) -> Raised:
        """Return the sum over other sources of the same days."""
        return Raised(
            self.by_day + other.by_day,
            self.n_over + other.n_over,
            self.n_judged + other.n_judged,
            self.n_hidden + other.n_hidden,
        )


@dataclass(frozen=True)
class Passes:
    """Sources to be followed, each with a judged record or more.

    start: the interval and the time constant. hands: who follows them.
    """

    sources: Sequence[HeldExcess]
    start: Levels
    settings: AlertSettings
    hands: Hands = HERE

    def rest(self) -> tuple[Floats, float, Ints]:
        """Set where each source's sustained rests.

        Returns a sample of sustained (m,), its highest, and the days with a judged record,
        (n_days,) since 1970.
        """
        cap = float(np.quantile(self.sample(), _CAP_QUANTILE))
        items = []
        for one in self.sources:
            n = len(one.sample)
            one.usual = float(np.minimum(one.sample, cap).mean()) if n else 0.0
            items.append((_bare(one), max(1, one.n_records // n) if n else 1))
        found = list(self.hands.each(partial(_rest_of, start=self.start), items))
        days = np.unique(np.concatenate([days for _, _, days in found]))
        highest = max(highest for _, highest, _ in found)
        return np.concatenate([sample for sample, _, _ in found]), highest, days

    def sample(self) -> Floats:
        """Return a sample of excess, (m,)."""
        return np.concatenate([one.sample for one in self.sources])

    def episodes(self, pairs: Pairs) -> Ints:
        """Return how many episodes each pair has, (n_pairs,)."""
        work = partial(_episodes_of, new=self._new(pairs))
        ((episodes, _),) = self.hands.total(work, self._groups(self.sources))
        return episodes

    def peaks(self, pairs: Pairs) -> list[Floats]:
        """Return the peak of every episode, of each pair (m,): source by source, open ones last."""
        work = partial(_peaks_of, new=self._new(pairs))
        cleared: list[list[Floats]] = [[] for _ in range(len(pairs))]
        still_open: list[list[Floats]] = [[] for _ in range(len(pairs))]
        each: list[Group] = [[(_bare(one), None)] for one in self.sources]
        for found in self.hands.each(work, each):
            for k, (done, standing) in enumerate(found):
                cleared[k].append(done)
                still_open[k].append(standing)
        return [np.concatenate([*a, *b]) for a, b in zip(cleared, still_open, strict=True)]

    def raised(
        self, pairs: Pairs, days: Ints, only: set[str], hidden: dict[str, Ints] | None = None
    ) -> Raised:
        """Return what the pairs would have raised at some of the sources.

        days: (n_days,) those with a judged record, rising. hidden: stretches of each source,
        (n, 2) first and last times in ns, that are passed over.
        """
        sources = [one for one in self.sources if one.source in only]
        if not sources:
            nothing = np.zeros((len(pairs), len(days)), dtype=np.int64)
            return Raised(nothing, nothing.sum(axis=1), 0, 0)
        work = partial(_raised_of, new=self._new(pairs), days=days)
        counted = self.hands.total(work, self._groups(sources, hidden or {}))
        (by_day, n_judged), (n_over, n_hidden) = counted
        return Raised(by_day, n_over, n_judged, n_hidden)

    def _new(self, pairs: Pairs) -> NewSweep:
        return partial(Sweep, pairs, self.start, self.settings)

    def _groups(
        self, sources: Sequence[HeldExcess], hidden: dict[str, Ints] | None = None
    ) -> list[Group]:
        items = [(_bare(one), (hidden or {}).get(one.source)) for one in sources]
        places = self.hands.groups([_WORTH * one.n_records for one in sources])
        return [[items[k] for k in group] for group in places]


def inside(times_ns: Ints, stretches: Ints | None) -> NDArray[np.bool_]:
    """Return which times (n,) lie in one of the stretches, (m, 2) first and last or None."""
    found = np.zeros(len(times_ns), dtype=bool)
    for start, end in stretches if stretches is not None else ():
        found |= (times_ns >= start) & (times_ns <= end)
    return found


def _bare(one: HeldExcess) -> HeldExcess:
    """Return the same without its sample, which nobody needs who follows the file."""
    return replace(one, sample=np.zeros(0))


def _rest_of(item: tuple[HeldExcess, int], start: Levels) -> tuple[Floats, float, Ints]:
    """Return one in so many values of a source's sustained, the highest, and days."""
    one, every = item
    last_ns, value = -1, one.usual
    sample, highest, days = [], -np.inf, []
    for times_ns, excess in one.chunks():
        found, _, last_ns, value = sustain(
            times_ns, excess, last_ns, value, one.usual, start.tau_s, start.step_s, np.inf
        )
        there = ~np.isnan(excess)
        judged = found[there]
        sample.append(judged[::every])
        highest = max(highest, float(judged.max(initial=-np.inf)))
        days.append(np.unique(times_ns[there] // DAY_NS))
    return np.concatenate(sample), highest, np.concatenate(days)


def _marks(sweep: Sweep, group: Group) -> Iterator[Marks]:
    for one, _ in group:
        for times_ns, excess in one.chunks():
            yield sweep.add(one.source, one.usual, times_ns, excess)


def _episodes_of(group: Group, new: NewSweep) -> Counted:
    sweep = new()
    n = len(sweep.pairs)
    episodes = np.zeros(n, dtype=np.int64)
    for marks in _marks(sweep, group):
        episodes += np.bincount(marks.pair[marks.raised], minlength=n)
    return [(episodes, 0)]


def _peaks_of(group: Group, new: NewSweep) -> list[tuple[Floats, Floats]]:
    """Return the peaks of each pair: of episodes that were cleared, and of those still open."""
    sweep = new()
    pairs = range(len(sweep.pairs))
    cleared: list[list[Floats]] = [[np.zeros(0)] for _ in pairs]
    for marks in _marks(sweep, group):
        for k in pairs:
            cleared[k].append(marks.peak[~marks.raised & (marks.pair == k)])
    pair, peak = sweep.still_open()
    return [(np.concatenate(cleared[k]), peak[pair == k]) for k in pairs]


def _raised_of(group: Group, new: NewSweep, days: Ints) -> Counted:
    """Return episodes by day with the records judged, records over with those hidden."""
    sweep, n_hidden = new(), 0
    by_day = np.zeros((len(sweep.pairs), len(days)), dtype=np.int64)
    for one, stretches in group:
        for times_ns, excess in one.chunks():
            hide = inside(times_ns, stretches) & ~np.isnan(excess)
            n_hidden += int(hide.sum())
            marks = sweep.add(one.source, one.usual, times_ns, np.where(hide, np.nan, excess))
            at = np.searchsorted(days, times_ns[marks.row[marks.raised]] // DAY_NS)
            np.add.at(by_day, (marks.pair[marks.raised], at), 1)
    return [(by_day, sweep.n_judged), (sweep.n_over, n_hidden)]
