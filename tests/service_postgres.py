"""A PostgreSQL of the tests' own: in a scratch folder, on loopback, under a plain user."""

from __future__ import annotations

import os
import pwd
import shutil
import signal
import socket
import subprocess
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from itertools import count
from pathlib import Path

import psycopg

from tests.conftest import need_program

# Servers of databases refuse to run as root.
_PLAIN_USERS = ("postgres", "nobody")


class Cluster:
    """A database server and its scratch folder.

    durable: whether it waits for the disk; only tests that kill it need that.
    """

    def __init__(self, folder: Path, *, durable: bool) -> None:
        self.folder, self.durable = folder, durable
        self.user = _plain_user()
        self.initdb = need_program("initdb")
        self.postgres = need_program("postgres")
        if self.user is not None:
            shutil.chown(folder, self.user)
        self._run(self.initdb, "-D", str(folder / "db"), "-U", "odd", "-A", "trust", "-N")
        self.port = _free_port()
        self._numbers = count(1)
        self.process: subprocess.Popen[bytes] | None = None
        self.start()

    def _run(self, *words: str) -> None:
        done = subprocess.run(
            words, user=self.user, capture_output=True, check=False, cwd=self.folder
        )
        assert done.returncode == 0, done.stderr.decode()

    def start(self) -> None:
        """Start it and wait until it answers."""
        switch = "on" if self.durable else "off"
        self.process = subprocess.Popen(
            [self.postgres, "-D", str(self.folder / "db"), "-p", str(self.port),
             "-c", "listen_addresses=127.0.0.1", "-c", f"unix_socket_directories={self.folder}",
             "-c", f"fsync={switch}", "-c", f"synchronous_commit={switch}",
             "-c", "max_connections=60", "-c", "shared_buffers=32MB"],
            user=self.user, cwd=self.folder, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
            start_new_session=True,
        )  # fmt: skip
        end = time.monotonic() + 30
        while True:
            try:
                psycopg.connect(self.url("postgres"), connect_timeout=2).close()
            except psycopg.OperationalError:
                assert self.process.poll() is None, "the database server ended"
                assert time.monotonic() < end, "the database server does not answer"
                time.sleep(0.1)
            else:
                return

    def kill(self) -> None:
        """End every process of it as a power cut would."""
        assert self.process is not None
        os.killpg(self.process.pid, signal.SIGKILL)
        self.process.wait(10)
        (self.folder / "db" / "postmaster.pid").unlink(missing_ok=True)

    def stop(self) -> None:
        """End it at once; nothing of it is kept."""
        if self.process is not None and self.process.poll() is None:
            self.process.send_signal(signal.SIGQUIT)
            self.process.wait(20)

    def url(self, database: str) -> str:
        """Return the URL of one of its databases."""
        return f"postgresql://odd@127.0.0.1:{self.port}/{database}"

    def emptied_database(self) -> str:
        """Return the URL of one database, emptied: quicker than a new one for every test."""
        with psycopg.connect(self.url("postgres"), autocommit=True) as connection:
            connection.execute("DROP SCHEMA public CASCADE")
            connection.execute("CREATE SCHEMA public")
        return self.url("postgres")

    def new_database(self) -> str:
        """Make an empty database and return its URL."""
        name = f"odd_{next(self._numbers)}"
        with psycopg.connect(self.url("postgres"), autocommit=True) as connection:
            connection.execute(f"CREATE DATABASE {name}")
        return self.url(name)


def _plain_user() -> str | None:
    if os.geteuid() != 0:
        return None
    known = {entry.pw_name for entry in pwd.getpwall()}
    return next(name for name in _PLAIN_USERS if name in known)


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextmanager
def cluster(*, durable: bool = False) -> Iterator[Cluster]:
    """Run a database server until the block ends."""
    need_program("initdb")
    folder = Path(tempfile.mkdtemp(prefix="oddbranch-db-"))
    found = None
    try:
        found = Cluster(folder, durable=durable)
        yield found
    finally:
        if found is not None:
            found.stop()
        shutil.rmtree(folder, ignore_errors=True)
