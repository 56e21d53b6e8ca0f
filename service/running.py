"""What lives as long as the service: store, writer, model, tokens, background work."""

from __future__ import annotations

import asyncio
import contextlib
import shutil
import time
from collections.abc import Callable, Coroutine
from functools import partial
from pathlib import Path
from typing import Any

import sqlalchemy as sa

from scoring.alerts import KINDS, RAISED
from service.access import Tokens, is_loopback
from service.alerting import N_TICKED, Keeper, Quiet, budget_used, flood_answer
from service.engine import Engine
from service.logs import log_event
from service.metrics import Metrics
from service.pipeline import AlertSink
from service.quick import warm
from service.reload import ModelWatch
from service.retention import Retention
from service.settings import Settings
from service.store.alerts import count_alerts, count_raised
from service.store.database import Database
from service.store.group import Group
from service.writer import Writer

# A token made or ended is in force after this long at most.
_TOKEN_REFRESH_S = 2.0
# Silence is judged in minutes; a look costs a walk over all sources.
_TICK_S = 5.0


class Service:
    """Everything that routes need. Open it, start it on a loop, stop it.

    load: turns a model directory into an engine. clock_ns: wall clock, for tests.
    """

    def __init__(
        self,
        settings: Settings,
        load: Callable[[Path], Engine],
        *,
        sink: AlertSink | None = None,
        clock_ns: Callable[[], int] = time.time_ns,
    ) -> None:
        self.settings = settings
        self.clock_ns = clock_ns
        self.started_s = time.time()
        store = settings.store
        self.database = Database(
            store.data, store.url.get_secret_value(), max_pages=store.max_pages
        )
        self.metrics = Metrics(
            per_source=settings.metrics.per_source, n_sources_max=settings.metrics.n_sources
        )
        self.tokens = Tokens(open_without=is_loopback(settings.server.host))
        self.models = ModelWatch(settings.model.path, load, self.metrics, settings.limits)
        self.keeper = Keeper(settings.alerts, clock_ns())
        self.writer = Writer(
            self.database,
            self.metrics,
            sink or self.keeper,
            n_waiting_max=settings.limits.n_waiting,
            n_sources_max=settings.limits.n_sources,
            clock_ns=clock_ns,
        )
        self.retention = Retention(self.database, self.writer, settings.store, clock_ns)
        self._quiet = Quiet()
        self.n_body_bytes = 0
        self._tasks: list[asyncio.Task[None]] = []

    @property
    def engine(self) -> Engine:
        """The model in use."""
        return self.models.engine

    def open(self) -> None:
        """Take the store and load the model; raises OddbranchError with the reason."""
        self.database.lock()
        try:
            self.database.migrate()
            self.database.load_states()
            with self.database.read.connect() as connection:
                self.tokens.read(connection)
            self.models.load_first()
            warm(self.engine.layout)
        except BaseException:
            self.database.close()
            raise
        for name, last_ns, n_over_level, sustained in self.database.loaded_sources():
            tally = self.metrics.source(name)
            tally.last_ns, tally.n_over_level, tally.sustained = last_ns, n_over_level, sustained
        self.metrics.gauges = self._gauges
        self.metrics.alerts = self._count_alerts
        self.metrics.quiet = self._find_quiet
        self.metrics.engine = lambda: self.models.engine

    async def start(self) -> None:
        """Start the writer and the background work on the running loop."""
        self.writer.start(asyncio.get_running_loop())
        self._every(self.settings.model.reload_s, self.models.look)
        self._every(self.settings.store.prune_s, self.retention.prune)
        self._every(_TOKEN_REFRESH_S, self._read_tokens)
        self._every(_TICK_S, self.tick)
        log_event("started", store=self.database.where, model=self.engine.name)

    async def stop(self) -> None:
        """Store what waits, then close everything."""
        for task in self._tasks:
            task.cancel()
        await asyncio.gather(*self._tasks, return_exceptions=True)
        await asyncio.to_thread(self.writer.stop)
        self.database.close()
        log_event("stopped")

    def _every(self, seconds: float, work: Callable[[], Coroutine[Any, Any, None]]) -> None:
        async def forever() -> None:
            while True:
                await asyncio.sleep(seconds)
                try:
                    await work()
                except Exception as error:  # noqa: BLE001 - the next turn may succeed
                    log_event(
                        "background_failed", error=type(error).__name__, detail=str(error)[:300]
                    )

        self._tasks.append(asyncio.get_running_loop().create_task(forever()))

    async def tick(self) -> None:
        """Let time pass for every source: silence, shelves that end, alerts that stand."""
        engine, now_ns = self.engine, self.clock_ns()
        names = await asyncio.to_thread(self.keeper.due, self.database, engine, now_ns)
        for start in range(0, len(names), N_TICKED):
            piece = names[start : start + N_TICKED]
            await self.writer.act(partial(self._tick_some, engine, piece, now_ns))
        if await asyncio.to_thread(self._is_flood):
            await self.writer.act(lambda group: self.keeper.end_flood(group, now_ns))

    def _is_flood(self) -> bool:
        with self.database.read.connect() as connection:
            return flood_answer(connection) is not None

    def _tick_some(self, engine: Engine, names: list[str], now_ns: int, group: Group) -> int:
        return self.keeper.tick(group, engine, names, now_ns)

    def _count_alerts(self) -> dict[tuple[str, str], int]:
        try:
            with self.database.read.connect() as connection:
                # Shown from the start at zero, so that a rule sees the first one too.
                return dict.fromkeys(((RAISED, kind) for kind in KINDS), 0) | count_alerts(
                    connection
                )
        except sa.exc.DBAPIError:
            # The other numbers are wanted most while the store is away.
            return {}

    def _find_quiet(self) -> Quiet:
        # While the store is away what was quiet stays so: nobody can have changed it.
        with contextlib.suppress(sa.exc.DBAPIError):
            self._quiet = self.keeper.quiet(self.database, self.clock_ns())
        return self._quiet

    def _budget_used(self) -> float | None:
        try:
            with self.database.read.connect() as connection:
                count = partial(count_raised, connection)
                return float(budget_used(count, self.clock_ns()))
        except sa.exc.DBAPIError:
            return None

    async def _read_tokens(self) -> None:
        def read() -> None:
            with self.database.read.connect() as connection:
                self.tokens.read(connection)

        await asyncio.to_thread(read)

    def _gauges(self) -> dict[str, float]:
        gauges = {
            "queue_records": float(self.writer.n_waiting),
            "body_memory_bytes": float(self.n_body_bytes),
            "start_timestamp_seconds": self.started_s,
            "model_published_timestamp_seconds": self.models.published_s,
            "model_refused": float(self.models.refusal is not None),
        }
        used = self._budget_used()
        if used is not None:
            gauges["alarm_budget_alerts_last_day"] = used
        size = self.database.n_bytes()
        if size is not None:
            gauges["store_size_bytes"] = float(size)
        if self.database.is_sqlite:
            free = shutil.disk_usage(self.settings.store.data).free
            gauges["store_free_bytes"] = float(free)
        return gauges
