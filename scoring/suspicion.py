"""Whom an open alert suspects: own surprise beyond usual, summed over the episode.

Each record counts with at most a few of a channel's spreads. On 161 incidents of an
invented plant this named the right channel first in 78 % at the incident's end and in
71 % thirty records after the alert, plain sums as often within 1 %, sums in units of each
channel's spread less often soon after (65 %).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scoring import alert_kernel as kernel
from scoring.alert_rules import Rules
from scoring.alert_standing import Case, Evidence, Tally
from scoring.alerts import INSTRUMENT, SEVERAL, STUCK, Suspect
from scoring.channels import Channel
from scoring.scorer import Scorer, Scores
from scoring.sentences import scored_text

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# How many suspects an alert names.
N_SUSPECTS = 3
# Where the second channel has less than this share of the first one's sum, one instrument
# is likely at fault. On the same incidents this tells one instrument from several in two
# cases of three; nothing tried did better, because a machine fault can show in one reading.
APART_SHARE = 0.6


@dataclass(frozen=True, slots=True)
class Batch:
    """Records of one source with their scores, as they came.

    times_ns: (n,); values: (n, n_instruments). ahead: (n,) ahead of the receiver's clock,
    or (0,) for none. on_time: (n,) neither late nor ahead.
    """

    source: str
    times_ns: Ints
    values: Floats
    scores: Scores
    ahead: Bools
    on_time: Bools

    @classmethod
    def of(
        cls, source: str, times_ns: Ints, values: Floats, scores: Scores, ahead: Bools, last_ns: int
    ) -> Batch:
        """Return the batch of a source whose last record on time was at last_ns."""
        moving = np.where(ahead, last_ns, times_ns) if len(ahead) else times_ns
        newest = np.maximum.accumulate(np.concatenate([[last_ns], moving[:-1]]))
        on_time = (moving > newest) & (moving == times_ns)
        return cls(source, times_ns, values, scores, ahead, on_time)


@njit(cache=True, nogil=True)
def sum_rows(own: Floats, rows: Ints, middle: Floats, cap: Floats, sums: Floats) -> None:
    """Add some rows' own surprise beyond usual to `sums` (n_instruments,), capped.

    Row by row, so that the same records in other batches give the same sums.
    """
    for r in rows:
        for i in range(own.shape[1]):
            x = own[r, i] - middle[i]
            if x == x:
                sums[i] += min(x, cap[i])


class Inquiry:
    """What an open scored alert is about, summed up as its records come.

    over: (n,) rows of the batch that are over a level.
    """

    def __init__(self, scorer: Scorer, rules: Rules, batch: Batch, case: Case | None) -> None:
        self._scorer, self._rules, self._batch = scorer, rules, batch
        scores, knobs = batch.scores, rules.knobs
        self._use = batch.on_time & ~np.isnan(scores.excess)
        self.over = self._use & (
            (scores.excess > knobs[kernel.RECORD]) | (scores.sustained > knobs[kernel.SUSTAINED])
        )
        self._is_open = False
        self._others: dict[str, float] = {}
        self._evidence: dict[str, Evidence] = {}
        self._crossings: list[int] = []
        if case is not None and case.tally is not None:
            self._resume(case, case.tally)

    def _resume(self, case: Case, tally: Tally) -> None:
        alert, instruments = case.alert, self._scorer.instruments
        known = {channel.name for channel in instruments}
        self._is_open = True
        self._sums = np.array([tally.nats.get(channel.name, 0.0) for channel in instruments])
        self._others = {name: x for name, x in tally.nats.items() if name not in known}
        self._evidence = dict(tally.evidence)
        self._crossings = list(tally.crossings_ns)
        self._is_over, self._over_ns = tally.over, tally.over_ns
        self._raised_ns = alert.raised_ns
        self._worst_ns, self._worst = alert.worst_ns, alert.worst_excess
        self._n_records, self._n_over, self._n_cycles = (
            alert.n_records, alert.n_over, alert.n_cycles,
        )  # fmt: skip
        self._chattering = alert.chattering

    def begin(self, row: int, recent: Floats) -> None:
        """Open an inquiry at the row that raised the alert.

        recent: (n_instruments + 1,) what the last few records, this one with them, say.
        """
        time_ns = int(self._batch.times_ns[row])
        self._is_open = True
        self._sums = recent[:-1].copy()
        self._others, self._evidence, self._crossings = {}, {}, [time_ns]
        self._is_over, self._over_ns, self._raised_ns = True, time_ns, time_ns
        self._worst_ns, self._worst = time_ns, float(self._batch.scores.excess[row])
        self._n_records, self._n_over, self._n_cycles = 1, 1, 1
        self._chattering = False
        self._weigh(np.array([row]))
        for i in np.argsort(-self._sums, kind="stable")[:N_SUSPECTS].tolist():
            # A record may suspect another channel than the last few together do.
            name, own = self._scorer.instruments[i].name, self._own(row, i)
            if self._sums[i] > 0 and name not in self._evidence and own == own:
                self._evidence[name] = evidence_at(self._scorer, self._batch, row, i, own)

    def drop(self) -> None:
        """End the inquiry: its alert is cleared."""
        self._is_open = False

    def sum_up(self, start: int, stop: int) -> None:
        """Take in the rows from start to before stop."""
        if not self._is_open:
            return
        rows = start + np.flatnonzero(self._use[start:stop])
        if not len(rows):
            return
        scores, times_ns = self._batch.scores, self._batch.times_ns
        middle, cap = self._rules.rows[kernel.MIDDLE], self._rules.rows[kernel.CAP]
        sum_rows(scores.channel_surprise, rows, middle, cap, self._sums)
        worst = int(rows[np.argmax(scores.excess[rows])])
        if self._worst is None or scores.excess[worst] > self._worst:
            self._worst_ns, self._worst = int(times_ns[worst]), float(scores.excess[worst])
        over = self.over[rows]
        self._cross(times_ns[rows[over & ~np.concatenate([[self._is_over], over[:-1]])]])
        self._is_over = bool(over[-1])
        if over.any():
            self._over_ns = int(times_ns[rows[over][-1]])
        self._n_records += len(rows)
        self._n_over += int(over.sum())
        self._weigh(rows)

    def _cross(self, times_ns: Ints) -> None:
        """Count times at which the source went over a level, and see whether it chatters."""
        self._n_cycles += len(times_ns)
        for time_ns in times_ns.tolist():
            self._crossings = [*self._crossings, time_ns][-self._rules.chatter_cycles :]
            if len(self._crossings) == self._rules.chatter_cycles:
                lasted_s = (self._crossings[-1] - self._crossings[0]) * 1e-9
                self._chattering |= lasted_s <= self._rules.chatter_s

    def _weigh(self, rows: Ints) -> None:
        """Keep for each record's suspect the record that speaks most against it."""
        suspects = self._batch.scores.suspect[rows]
        middle = self._rules.rows[kernel.MIDDLE]
        nats = self._batch.scores.suspect_surprise[rows] - middle[np.maximum(suspects, 0)]
        for i in np.unique(suspects[suspects >= 0]).tolist():
            own = np.flatnonzero(suspects == i)
            best = int(own[np.argmax(nats[own])])
            name = self._scorer.instruments[i].name
            if name not in self._evidence or nats[best] > self._evidence[name].nats:
                self._evidence[name] = evidence_at(
                    self._scorer, self._batch, int(rows[best]), i, float(nats[best])
                )

    def _own(self, row: int, i: int) -> float:
        own = self._batch.scores.channel_surprise[row, i]
        return float(own - self._rules.rows[kernel.MIDDLE, i])

    def was_fleeting(self) -> bool:
        """Return whether it was over a level once and briefly."""
        lasted_s = (self._over_ns - self._raised_ns) * 1e-9
        return self._n_cycles == 1 and lasted_s <= self._rules.fleeting_s

    def tally(self) -> Tally:
        """Return what a standing has to keep."""
        own = zip(self._scorer.instruments, self._sums.tolist(), strict=True)
        return Tally(
            nats={**self._others, **{channel.name: x for channel, x in own}},
            evidence=self._evidence.copy(),
            crossings_ns=tuple(self._crossings),
            over=self._is_over,
            over_ns=self._over_ns,
        )

    def shown(self, stuck: tuple[str, ...]) -> dict[str, Any]:
        """Return the alert's fields. stuck: channels known to be stuck just now."""
        tally = self.tally()
        suspects = ranked(tally)
        first = suspects[0].channel if suspects else ""
        place = {channel.name: i for i, channel in enumerate(self._scorer.instruments)}
        beside = self._rules.beside[place[first]] if first in place else ()
        likely = STUCK if first in stuck or "" in stuck else likely_kind(tally.nats)
        channels = {channel.name: channel for channel in self._scorer.instruments}
        return {
            "likely": likely,
            "suspects": suspects,
            "channels": tuple(one.channel for one in suspects),
            "neighbours": beside,
            "sentence": scored_text(
                self._batch.source,
                likely,
                suspects,
                beside,
                channels,
                [name for name in stuck if name not in ("", first)],
            ),
            "worst_ns": self._worst_ns,
            "worst_excess": self._worst,
            "n_records": self._n_records,
            "n_over": self._n_over,
            "n_cycles": self._n_cycles,
            "chattering": self._chattering,
        }


def evidence_at(scorer: Scorer, batch: Batch, row: int, i: int, nats: float) -> Evidence:
    """Return what one record says against instrument i, `nats` beyond its usual."""
    scores = batch.scores
    channel = scorer.instruments[i]
    if int(scores.suspect[row]) == i and not channel.is_state:
        low, high, best = (
            float(a[row]) for a in (scores.expected_low, scores.expected_high, scores.expected_best)
        )
        words = None
    else:
        expected = scorer.expected(batch.source, scores.rows[row], i)
        low, high, best, words = expected.low, expected.high, expected.best, expected.words
    suspect = Suspect(
        channel=channel.name,
        unit=channel.unit,
        reading=_reading(float(batch.values[row, i]), channel),
        low=_closed(low),
        high=_closed(high),
        best=_closed(best),
        words=words,
        time_ns=int(batch.times_ns[row]),
        share=0.0,
    )
    return Evidence(nats, suspect)


def ranked(tally: Tally) -> tuple[Suspect, ...]:
    """Return the suspects, the likeliest first."""
    positive = {name: nats for name, nats in tally.nats.items() if nats > 0}
    total = sum(positive.values())
    found = []
    for name in sorted(positive, key=lambda name: (-positive[name], name))[:N_SUSPECTS]:
        share = positive[name] / total
        if name in tally.evidence:
            found.append(replace(tally.evidence[name].suspect, share=share))
        else:
            found.append(Suspect(name, "", None, None, None, None, None, tally.over_ns, share))
    return tuple(found)


def likely_kind(nats: Mapping[str, float]) -> str:
    """Return INSTRUMENT or SEVERAL from the channels' sums."""
    most = sorted(nats.values(), reverse=True)[:2]
    return INSTRUMENT if len(most) < 2 or most[1] < APART_SHARE * most[0] else SEVERAL


def _reading(value: float, channel: Channel) -> float | str | None:
    if not np.isfinite(value):
        return None
    if not channel.is_state:
        return value
    number = int(value)
    return channel.words[number] if number < len(channel.words) else "a word never seen"


def _closed(bound: float) -> float | None:
    return bound if np.isfinite(bound) else None
