"""Taking old records out, oldest received first.

Pieces go by `id`, the order of arrival, which is the order on disk and needs no index of
its own; a machine with a wrong clock cannot shield its records or lose them early.
"""

from __future__ import annotations

import sqlalchemy as sa

from service.store.tables import pruned, record

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


def write_pruned(
    connection: sa.Connection, at_ns: int, reason: str, before_ns: int, n_records: int
) -> None:
    """Put on record what was taken out."""
    connection.execute(
        pruned.insert().values(at_ns=at_ns, reason=reason, before_ns=before_ns, n_records=n_records)
    )


def give_back(connection: sa.Connection) -> None:
    """Hand free pages back to the file system; PostgreSQL sees to it by itself."""
    if connection.dialect.name == "sqlite":
        # It frees a page a step, and only a driver's own cursor takes steps without columns.
        cursor = connection.connection.cursor()
        cursor.execute(f"PRAGMA incremental_vacuum({_N_PAGES})")
        cursor.fetchall()
        cursor.close()
