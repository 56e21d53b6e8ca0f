"""Old records go by age and by size, a piece at a time, and what went is on record.

Alerts go by age alone: they are few, and what people said about them is dear.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable

from service.logs import log_event
from service.settings import StoreSettings
from service.store.database import Database
from service.store.prune import (
    give_back,
    older_than,
    prune_actions,
    prune_alerts,
    prune_piece,
    write_pruned,
)
from service.times import format_time
from service.writer import Writer

# Between pieces waiting requests are stored; a piece of this size takes some ten ms.
_N_PIECE = 2000
# Some SQL has room for a thousand values in a list.
_N_ALERTS = 500
_DAY_NS = 86_400 * 1_000_000_000
# How much of the store goes at once when it is over its size.
_SIZE_SHARE = 0.05


class Retention:
    """Prunes through the writer, so that there is still only one."""

    def __init__(
        self,
        database: Database,
        writer: Writer,
        settings: StoreSettings,
        clock_ns: Callable[[], int],
    ) -> None:
        self.database, self.writer, self.settings = database, writer, settings
        self.clock_ns = clock_ns

    async def prune(self) -> None:
        """Take out what is too old, then the oldest while the store is too large."""
        before_ns = self.clock_ns() - int(self.settings.keep_days * _DAY_NS)
        await self._prune_before(before_ns, "age")
        await self._prune_alerts()
        if not self.settings.keep_mb:
            return
        limit = self.settings.keep_mb * 1e6
        size = await asyncio.to_thread(self.database.n_bytes_used)
        if size is None or size <= limit:
            return
        share = min(1.0, (size - limit) / size + _SIZE_SHARE)
        cut = await asyncio.to_thread(self._oldest_share, share)
        if cut is not None:
            await self._prune_before(cut, "size")

    async def _prune_before(self, before_ns: int, reason: str) -> None:
        n_pruned = 0
        while True:
            done = await self.writer.errand(lambda c: prune_piece(c, before_ns, _N_PIECE))
            assert isinstance(done, int)
            n_pruned += done
            if done < _N_PIECE:
                break
        if n_pruned:
            now_ns = self.clock_ns()
            await self.writer.errand(lambda c: write_pruned(c, now_ns, reason, before_ns, n_pruned))
            log_event(
                "pruned", reason=reason, before=format_time(max(before_ns, 0)), n_records=n_pruned
            )
            await self.writer.errand(give_back)

    async def _prune_alerts(self) -> None:
        # A night that still has a record must know whether an alert stood over it.
        days = max(self.settings.keep_alerts_days, self.settings.keep_days)
        before_ns = self.clock_ns() - int(days * _DAY_NS)
        n_alerts = n_actions = 0
        while True:
            done = await self.writer.errand(lambda c: prune_alerts(c, before_ns, _N_ALERTS))
            assert isinstance(done, tuple)
            n_alerts, n_actions = n_alerts + done[0], n_actions + done[1]
            if done[0] < _N_ALERTS:
                break
        done = await self.writer.errand(lambda c: prune_actions(c, before_ns))
        assert isinstance(done, int)
        n_actions += done
        if n_alerts or n_actions:
            now_ns, counts = self.clock_ns(), {"n_alerts": n_alerts, "n_actions": n_actions}
            await self.writer.errand(
                lambda c: write_pruned(c, now_ns, "age", before_ns, 0, **counts)
            )
            log_event("pruned", reason="age", before=format_time(max(before_ns, 0)), **counts)

    def _oldest_share(self, share: float) -> int | None:
        with self.database.read.connect() as connection:
            return older_than(connection, share)
