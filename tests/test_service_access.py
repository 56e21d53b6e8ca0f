"""Who may: tokens, roles, loopback."""

from __future__ import annotations

import re
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
import sqlalchemy as sa
from click.testing import CliRunner

from scoring.errors import OddbranchError
from service.access import Tokens, is_loopback, require_tokens_off_loopback, token_command
from service.store.database import Database
from service.store.tables import token as token_table
from tests.service_http import Api, record, running, settings_for


def command(data: Path, *words: str) -> str:
    result = CliRunner().invoke(
        token_command, [*words, "--data", str(data)], catch_exceptions=False
    )
    assert result.exit_code == 0, result.output
    return result.output


def made(data: Path, name: str, *roles: str, days: float | None = None) -> str:
    options = [word for role in roles for word in ("--role", role)]
    if days is not None:
        options += ["--days", str(days)]
    return command(data, "add", name, *options).splitlines()[-1]


@pytest.fixture
def tokens(tmp_path: Path) -> dict[str, str]:
    return {role: made(tmp_path / "data", role, role) for role in ("send", "read", "operate")}


@pytest.fixture
def api(tmp_path: Path, tokens: dict[str, str]) -> Iterator[Api]:
    with running(tmp_path) as found:
        yield found


def bearer(token: str) -> dict[str, str]:
    return {"authorization": f"Bearer {token}"}


def test_each_role_may_do_its_own_and_nothing_else(api: Api, tokens: dict[str, str]) -> None:
    assert api.post(record(), headers=bearer(tokens["send"])).status_code == 200
    assert api.post(record(1), headers=bearer(tokens["read"])).status_code == 403
    assert api.get("/records", headers=bearer(tokens["read"])).status_code == 200
    for path in ("/", "/records", "/alerts", "/sources", "/model", "/metrics", "/openapi.json"):
        assert api.get(path, headers=bearer(tokens["send"])).status_code == 403, path
        assert api.get(path).status_code == 401, path


def test_health_needs_no_token(api: Api) -> None:
    assert api.get("/health/live").status_code == 200
    assert api.get("/health/ready").status_code == 200
    assert api.get("/problems/no-token").status_code == 200


@pytest.mark.parametrize(
    "authorization",
    [
        "Bearer",
        "Bearer x",
        "Bearer .",
        "Basic !!",
        "Basic eA==",
        "Digest x",
        "",
        "Bearer \xff.\xff",
    ],
)
def test_what_is_no_token_is_refused_alike(api: Api, authorization: str) -> None:
    headers = [(b"authorization", authorization.encode("latin-1"))]
    answer = api.get("/records", headers=headers)
    assert answer.status_code == 401
    assert answer.json()["detail"] == "the token is not known here, or has ended"
    assert answer.headers["www-authenticate"].startswith("Bearer")


def test_a_token_with_another_secret_is_refused(api: Api, tokens: dict[str, str]) -> None:
    changed = tokens["read"][:-1] + ("A" if tokens["read"][-1] != "A" else "B")
    assert api.get("/records", headers=bearer(changed)).status_code == 401


def test_a_browser_may_send_the_token_as_a_password(api: Api, tokens: dict[str, str]) -> None:
    answer = api.call(api.client.get("/", auth=("anyone", tokens["read"])))
    assert answer.status_code == 200


def test_a_token_made_or_ended_while_serving_counts_within_seconds(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        assert api.get("/records").status_code == 200
        token = made(tmp_path / "data", "later", "read")
        assert _within_seconds(lambda: api.get("/records").status_code == 401)
        assert api.get("/records", headers=bearer(token)).status_code == 200
        command(tmp_path / "data", "end", "later")
        assert _within_seconds(lambda: api.get("/records").status_code == 200)


def _within_seconds(holds: object) -> bool:
    assert callable(holds)
    end = time.monotonic() + 10
    while time.monotonic() < end:
        if holds():
            return True
        time.sleep(0.1)
    return False


def test_a_token_ends_by_itself(tmp_path: Path) -> None:
    token = made(tmp_path / "data", "short", "read", days=0.001)
    with running(tmp_path) as api:
        assert api.get("/records", headers=bearer(token)).status_code == 200
        with api.service.database.write.begin() as connection:
            connection.execute(token_table.update().values(ends_ns=time.time_ns() - 1))
        with api.service.database.read.connect() as connection:
            api.service.tokens.read(connection)
        assert api.get("/records", headers=bearer(token)).status_code == 401


def test_the_store_holds_no_token(tmp_path: Path) -> None:
    token = made(tmp_path / "data", "mine", "send")
    database = Database(tmp_path / "data")
    with database.read.connect() as connection:
        row = connection.execute(sa.select(token_table)).one()
    database.close()
    assert len(row.hash) == 32
    secret = token.partition(".")[2].encode()
    files = list((tmp_path / "data").iterdir())
    assert files
    assert all(secret not in file.read_bytes() for file in files)


def test_the_list_shows_names_and_roles_only(tmp_path: Path) -> None:
    assert "There is no token" in command(tmp_path, "list")
    token = made(tmp_path, "forwarder", "send", "read")
    listed = command(tmp_path, "list")
    assert re.match(r"forwarder  roles read,send  made .*  ends never", listed)
    assert token.partition(".")[2] not in listed


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (("add", "Bad Name", "--role", "send"), "cannot name a token"),
        (("end", "nobody"), "there is no token 'nobody'"),
    ],
)
def test_a_token_that_cannot_be_gets_a_sentence(
    tmp_path: Path, words: tuple[str, ...], message: str
) -> None:
    with pytest.raises(OddbranchError, match=message):
        command(tmp_path, *words)


def test_a_name_is_given_once(tmp_path: Path) -> None:
    made(tmp_path, "mine", "send")
    with pytest.raises(OddbranchError, match="there is a token 'mine' already"):
        made(tmp_path, "mine", "send")


@pytest.mark.parametrize(
    ("host", "expected"),
    [("127.0.0.1", True), ("127.8.8.8", True), ("::1", True), ("localhost", True),
     ("0.0.0.0", False), ("::", False), ("10.1.2.3", False), ("station.example", False)],
)  # fmt: skip
def test_loopback_is_told_from_the_rest(host: str, expected: bool) -> None:
    assert is_loopback(host) is expected


def test_without_tokens_only_loopback_is_listened_on(tmp_path: Path) -> None:
    settings = settings_for(tmp_path, server={"host": "0.0.0.0"})
    with pytest.raises(OddbranchError, match=r"oddbranch token add NAME --role send.*127.0.0.1"):
        require_tokens_off_loopback(settings, Tokens(open_without=False))
    require_tokens_off_loopback(settings_for(tmp_path), Tokens(open_without=True))


def test_without_tokens_nobody_is_let_in_off_loopback(tmp_path: Path) -> None:
    # For when the last token is ended while the service runs.
    with running(tmp_path, server={"host": "0.0.0.0"}) as api:
        assert api.get("/records").status_code == 401
        assert api.post(record()).status_code == 401
