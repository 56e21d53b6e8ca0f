"""The hot path: batches in, records stored, standings advanced, outcomes out.

All batches that wait are taken together as one group and one transaction. Rows are
grouped by source and scored in the order of arrival; only rows newer than the standing
and not ahead of the clock move it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
import orjson
from numpy.typing import NDArray

from service.engine import Engine, Scored
from service.layout import unpack_readings
from service.parse import Batch
from service.store.group import Group
from service.store.states import SourceState, StoredRecord
from service.store.tables import FLAG_AHEAD, FLAG_LATE, FLAG_NOT_JUDGED

STORED, KNOWN, CONFLICT, NO_ROOM = 0, 1, 2, 3
# A record further ahead of the server's clock than this is scored and leaves the standing
# alone: one machine with a wrong clock must not make all that follows late.
AHEAD_NS = 5 * 60 * 1_000_000_000


@dataclass(slots=True)
class Job:
    """One batch on its way through the writer."""

    batch: Batch
    engine: Engine
    request: str
    channels: bool = False


@dataclass(slots=True)
class Outcome:
    """What became of a batch's rows; arrays are (n,).

    status: STORED, KNOWN, CONFLICT or NO_ROOM. flags: FLAG_* of the store.
    model_of: the model's name of known rows that another model scored.
    """

    scored: Scored
    status: NDArray[np.uint8]
    flags: NDArray[np.int16]
    model_of: dict[int, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Run:
    """Records of one source that moved its standing, in order, for an alert sink."""

    source: SourceState
    engine: Engine
    times_ns: NDArray[np.int64]
    scored: Scored


class AlertSink(Protocol):
    """Takes what the service scored, to make alerts of it.

    Called inside the transaction that stores the records, so that an alert and its
    records are durable together; late and ahead records are not in it.
    """

    def take(self, group: Group, runs: Sequence[Run]) -> None:
        """Advance the alerts by these runs; write through the group's connection."""


class NoAlerts:
    """Alerts are then just the stored records over a level."""

    def take(self, group: Group, runs: Sequence[Run]) -> None:
        """Do nothing."""


class GroupScorer:
    """Scores and stores one group of batches that were parsed for one engine."""

    def __init__(self, group: Group, engine: Engine, jobs: Sequence[Job], now_ns: int) -> None:
        self.group, self.engine, self.jobs, self.now_ns = group, engine, jobs, now_ns
        batches = [job.batch for job in jobs]
        self.sources = [name for batch in batches for name in batch.sources]
        n = len(self.sources)
        if len(batches) == 1:
            self.times_ns, self.values = batches[0].times_ns, batches[0].values
        else:
            self.times_ns = np.concatenate([batch.times_ns for batch in batches])
            self.values = np.concatenate([batch.values for batch in batches])
        self.bad = _joined_bad(batches)
        self.channels = any(job.channels for job in jobs)
        self.outcome = Outcome(
            Scored.empty(n), np.zeros(n, dtype=np.uint8), np.zeros(n, dtype=np.int16)
        )
        self.extra: dict[int, dict[str, Any]] = {}
        start = 0
        for batch in batches:
            for row, extra in batch.extra.items():
                self.extra[start + row] = extra
            start += len(batch.sources)
        self.kept: list[tuple[SourceState, list[int]]] = []
        self.copies: dict[int, int] = {}
        self.runs: list[Run] = []

    def run(self, sink: AlertSink) -> list[Outcome]:
        """Score, insert, save; the caller commits. Returns an outcome for each job."""
        rows_of: dict[str, list[int]] = {}
        for row, name in enumerate(self.sources):
            rows_of.setdefault(name, []).append(row)
        states = self.group.sources(list(rows_of))
        for name, rows in rows_of.items():
            state = states.get(name)
            if state is None:
                self.outcome.status[rows] = NO_ROOM
                continue
            fresh = self._fresh(state, rows)
            if fresh:
                self._score(state, fresh)
                self.kept.append((state, fresh))
        self._copy_repeats()
        if self.kept:
            self.group.insert(self._rows())
            self.group.save([state for state, _ in self.kept])
            sink.take(self.group, self.runs)
        return self._split()

    def _fresh(self, state: SourceState, rows: list[int]) -> list[int]:
        """Return the rows that are not stored yet; settle the others."""
        times = self.times_ns[rows]
        if times[0] > state.newest_ns and (len(rows) == 1 or bool((np.diff(times) > 0).all())):
            return rows
        times_list = times.tolist()
        stored = self.group.find(state, [t for t in times_list if t <= state.newest_ns])
        first_at: dict[int, int] = {}
        fresh: list[int] = []
        for row, time_ns in zip(rows, times_list, strict=True):
            if time_ns in stored:
                self._settle_stored(row, stored[time_ns])
            elif time_ns in first_at:
                self._settle_twin(row, first_at[time_ns])
            else:
                first_at[time_ns] = row
                fresh.append(row)
        return fresh

    def _settle_stored(self, row: int, stored: StoredRecord) -> None:
        layout_id = self._layout_id()
        same = (
            stored.readings == self.values[row].tobytes()
            and stored.extra == _pack(self.extra.get(row))
            if stored.layout_id == layout_id
            else self._stored_readings(stored) == self._given_readings(row)
        )
        if not same:
            self.outcome.status[row] = CONFLICT
            return
        self.outcome.status[row] = KNOWN
        self.outcome.flags[row] = stored.flags
        scored = self.outcome.scored
        scored.surprise[row] = _or_nan(stored.surprise)
        scored.excess[row] = _or_nan(stored.excess)
        scored.sustained[row] = _or_nan(stored.sustained)
        scored.alert[row] = stored.alert
        scored.judged[row] = not stored.flags & FLAG_NOT_JUDGED
        if stored.layout_id == layout_id:
            scored.suspect[row] = stored.suspect
            detail = unpack_detail(stored.suspect_detail)
            scored.suspect_surprise[row], scored.low[row] = detail[0], detail[1]
            scored.high[row], scored.best[row] = detail[2], detail[3]
        else:
            self.outcome.model_of[row] = self.group.layout_model(stored.layout_id)

    def _settle_twin(self, row: int, first: int) -> None:
        same = self.values[row].tobytes() == self.values[first].tobytes()
        if same and self.extra.get(row) == self.extra.get(first):
            self.outcome.status[row] = KNOWN
            self.copies[row] = first
        else:
            self.outcome.status[row] = CONFLICT

    def _copy_repeats(self) -> None:
        scored = self.outcome.scored
        for row, first in self.copies.items():
            for name in _ARRAYS:
                array = getattr(scored, name)
                array[row] = array[first]
            self.outcome.flags[row] = self.outcome.flags[first]
            if first in scored.words:
                scored.words[row] = scored.words[first]
            if first in scored.every:
                scored.every[row] = scored.every[first]

    def _score(self, state: SourceState, rows: list[int]) -> None:
        """Score a source's fresh rows and advance its state."""
        times = self.times_ns[rows]
        ahead = times > self.now_ns + AHEAD_NS
        moving = np.where(ahead, state.last_ns, times)
        newest_before = np.maximum.accumulate(np.concatenate([[state.last_ns], moving[:-1]]))
        late = ~ahead & (times <= newest_before)
        if state.live is None or state.model != self.engine.name:
            state.live = self.engine.standing_from(state.standing)
        still = ahead | late
        if not still.any():
            self._score_run(state, rows, moves=True)
        else:
            borders = np.flatnonzero(np.diff(still)) + 1
            for part in np.split(np.arange(len(rows)), borders):
                self._score_run(
                    state, [rows[i] for i in part.tolist()], moves=not bool(still[part[0]])
                )
            self.outcome.flags[rows] += (late * FLAG_LATE + ahead * FLAG_AHEAD).astype(np.int16)
        state.newest_ns = max(state.newest_ns, int(times.max()))
        state.n_records += len(rows)
        state.n_over_level += int(np.count_nonzero(self.outcome.scored.alert[rows]))

    def _score_run(self, state: SourceState, rows: list[int], *, moves: bool) -> None:
        # One source alone in its group, or one that came in one piece, needs no copy.
        whole = rows[-1] - rows[0] + 1 == len(rows)
        at: Any = slice(rows[0], rows[-1] + 1) if whole else np.array(rows)
        times = self.times_ns[at]
        bad = None if self.bad is None else self.bad[at]
        scored, live = self.engine.score(
            state.name, times, self.values[at], state.live, bad, self.channels
        )
        out = self.outcome
        out.scored.put(at, scored, rows)
        if not scored.judged.all():
            out.flags[at] += (~scored.judged * FLAG_NOT_JUDGED).astype(np.int16)
        if not moves:
            return
        state.live, state.model = live, self.engine.name
        state.standing = self.engine.standing_bytes(live)
        state.last_ns = int(times[-1])
        state.excess = _or_none(scored.excess[-1])
        state.sustained = _or_none(scored.sustained[-1])
        state.alert = int(scored.alert[-1])
        self.runs.append(Run(state, self.engine, times, scored))

    def _rows(self) -> list[tuple[Any, ...]]:
        """Return the rows for the store, source by source."""
        out, scored = self.outcome, self.outcome.scored
        order = [row for _, rows in self.kept for row in rows]
        ids = [state.id for state, rows in self.kept for _ in rows]
        requests = self._requests()
        detail = np.column_stack(
            [scored.suspect_surprise[order], scored.low[order], scored.high[order],
             scored.best[order]]
        ).tobytes()  # fmt: skip
        readings = self.values[order].tobytes()
        width = self.values.shape[1] * 8
        layout_id = self._layout_id()
        extra = [_pack(self.extra.get(row)) for row in order] if self.extra else [None] * len(order)
        return list(
            zip(
                ids,
                self.times_ns[order].tolist(),
                [self.now_ns] * len(order),
                [requests[row] for row in order],
                [layout_id] * len(order),
                _nullable(scored.surprise[order]),
                _nullable(scored.excess[order]),
                _nullable(scored.sustained[order]),
                scored.suspect[order].tolist(),
                scored.alert[order].tolist(),
                out.flags[order].tolist(),
                [detail[i : i + 32] for i in range(0, 32 * len(order), 32)],
                [readings[i : i + width] for i in range(0, width * len(order), width)],
                extra,
                strict=True,
            )
        )

    def _requests(self) -> list[str]:
        if len(self.jobs) == 1:
            return [self.jobs[0].request] * len(self.sources)
        return [job.request for job in self.jobs for _ in job.batch.sources]

    def _layout_id(self) -> int:
        return self.group.layout_id(self.engine.name, self.engine.layout)

    def _stored_readings(self, stored: StoredRecord) -> dict[str, Any]:
        channels = orjson.loads(self.group.layout_channels(stored.layout_id))
        extra = orjson.loads(stored.extra) if stored.extra else None
        return _present(unpack_readings(stored.readings, extra, channels))

    def _given_readings(self, row: int) -> dict[str, Any]:
        channels = self.engine.layout.as_json()
        return _present(unpack_readings(self.values[row].tobytes(), self.extra.get(row), channels))

    def _split(self) -> list[Outcome]:
        if len(self.jobs) == 1:
            return [self.outcome]
        outcomes, start = [], 0
        for job in self.jobs:
            stop = start + len(job.batch.sources)
            outcomes.append(_slice(self.outcome, start, stop))
            start = stop
        return outcomes


_ARRAYS = (
    "surprise", "excess", "sustained", "suspect", "suspect_surprise", "low", "high", "best",
    "alert", "judged",
)  # fmt: skip


def _slice(outcome: Outcome, start: int, stop: int) -> Outcome:
    scored = outcome.scored
    part = Scored(**{name: getattr(scored, name)[start:stop] for name in _ARRAYS})
    rows = range(start, stop)
    if scored.words:
        part.words = {row - start: scored.words[row] for row in rows if row in scored.words}
    if scored.every:
        part.every = {row - start: scored.every[row] for row in rows if row in scored.every}
    models = outcome.model_of
    return Outcome(
        part,
        outcome.status[start:stop],
        outcome.flags[start:stop],
        {row - start: models[row] for row in rows if row in models} if models else {},
    )


def _joined_bad(batches: Sequence[Batch]) -> NDArray[np.bool_] | None:
    if all(batch.bad is None for batch in batches):
        return None
    return np.concatenate(
        [
            batch.bad if batch.bad is not None else np.zeros_like(batch.values, dtype=np.bool_)
            for batch in batches
        ]
    )


def _present(readings: dict[str, Any]) -> dict[str, Any]:
    """Return readings without the missing ones, which one model lists and another does not."""
    return {name: value for name, value in readings.items() if value is not None}


def _pack(extra: dict[str, Any] | None) -> bytes | None:
    # Sorted, so that the same readings in another order are the same bytes.
    return orjson.dumps(extra, option=orjson.OPT_SORT_KEYS) if extra else None


def unpack_detail(stored: bytes | None) -> list[float]:
    """Return surprise, low, high and best of a stored suspect, NaN where open."""
    values: list[float] = np.frombuffer(stored or bytes(0), dtype=np.float64).tolist()
    return values if len(values) == 4 else [float("nan")] * 4


def _nullable(values: NDArray[np.float64]) -> list[float | None]:
    if np.isnan(values).any():
        return [None if value != value else value for value in values.tolist()]
    plain: list[float | None] = values.tolist()
    return plain


def _or_nan(value: float | None) -> float:
    return float("nan") if value is None else value


def _or_none(value: float) -> float | None:
    return None if value != value else float(value)
