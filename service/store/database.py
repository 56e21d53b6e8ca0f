"""Opening a database: engines, connection settings, migrations, the lock on a data folder.

SQLite runs with a write-ahead log and full synchronisation: a commit returns when the
operating system says that it is on disk.
"""

from __future__ import annotations

import fcntl
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import sqlalchemy as sa

from scoring.errors import OddbranchError
from service.store import migrations
from service.store.group import Group, PostgresGroup, SqliteGroup
from service.store.states import SourceState
from service.store.tables import source

DATABASE_FILE = "records.sqlite3"
# How long a statement waits for another program's write, for example `oddbranch token`.
_BUSY_MS = 10_000
# Records are a few hundred bytes; 8 KiB pages held them in less space and time than 4 or 16.
_PAGE_BYTES = 8192
_CACHE_KIB = 32 * 1024
# Any fixed number: replicas that start together migrate one after the other.
_MIGRATION_LOCK = 7_245_663_113


class StoreRefused(OddbranchError):
    """A store that cannot be opened; the sentence says why and what to do."""


class Database:
    """One database: `write` for the writer alone, `read` for everything else.

    url: empty for SQLite in the data folder, or a postgresql:// URL.
    max_pages: SQLite's own limit on its size in pages, 0 for none.
    """

    def __init__(self, data: Path, url: str = "", *, max_pages: int = 0) -> None:
        self.is_sqlite = not url
        self.path = data / DATABASE_FILE
        self._lock: int | None = None
        if self.is_sqlite:
            data.mkdir(parents=True, exist_ok=True)
            self.write = _sqlite_engine(self.path, read_only=False, max_pages=max_pages)
            self.read = _sqlite_engine(self.path, read_only=True, max_pages=0)
        else:
            self.write = _postgres_engine(url)
            self.read = self.write
        self._states: dict[str, SourceState] = {}
        self._layout_ids: dict[str, int] = {}

    def lock(self) -> None:
        """Take the data folder for this process; raises StoreRefused if another has it."""
        if not self.is_sqlite:
            return
        handle = os.open(self.path.with_suffix(".lock"), os.O_RDWR | os.O_CREAT, 0o600)
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            os.close(handle)
            raise StoreRefused(
                f"{self.path.parent}: another service writes here; stop it, give this one its own "
                "folder with --data, or use PostgreSQL for several replicas"
            ) from None
        self._lock = handle

    def migrate(self) -> None:
        """Bring the tables to this version; raises StoreRefused for a later version's."""
        try:
            with self.write.connect() as connection:
                with _migration_lock(connection, self.is_sqlite):
                    _upgrade(connection)
                connection.commit()
        except sa.exc.DBAPIError as error:
            raise StoreRefused(f"{self.where}: cannot be opened: {error.orig}") from None

    def load_states(self) -> None:
        """Read every source into memory, where this process alone writes."""
        if not self.is_sqlite:
            return
        with self.read.connect() as connection:
            for row in connection.execute(sa.select(source)):
                self._states[row.name] = SourceState(**row._mapping)

    @property
    def where(self) -> str:
        """Where the store is, without a password."""
        if self.is_sqlite:
            return str(self.path)
        return self.write.url.render_as_string(hide_password=True)

    def begin(self, connection: sa.Connection, n_sources_max: int) -> Group:
        """Start a transaction of the writer."""
        if self.is_sqlite:
            return SqliteGroup(connection, n_sources_max, self._layout_ids, self._states)
        return PostgresGroup(connection, n_sources_max, self._layout_ids)

    def ping(self) -> None:
        """Raise unless the store answers."""
        with self.read.connect() as connection:
            connection.exec_driver_sql("SELECT 1").all()

    def loaded_sources(self) -> Iterator[tuple[str, int, int, float]]:
        """Yield name, last_ns, n_over_level and sustained of the sources held in memory."""
        for state in self._states.values():
            sustained = float("nan") if state.sustained is None else state.sustained
            yield state.name, max(state.last_ns, 0), state.n_over_level, sustained

    def alert_standings(self) -> list[SourceState]:
        """Return the states of all sources with an alert standing, to read only.

        Of the database of several replicas, only what ticks need is read.
        """
        if self.is_sqlite:
            return [state for state in list(self._states.values()) if state.alert_standing]
        query = sa.select(source.c.id, source.c.name, source.c.alert_standing).where(
            source.c.alert_standing.is_not(None)
        )
        with self.read.connect() as connection:
            return [SourceState(**row._mapping) for row in connection.execute(query)]

    def n_bytes(self) -> int | None:
        """Return the size on disk, log included, or None where it cannot be asked."""
        if self.is_sqlite:
            log = self.path.with_name(self.path.name + "-wal")
            return sum(file.stat().st_size for file in (self.path, log) if file.exists())
        return self._n_bytes_postgres()

    def n_bytes_used(self) -> int | None:
        """Return the size less the room that pruning has left inside the file."""
        if not self.is_sqlite:
            return self._n_bytes_postgres()
        with self.read.connect() as connection:
            pages, free = (
                int(connection.exec_driver_sql(f"PRAGMA {name}").scalar_one())
                for name in ("page_count", "freelist_count")
            )
        return (pages - free) * _PAGE_BYTES

    def _n_bytes_postgres(self) -> int | None:
        try:
            with self.read.connect() as connection:
                query = "SELECT pg_total_relation_size('record')"
                return int(connection.exec_driver_sql(query).scalar_one())
        except sa.exc.DBAPIError:
            return None

    def close(self) -> None:
        """Close every connection and give the data folder free; may be called twice."""
        self.read.dispose()
        self.write.dispose()
        if self._lock is not None:
            os.close(self._lock)
            self._lock = None


def _sqlite_engine(path: Path, *, read_only: bool, max_pages: int) -> sa.Engine:
    engine = sa.create_engine(
        f"sqlite:///{path}",
        connect_args={
            "isolation_level": None,
            "check_same_thread": False,
            "timeout": 10,
            # Room for the statements of every size of group, see store.group.
            "cached_statements": 256,
        },
        pool_size=8 if read_only else 1,
        max_overflow=8 if read_only else 1,
        poolclass=sa.pool.QueuePool,
    )

    @sa.event.listens_for(engine, "connect")
    def configure(connection: Any, _record: Any) -> None:
        pragmas = [f"busy_timeout={_BUSY_MS}", f"cache_size=-{_CACHE_KIB}"]
        if read_only:
            pragmas.append("query_only=ON")
        else:
            # Said of a store that is there, the second of these writes to its file, and then
            # a service that was killed on a full disk could not even be read again.
            if not connection.execute("PRAGMA page_count").fetchone()[0]:
                pragmas += [f"page_size={_PAGE_BYTES}", "auto_vacuum=INCREMENTAL"]
            pragmas += ["journal_mode=WAL", "synchronous=FULL", "journal_size_limit=67108864"]
            if max_pages:
                pragmas.append(f"max_page_count={max_pages}")
        for pragma in pragmas:
            connection.execute(f"PRAGMA {pragma}").close()

    @sa.event.listens_for(engine, "begin")
    def begin(connection: sa.Connection) -> None:
        # Taking the write lock at the start means that no statement later on can find it taken.
        connection.exec_driver_sql("BEGIN" if read_only else "BEGIN IMMEDIATE")

    return engine


def _postgres_engine(url: str) -> sa.Engine:
    scheme, _, rest = url.partition("://")
    if scheme not in ("postgresql", "postgres", "postgresql+psycopg") or not rest:
        raise StoreRefused(
            "store.url must begin with postgresql://, for example "
            "postgresql://oddbranch@localhost/oddbranch; leave it empty for SQLite"
        )
    try:
        return sa.create_engine(
            f"postgresql+psycopg://{rest}",
            pool_pre_ping=True,
            pool_size=8,
            connect_args={"connect_timeout": 5, "application_name": "oddbranch"},
        )
    except sa.exc.ArgumentError:
        raise StoreRefused("store.url is not a URL that PostgreSQL's driver reads") from None
    except ModuleNotFoundError:
        raise StoreRefused(
            "store.url needs the driver of PostgreSQL: pip install 'oddbranch[postgresql]'"
        ) from None


@contextmanager
def _migration_lock(connection: sa.Connection, is_sqlite: bool) -> Iterator[None]:
    if is_sqlite:
        yield
        return
    connection.exec_driver_sql(f"SELECT pg_advisory_lock({_MIGRATION_LOCK})")
    connection.commit()
    try:
        yield
    finally:
        connection.rollback()
        connection.exec_driver_sql(f"SELECT pg_advisory_unlock({_MIGRATION_LOCK})")
        connection.commit()


def _upgrade(connection: sa.Connection) -> None:
    current = _version_of(connection)
    if current == migrations.HEAD:
        return
    # A quarter of a second that a start with the tables as they should be does not need.
    from alembic import command
    from alembic.config import Config
    from alembic.script import ScriptDirectory

    config = Config()
    config.set_main_option("script_location", str(Path(migrations.__file__).parent))
    config.attributes["connection"] = connection
    known = {script.revision for script in ScriptDirectory.from_config(config).walk_revisions()}
    if current is not None and current not in known:
        raise StoreRefused(
            f"the store has tables of version {current}, this program knows up to "
            f"{migrations.HEAD}; install the later version that wrote them"
        )
    connection.rollback()
    command.upgrade(config, "head")
    connection.commit()


def _version_of(connection: sa.Connection) -> str | None:
    """Return the name of the last migration that the tables have seen, None where none has."""
    if not sa.inspect(connection).has_table("alembic_version"):
        return None
    version = connection.exec_driver_sql("SELECT version_num FROM alembic_version").scalar()
    return None if version is None else str(version)
