"""One transaction of the writer: sources read, records added, standings advanced.

Two ways to the same end. With SQLite this process alone writes, so sources are held in
memory and only written. With PostgreSQL any replica writes, so sources are read under a
row lock; a second replica waits and then sees what the first one left.
"""

from __future__ import annotations

import contextlib
import json
from abc import ABC, abstractmethod
from collections.abc import Callable, Iterable, Sequence
from functools import lru_cache
from typing import Any, Protocol

import sqlalchemy as sa

from service.store import tables
from service.store.states import SourceState, StoredRecord

RECORD_COLUMNS = tuple(column.name for column in tables.record.columns if column.name != "id")
SOURCE_COLUMNS = tuple(column.name for column in tables.source.columns)
_STORED = tuple(tables.record.c[name] for name in ("id", *RECORD_COLUMNS) if name != "source_id")

# Rows of one INSERT: one statement lets go of the interpreter once, where a statement a row
# lets go a thousand times and waits each time for a busy event loop. Up to the first number
# a group goes in one statement; above it powers of two keep the number of prepared ones small.
_WHOLE_ROWS, _MAX_ROWS = 64, 1024
# SQLite takes 32 766 parameters a statement; a look-up needs one a time.
_MAX_TIMES = 5000


class LayoutLike(Protocol):
    """What gives a readings blob its meaning."""

    def as_json(self) -> list[dict[str, Any]]: ...


class Group(ABC):
    """A running transaction on one connection; use commit or rollback once."""

    def __init__(
        self, connection: sa.Connection, n_sources_max: int, layout_ids: dict[str, int]
    ) -> None:
        self.connection = connection
        self.n_sources_max = n_sources_max
        self.layout_ids = layout_ids
        self._new_layouts: dict[str, int] = {}
        self._transaction = connection.begin()
        # Called once everything is on disk: what a log says must have happened.
        self.afterwards: list[Callable[[], None]] = []

    @abstractmethod
    def sources(self, names: Sequence[str]) -> dict[str, SourceState]:
        """Return copies of the sources' states, made where new.

        A new source beyond the limit is left out of the answer.
        """

    @abstractmethod
    def known(self, names: Sequence[str]) -> dict[str, SourceState]:
        """Return copies of the states of those sources that there are; none is made."""

    @abstractmethod
    def insert(self, columns: Sequence[Sequence[Any]]) -> None:
        """Add records; columns: the values of each of RECORD_COLUMNS, one a record."""

    @abstractmethod
    def save(self, states: Iterable[SourceState]) -> None:
        """Write the states of sources."""

    def find(self, source: SourceState, times_ns: Iterable[int]) -> dict[int, StoredRecord]:
        """Return the stored records of a source at some times, by time."""
        wanted = sorted(set(times_ns))
        found: dict[int, StoredRecord] = {}
        for start in range(0, len(wanted), _MAX_TIMES):
            query = sa.select(*_STORED).where(
                tables.record.c.source_id == source.id,
                tables.record.c.time_ns.in_(wanted[start : start + _MAX_TIMES]),
            )
            for row in self.connection.execute(query):
                found[row.time_ns] = StoredRecord(source=source.name, **row._mapping)
        return found

    def layout_id(self, model: str, layout: LayoutLike) -> int:
        """Return the id of a model's layout, stored where new."""
        found = self.layout_ids.get(model)
        if found is not None:
            return found
        table = tables.layout
        query = sa.select(table.c.id).where(table.c.model == model)
        found = self.connection.execute(query).scalar()
        if found is None:
            self._add_layout(model, json.dumps(layout.as_json()))
            found = self.connection.execute(query).scalar_one()
        self._new_layouts[model] = int(found)
        return int(found)

    def layout_model(self, layout_id: int) -> str:
        """Return the name of the model that a stored layout belongs to."""
        query = sa.select(tables.layout.c.model).where(tables.layout.c.id == layout_id)
        return str(self.connection.execute(query).scalar_one())

    @abstractmethod
    def _add_layout(self, model: str, channels: str) -> None: ...

    def layout_channels(self, layout_id: int) -> str:
        """Return the channels of a stored layout as JSON."""
        query = sa.select(tables.layout.c.channels).where(tables.layout.c.id == layout_id)
        return str(self.connection.execute(query).scalar_one())

    def commit(self) -> None:
        """Make everything durable; returns once it is on disk."""
        self._transaction.commit()
        self.layout_ids.update(self._new_layouts)
        self._committed()
        for tell in self.afterwards:
            # Nobody listens; what is stored is stored all the same.
            with contextlib.suppress(OSError):
                tell()

    def _committed(self) -> None:  # noqa: B027 - most have nothing more to do
        """Take over what is on disk now."""

    def rollback(self) -> None:
        """Forget everything since the start."""
        self._transaction.rollback()


class SqliteGroup(Group):
    """Sources come from memory; `states` changes only when the commit is on disk."""

    def __init__(
        self,
        connection: sa.Connection,
        n_sources_max: int,
        layout_ids: dict[str, int],
        states: dict[str, SourceState],
    ) -> None:
        super().__init__(connection, n_sources_max, layout_ids)
        self._states = states
        self._changed: dict[str, SourceState] = {}

    def sources(self, names: Sequence[str]) -> dict[str, SourceState]:
        found: dict[str, SourceState] = {}
        for name in names:
            state = self._changed.get(name) or self._states.get(name)
            if state is None:
                n_new = sum(1 for changed in self._changed if changed not in self._states)
                n_known = len(self._states) + n_new
                if n_known >= self.n_sources_max:
                    continue
                # Sources are never deleted, so the count is the highest id.
                state = SourceState(id=n_known + 1, name=name)
                self._changed[name] = state
            found[name] = state.copy()
        return found

    def known(self, names: Sequence[str]) -> dict[str, SourceState]:
        states = ((name, self._changed.get(name) or self._states.get(name)) for name in names)
        return {name: state.copy() for name, state in states if state is not None}

    def insert(self, columns: Sequence[Sequence[Any]]) -> None:
        self._in_pieces(_insert_records, columns)

    def save(self, states: Iterable[SourceState]) -> None:
        rows = []
        for state in states:
            self._changed[state.name] = state
            rows.append(_source_row(state))
        self._in_pieces(_upsert_sources, list(zip(*rows, strict=True)))

    def _in_pieces(self, statement: Callable[[int], str], columns: Sequence[Sequence[Any]]) -> None:
        start, left = 0, len(columns[0]) if columns else 0
        while left:
            n_rows = left if left <= _WHOLE_ROWS else min(_MAX_ROWS, 1 << (left.bit_length() - 1))
            # Row after row in one list; columns are laid in by strides, which is quickest.
            values = [None] * (n_rows * len(columns))
            for k, column in enumerate(columns):
                values[k :: len(columns)] = column[start : start + n_rows]
            self.connection.exec_driver_sql(statement(n_rows), tuple(values))
            start, left = start + n_rows, left - n_rows

    def _add_layout(self, model: str, channels: str) -> None:
        self.connection.execute(tables.layout.insert().values(model=model, channels=channels))

    def _committed(self) -> None:
        self._states.update(self._changed)


class PostgresGroup(Group):
    """Sources are read and locked in the order of their names, so that two groups cannot
    wait for each other."""

    def sources(self, names: Sequence[str]) -> dict[str, SourceState]:
        wanted = sorted(names)
        found = self._locked(wanted)
        missing = [name for name in wanted if name not in found]
        if missing:
            self._make(missing)
            found = self._locked(wanted)
        return found

    def known(self, names: Sequence[str]) -> dict[str, SourceState]:
        return self._locked(sorted(names))

    def _locked(self, names: Sequence[str]) -> dict[str, SourceState]:
        table = tables.source
        query = (
            sa.select(table).where(table.c.name == sa.any_(sa.literal(names, _TEXTS)))
            .order_by(table.c.name).with_for_update()
        )  # fmt: skip
        return {row.name: SourceState(**row._mapping) for row in self.connection.execute(query)}

    def _make(self, names: Sequence[str]) -> None:
        table = tables.source
        n_known = self.connection.execute(sa.select(sa.func.count()).select_from(table)).scalar()
        room = max(0, self.n_sources_max - int(n_known or 0))
        if room:
            self.connection.exec_driver_sql(
                "INSERT INTO source (name, newest_ns, last_ns, n_records, n_over_level, model,"
                " alert) SELECT name, -1, -1, 0, 0, '', 0 FROM unnest(%s::text[]) AS name"
                " ON CONFLICT (name) DO NOTHING",
                (list(names[:room]),),
            )

    def insert(self, columns: Sequence[Sequence[Any]]) -> None:
        cursor = self.connection.connection.cursor()
        with cursor.copy(f"COPY record ({', '.join(RECORD_COLUMNS)}) FROM STDIN") as copy:
            for row in zip(*columns, strict=True):
                copy.write_row(row)

    def save(self, states: Iterable[SourceState]) -> None:
        changing = [name for name in SOURCE_COLUMNS if name not in ("id", "name")]
        statement = (
            f"UPDATE source SET {', '.join(f'{name} = %s' for name in changing)} WHERE id = %s"  # noqa: S608 - names of columns only
        )
        rows = [(*_source_row(state)[2:], state.id) for state in states]
        if rows:
            self.connection.exec_driver_sql(statement, rows)

    def _add_layout(self, model: str, channels: str) -> None:
        self.connection.exec_driver_sql(
            "INSERT INTO layout (model, channels) VALUES (%s, %s) ON CONFLICT (model) DO NOTHING",
            (model, channels),
        )


_TEXTS = sa.ARRAY(sa.Text)


def _source_row(state: SourceState) -> tuple[Any, ...]:
    return (
        state.id, state.name, state.newest_ns, state.last_ns, state.n_records,
        state.n_over_level, state.model, state.excess, state.sustained, state.alert,
        state.standing, state.alert_standing,
    )  # fmt: skip


@lru_cache(maxsize=128)
def _insert_records(n_rows: int) -> str:
    cells = "(" + ",".join("?" * len(RECORD_COLUMNS)) + ")"
    return (
        f"INSERT INTO record ({', '.join(RECORD_COLUMNS)}) VALUES " + ",".join([cells] * n_rows)  # noqa: S608 - names of columns only
    )


@lru_cache(maxsize=128)
def _upsert_sources(n_rows: int) -> str:
    cells = "(" + ",".join("?" * len(SOURCE_COLUMNS)) + ")"
    changing = ", ".join(
        f"{name} = excluded.{name}" for name in SOURCE_COLUMNS if name not in ("id", "name")
    )
    return (
        f"INSERT INTO source ({', '.join(SOURCE_COLUMNS)}) VALUES "  # noqa: S608 - names of columns only
        + ",".join([cells] * n_rows)
        + f" ON CONFLICT (id) DO UPDATE SET {changing}"
    )
