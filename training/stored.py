"""History out of the service's store, read beside the running service.

The store is the SQLite file of a data folder, or PostgreSQL. It is only read, in short
transactions, so that the service is never in the way. What is needed of its tables is
named here and checked before anything is read. Records become batches like those of a
history file, so that spans, words and excluded periods count as they do there.
"""

from __future__ import annotations

import json
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from urllib.parse import quote

import numpy as np
import sqlalchemy as sa
from numpy.typing import NDArray

from scoring.channels import Channel, ChannelTable
from scoring.errors import OddbranchError
from training.history.batch import HistoryBatch
from training.history.exclusions import Exclusion
from training.history.reading import Advances
from training.history.spool import Spool
from training.history.tally import Tally
from training.history.wide import blank_outside_span

Floats = NDArray[np.float64]

DATABASE_FILE = "records.sqlite3"
# What the nightly job relies on; the store may have more.
COLUMNS = {
    "layout": ("id", "channels"),
    "source": ("id", "name", "last_ns"),
    "record": (
        *("id", "source_id", "time_ns", "received_ns", "layout_id", "flags"),
        *("readings", "extra"),
    ),
    "alert": ("source", "kind", "since_ns", "until_ns", "data"),
    "action": ("id", "what", "source", "details"),
}
# Set on a record whose time was ahead of the service's clock: a wrong clock, not history.
FLAG_AHEAD = 2
# A record may be this much ahead and not be called so.
AHEAD_NS = 300 * 10**9
_PAGE_ROWS = 20_000
_BUSY_S = 10

_PAGE = sa.text(
    "SELECT id, source_id, time_ns, layout_id, flags, readings, extra FROM record "
    "WHERE id > :after AND id <= :last ORDER BY id LIMIT :n"
)


class BadStore(OddbranchError):
    """A store that cannot be read, or that holds too little."""

    def __init__(self, place: str, what: str) -> None:
        self.place, self.what = place, what
        super().__init__(f"{place}: {what}")


@dataclass(frozen=True, slots=True)
class Window:
    """Times of records wanted: from since_ns up to and including until_ns."""

    since_ns: int
    until_ns: int


def _sqlite(path: Path) -> sa.Engine:
    if not path.is_file():
        raise BadStore(str(path), "no such file; is this the service's data folder?")
    return sa.create_engine(
        f"sqlite:///file:{quote(str(path.resolve()))}?mode=ro&uri=true",
        connect_args={"timeout": _BUSY_S},
    )


def _postgresql(url: str) -> sa.Engine:
    scheme, _, rest = url.partition("://")
    if scheme not in ("postgresql", "postgres", "postgresql+psycopg") or not rest:
        raise BadStore(
            "store.url",
            "must begin with postgresql://, for example postgresql://oddbranch@localhost/records; "
            "leave it empty for SQLite",
        )
    try:
        return sa.create_engine(
            f"postgresql+psycopg://{rest}",
            connect_args={"connect_timeout": _BUSY_S, "application_name": "oddbranch nightly"},
        )
    except sa.exc.ArgumentError:
        raise BadStore("store.url", "is not a URL that PostgreSQL's driver reads") from None
    except ModuleNotFoundError:
        raise BadStore(
            "store.url", "needs the driver of PostgreSQL: pip install 'oddbranch[postgresql]'"
        ) from None


class Store:
    """A service's store, opened for reading; a context manager by way of `closing`.

    data: its data folder. url: of PostgreSQL, where the service has its records there.
    """

    def __init__(self, data: Path, url: str = "") -> None:
        self.path = data / DATABASE_FILE
        self._engine = _postgresql(url) if url else _sqlite(self.path)
        if url:
            self.path = Path(f"the database {self._engine.url.database} of {self._engine.url.host}")
        try:
            self._check_tables()
        except sa.exc.DatabaseError as error:
            self.close()
            raise BadStore(str(self.path), f"cannot be read: {error.orig}") from None
        except BadStore:
            self.close()
            raise

    def connect(self) -> sa.Connection:
        """Return a connection to read by; close it soon."""
        return self._engine.connect()

    def close(self) -> None:
        """Close every connection; may be called twice."""
        self._engine.dispose()

    def _check_tables(self) -> None:
        inspector = sa.inspect(self._engine)
        there = set(inspector.get_table_names())
        for table, wanted in COLUMNS.items():
            found = {c["name"] for c in inspector.get_columns(table)} if table in there else set()
            missing = [f"{table}.{column}" for column in wanted if column not in found]
            if missing:
                raise BadStore(
                    str(self.path),
                    f"has no {', '.join(missing)}; it is no store of this version's service",
                )

    def newest(self, days: float) -> Window:
        """Return the window of some days up to the newest record; raises BadStore if empty."""
        with self.connect() as connection:
            last_ns = connection.execute(sa.text("SELECT MAX(last_ns) FROM source")).scalar()
        if last_ns is None or last_ns < 0:
            raise BadStore(str(self.path), "holds no records yet")
        return Window(int(last_ns) - round(days * 86_400e9), int(last_ns))

    def n_rows(self, window: Window) -> int:
        """Return about how many records a window holds: the total of a progress bar."""
        _, last = self._ends()
        return last - self._first_received(window.since_ns - AHEAD_NS) + 1

    def batches(self, table: ChannelTable, window: Window, tally: Tally) -> Iterator[HistoryBatch]:
        """Yield the records of a window as batches, in the order they came."""
        names = self._sources()
        codes = {source_id: code for code, source_id in enumerate(names)}
        layouts: dict[int, _Reader] = {}
        for rows in self._pages(window):
            parts: dict[int, list[Any]] = {}
            for row in rows:
                inside = window.since_ns <= row.time_ns <= window.until_ns
                if inside and not row.flags & FLAG_AHEAD:
                    parts.setdefault(row.layout_id, []).append(row)
            for layout_id, part in parts.items():
                if layout_id not in layouts:
                    layouts[layout_id] = _Reader(self._layout(layout_id), table)
                if any(row.source_id not in codes for row in part):
                    # A source that sent its first record while this was read.
                    names = self._sources()
                    codes = {source_id: code for code, source_id in enumerate(names)}
                tally.n_rows += len(part)
                yield HistoryBatch(
                    file=self.path,
                    lines=np.array([row.id for row in part], dtype=np.int64),
                    times_ns=np.array([row.time_ns for row in part], dtype=np.int64),
                    source_codes=np.array([codes[row.source_id] for row in part], dtype=np.int32),
                    source_names=tuple(names.values()),
                    values=layouts[layout_id].values(part, tally),
                    problem=np.full(len(part), "", dtype=object),
                )

    def _pages(self, window: Window) -> Iterator[Sequence[Any]]:
        """Yield rows in the order of arrival, from the first that can be in the window."""
        _, last = self._ends()
        after = self._first_received(window.since_ns - AHEAD_NS) - 1
        while after < last:
            wanted = {"after": after, "last": last, "n": _PAGE_ROWS}
            with self.connect() as connection:
                rows = connection.execute(_PAGE, wanted).all()
            if not rows:
                return
            yield rows
            after = int(rows[-1].id)

    def _ends(self) -> tuple[int, int]:
        with self.connect() as connection:
            found = connection.execute(sa.text("SELECT MIN(id), MAX(id) FROM record")).one()
        return int(found[0] or 0), int(found[1] or 0)

    def _first_received(self, received_ns: int) -> int:
        """Return the first id that came at or after a time; ids rise with arrival."""
        low, high = self._ends()
        query = sa.text("SELECT received_ns FROM record WHERE id >= :id ORDER BY id LIMIT 1")
        with self.connect() as connection:
            while low < high:
                middle = (low + high) // 2
                if int(connection.execute(query, {"id": middle}).scalar_one()) < received_ns:
                    low = middle + 1
                else:
                    high = middle
        return low

    def sources(self) -> tuple[str, ...]:
        """Return every source that ever sent a record."""
        return tuple(self._sources().values())

    def _sources(self) -> dict[int, str]:
        with self.connect() as connection:
            rows = connection.execute(sa.text("SELECT id, name FROM source ORDER BY id")).all()
        return {int(row.id): str(row.name) for row in rows}

    def _layout(self, layout_id: int) -> list[Mapping[str, Any]]:
        query = sa.text("SELECT channels FROM layout WHERE id = :id")
        with self.connect() as connection:
            text = connection.execute(query, {"id": layout_id}).scalar_one()
        found: list[Mapping[str, Any]] = json.loads(text)
        return found


class _Reader:
    """Turns readings stored under one layout into values in the order of a channel table."""

    def __init__(self, layout: Sequence[Mapping[str, Any]], table: ChannelTable) -> None:
        self._n_stored, self._instruments = len(layout), table.instruments
        self._stored = {str(channel["name"]): j for j, channel in enumerate(layout)}
        self._column: list[int | None] = []
        self._words: dict[int, Floats] = {}
        for k, instrument in enumerate(self._instruments):
            j = self._stored.get(instrument.name)
            # A channel that was stored as another kind has no readings of this one.
            same = j is not None and (layout[j]["kind"] == "state") == instrument.is_state
            self._column.append(j if same else None)
            if j is not None and same and instrument.is_state:
                words = [*layout[j]["words"], None]
                self._words[k] = np.array([_code(instrument, w) for w in words], dtype=np.float64)

    def values(self, rows: Sequence[Any], tally: Tally) -> Floats:
        """Return values, (n, n_instruments), NaN for missing, bad or outside the span."""
        stored = np.frombuffer(b"".join(row.readings for row in rows), dtype="<f8")
        stored = stored.reshape(len(rows), self._n_stored)
        values = np.full((len(rows), len(self._instruments)), np.nan)
        for k, j in enumerate(self._column):
            if j is not None:
                values[:, k] = self._coded(k, stored[:, j]) if k in self._words else stored[:, j]
        for r, row in enumerate(rows):
            if row.extra is not None:
                self._apply(json.loads(row.extra), values[r], tally)
        self._blank(values, tally)
        return values

    def _coded(self, k: int, column: Floats) -> Floats:
        """Return the codes of words in the new table's order."""
        there = ~np.isnan(column)
        coded = np.full(len(column), np.nan)
        coded[there] = self._words[k][column[there].astype(np.int64)]
        return coded

    def _apply(self, extra: Mapping[str, Any], values: Floats, tally: Tally) -> None:
        """Put in what a record keeps beside its readings: unknown names, words, quality."""
        beside = {**extra.get("unknown", {}), **extra.get("words", {})}
        quality = extra.get("quality", {})
        for k, instrument in enumerate(self._instruments):
            if instrument.name in beside:
                values[k] = _number(instrument, beside[instrument.name])
            if quality.get(instrument.name) == "bad":
                tally.bad_quality[instrument.name] += 1
                values[k] = math.nan

    def _blank(self, values: Floats, tally: Tally) -> None:
        for k, instrument in enumerate(self._instruments):
            if instrument.is_state:
                n_unknown = int((values[:, k] == len(instrument.words)).sum())
                if n_unknown:
                    tally.unknown_words[instrument.name] += n_unknown
                continue
            n_outside = blank_outside_span(instrument, values[:, k])
            if n_outside:
                tally.outside_span[instrument.name] += n_outside


def _code(instrument: Channel, word: str | None) -> int:
    """Return the number of a word in the table, one past the last for one it does not list."""
    return instrument.words.index(word) if word in instrument.words else len(instrument.words)


def _number(instrument: Channel, given: object) -> float:
    if isinstance(given, str):
        return float(_code(instrument, given)) if instrument.is_state else math.nan
    numeric = isinstance(given, int | float) and not instrument.is_state
    return float(given) if numeric else math.nan  # type: ignore[arg-type]  # a number here


def spool_stored(
    store: Store,
    table: ChannelTable,
    window: Window,
    *,
    exclusions: tuple[Exclusion, ...] = (),
    progress: Advances | None = None,
    folder: Path | None = None,
) -> Spool:
    """Return a window of the store's records as a spool, which the caller closes.

    exclusions: periods to leave out. folder: where the temporary folder goes.
    Raises BadStore when no record is left.
    """
    spool = Spool(len(table.instruments), folder)
    try:
        with Tally() as tally:
            for batch in store.batches(table, window, tally):
                spool.add(batch, exclusions, tally)
                if progress is not None:
                    progress.advance(batch.n_rows)
            spool.finish(tally)
        if not spool.sources:
            raise BadStore(str(store.path), "no record of the days asked for is left to use")
    except BaseException:
        spool.close()
        raise
    return spool
