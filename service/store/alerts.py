"""Alerts and actions in the store: written by the one writer, read in pages.

An alert's row is its newest form as JSON beside what rows are chosen by. Nothing here
knows what is in the JSON.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import sqlalchemy as sa

from service.store import tables

_ALERT = tables.alert.c
_ACTION = tables.action.c

_PUT_ALERT = sa.text(
    "INSERT INTO alert (id, source, kind, state, since_ns, raised_ns, until_ns, data) VALUES "
    "(:id, :source, :kind, :state, :since_ns, :raised_ns, :until_ns, :data) "
    "ON CONFLICT (id) DO UPDATE SET state = excluded.state, since_ns = excluded.since_ns, "
    "until_ns = excluded.until_ns, data = excluded.data"
)

_PUT_FLOOD = sa.text(
    "INSERT INTO flood (id, data) VALUES (:id, :data) "
    "ON CONFLICT (id) DO UPDATE SET data = excluded.data"
)
_THE_FLOOD = 1


def put_alerts(connection: sa.Connection, rows: Sequence[dict[str, Any]]) -> None:
    """Add alerts or replace them by their newer form; every row has all columns but number."""
    if rows:
        connection.execute(_PUT_ALERT, list(rows))


def put_actions(connection: sa.Connection, rows: Sequence[dict[str, Any]]) -> None:
    """Add what was done; every row has all columns but id."""
    if rows:
        connection.execute(tables.action.insert(), list(rows))


def alert_data(connection: sa.Connection, alert_id: str) -> str | None:
    """Return an alert's JSON, or None where there is no such alert."""
    found = connection.execute(sa.select(_ALERT.data).where(_ALERT.id == alert_id)).scalar()
    return None if found is None else str(found)


def alerts_page(
    connection: sa.Connection,
    *,
    source: str | None = None,
    state: str | None = None,
    from_ns: int | None = None,
    to_ns: int | None = None,
    limit: int,
    after: tuple[int, int] | None = None,
) -> tuple[list[str], tuple[int, int] | None]:
    """Return alerts as JSON, latest raised first, and the cursor of the next page.

    state: one of them, or `open` for all that are not cleared. from_ns is in the range of
    raised times, to_ns is not. after: (number, raised) of the last one seen.
    """
    query = sa.select(_ALERT.data, _ALERT.number, _ALERT.raised_ns)
    if source is not None:
        query = query.where(_ALERT.source == source)
    if state == "open":
        query = query.where(_ALERT.until_ns.is_(None))
    elif state is not None:
        query = query.where(_ALERT.state == state)
    if from_ns is not None:
        query = query.where(_ALERT.raised_ns >= from_ns)
    if to_ns is not None:
        query = query.where(_ALERT.raised_ns < to_ns)
    if after is not None:
        query = query.where(sa.tuple_(_ALERT.raised_ns, _ALERT.number) < sa.tuple_(*after[::-1]))
    query = query.order_by(_ALERT.raised_ns.desc(), _ALERT.number.desc()).limit(limit + 1)
    rows = connection.execute(query).all()
    last = rows[limit - 1] if len(rows) > limit else None
    following = None if last is None else (int(last.number), int(last.raised_ns))
    return [row.data for row in rows[:limit]], following


def actions_page(
    connection: sa.Connection,
    *,
    source: str | None = None,
    alert: str | None = None,
    limit: int,
    after: int | None = None,
) -> tuple[list[dict[str, Any]], int | None]:
    """Return what was done, newest first."""
    query = sa.select(tables.action).order_by(_ACTION.id.desc()).limit(limit + 1)
    if source is not None:
        query = query.where(_ACTION.source == source)
    if alert is not None:
        query = query.where(_ACTION.alert == alert)
    if after is not None:
        query = query.where(_ACTION.id < after)
    rows = [dict(row._mapping) for row in connection.execute(query)]
    return rows[:limit], int(rows[limit - 1]["id"]) if len(rows) > limit else None


def flood_data(connection: sa.Connection, *, to_change: bool = False) -> bytes | None:
    """Return what is remembered of a flood; to_change: no other replica may change it now."""
    query = sa.select(tables.flood.c.data).where(tables.flood.c.id == _THE_FLOOD)
    found = connection.execute(query.with_for_update() if to_change else query).scalar()
    return None if found is None else bytes(found)


def put_flood(connection: sa.Connection, data: bytes) -> None:
    """Replace what is remembered of a flood."""
    connection.execute(_PUT_FLOOD, {"id": _THE_FLOOD, "data": data})


def count_alerts(connection: sa.Connection) -> dict[tuple[str, str], int]:
    """Return how many alerts there are by state and kind."""
    query = sa.select(_ALERT.state, _ALERT.kind, sa.func.count()).group_by(
        _ALERT.state, _ALERT.kind
    )
    return {(state, kind): int(n) for state, kind, n in connection.execute(query)}


def count_raised(connection: sa.Connection, kind: str, from_ns: int) -> int:
    """Return how many alerts of a kind were raised since a time."""
    query = sa.select(sa.func.count()).where(_ALERT.raised_ns >= from_ns, _ALERT.kind == kind)
    return int(connection.execute(query).scalar_one())
