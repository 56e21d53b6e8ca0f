"""What the levels promise, said beforehand: alerts to expect, how sure that is, what it
rests on, and what another budget would cost.

A promise is for one source-day, so it follows the number of sources. It goes into the
model as plain data and is read back from there.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri, stdtrit

from scoring.model import Levels
from training.intervals import count_to_come, dispersion_of
from training.levels import Curve
from training.scale import LEAST_COUNT, is_fitted
from training.season import SlowChannel

Ints = NDArray[np.int64]

# Other budgets that are shown, as multiples of the one asked for.
OTHER_BUDGETS: Final = (0.1, 0.25, 0.5, 1.0, 2.0, 4.0)
# Clusters are looked for in stretches of so many days, while there are this many of them.
_STRETCH_DAYS: Final = (1, 2, 3, 5, 7, 14)
_LEAST_STRETCHES: Final = 5
# With fewer episodes seen, clusters are measured at a lower level that has as many.
_ENOUGH_SEEN: Final = 10


@dataclass(frozen=True, slots=True)
class Budget:
    """One budget: alerts a day over the fleet, its levels, and what was seen at them.

    n_seen: episodes in held-out time. expected: a day over the fleet. time_share: of
    records that hold an alert.
    """

    alerts_per_day: float
    record: float
    sustained: float
    n_seen: int
    expected: float
    time_share: float


@dataclass(frozen=True, slots=True)
class CurvePoint:
    """A pair of levels, nats, and the episodes a source-day that pass it."""

    record: float
    sustained: float
    rate: float


@dataclass(frozen=True, slots=True)
class Promise:
    """What may be expected at the model's levels.

    source_days: held out and judged, over n_sources sources. n_seen: episodes in them.
    rate: expected alerts a source-day. dispersion: variance over mean of counts, the
    largest over stretches of one to some days, widened for how few those are.
    busiest_days: the fewest days that hold half of the episodes, of n_days. time_share: of
    records that held an alert.
    record, sustained, and the highest of each that was seen: nats. reach: once in how many
    held-out spans the levels are expected to be passed, 0 where they lie inside the data.
    fitted: whether the tail's shape was fitted on 30 episodes or more.
    at_limit: the budget asks for less than once in ten held-out spans, which is not given.
    held_back: the time in alert, not the budget, decides.
    unseen_nats: how much more surprising a held-out record is than a fitted one.
    slow: channels that do not repeat within the history. budgets: others, strict to loose.
    curve: episodes a source-day over pairs of levels, strict to loose.
    """

    alerts_per_day: float
    n_sources: int
    source_days: float
    n_days: int
    n_seen: int
    rate: float
    dispersion: float
    busiest_days: int
    time_share: float
    record: float
    sustained: float
    record_highest: float
    sustained_highest: float
    reach: float
    fitted: bool
    at_limit: bool
    held_back: bool
    unseen_nats: float
    slow: tuple[SlowChannel, ...]
    budgets: tuple[Budget, ...]
    curve: tuple[CurvePoint, ...]

    def per_day(self, n_sources: int | None = None) -> float:
        """Return the alerts to expect a day over a fleet, the learned one unless said."""
        return self.rate * (self.n_sources if n_sources is None else n_sources)

    def interval(self, n_days: float, n_sources: int | None = None) -> tuple[float, float]:
        """Return the 95 % prediction interval of the count in some days over a fleet.

        With slow channels its upper end grows with the days beyond what one count allows: on
        the invented plant a summer month's levels saw 1.1 to 3.5 times the promised alerts in
        the two quiet months after it.
        """
        n_sources = self.n_sources if n_sources is None else n_sources
        # Beyond the data fewer episodes were seen than the tail expects; the larger counts.
        count = max(float(self.n_seen), self.rate * self.source_days)
        low, high = count_to_come(count, self.source_days, n_days * n_sources, self.dispersion)
        return low, high * (1.0 + n_days / max(self.n_days, 1)) if self.slow else high

    def as_data(self) -> dict[str, Any]:
        """Return plain numbers and texts for model.json."""
        return asdict(self)

    @classmethod
    def from_data(cls, data: dict[str, Any]) -> Promise:
        """Return the promise that `as_data` gave."""
        budgets = tuple(Budget(**one) for one in data["budgets"])
        slow = tuple(SlowChannel(**one) for one in data["slow"])
        curve = tuple(CurvePoint(**one) for one in data["curve"])
        return cls(**{**data, "budgets": budgets, "slow": slow, "curve": curve})


def promise_of(
    curve: Curve,
    levels: Levels,
    alerts_per_day: float,
    slow: Sequence[SlowChannel] = (),
    unseen_nats: float = 0.0,
) -> Promise:
    """Return what a curve promises at its chosen levels.

    alerts_per_day: over the sources of the curve.
    """
    k = curve.chosen
    record, sustained = curve.scales
    alone = float(curve.alone[k])
    by_day = curve.by_day[k]
    return Promise(
        alerts_per_day=alerts_per_day,
        n_sources=curve.n_sources,
        source_days=curve.source_days,
        n_days=len(by_day),
        n_seen=int(curve.seen[k]),
        rate=float(curve.expected[k]) / curve.source_days,
        dispersion=_clusters(curve, k),
        busiest_days=_busiest(by_day),
        time_share=float(curve.time_share[k]),
        record=levels.record,
        sustained=levels.sustained,
        record_highest=record.highest,
        sustained_highest=sustained.highest,
        reach=1.0 / alone if alone < 1.0 else 0.0,
        fitted=is_fitted(record) and is_fitted(sustained),
        at_limit=curve.allowed < LEAST_COUNT,
        held_back=_held_back(curve, k),
        unseen_nats=unseen_nats,
        slow=tuple(slow),
        budgets=tuple(_budget(curve, alerts_per_day * share) for share in OTHER_BUDGETS),
        curve=_points(curve),
    )


def _points(curve: Curve) -> tuple[CurvePoint, ...]:
    """Return every other pair, the chosen one among them."""
    places = range(curve.chosen % 2, len(curve.record), 2)
    found = [
        CurvePoint(
            float(curve.record[k]),
            float(curve.sustained[k]),
            float(curve.expected[k]) / curve.source_days,
        )
        for k in places
    ]
    # Where few episodes were seen neighbouring pairs may be the same.
    return tuple(dict.fromkeys(found))


def _held_back(curve: Curve, k: int) -> bool:
    """Whether the next looser pair would keep to the budget, and fails for its time in alert."""
    return k + 1 < len(curve.expected) and bool(
        max(float(curve.expected[k + 1]), float(curve.seen[k + 1])) <= curve.allowed
    )


def _budget(curve: Curve, alerts_per_day: float) -> Budget:
    k = curve.place(alerts_per_day * curve.source_days / curve.n_sources)
    return Budget(
        alerts_per_day,
        float(curve.record[k]),
        float(curve.sustained[k]),
        int(curve.seen[k]),
        float(curve.expected[k]) / curve.source_days * curve.n_sources,
        float(curve.time_share[k]),
    )


def _clusters(curve: Curve, k: int) -> float:
    """Return the dispersion of episodes, the largest over stretches of one day to some.

    Few stretches measure it badly: each is widened as Student's t of so many differs from
    the normal distribution.
    """
    while curve.seen[k] < _ENOUGH_SEEN and k + 1 < len(curve.seen):
        k += 1
    by_day, largest = curve.by_day[k], 1.0
    for n_days in _STRETCH_DAYS:
        n = len(by_day) // n_days
        if n >= _LEAST_STRETCHES:
            stretches = by_day[: n * n_days].reshape(n, n_days).sum(axis=1)
            widened = (float(stdtrit(n - 1, 0.975)) / float(ndtri(0.975))) ** 2
            scatter = dispersion_of(stretches)
            largest = max(largest, scatter * widened if scatter > 1.0 else 1.0)
    return largest


def _busiest(by_day: Ints) -> int:
    """Return how few days hold half of the episodes, 0 for none."""
    if not by_day.sum():
        return 0
    held = np.cumsum(np.sort(by_day)[::-1])
    return int(np.searchsorted(held, math.ceil(by_day.sum() / 2))) + 1
