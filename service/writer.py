"""One writer: waiting batches are stored together, and each request awaits its commit.

A thread takes every batch that waits, scores and inserts them in one transaction and
commits once. While the disk is busy the next batches gather, so the cost of a commit is
shared by all that came meanwhile; and it waits a moment for those that are on their way.
Nothing is answered before its commit is on disk.
"""

from __future__ import annotations

import asyncio
import threading
import time
from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import groupby
from typing import Any, TypeVar

import sqlalchemy as sa

from service.logs import log_event
from service.metrics import Metrics
from service.pipeline import AlertSink, GroupScorer, Job, Outcome
from service.problems import Problem
from service.sheet import Sheet
from service.store.database import Database
from service.store.group import Group

T = TypeVar("T")

# Records of one transaction: more would make its first request wait for the last one's scores.
MAX_GROUP_RECORDS = 8192
# How long a group waits, once, where more requests are being answered than wait here: they will
# be here soon, or their clients send the next. 4 to 32 connections are served 10 to 25 % faster by
# it and cost 15 to 30 % less processor time; one alone never waits.
GATHER_S = 0.0002


@dataclass(slots=True)
class _Waiting:
    job: Job
    done: asyncio.Future[Any]
    n_records: int


@dataclass(slots=True)
class _Errand:
    """Work for the writer's connection that is no record, for example pruning."""

    work: Callable[[sa.Connection], object] | None
    done: asyncio.Future[Any]
    n_records: int = 0
    # Work that changes sources, as records do.
    on_group: Callable[[Group], object] | None = None


class Writer:
    """Owns the one connection that writes.

    n_waiting_max: records that may wait before more are refused; the queue is the memory
    that overload would fill. n_requests: how many requests are being answered just now, set by
    whoever knows.
    """

    def __init__(
        self,
        database: Database,
        metrics: Metrics,
        sink: AlertSink,
        *,
        n_waiting_max: int,
        n_sources_max: int,
        clock_ns: Callable[[], int] = time.time_ns,
    ) -> None:
        self.database, self.metrics, self.sink = database, metrics, sink
        self.n_waiting_max, self.n_sources_max = n_waiting_max, n_sources_max
        self.clock_ns = clock_ns
        self.n_requests: Callable[[], int] = lambda: 0
        self._waiting: deque[_Waiting | _Errand] = deque()
        self._n_waiting = 0
        self._bell = threading.Condition()
        self._stopping = False
        self._thread = threading.Thread(target=self._run, name="writer", daemon=True)
        self._loop: asyncio.AbstractEventLoop | None = None
        self._connection: sa.Connection | None = None

    @property
    def n_waiting(self) -> int:
        """Records that wait for their commit."""
        return self._n_waiting

    @property
    def alive(self) -> bool:
        """Whether the thread runs."""
        return self._thread.is_alive()

    def start(self, loop: asyncio.AbstractEventLoop) -> None:
        """Start the thread; futures are answered on this loop."""
        self._loop = loop
        self._thread.start()

    def submit(self, job: Job) -> asyncio.Future[Outcome]:
        """Return a future that is done when the batch is durable; raises Problem.

        Called on the loop, in the order in which batches were parsed.
        """
        n_records = len(job.batch.sources)
        if self._n_waiting and self._n_waiting + n_records > self.n_waiting_max:
            raise Problem(
                "overload",
                f"{self._n_waiting} records wait to be stored; at most {self.n_waiting_max} may",
            )
        done: asyncio.Future[Outcome] = asyncio.get_running_loop().create_future()
        self._put(_Waiting(job, done, n_records))
        return done

    def errand(self, work: Callable[[sa.Connection], object]) -> asyncio.Future[object]:
        """Run some work in a transaction of its own between two groups."""
        done: asyncio.Future[object] = asyncio.get_running_loop().create_future()
        self._put(_Errand(work, done))
        return done

    def act(self, work: Callable[[Group], T]) -> asyncio.Future[T]:
        """Run some work that changes sources or alerts in a transaction of its own.

        A Problem that it raises is what the future raises, and nothing is changed then.
        """
        done: asyncio.Future[T] = asyncio.get_running_loop().create_future()
        self._put(_Errand(None, done, on_group=work))
        return done

    def _put(self, entry: _Waiting | _Errand) -> None:
        with self._bell:
            if self._stopping:
                raise Problem("store-away", "the service is stopping")
            self._n_waiting += entry.n_records
            self._waiting.append(entry)
            self._bell.notify()

    def stop(self) -> None:
        """Store what waits, then end the thread; may be called twice."""
        with self._bell:
            self._stopping = True
            self._bell.notify()
        if self._thread.is_alive():
            self._thread.join()

    def _run(self) -> None:
        while True:
            with self._bell:
                while not self._waiting and not self._stopping:
                    self._bell.wait()
                if not self._waiting:
                    break
                more_come = len(self._waiting) < self.n_requests()
            if more_come:
                time.sleep(GATHER_S)
            with self._bell:
                entries = self._take()
            if isinstance(entries, _Errand):
                self._do_errand(entries)
            else:
                self._store(entries)
            # What waits for the next bell must not keep the last batches and their model.
            del entries
        self._drop_connection()

    def _take(self) -> list[_Waiting] | _Errand:
        group: list[_Waiting] = []
        n_records = 0
        while self._waiting:
            entry = self._waiting[0]
            if isinstance(entry, _Errand):
                if not group:
                    self._waiting.popleft()
                    return entry
                break
            if group and n_records + entry.n_records > MAX_GROUP_RECORDS:
                break
            self._waiting.popleft()
            group.append(entry)
            n_records += entry.n_records
        return group

    def _store(self, entries: Sequence[_Waiting]) -> None:
        results: list[Outcome | Problem]
        try:
            results = list(self._transact([entry.job for entry in entries]))
        except Exception as error:  # noqa: BLE001 - whatever it is, the requests must be answered
            problem = self._refusal(error)
            # A fault in one batch must not take the others with it; a full disk takes all.
            if problem.kind == "internal" and len(entries) > 1:
                for entry in entries:
                    self._store([entry])
                return
            results = [problem] * len(entries)
        with self._bell:
            self._n_waiting -= sum(entry.n_records for entry in entries)
        self._answer(_deliver, entries, results)

    def _transact(self, jobs: Sequence[Job]) -> Sequence[Outcome]:
        started = time.perf_counter()
        group = self.database.begin(self._connected(), self.n_sources_max)
        outcomes: list[Outcome] = []
        sheets: list[Sheet] = []
        try:
            # Batches parsed before a new model was published go through the model they
            # were parsed for; the order of the queue is the order of the models.
            for _, same in groupby(jobs, key=lambda job: id(job.engine)):
                part = list(same)
                scorer = GroupScorer(group, part[0].engine, part, self.clock_ns())
                outcomes += scorer.run(self.sink)
                sheets.append(scorer.sheet)
            scored = time.perf_counter()
            group.commit()
        except BaseException:
            self._rollback(group.rollback)
            raise
        now = time.perf_counter()
        self.metrics.group_done(jobs, sheets, scored - started, now - scored)
        return outcomes

    def _do_errand(self, errand: _Errand) -> None:
        result: object
        try:
            connection = self._connected()
            if errand.on_group is not None:
                result = self._do_on_group(connection, errand.on_group)
            else:
                assert errand.work is not None
                with connection.begin():
                    result = errand.work(connection)
        except Exception as error:  # noqa: BLE001 - handed to whoever asked
            result = self._refusal(error)
        self._answer(_deliver, [errand], [result])

    def _do_on_group(self, connection: sa.Connection, work: Callable[[Group], object]) -> object:
        group = self.database.begin(connection, self.n_sources_max)
        try:
            result = work(group)
            group.commit()
        except BaseException:
            self._rollback(group.rollback)
            raise
        return result

    def _answer(self, deliver: Callable[..., None], entries: object, results: object) -> None:
        assert self._loop is not None
        try:
            self._loop.call_soon_threadsafe(deliver, entries, results)
        except RuntimeError:
            # The loop is closed: nobody waits for an answer any more.
            log_event("answers_dropped")

    def _connected(self) -> sa.Connection:
        if self._connection is None or self._connection.invalidated:
            self._drop_connection()
            self._connection = self.database.write.connect()
        return self._connection

    def _drop_connection(self) -> None:
        if self._connection is not None:
            self._rollback(self._connection.close)
            self._connection = None

    def _rollback(self, undo: Callable[[], None]) -> None:
        try:
            undo()
        except sa.exc.DBAPIError:
            # The connection is gone, and the transaction with it.
            if self._connection is not None:
                self._connection.invalidate()
                self._connection = None

    def _refusal(self, error: Exception) -> Problem:
        if isinstance(error, Problem):
            return error
        self.metrics.store_failures += 1
        log_event("store_failed", error=type(error).__name__, detail=str(error)[:300])
        if isinstance(error, sa.exc.DBAPIError):
            text = str(error.orig).lower()
            if "full" in text or "no space" in text or "disk i/o" in text:
                return Problem("store-full", "the store has no room for the records")
            if isinstance(error, sa.exc.OperationalError | sa.exc.InterfaceError):
                self._drop_connection()
                return Problem("store-away", "the store did not take the records")
        return Problem("internal", "the records could not be stored")


def _deliver(
    entries: Sequence[_Waiting | _Errand], results: Sequence[Outcome | Problem | object]
) -> None:
    for entry, result in zip(entries, results, strict=True):
        if entry.done.done():
            continue
        if isinstance(result, Exception):
            entry.done.set_exception(result)
        else:
            entry.done.set_result(result)
