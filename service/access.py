"""Who may do what: tokens with roles, kept as hashes, and the command that makes them.

A token is an id and 32 random bytes. The store holds SHA-256 of the bytes: a slow hash
defends guessable passwords, which these are not. Without any token the service answers
everyone who reaches it, and then it listens on loopback only.
"""

from __future__ import annotations

import base64
import binascii
import hashlib
import hmac
import ipaddress
import re
import secrets
import time
from dataclasses import dataclass
from pathlib import Path
from typing import Literal, get_args

import click
import sqlalchemy as sa

from scoring.errors import OddbranchError
from service.problems import Problem
from service.settings import Settings, load_settings
from service.store.database import Database
from service.store.tables import token as token_table
from service.times import format_time

Role = Literal["send", "read", "operate"]
ROLES: tuple[str, ...] = get_args(Role)
_N_SECRET_BYTES = 32
_NAME = re.compile(r"^[a-z0-9][a-z0-9._-]{0,63}$")


class BadToken(OddbranchError):
    """A token that cannot be made or ended."""


@dataclass(frozen=True, slots=True)
class KnownToken:
    """One token as the store has it."""

    name: str
    roles: frozenset[str]
    hash: bytes
    ends_ns: int | None


class NoRight(Problem):
    """A known token without the role. by: the token's name, for the log."""

    def __init__(self, by: str, detail: str) -> None:
        super().__init__("no-right", detail)
        self.by = by


class Tokens:
    """The tokens in force, as last read from the store.

    open_without: whether everyone may do everything while there is no token.
    """

    def __init__(self, *, open_without: bool) -> None:
        self.open_without = open_without
        self._known: dict[str, KnownToken] = {}

    def read(self, connection: sa.Connection) -> None:
        """Take the store's tokens; called again and again while the service runs."""
        known = {}
        for row in connection.execute(sa.select(token_table)):
            roles = frozenset(row.roles.split(","))
            known[row.id] = KnownToken(row.name, roles, row.hash, row.ends_ns)
        self._known = known

    @property
    def any_known(self) -> bool:
        """Whether there is a token at all."""
        return bool(self._known)

    @property
    def are_needed(self) -> bool:
        """Whether a request without a token is refused."""
        return self.any_known or not self.open_without

    def check(self, authorization: str | None, role: str) -> str:
        """Return the name of the token that has a role; raises Problem."""
        if not self.are_needed:
            return ""
        if authorization is None:
            raise Problem("no-token", f"this needs a token with the role {role}")
        found = self._find(_secret_of(authorization))
        if found is None:
            raise Problem("no-token", "the token is not known here, or has ended")
        if role not in found.roles:
            raise NoRight(
                found.name,
                f"the token has the roles {', '.join(sorted(found.roles))}; this needs {role}",
            )
        return found.name

    def _find(self, text: str) -> KnownToken | None:
        token_id, _, secret = text.partition(".")
        known = self._known.get(token_id)
        given = hashlib.sha256(secret.encode("utf-8", "replace")).digest()
        # An unknown id takes as long as a wrong secret.
        if not hmac.compare_digest(given, known.hash if known else bytes(32)) or known is None:
            return None
        if known.ends_ns is not None and known.ends_ns <= time.time_ns():
            return None
        return known


def _secret_of(authorization: str) -> str:
    """Return the token of a Bearer header, or the password of a Basic one."""
    scheme, _, value = authorization.partition(" ")
    if scheme.lower() == "bearer":
        return value.strip()
    if scheme.lower() == "basic":
        try:
            pair = base64.b64decode(value.strip(), validate=True).decode("utf-8")
        except (binascii.Error, UnicodeDecodeError):
            return ""
        return pair.partition(":")[2]
    return ""


def is_loopback(host: str) -> bool:
    """Return whether an address to listen on can be reached from this machine only."""
    if host == "localhost":
        return True
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False


def require_tokens_off_loopback(settings: Settings, tokens: Tokens) -> None:
    """Refuse to listen beyond this machine while everyone would be let in."""
    if not is_loopback(settings.server.host) and not tokens.any_known:
        raise OddbranchError(
            f"server.host = {settings.server.host} can be reached from other machines, and there "
            "is no token yet, so everyone could send and read; make one with "
            "`oddbranch token add NAME --role send`, or listen on 127.0.0.1"
        )


def add_token(
    connection: sa.Connection, name: str, roles: tuple[str, ...], days: float | None
) -> str:
    """Store a new token and return it, the only time that it can be read."""
    if not _NAME.fullmatch(name):
        raise BadToken(
            f"{name!r} cannot name a token; use 1 to 64 small letters, digits, dots and dashes"
        )
    taken = sa.select(token_table.c.id).where(token_table.c.name == name)
    if connection.execute(taken).first() is not None:
        raise BadToken(f"there is a token {name!r} already; end it first or choose another name")
    token_id, secret = secrets.token_hex(4), secrets.token_urlsafe(_N_SECRET_BYTES)
    now_ns = time.time_ns()
    connection.execute(
        token_table.insert().values(
            id=token_id,
            name=name,
            roles=",".join(sorted(set(roles))),
            hash=hashlib.sha256(secret.encode()).digest(),
            made_ns=now_ns,
            ends_ns=None if days is None else now_ns + int(days * 86_400e9),
        )
    )
    return f"{token_id}.{secret}"


def end_token(connection: sa.Connection, name: str) -> None:
    """Take a token out of the store; raises BadToken where there is none of that name."""
    done = connection.execute(token_table.delete().where(token_table.c.name == name))
    if not done.rowcount:
        raise BadToken(f"there is no token {name!r}; `oddbranch token list` shows them")


def _open(config: Path | None, data: Path | None) -> Database:
    options = {"store": {"data": data}} if data is not None else {}
    settings = load_settings(config, options)
    database = Database(settings.store.data, settings.store.url.get_secret_value())
    database.migrate()
    return database


_config = click.option(
    "--config", type=click.Path(path_type=Path), help="Settings file of the service."
)
_data = click.option(
    "--data", type=click.Path(path_type=Path), help="Data folder, as given to `serve`."
)


@click.group("token")
def token_command() -> None:
    """Make, list and end the tokens that let programs and people in."""


@token_command.command("add")
@click.argument("name")
@click.option(
    "--role", "roles", type=click.Choice(ROLES), multiple=True, required=True,
    help="What the token may do; give it again for more.",
)  # fmt: skip
@click.option("--days", type=click.FloatRange(min=0.001), help="Days after which it ends.")
@_config
@_data
def add_command(
    name: str, roles: tuple[str, ...], days: float | None, config: Path | None, data: Path | None
) -> None:
    """Make a token and show it once.

    The service takes it up within seconds, without a restart.
    """
    database = _open(config, data)
    with database.write.begin() as connection:
        made = add_token(connection, name, roles, days)
    database.close()
    click.echo(f"Token {name}, shown only now; keep it where the program that sends reads it:")
    click.echo(made)


@token_command.command("list")
@_config
@_data
def list_command(config: Path | None, data: Path | None) -> None:
    """List the tokens by name, without their secrets."""
    database = _open(config, data)
    with database.read.connect() as connection:
        rows = connection.execute(sa.select(token_table).order_by(token_table.c.name)).all()
    database.close()
    if not rows:
        click.echo("There is no token; make one with `oddbranch token add NAME --role send`.")
    for row in rows:
        ends = format_time(row.ends_ns) if row.ends_ns else "never"
        click.echo(f"{row.name}  roles {row.roles}  made {format_time(row.made_ns)}  ends {ends}")


@token_command.command("end")
@click.argument("name")
@_config
@_data
def end_command(name: str, config: Path | None, data: Path | None) -> None:
    """End a token; within seconds nobody is let in with it."""
    database = _open(config, data)
    with database.write.begin() as connection:
        end_token(connection, name)
    database.close()
    click.echo(f"Token {name} has ended.")
