"""A whole replay: records through the online path, held against incidents and rivals."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.alert_settings import AlertSettings
from scoring.alerts import Alert
from scoring.errors import OddbranchError
from scoring.model import Levels, Model
from training.calls import calls_by_pair, with_suspects
from training.heldexcess import HeldExcess
from training.intervals import dispersion_of, rate_limits
from training.judging import DAY_NS, Call, Judge, Verdict
from training.known import Known
from training.online import Online
from training.promise import Promise
from training.rival_streams import Rival
from training.sweep import Pairs, cap_of

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Pairs of levels without a curve in the model: these multiples of its own.
_MULTIPLES: Final = np.geomspace(0.4, 2.5, 25)
# Without incidents every alert is one on normal records, as far as anyone knows.
OURS: Final = "oddbranch"


class BadReplay(OddbranchError):
    """Records that cannot be replayed."""


@dataclass(frozen=True)
class LevelRow:
    """What one pair of levels would have done. is_model: the model's own pair."""

    record: float
    sustained: float
    verdict: Verdict
    time_share: float
    is_model: bool = False


@dataclass(frozen=True)
class MethodRow:
    """What one method did.

    how: in words, how its levels were chosen. own_levels: a rival at the levels that its
    history gave it, not at our false rate.
    """

    name: str
    how: str
    verdict: Verdict
    time_share: float
    own_levels: bool = False


@dataclass(frozen=True)
class Replayed:
    """The outcome of a replay.

    spans: by source, time of first and last record. n_records, n_late, n_not_judged:
    counts. verdict: of the alerts in the budget; with_others: with the kinds apart from it,
    for what they catch. alerts: all, in order of time; calls: those
    in the budget. others: kinds apart from it, counted. by_day: alerts in the budget by day
    of the fleet. n_damped: opened without calling anyone; n_again: raised again.
    fleet_only: sources that the model's fleet member scored. rows: the sweep, strict to
    loose. methods: ours and the rivals; empty without a history.
    curves: by rival, its whole sweep.
    """

    model: Model
    promise: Promise | None
    known: tuple[Known, ...]
    spans: dict[str, tuple[int, int]]
    n_records: int
    n_late: int
    n_not_judged: int
    verdict: Verdict
    with_others: Verdict
    alerts: list[Alert]
    calls: list[Call]
    others: Counter[str]
    by_day: Ints
    n_damped: int
    n_again: int
    fleet_only: tuple[str, ...]
    time_share: float
    rows: list[LevelRow]
    methods: list[MethodRow]
    curves: dict[str, list[LevelRow]]

    @property
    def dispersion(self) -> float:
        """Variance over mean of the alerts by day."""
        return dispersion_of(self.by_day)

    @property
    def per_day_limits(self) -> tuple[float, float]:
        """95 % limits of the alerts a day over the fleet, widened for clusters."""
        days = self.verdict.source_days / max(self.verdict.n_sources, 1)
        return rate_limits(self.verdict.n_alerts, days, self.dispersion)


def judge_replay(
    online: Online, known: Sequence[Known], rivals: Sequence[Rival], recovery_s: float
) -> Replayed:
    """Return the outcome of records that went through `online`; call its finish() before.

    known: may be empty: then every alert counts as false.
    """
    if not online.sources:
        raise BadReplay("the records hold no row that can be replayed")
    model, levels = online.model, online.model.levels
    spans = {s: (one.first_ns, one.last_ns) for s, one in sorted(online.sources.items())}
    judge = Judge(known, int(recovery_s * 1e9), spans, int(levels.step_s * 1e9))
    calls, others = online.calls(), online.calls(in_budget=False)
    verdict = judge.verdict(calls)
    promise = promise_in(model)
    rows = _sweep(online.excess, _pairs(model, promise), judge, levels, online.settings)
    own = next(row for row in rows if row.is_model)
    methods = [MethodRow(OURS, "the model's levels", verdict, own.time_share)] if rivals else []
    curves: dict[str, list[LevelRow]] = {}
    for rival in rivals:
        found, curves[rival.name] = _rival(rival, verdict, judge, online)
        methods += found
    return Replayed(
        model=model,
        promise=promise,
        known=tuple(known),
        spans=spans,
        n_records=sum(one.n_records for one in online.sources.values()),
        n_late=sum(one.n_late for one in online.sources.values()),
        n_not_judged=sum(one.n_not_judged for one in online.sources.values()),
        verdict=verdict,
        with_others=judge.verdict([*calls, *others]),
        alerts=online.alerts,
        calls=calls,
        others=Counter(call.kind for call in others),
        by_day=_by_day(calls, spans),
        n_damped=online.n_damped,
        n_again=online.n_again,
        fleet_only=tuple(s for s in spans if s not in model.members),
        time_share=own.time_share,
        rows=rows,
        methods=methods,
        curves=curves,
    )


def promise_in(model: Model) -> Promise | None:
    """Return the promise that a model carries, None for a model without one."""
    data = model.about.get("promise")
    return Promise.from_data(data) if data else None


def _pairs(model: Model, promise: Promise | None) -> tuple[Pairs, int]:
    """Return pairs of levels, strict to loose, and the place of the model's own."""
    levels = model.levels
    if promise is not None:
        record = np.array([point.record for point in promise.curve])
        sustained = np.array([point.sustained for point in promise.curve])
    else:
        record, sustained = _MULTIPLES[::-1] * levels.record, _MULTIPLES[::-1] * levels.sustained
    own = np.flatnonzero((record == levels.record) & (sustained == levels.sustained))
    at = int(own[0]) if len(own) else int((record > levels.record).sum())
    if not len(own):
        record = np.insert(record, at, levels.record)
        sustained = np.insert(sustained, at, levels.sustained)
    usual = max([m.usual.sustained for m in model.members.values()] or [0.0])
    caps = cap_of(sustained, usual, levels.tau_s, levels.step_s)
    caps[at] = levels.cap
    return Pairs(record, sustained, caps), at


def _sweep(
    streams: Sequence[HeldExcess],
    pairs_at: tuple[Pairs, int],
    judge: Judge,
    levels: Levels,
    settings: AlertSettings,
) -> list[LevelRow]:
    pairs, own = pairs_at
    calls, shares = calls_by_pair(streams, pairs, levels, settings)
    return [
        LevelRow(
            float(pairs.record[k]),
            float(pairs.sustained[k]),
            judge.verdict(calls[k]),
            shares[k],
            k == own,
        )
        for k in range(len(pairs))
    ]


def _rival(
    rival: Rival, ours: Verdict, judge: Judge, online: Online
) -> tuple[list[MethodRow], list[LevelRow]]:
    """Return a rival's rows, at our false rate and at the levels its history gave it."""
    levels, settings = online.model.levels, online.settings
    pairs = rival.pairs(levels)
    calls, shares = calls_by_pair(rival.streams, pairs, levels, settings)
    verdicts = [judge.verdict(found) for found in calls]
    rows = [
        LevelRow(float(pairs.record[k]), float(pairs.sustained[k]), verdicts[k], shares[k])
        for k in range(len(pairs))
    ]
    names = [channel.name for channel in online.model.table.instruments]
    found = []
    for own, how, k in (
        (False, "no more false alerts than ours", same_rate(verdicts, ours.false_per_day)),
        (True, "from its history, for the budget", rival.curve.chosen),
    ):
        named = judge.verdict(with_suspects(rival.streams, calls[k], names))
        found.append(MethodRow(rival.name, how, named, shares[k], own))
    return found, rows


def same_rate(verdicts: Sequence[Verdict], false_per_day: float) -> int:
    """Return the loosest place that, with every stricter one, has no more false alerts."""
    for k, verdict in enumerate(verdicts):
        if verdict.false_per_day > false_per_day * (1 + 1e-9):
            return max(k - 1, 0)
    return len(verdicts) - 1


def _by_day(calls: Sequence[Call], spans: dict[str, tuple[int, int]]) -> Ints:
    """Return alerts by whole day of the fleet, from the first record on."""
    first = min(first for first, _ in spans.values())
    last = max(last for _, last in spans.values())
    # The last day may lack a few records.
    n_days = max(1, round((last - first) / DAY_NS))
    days = np.array([(call.raised_ns - first) // DAY_NS for call in calls], dtype=np.int64)
    return np.bincount(days[days < n_days], minlength=n_days).astype(np.int64)
