"""The hot path: batches in, records stored, standings advanced, outcomes out.

All batches that wait are taken together as one group and one transaction. Rows are
grouped by source and scored in the order of arrival; only rows newer than the standing
and not ahead of the clock move it.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any, Protocol

import numpy as np
import orjson
from numpy.typing import NDArray

from service.engine import Engine, Scored
from service.layout import unpack_readings
from service.parse import Batch
from service.sheet import CONFLICT, KNOWN, NO_ROOM, Sheet
from service.store.group import Group
from service.store.states import SourceState, StoredRecord
from service.store.tables import FLAG_AHEAD, FLAG_LATE, FLAG_NOT_JUDGED

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


@dataclass(frozen=True, slots=True)
class Outcome:
    """What became of one batch: its rows of the group's sheet, from start to before stop."""

    sheet: Sheet
    start: int
    stop: int


@dataclass(frozen=True, slots=True)
class Run:
    """Records of one source in the order of arrival, for an alert sink.

    values: (n, n_channels) as scored, bad readings NaN. scored: of these and of others' records;
    these are its `rows`. heard_ns: when they came, by the server's clock. ahead: (n,) of records
    that moved no standing, which are ahead and not late; None of records that moved it.
    """

    source: SourceState
    engine: Engine
    times_ns: NDArray[np.int64]
    values: NDArray[np.float64]
    scored: Scored
    rows: slice
    heard_ns: int
    ahead: NDArray[np.bool_] | None = None

    @property
    def still(self) -> bool:
        """Whether the records moved no standing."""
        return self.ahead is not None


@dataclass(frozen=True, slots=True)
class _Stretch:
    """Rows of one source that are scored together. still: all of them are late or ahead, and
    move no standing."""

    state: SourceState
    rows: list[int]
    still: bool = False


class AlertSink(Protocol):
    """Takes what the service scored, to make alerts of it.

    Called inside the transaction that stores the records, before the sources' states are
    saved, so that an alert and its records are durable together.
    """

    def take(self, group: Group, runs: Sequence[Run]) -> None:
        """Advance the alerts by these runs; write through the group's connection.

        What the sink remembers of a source it puts into the source's state.
        """


class GroupScorer:
    """Scores and stores one group of batches that were parsed for one engine."""

    def __init__(self, group: Group, engine: Engine, jobs: Sequence[Job], now_ns: int) -> None:
        self.group, self.engine, self.jobs, self.now_ns = group, engine, jobs, now_ns
        self.sheet = Sheet.of(engine, [job.batch for job in jobs])
        self._times: list[int] = self.sheet.times_ns.tolist()
        self.channels = any(job.channels for job in jobs)
        self.kept: list[tuple[SourceState, list[int]]] = []
        self.copies: dict[int, int] = {}
        self.runs: list[Run] = []

    def run(self, sink: AlertSink) -> list[Outcome]:
        """Score, insert, save; the caller commits. Returns an outcome for each job."""
        rows_of: dict[str, list[int]] = {}
        for row, name in enumerate(self.sheet.sources):
            rows_of.setdefault(name, []).append(row)
        states = self.group.sources(list(rows_of))
        turns: list[list[_Stretch]] = []
        for name, rows in rows_of.items():
            state = states.get(name)
            if state is None:
                self.sheet.status[rows] = NO_ROOM
                continue
            fresh = self._fresh(state, rows)
            if fresh:
                self.kept.append((state, fresh))
                for turn, stretch in enumerate(self._stretches(state, fresh)):
                    if turn == len(turns):
                        turns.append([])
                    turns[turn].append(stretch)
        for stretches in turns:
            self._score(stretches)
        self._copy_repeats()
        if self.kept:
            self.sheet.scored.close_open_sides()
            self.group.insert(self._columns())
            sink.take(self.group, self.runs)
            self.group.save([state for state, _ in self.kept])
        return self._split()

    def _fresh(self, state: SourceState, rows: list[int]) -> list[int]:
        """Return the rows that are not stored yet; settle the others."""
        times_list = self._times_of(rows)
        if times_list[0] > state.newest_ns and _is_rising(times_list):
            return rows
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

    def _times_of(self, rows: list[int]) -> list[int]:
        return [self._times[row] for row in rows]

    def _settle_stored(self, row: int, stored: StoredRecord) -> None:
        layout_id = self.group.layout_id(self.engine.name, self.engine.layout)
        same = (
            stored.readings == self.sheet.values[row].tobytes()
            and stored.extra == _pack(self.sheet.extra.get(row))
            if stored.layout_id == layout_id
            else self._stored_readings(stored) == self._given_readings(row)
        )
        if not same:
            self.sheet.status[row] = CONFLICT
            return
        self.sheet.status[row] = KNOWN
        self.sheet.flags[row] = stored.flags
        scored = self.sheet.scored
        scored.surprise[row] = _or_nan(stored.surprise)
        scored.excess[row] = _or_nan(stored.excess)
        scored.sustained[row] = _or_nan(stored.sustained)
        scored.alert[row] = stored.alert
        scored.judged[row] = not stored.flags & FLAG_NOT_JUDGED
        if stored.layout_id == layout_id:
            scored.suspect[row] = stored.suspect
            detail = unpack_detail(stored.suspect_detail)
            scored.suspect_surprise[row], scored.low[row] = detail.surprise, detail.low
            scored.high[row], scored.best[row] = detail.high, detail.best
            if detail.words is not None:
                scored.words[row] = detail.words
        else:
            self.sheet.model_of[row] = self.group.layout_model(stored.layout_id)

    def _settle_twin(self, row: int, first: int) -> None:
        same = self.sheet.values[row].tobytes() == self.sheet.values[first].tobytes()
        if same and self.sheet.extra.get(row) == self.sheet.extra.get(first):
            self.sheet.status[row] = KNOWN
            self.copies[row] = first
        else:
            self.sheet.status[row] = CONFLICT

    def _copy_repeats(self) -> None:
        scored = self.sheet.scored
        for row, first in self.copies.items():
            for name in _ARRAYS:
                array = getattr(scored, name)
                array[row] = array[first]
            self.sheet.flags[row] = self.sheet.flags[first]
            if first in scored.words:
                scored.words[row] = scored.words[first]
            if first in scored.every:
                scored.every[row] = scored.every[first]

    def _stretches(self, state: SourceState, rows: list[int]) -> list[_Stretch]:
        """Return a source's fresh rows in stretches that move its standing, or do not."""
        times_list, last_ns = self._times_of(rows), state.last_ns
        newest_ns, ahead_from_ns = max(times_list), self.now_ns + AHEAD_NS
        state.newest_ns = max(state.newest_ns, newest_ns)
        state.n_records += len(rows)
        if times_list[0] > last_ns and newest_ns <= ahead_from_ns and _is_rising(times_list):
            return [_Stretch(state, rows)]
        times = self.sheet.times_ns[rows]
        ahead = times > ahead_from_ns
        moving = np.where(ahead, last_ns, times)
        newest_before = np.maximum.accumulate(np.concatenate([[last_ns], moving[:-1]]))
        still = ahead | (times <= newest_before)
        borders = np.flatnonzero(np.diff(still)) + 1
        return [
            _Stretch(state, [rows[i] for i in part.tolist()], bool(still[part[0]]))
            for part in np.split(np.arange(len(rows)), borders)
        ]

    def _score(self, stretches: Sequence[_Stretch]) -> None:
        """Score one stretch each of some sources and advance their states."""
        out, engine = self.sheet, self.engine
        rows = [row for one in stretches for row in one.rows]
        start = np.cumsum([0, *(len(one.rows) for one in stretches)])
        # Rows that came in one piece need no copy.
        whole = rows == list(range(rows[0], rows[0] + len(rows)))
        at: Any = slice(rows[0], rows[0] + len(rows)) if whole else np.array(rows)
        times, used = out.times_ns[at], out.values[at]
        if out.bad is not None:
            used = np.where(out.bad[at], np.nan, used)
        for one in stretches:
            if one.state.live is None or one.state.model != engine.name:
                one.state.live = engine.standing_from(one.state.standing)
        scored, lives = engine.score(
            [one.state.name for one in stretches],
            start, times, used, [one.state.live for one in stretches], self.channels,
        )  # fmt: skip
        out.scored.put(at, scored, rows)
        if not scored.judged.all():
            out.flags[at] += (~scored.judged * FLAG_NOT_JUDGED).astype(np.int16)
        alerts, times_list = scored.alert.tolist(), times.tolist()
        excess, sustained = _nullable(scored.excess), _nullable(scored.sustained)
        for one, live, first, stop in zip(
            stretches, lives, start[:-1].tolist(), start[1:].tolist(), strict=True
        ):
            part, state = slice(first, stop), one.state
            ahead = None
            if one.still:
                ahead = times[part] > self.now_ns + AHEAD_NS
                out.flags[one.rows] += np.where(ahead, FLAG_AHEAD, FLAG_LATE).astype(np.int16)
            self.runs.append(
                Run(state, engine, times[part], used[part], scored, part, self.now_ns, ahead)
            )
            state.n_over_level += sum(map(bool, alerts[part]))
            if one.still:
                continue
            state.live, state.model = live, engine.name
            state.standing = engine.standing_bytes(live)
            state.last_ns = times_list[stop - 1]
            state.excess, state.sustained = excess[stop - 1], sustained[stop - 1]
            state.alert = alerts[stop - 1]

    def _columns(self) -> list[Sequence[Any]]:
        """Return what the store is to add, by RECORD_COLUMNS, source by source."""
        out, scored, engine = self.sheet, self.sheet.scored, self.engine
        order = [row for _, rows in self.kept for row in rows]
        at, n = np.array(order), len(order)
        detail = np.column_stack(
            [scored.suspect_surprise[at], scored.low[at], scored.high[at], scored.best[at]]
        ).tobytes()
        details = [detail[i : i + 32] for i in range(0, 32 * n, 32)]
        if scored.words:
            details = [
                pack_words(part, scored.words[row]) if row in scored.words else part
                for part, row in zip(details, order, strict=True)
            ]
        width, readings = self.sheet.values.shape[1] * 8, self.sheet.values[at].tobytes()
        requests = self._requests()
        return [
            [state.id for state, rows in self.kept for _ in rows],
            out.times_ns[at].tolist(),
            [self.now_ns] * n,
            [requests[row] for row in order],
            [self.group.layout_id(engine.name, engine.layout)] * n,
            _nullable(scored.surprise[at]),
            _nullable(scored.excess[at]),
            _nullable(scored.sustained[at]),
            scored.suspect[at].tolist(),
            scored.alert[at].tolist(),
            out.flags[at].tolist(),
            details,
            [readings[i : i + width] for i in range(0, width * n, width)],
            [_pack(out.extra.get(row)) for row in order] if out.extra else [None] * n,
        ]

    def _requests(self) -> list[str]:
        if len(self.jobs) == 1:
            return [self.jobs[0].request] * len(self.sheet.sources)
        return [job.request for job in self.jobs for _ in job.batch.sources]

    def _stored_readings(self, stored: StoredRecord) -> dict[str, Any]:
        channels = orjson.loads(self.group.layout_channels(stored.layout_id))
        extra = orjson.loads(stored.extra) if stored.extra else None
        return _present(unpack_readings(stored.readings, extra, channels))

    def _given_readings(self, row: int) -> dict[str, Any]:
        channels = self.engine.layout.as_json()
        return _present(
            unpack_readings(self.sheet.values[row].tobytes(), self.sheet.extra.get(row), channels)
        )

    def _split(self) -> list[Outcome]:
        outcomes, start = [], 0
        for job in self.jobs:
            stop = start + len(job.batch.sources)
            outcomes.append(Outcome(self.sheet, start, stop))
            start = stop
        return outcomes


_ARRAYS = (
    "surprise", "excess", "sustained", "suspect", "suspect_surprise", "low", "high", "best",
    "alert", "judged",
)  # fmt: skip


def _is_rising(times: list[int]) -> bool:
    return all(earlier < later for earlier, later in pairwise(times))


def _present(readings: dict[str, Any]) -> dict[str, Any]:
    """Return readings without the missing ones, which one model lists and another does not."""
    return {name: value for name, value in readings.items() if value is not None}


def _pack(extra: dict[str, Any] | None) -> bytes | None:
    # Sorted, so that the same readings in another order are the same bytes.
    return orjson.dumps(extra, option=orjson.OPT_SORT_KEYS) if extra else None


@dataclass(frozen=True, slots=True)
class Detail:
    """What is stored of a suspect: nats, and what it should have read, NaN = open or none."""

    surprise: float = math.nan
    low: float = math.nan
    high: float = math.nan
    best: float = math.nan
    words: dict[str, float] | None = None


def pack_words(detail: bytes, words: Mapping[str, float]) -> bytes:
    """Return a state's detail: its surprise as before, then its words as JSON."""
    text = orjson.dumps(words)
    # Three float64 have this length too; a space more tells them apart.
    return detail[:8] + (text + b" " if len(text) == _N_RANGE_BYTES else text)


def unpack_detail(stored: bytes | None) -> Detail:
    """Return the suspect's detail as it was stored."""
    if not stored:
        return Detail()
    if len(stored) == 8 + _N_RANGE_BYTES:
        return Detail(*np.frombuffer(stored, dtype=np.float64).tolist())
    surprise = float(np.frombuffer(stored[:8], dtype=np.float64)[0])
    return Detail(surprise, words=orjson.loads(stored[8:]))


_N_RANGE_BYTES = 24


def _nullable(values: NDArray[np.float64]) -> list[float | None]:
    if np.isnan(values).any():
        return [None if value != value else value for value in values.tolist()]
    plain: list[float | None] = values.tolist()
    return plain


def _or_nan(value: float | None) -> float:
    return float("nan") if value is None else value
