"""Upgrades: stores and models of every format written so far are held, and still work.

tests/data/formats: `store-N.sql` is a store as version N's tables had it, `model-N` a model
directory of format N, and `answers.json` what the service answered when they were made.
A change of format adds a file here and changes none.
"""

from __future__ import annotations

import json
import shutil
import sqlite3
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path
from typing import Any

import pytest
import sqlalchemy as sa
from alembic import command
from alembic.config import Config
from alembic.script import ScriptDirectory

from scoring.artefact import MODEL_FORMAT, read_model
from service.scoring_engine import load_engine
from service.store import migrations
from service.store.database import Database
from service.store.tables import metadata
from tests.conftest import ROOT
from tests.service_http import Api, running
from tests.service_postgres import Cluster, cluster

HELD = ROOT / "tests" / "data" / "formats"
ANSWERS = json.loads((HELD / "answers.json").read_text(encoding="utf-8"))
LEAVE = {"authorization": f"Bearer {ANSWERS['token']}"}
VERSIONS = sorted(path.stem.removeprefix("store-") for path in HELD.glob("store-*.sql"))
NEXT = {
    "source": "a",
    "time": "2025-12-01T04:02:00Z",
    "readings": {"in": 21.0, "out": 90.0, "power": 11.0, "pump": "running"},
}


@pytest.fixture(scope="module")
def database() -> Iterator[Cluster]:
    with cluster() as found:
        yield found


def alembic(connection: sa.Connection | None = None) -> Config:
    """Return the migrations' own configuration."""
    config = Config()
    config.set_main_option("script_location", str(Path(migrations.__file__).parent))
    config.attributes["connection"] = connection
    return config


def held_store(folder: Path, version: str) -> Path:
    """Write a store as an earlier version left it, and return its file."""
    path = folder / "data" / "records.sqlite3"
    path.parent.mkdir()
    with closing(sqlite3.connect(path)) as connection:
        connection.executescript((HELD / f"store-{version}.sql").read_text(encoding="utf-8"))
    return path


def in_postgres(url: str, path: Path, version: str) -> None:
    """Make the tables of an earlier version in PostgreSQL, with the held store's rows."""
    target = sa.create_engine(url.replace("postgresql://", "postgresql+psycopg://"))
    source = sa.create_engine(f"sqlite:///{path}")
    with target.connect() as connection:
        command.upgrade(alembic(connection), version)
        connection.commit()
    tables = sa.MetaData()
    tables.reflect(target)
    with source.connect() as old, target.begin() as new:
        for table in tables.sorted_tables:
            if table.name == "alembic_version":
                continue
            rows = [dict(row._mapping) for row in old.execute(sa.text(f"SELECT * FROM {table}"))]
            if rows:
                new.execute(table.insert(), rows)
            for name in ("id", "number"):
                if rows and isinstance(rows[0].get(name), int) and table.name != "flood":
                    # The counter goes on behind the rows, as it would have where they were made.
                    new.execute(
                        sa.text(
                            f"SELECT setval(pg_get_serial_sequence('{table}', '{name}'), "
                            f"(SELECT max({name}) FROM {table}))"
                        )
                    )
    for engine in (target, source):
        engine.dispose()


def shape(engine: sa.Engine) -> dict[str, tuple[list[str], set[str | None]]]:
    """Return every table's columns and indexes by name."""
    seen = sa.inspect(engine)
    return {
        name: (
            sorted(column["name"] for column in seen.get_columns(name)),
            {index["name"] for index in seen.get_indexes(name)},
        )
        for name in seen.get_table_names()
    }


def close(answer: dict[str, Any]) -> list[Any]:
    """Return what is compared of an answer; a later program may round the last digit else."""
    numbers = [answer[name] for name in ("surprise", "excess", "sustained")]
    return [answer["source"], answer["time"], answer["alert"], pytest.approx(numbers, abs=2e-4)]


def stored(api: Api, source: str) -> list[dict[str, Any]]:
    answer = api.get("/records", params={"source": source}, headers=LEAVE)
    assert answer.status_code == 200, answer.text
    return list(answer.json()["items"])


def check_it_goes_on(api: Api, wanted: dict[str, Any]) -> None:
    """Old records are there with their scores, the token holds, and the standing goes on."""
    assert api.get("/records").status_code == 401
    for source in ("a", "elsewhere"):
        old = [one for one in ANSWERS["answers"] if one["source"] == source]
        found = sorted(stored(api, source), key=lambda one: str(one["time"]))
        assert [one["time"] for one in found] == [one["time"] for one in old]
        for answer, before in zip(found, old, strict=True):
            numbers = [answer[name] for name in ("surprise", "excess", "sustained")]
            assert [answer["source"], answer["time"], answer["alert"], numbers] == close(before)
    # What a sender sends again is known; what comes next continues the standing.
    again = api.post(ANSWERS["sent"], headers=LEAVE).json()
    assert all(one["known"] for one in again)
    following = api.post(NEXT, headers=LEAVE).json()
    for name in ("surprise", "excess", "sustained"):
        assert following[name] == pytest.approx(wanted[name], abs=2e-4)
    assert following["alert"] == wanted["alert"]


@pytest.fixture(scope="module")
def unbroken(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """Return the answer to the next record where nothing was ever upgraded."""
    folder = tmp_path_factory.mktemp("unbroken")
    shutil.copytree(HELD / "model-1", folder / "model")
    with running(folder, load=load_engine) as api:
        api.post(ANSWERS["sent"])
        answer: dict[str, Any] = api.post(NEXT).json()
        return answer


@pytest.mark.parametrize("version", VERSIONS)
def test_a_store_of_an_earlier_version_goes_on(
    version: str, tmp_path: Path, unbroken: dict[str, Any]
) -> None:
    held_store(tmp_path, version)
    shutil.copytree(HELD / "model-1", tmp_path / "model")
    with running(tmp_path, load=load_engine) as api:
        check_it_goes_on(api, unbroken)
        made = shape(api.service.database.write)
    assert set(made) - {"alembic_version"} == set(metadata.tables)
    for name, table in metadata.tables.items():
        assert made[name][0] == sorted(column.name for column in table.columns)
        assert made[name][1] == {index.name for index in table.indexes}


@pytest.mark.parametrize("version", VERSIONS)
def test_so_it_does_in_postgresql(
    version: str, tmp_path: Path, database: Cluster, unbroken: dict[str, Any]
) -> None:
    url = database.emptied_database()
    in_postgres(url, held_store(tmp_path, version), version)
    shutil.copytree(HELD / "model-1", tmp_path / "model")
    with running(tmp_path, load=load_engine, store={"url": url}) as api:
        check_it_goes_on(api, unbroken)


def test_a_store_is_held_of_every_version() -> None:
    scripts = ScriptDirectory.from_config(alembic())
    assert {one.revision for one in scripts.walk_revisions()} == set(VERSIONS)
    assert scripts.get_current_head() == migrations.HEAD


def test_the_newest_held_store_has_the_tables_that_are_made_today(tmp_path: Path) -> None:
    """A migration that was released is not edited: another one follows it."""
    path = held_store(tmp_path, VERSIONS[-1])
    made = Database(tmp_path / "made")
    made.migrate()
    old = sa.create_engine(f"sqlite:///{path}")
    try:
        assert shape(old) == shape(made.write)
    finally:
        old.dispose()
        made.close()


@pytest.mark.parametrize("version", range(1, MODEL_FORMAT + 1))
def test_a_model_of_every_format_is_read_and_scores_as_it_did(version: int, tmp_path: Path) -> None:
    path = HELD / f"model-{version}"
    name = json.loads((path / "model.json").read_text(encoding="utf-8"))["name"]
    assert read_model(path).name == name
    shutil.copytree(path, tmp_path / "model")
    with running(tmp_path, load=load_engine) as api:
        answers = api.post(ANSWERS["sent"]).json()
    for answer, before in zip(answers, ANSWERS["answers"], strict=True):
        numbers = [answer[key] for key in ("surprise", "excess", "sustained")]
        assert [answer["source"], answer["time"], answer["alert"], numbers] == close(before)
        assert answer["suspect"]["channel"] == before["suspect"]["channel"]
