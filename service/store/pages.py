"""Pages of what is stored: a piece of a list, and where the next one starts.

A cursor says where the last page ended, not how many rows went before, so that a page
stays right while records come in.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import sqlalchemy as sa

from service.store import tables
from service.store.states import StoredRecord

_RECORD = tables.record.c
_SOURCE = tables.source.c
_STORED = (
    _SOURCE.name.label("source"),
    *(column for column in _RECORD if column.name != "source_id"),
)


def records_page(
    connection: sa.Connection,
    *,
    source: str | None,
    from_ns: int | None,
    to_ns: int | None,
    newest_first: bool,
    limit: int,
    after: tuple[int, int] | None,
) -> tuple[list[StoredRecord], tuple[int, int] | None]:
    """Return records by source and time, and the cursor of the next page.

    from_ns is in the range, to_ns is not. after: (source id, time) of the last one seen.
    """
    order = (_RECORD.source_id, _RECORD.time_ns)
    query: sa.Select[Any] = sa.select(*_STORED, _RECORD.source_id).join(
        tables.source, _SOURCE.id == _RECORD.source_id
    )
    if source is not None:
        query = query.where(_SOURCE.name == source)
    query = _between(query, from_ns, to_ns)
    if after is not None:
        place, seen = sa.tuple_(*order), sa.tuple_(*after)
        query = query.where(place < seen if newest_first else place > seen)
    query = query.order_by(*(c.desc() if newest_first else c for c in order)).limit(limit + 1)
    return _page(connection.execute(query).all(), limit, "source_id", "time_ns")


def over_level_page(
    connection: sa.Connection,
    *,
    source: str | None,
    from_ns: int | None,
    to_ns: int | None,
    limit: int,
    after: tuple[int, int] | None,
) -> tuple[list[StoredRecord], tuple[int, int] | None]:
    """Return records over a level, newest first, and the cursor of the next page.

    after: (id, time) of the last one seen.
    """
    query: sa.Select[Any] = sa.select(*_STORED, _RECORD.source_id).join(
        tables.source, _SOURCE.id == _RECORD.source_id
    )
    query = _between(query.where(_RECORD.alert > 0), from_ns, to_ns)
    if source is not None:
        query = query.where(_SOURCE.name == source)
    if after is not None:
        query = query.where(sa.tuple_(_RECORD.time_ns, _RECORD.id) < sa.tuple_(*after[::-1]))
    query = query.order_by(_RECORD.time_ns.desc(), _RECORD.id.desc()).limit(limit + 1)
    return _page(connection.execute(query).all(), limit, "id", "time_ns")


def _between(query: sa.Select[Any], from_ns: int | None, to_ns: int | None) -> sa.Select[Any]:
    if from_ns is not None:
        query = query.where(_RECORD.time_ns >= from_ns)
    if to_ns is not None:
        query = query.where(_RECORD.time_ns < to_ns)
    return query


def _page(
    rows: Sequence[sa.Row[Any]], limit: int, *cursor: str
) -> tuple[list[StoredRecord], tuple[int, int] | None]:
    after = None
    if len(rows) > limit:
        last = rows[limit - 1]._mapping
        after = int(last[cursor[0]]), int(last[cursor[1]])
    found = [
        StoredRecord(**{k: v for k, v in row._mapping.items() if k != "source_id"})
        for row in rows[:limit]
    ]
    return found, after


def source_row(connection: sa.Connection, name: str) -> dict[str, Any] | None:
    """Return one source's row without its standings, or None where there is no such source."""
    row = connection.execute(sa.select(*_shown()).where(_SOURCE.name == name)).first()
    return None if row is None else dict(row._mapping)


def sources_page(
    connection: sa.Connection, *, limit: int, after: str | None
) -> tuple[list[dict[str, Any]], str | None]:
    """Return the rows of sources by name, without their standings."""
    query = sa.select(*_shown()).order_by(_SOURCE.name).limit(limit + 1)
    if after is not None:
        query = query.where(_SOURCE.name > after)
    rows = [dict(row._mapping) for row in connection.execute(query)]
    return rows[:limit], rows[limit - 1]["name"] if len(rows) > limit else None


def _shown() -> list[sa.ColumnElement[Any]]:
    return [column for column in _SOURCE if "standing" not in column.name]


def pruned_page(
    connection: sa.Connection, *, limit: int, after: int | None
) -> tuple[list[dict[str, Any]], int | None]:
    """Return what retention took out, newest first."""
    table = tables.pruned
    query = sa.select(table).order_by(table.c.id.desc()).limit(limit + 1)
    if after is not None:
        query = query.where(table.c.id < after)
    rows = [dict(row._mapping) for row in connection.execute(query)]
    return rows[:limit], int(rows[limit - 1]["id"]) if len(rows) > limit else None


def layout_of(connection: sa.Connection, layout_id: int) -> tuple[str, str]:
    """Return the model's name and the channels (JSON) of a stored layout."""
    table = tables.layout
    row = connection.execute(sa.select(table).where(table.c.id == layout_id)).one()
    return row.model, row.channels
