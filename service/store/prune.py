"""Taking old records out, oldest received first, and alerts that were cleared long ago.

Pieces go by `id`, the order of arrival, which is the order on disk and needs no index of
its own; a machine with a wrong clock cannot shield its records or lose them early.
"""

from __future__ import annotations

import sqlalchemy as sa

from service.store.tables import action, alert, pruned, record

# What the actions are called that begin and end a time out of service.
OUT, BACK = "out_of_service", "back_in_service"
# 16 MB a call, so that requests wait for some ten ms and not for the whole file.
_N_PAGES = 2000


def prune_piece(connection: sa.Connection, before_ns: int, n_piece: int) -> int:
    """Delete up to n_piece of the first records, as far as they came before a time."""
    first = connection.execute(sa.select(sa.func.min(record.c.id))).scalar()
    if first is None:
        return 0
    ids = (
        sa.select(record.c.id, record.c.received_ns).order_by(record.c.id).limit(n_piece)
    ).subquery()
    last = connection.execute(
        sa.select(sa.func.max(ids.c.id)).where(ids.c.received_ns < before_ns)
    ).scalar()
    if last is None:
        return 0
    done = connection.execute(
        record.delete().where(record.c.id <= last, record.c.received_ns < before_ns)
    )
    return int(done.rowcount)


def older_than(connection: sa.Connection, share: float) -> int | None:
    """Return the time before which about this share of the records came."""
    first, last = connection.execute(
        sa.select(sa.func.min(record.c.id), sa.func.max(record.c.id))
    ).one()
    if first is None:
        return None
    cut = first + int((last - first) * share)
    found = connection.execute(
        sa.select(record.c.received_ns).where(record.c.id >= cut).order_by(record.c.id).limit(1)
    ).scalar()
    return None if found is None else int(found) + 1


def prune_alerts(connection: sa.Connection, before_ns: int, n_piece: int) -> tuple[int, int]:
    """Delete up to n_piece alerts that were cleared before a time, with their actions.

    Return how many alerts and how many actions went.
    """
    query = sa.select(alert.c.id).where(alert.c.until_ns < before_ns).limit(n_piece)
    ids = list(connection.execute(query).scalars())
    if not ids:
        return 0, 0
    n_actions = connection.execute(action.delete().where(action.c.alert.in_(ids))).rowcount
    n_alerts = connection.execute(alert.delete().where(alert.c.id.in_(ids))).rowcount
    return int(n_alerts), int(n_actions)


def prune_actions(connection: sa.Connection, before_ns: int) -> int:
    """Delete actions of no alert from before a time; return how many went.

    A time out of service goes as a whole, once the source has been back in service since
    before that time: one that lasts is never forgotten.
    """
    later = action.alias("later")
    is_over = (
        sa.select(later.c.id)
        .where(
            later.c.source == action.c.source,
            later.c.what == BACK,
            later.c.at_ns < before_ns,
            later.c.id > action.c.id,
        )
        .exists()
    )
    done = connection.execute(
        action.delete().where(
            action.c.alert == "",
            action.c.at_ns < before_ns,
            sa.or_(action.c.what != OUT, is_over),
        )
    )
    return int(done.rowcount)


def write_pruned(
    connection: sa.Connection,
    at_ns: int,
    reason: str,
    before_ns: int,
    n_records: int,
    *,
    n_alerts: int = 0,
    n_actions: int = 0,
) -> None:
    """Put on record what was taken out."""
    connection.execute(
        pruned.insert().values(
            at_ns=at_ns,
            reason=reason,
            before_ns=before_ns,
            n_records=n_records,
            n_alerts=n_alerts,
            n_actions=n_actions,
        )
    )


def give_back(connection: sa.Connection) -> None:
    """Hand free pages back to the file system; PostgreSQL sees to it by itself."""
    if connection.dialect.name == "sqlite":
        # It frees a page a step, and only a driver's own cursor takes steps without columns.
        cursor = connection.connection.cursor()
        cursor.execute(f"PRAGMA incremental_vacuum({_N_PAGES})")
        cursor.fetchall()
        cursor.close()
