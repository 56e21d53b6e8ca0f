"""Operating limits and PCA as a plant would run them, on the budget that ours keeps.

Each rival is one number a record, or that number's weighted mean over time, with one
level: the lowest that keeps to the budget over the history, stretches counted as for
every other method. None of them is given less than the whole budget.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from scoring.sustained import sustain
from training.baselines import fit_limits, fit_pca
from training.stretches import OverLevel

Floats = NDArray[np.float64]
Times = NDArray[np.int64]
# One source's records: times (n,) and values (n, n_channels).
Records = tuple[Times, Floats]

# Levels that are tried: scores of the history, the highest ones all, then ever sparser,
# down to the share that no level may spend over it. The share is the same for ours.
_N_TRIED = 400
_MOST_TIME_SHARE = 0.01
# Limits are fitted narrow, and the level then widens all of them by as many spreads as
# the budget asks for.
_LIMITS_TAIL = 0.005


class Method(Protocol):
    """A fitted method of one source; see training.baselines."""

    def score(self, values: Floats) -> Floats:
        """Return one number a record, (n,)."""

    def suspect(self, values: Floats) -> NDArray[np.int64]:
        """Return the suspect's column, (n,), -1 for none."""


@dataclass(frozen=True, slots=True)
class Rule:
    """What all rivals share. alerts_per_day: over all sources together.

    tau_s: time constant of the weighted mean; step_s: the usual interval; gap_ns: from
    where two records over a level are two stretches.
    """

    alerts_per_day: float
    tau_s: float
    step_s: float
    gap_ns: int


@dataclass(frozen=True)
class Rival:
    """One method with a fit for each source and its level.

    cap: None judges each record; else the weighted mean is judged, and one record counts
    in it for no more than this.
    """

    name: str
    methods: Mapping[str, Method]
    rule: Rule
    level: float
    cap: float | None = None

    def over_level(
        self, source: str, records: Records, names: tuple[str, ...]
    ) -> Iterator[OverLevel]:
        """Yield a source's records over the level, in order of time. names: of the columns."""
        times_ns, values = records
        method, kind = self.methods[source], "record" if self.cap is None else "sustained"
        score = method.score(values)
        judged = score if self.cap is None else smoothed(times_ns, score, self.cap, self.rule)
        rows = np.flatnonzero(judged > self.level)
        suspects = method.suspect(values[rows])
        for row, column in zip(rows.tolist(), suspects.tolist(), strict=True):
            name = names[column] if column >= 0 else ""
            yield OverLevel(source, int(times_ns[row]), kind, name, float(score[row]))


def smoothed(times_ns: Times, score: Floats, cap: float, rule: Rule) -> Floats:
    """Return the weighted mean over time, (n,); one record counts for no more than cap."""
    mean, _, _, _ = sustain(times_ns, score, -1, 0.0, 0.0, rule.tau_s, rule.step_s, cap)
    return mean


def fit_rivals(history: Mapping[str, Records], rule: Rule) -> tuple[Rival, ...]:
    """Fit operating limits, T2 and SPE on a history and set their levels on it.

    T2 and SPE come twice: judged by the record, and by their weighted mean.
    """
    values = {source: records[1] for source, records in history.items()}
    limits: dict[str, Method] = {
        s: fit_limits(v, tail=_LIMITS_TAIL, widening=0.0) for s, v in values.items()
    }
    fits = {s: fit_pca(v) for s, v in values.items()}
    t2: dict[str, Method] = {s: replace(fit, statistic="t2") for s, fit in fits.items()}
    spe: dict[str, Method] = {s: replace(fit, statistic="spe") for s, fit in fits.items()}
    by_record = [
        set_level(name, methods, history, rule)
        for name, methods in (("limits", limits), ("T2", t2), ("SPE", spe))
    ]
    by_mean = [
        set_level(f"{one.name} mean", one.methods, history, rule, cap=one.level)
        for one in by_record[1:]
    ]
    return *by_record, *by_mean


def set_level(
    name: str,
    methods: Mapping[str, Method],
    history: Mapping[str, Records],
    rule: Rule,
    cap: float | None = None,
) -> Rival:
    """Return a rival whose level keeps to the budget over a history."""
    n_source_days = sum(len(times_ns) for times_ns, _ in history.values()) * rule.step_s / 86_400
    n_allowed = rule.alerts_per_day * n_source_days / len(history)
    streams = [(times_ns, methods[s].score(v)) for s, (times_ns, v) in history.items()]
    if cap is not None:
        streams = [(times_ns, smoothed(times_ns, x, cap, rule)) for times_ns, x in streams]
    return Rival(name, methods, rule, lowest_level(streams, n_allowed, rule.gap_ns), cap)


def lowest_level(streams: Iterable[tuple[Times, Floats]], n_allowed: float, gap_ns: int) -> float:
    """Return the lowest level that, with every higher one, keeps to the budget.

    streams: times and scores of each source. n_allowed: stretches over the level.
    """
    streams = list(streams)
    pooled = np.sort(np.concatenate([score for _, score in streams]))[::-1]
    most = max(_MOST_TIME_SHARE * len(pooled), 1.0)
    places = np.unique(np.geomspace(1.0, most, _N_TRIED).astype(np.int64)) - 1
    # Whatever is under the lowest level that is tried never counts.
    lowest = pooled[places[-1]]
    high = [(times_ns[score > lowest], score[score > lowest]) for times_ns, score in streams]
    level = float(pooled[0])
    for tried in pooled[places]:
        if sum(count_stretches(t[score > tried], gap_ns) for t, score in high) > n_allowed:
            break
        level = float(tried)
    return level


def count_stretches(times_ns: Times, gap_ns: int) -> int:
    """Return how many stretches some times over a level are, (n,) rising."""
    return int(len(times_ns) > 0) + int((np.diff(times_ns) > gap_ns).sum())
