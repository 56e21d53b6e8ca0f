"""What one night learns from, what it is judged by, and what was left out and why.

Periods labelled real, out of service, under maintenance or before a declared change are
left out of everything. Periods in unlabelled alert are left out of the tables only. What
was labelled nuisance stays. The newest days are kept for the judge.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scoring.channels import ChannelTable
from training.changes import Change, since
from training.history.batch import HistoryBatch
from training.history.exclusions import Exclusion, stray_lines
from training.history.options import HistoryOptions
from training.history.reading import Advances, read_history
from training.history.spool import Spool
from training.history.tally import Tally
from training.nightly_settings import HistoryWanted
from training.stored import Store, Window
from training.stored_alerts import (
    REAL,
    OutOfService,
    StoredAlert,
    in_alert,
    read_alerts,
    read_out_of_service,
)

Ints = NDArray[np.int64]
DAY_NS = 86_400 * 10**9
HOUR_NS = 3600 * 10**9
_EVER_NS = 1 << 62
# From this share of its records in unlabelled alert on, a source is told by name.
LONG_SHARE = 0.25


@dataclass
class Chosen:
    """One night's records; a context manager that removes their files.

    learning: what is learned from. held: the newest days, for the judge.
    window: both together; cut_ns: the judge's days begin after it.
    in_alert: per source (n, 2) first and last times in ns of unlabelled alert.
    alerts: that touch the window. hours: with a record to learn from.
    n_in_alert_of: by source, records to learn from that lie in unlabelled alert.
    stray: a sentence for each excluded period of a file whose source has no record.
    """

    learning: Spool
    held: Spool
    window: Window
    cut_ns: int
    in_alert: dict[str, Ints]
    alerts: tuple[StoredAlert, ...]
    changes: tuple[Change, ...]
    hours: int
    n_in_alert_of: Counter[str]
    stray: tuple[str, ...] = ()

    @property
    def n_in_alert(self) -> int:
        """Records to learn from that lie in unlabelled alert."""
        return self.n_in_alert_of.total()

    @property
    def unlabelled_for_long(self) -> list[str]:
        """Sources of which little is learned, because they are in alert that nobody labels."""
        n = self.learning.report.n_records
        return [s for s, k in sorted(self.n_in_alert_of.items()) if k > LONG_SHARE * n.get(s, 0)]

    @property
    def n_records(self) -> int:
        """Records to learn from."""
        return sum(self.learning.report.n_records.values())

    @property
    def left_out(self) -> Counter[str]:
        """Records left out of everything, by reason, the judge's days included."""
        return self.learning.report.excluded + self.held.report.excluded

    def close(self) -> None:
        """Remove the files; may be called twice."""
        self.learning.close()
        self.held.close()

    def __enter__(self) -> Chosen:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


@dataclass(frozen=True)
class Wanted:
    """What a night may learn from: settings, files and how to read them, periods, changes.

    learned_from: model and source to the first time its member knows, None for one unknown.
    """

    history: HistoryWanted
    judge_days: float
    files: tuple[str, ...] = ()
    options: HistoryOptions = field(default_factory=HistoryOptions)
    exclusions: tuple[Exclusion, ...] = ()
    changes: tuple[Change, ...] = ()
    learned_from: Callable[[str, str], int | None] = lambda _model, _source: None

    def is_of_a_change(self, alert: StoredAlert) -> bool:
        """Return whether an alert tells of a declared change: raised by a model from before."""
        change = since(self.changes, alert.source)
        if change is None or alert.since_ns < change.since_ns:
            return False
        first_ns = self.learned_from(alert.model, alert.source)
        if first_ns is None:
            # That model is no longer kept; what was raised later was no longer of the change.
            return alert.since_ns <= change.declared_ns
        return first_ns < change.since_ns


def choose(
    store: Store,
    table: ChannelTable,
    wanted: Wanted,
    progress: Advances | None = None,
    folder: Path | None = None,
) -> Chosen:
    """Return one night's records, which the caller closes.

    folder: where temporary files go. Raises BadStore for an empty store, BadHistory.
    """
    window = store.newest(wanted.history.days)
    alerts = read_alerts(store, window)
    exclusions = (
        *wanted.exclusions,
        *(change.exclusion for change in wanted.changes),
        *_real(alerts, window.until_ns),
        *_out(read_out_of_service(store)),
    )
    join_ns = round(wanted.history.join_alerts_h * HOUR_NS)
    trouble = [alert for alert in alerts if not wanted.is_of_a_change(alert)]
    stretches = {
        source: np.array(found, dtype=np.int64).reshape(-1, 2)
        for source, found in in_alert(trouble, window.until_ns, join_ns).items()
    }
    cut_ns = window.until_ns - round(wanted.judge_days * DAY_NS)
    both = _Both(len(table.instruments), cut_ns, exclusions, folder)
    try:
        with Tally() as tally:
            for batch in _batches(store, table, window, wanted, tally):
                both.add(batch, tally)
                if progress is not None:
                    progress.advance(batch.n_rows)
            both.finish(tally)
        hours, n_in_alert_of = _look_over(both.learning, stretches)
        # One that sent nothing lately is no slip of the pen.
        sources = set(store.sources())
        for spool in (both.learning, both.held):
            sources |= {*spool.report.n_records, *spool.report.excluded_of}
    except BaseException:
        both.close()
        raise
    return Chosen(
        both.learning, both.held, window, cut_ns, stretches, alerts, wanted.changes, hours,
        n_in_alert_of, tuple(stray_lines(wanted.exclusions, sources)),
    )  # fmt: skip


def _batches(
    store: Store, table: ChannelTable, window: Window, wanted: Wanted, tally: Tally
) -> Iterator[HistoryBatch]:
    if wanted.files:
        yield from read_history(wanted.files, table, wanted.options, tally)
    yield from store.batches(table, window, tally)


def _real(alerts: Sequence[StoredAlert], now_ns: int) -> Iterator[Exclusion]:
    for alert in alerts:
        if alert.label == REAL:
            end_ns = now_ns if alert.until_ns is None else alert.until_ns
            yield Exclusion(alert.source, alert.since_ns, end_ns + 1, "alert labelled real")


def _out(periods: Sequence[OutOfService]) -> Iterator[Exclusion]:
    for one in periods:
        end_ns = _EVER_NS if one.end_ns is None else one.end_ns
        if one.start_ns < end_ns:
            yield Exclusion(one.source, one.start_ns, end_ns, f"out of service: {one.reason}")


class _Both:
    """Two spools filled from one reading: records up to the cut, and those after it."""

    def __init__(
        self, n_values: int, cut_ns: int, exclusions: tuple[Exclusion, ...], folder: Path | None
    ) -> None:
        self._cut_ns, self._exclusions = cut_ns, exclusions
        self.learning, self.held = Spool(n_values, folder), Spool(n_values, folder)

    def add(self, batch: HistoryBatch, tally: Tally) -> None:
        after = batch.times_ns > self._cut_ns
        for spool, mine in ((self.learning, ~after), (self.held, after)):
            if (mine & batch.good).any():
                problem = np.where(mine, batch.problem, "of the other part")
                spool.add(replace(batch, problem=problem), self._exclusions, tally)

    def finish(self, tally: Tally) -> None:
        self.learning.finish(tally)
        self.held.finish(tally)

    def close(self) -> None:
        self.learning.close()
        self.held.close()


def _look_over(spool: Spool, stretches: dict[str, Ints]) -> tuple[int, Counter[str]]:
    """Return how many hours have a record, and by source how many lie in stretches."""
    hours: set[int] = set()
    n_inside: Counter[str] = Counter()
    for source in spool.sources:
        for times_ns, _ in spool.chunks(source):
            hours.update(np.unique(times_ns // HOUR_NS).tolist())
            inside = np.zeros(len(times_ns), dtype=bool)
            for start, end in stretches.get(source, ()):
                inside |= (times_ns >= start) & (times_ns <= end)
            n_inside[source] += int(inside.sum())
    return len(hours), n_inside
