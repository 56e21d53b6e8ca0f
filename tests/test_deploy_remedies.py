"""The remedies of deploy/README.md, each tried."""

from __future__ import annotations

import itertools
import re
import shutil
import sqlite3
import subprocess
import time
from contextlib import closing
from dataclasses import replace
from pathlib import Path

import pytest
from click.testing import CliRunner

import oddbranch
from scoring.artefact import read_model, write_model
from service.scoring_engine import load_engine
from tests.conftest import ROOT
from tests.service_http import NOW_NS, Api, record, running

README = (ROOT / "deploy" / "README.md").read_text(encoding="utf-8")
MODEL = ROOT / "tests" / "data" / "formats" / "model-1"


def run(*words: str | Path) -> str:
    """Run an oddbranch command and return what it said."""
    done = CliRunner().invoke(oddbranch.cli, list(map(str, words)), catch_exceptions=False)
    assert done.exit_code == 0, done.output
    return done.output


def until_refused(api: Api, start: int = 0) -> int:
    """Send batches until one is refused; return how many records were acknowledged."""
    n = start
    while True:
        answer = api.post([record((n + i) / 6) for i in range(20)])
        if answer.status_code == 503:
            assert answer.json()["type"] == "/problems/store-full"
            assert answer.headers["retry-after"]
            return n
        assert answer.status_code == 200
        n += 20
        assert n < 5000, "the store is never full"


def value(api: Api, name: str, **labels: str) -> float | None:
    """Return a number as Prometheus would see it."""
    return api.service.metrics.registry.get_sample_value(f"oddbranch_{name}", labels)


def n_stored(api: Api) -> int:
    """Return how many records are in the store."""
    path = api.service.settings.store.data / "records.sqlite3"
    with closing(sqlite3.connect(path)) as connection:
        return int(connection.execute("SELECT count(*) FROM record").fetchone()[0])


def test_a_full_disk_is_mended_by_letting_old_records_go(tmp_path: Path) -> None:
    """As the page says: a lower store.keep_mb, and a restart; some room was made before."""
    # What came at the same moment goes at the same moment.
    ticks = itertools.count(NOW_NS, 10**9)
    with running(tmp_path, store={"max_pages": 60}, clock_ns=lambda: next(ticks)) as api:
        n = until_refused(api)
        assert n_stored(api) == n
    # Some room: another file was moved away. Then old records go.
    smaller = {"max_pages": 64, "keep_mb": 0.4}
    with running(tmp_path, store=smaller, clock_ns=lambda: next(ticks)) as api:
        api.call(api.service.retention.prune())
        left = n_stored(api)
        assert 0 < left < n
        went = api.get("/pruned").json()["items"]
        assert went[0]["reason"] == "size"
        assert went[0]["records"] == n - left
        answer = api.post([record((n + i) / 6) for i in range(20)])
        assert answer.status_code == 200
        assert n_stored(api) == left + 20


def test_a_full_disk_is_mended_by_giving_it_room(tmp_path: Path) -> None:
    """A real one, small and in memory; the service goes on by itself."""
    disk = tmp_path / "data"
    disk.mkdir()
    words = ["mount", "-t", "tmpfs", "-o", "size=2m", "tmpfs", str(disk)]
    done = subprocess.run(words, capture_output=True, text=True, check=False)
    if done.returncode:
        pytest.skip(f"no disk of its own can be made here: {done.stderr.strip()}")
    try:
        with running(tmp_path) as api:
            n = until_refused(api)
            assert shutil.disk_usage(disk).free < 64_000
            assert n_stored(api) == n
            subprocess.run(["mount", "-o", "remount,size=8m", str(disk)], check=True)
            answer = api.post([record((n + i) / 6) for i in range(20)])
            assert answer.status_code == 200
            assert n_stored(api) == n + 20
    finally:
        subprocess.run(["umount", str(disk)], check=True)


def test_a_clock_that_jumped_ahead_moves_no_standing(tmp_path: Path) -> None:
    clock = [NOW_NS]
    with running(tmp_path / "jumped", clock_ns=lambda: clock[0]) as api:
        api.post([record(i) for i in range(5)])
        # A day ahead of the service: stored, counted as ahead, and forgotten by the standing.
        api.post([record(24 * 60 + i) for i in range(3)])
        found = [api.post(record(5 + i)).json() for i in range(3)]
        ahead = value(api, "records_total", outcome="ahead")
    with running(tmp_path / "right", clock_ns=lambda: clock[0]) as api:
        api.post([record(i) for i in range(5)])
        wanted = [api.post(record(5 + i)).json() for i in range(3)]
    assert ahead == 3
    assert [one["sustained"] for one in found] == [one["sustained"] for one in wanted]


def test_the_services_own_clock_may_jump_and_come_back(tmp_path: Path) -> None:
    clock = [NOW_NS]
    with running(tmp_path, clock_ns=lambda: clock[0]) as api:
        first = api.post(record(0)).json()
        clock[0] = NOW_NS - 400 * 86_400 * 10**9
        while_wrong = api.post(record(1))
        clock[0] = NOW_NS
        after = api.post(record(2)).json()
        assert while_wrong.status_code == 200
        assert n_stored(api) == 3
        ahead = value(api, "records_total", outcome="ahead")
    assert ahead == 1
    with running(tmp_path / "right") as api:
        assert api.post(record(0)).json()["sustained"] == first["sustained"]
        assert api.post(record(2)).json()["sustained"] == after["sustained"]


def two_models(folder: Path) -> tuple[str, str]:
    """Keep two models and return their names, the one in use last."""
    shutil.copytree(MODEL, folder / "first")
    model = read_model(MODEL)
    other = replace(model, levels=replace(model.levels, record=0.5))
    write_model(other, folder / "second")
    for name in ("first", "second"):
        run("models", "--folder", folder / "models", "add", folder / name)
        # Kept models are told apart by the second of their publication.
        time.sleep(1.1)
    return model.name, read_model(folder / "second").name


def test_the_model_before_is_taken_back_while_the_service_runs(tmp_path: Path) -> None:
    first, second = two_models(tmp_path)
    path = tmp_path / "models" / "current"
    with running(tmp_path, load=load_engine, model={"path": path}) as api:
        body = {
            "source": "a",
            "time": "2025-12-01T04:00:00Z",
            "readings": {"in": 20.0, "out": 22.0},
        }
        assert api.post(body).json()["model"] == second
        assert first in run("models", "--folder", tmp_path / "models", "back")
        api.call(api.service.models.look())
        assert api.post(body | {"time": "2025-12-01T04:00:10Z"}).json()["model"] == first
        # A damaged one is refused, the one before goes on, and the way back is the same.
        damaged = tmp_path / "models" / "20990101T000000Z-damaged"
        shutil.copytree(MODEL, damaged)
        (damaged / "tables.npz").write_bytes(b"nonsense")
        path.unlink()
        path.symlink_to(damaged.name)
        api.call(api.service.models.look())
        assert api.post(body | {"time": "2025-12-01T04:00:20Z"}).json()["model"] == first
        assert value(api, "model_refused") == 1
        run("models", "--folder", tmp_path / "models", "back")
        api.call(api.service.models.look())
        assert value(api, "model_refused") == 0
        assert api.post(body | {"time": "2025-12-01T04:00:30Z"}).status_code == 200


def test_a_changed_plant_is_declared_in_one_command(tmp_path: Path) -> None:
    two_models(tmp_path)
    folder = tmp_path / "models"
    run("models", "--folder", folder, "since", "2026-12-01T06:00:00Z", "--reason", "new pump")
    assert "new pump" in run("models", "--folder", folder, "since")


def test_a_source_that_was_renamed_is_scored_by_the_fleets_member(tmp_path: Path) -> None:
    shutil.copytree(MODEL, tmp_path / "model")
    with running(tmp_path, load=load_engine) as api:
        body = {
            "source": "a",
            "time": "2025-12-01T04:00:00Z",
            "readings": {"in": 20.0, "out": 22.0},
        }
        assert api.post(body).json()["member"] == "own"
        assert api.post(body | {"source": "a-new-name"}).json()["member"] == "fleet"
        out = api.post({"reason": "renamed"}, "/sources/a/out-of-service")
        assert out.status_code == 200


def test_a_leaked_token_is_ended_and_lets_nobody_in(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        data = ("--data", tmp_path / "data")
        run("token", "add", "other", "--role", "read", *data)
        leaked = run("token", "add", "leaked", "--role", "read", *data).splitlines()[-1]
        head = {"authorization": f"Bearer {leaked}"}
        api.call(api.service._read_tokens())
        assert api.get("/sources", headers=head).status_code == 200
        run("token", "end", "leaked", *data)
        api.call(api.service._read_tokens())
        assert api.get("/sources", headers=head).status_code == 401


@pytest.mark.parametrize(
    "trouble",
    ["The disk is full", "The database is away", "The clock jumped", "The model is bad",
     "The plant changes", "A source was renamed", "A token leaked"],
)  # fmt: skip
def test_every_trouble_has_its_paragraph(trouble: str) -> None:
    remedies = README[README.index("## Remedies") : README.index("## Sizes")]
    assert f"**{trouble}" in remedies


def test_every_title_that_a_rule_points_to_is_there() -> None:
    rules = (ROOT / "deploy/prometheus/oddbranch.rules.yml").read_text(encoding="utf-8")
    text = " ".join(rules.split())
    pointed = set(re.findall(r'"([Tt]he [a-z ]+)"', text))
    assert {title.lower() for title in pointed} == {
        "the plant changes", "the disk is full", "the database is away", "the model is bad",
    }  # fmt: skip
    for title in pointed:
        assert f"**{title[0].upper()}{title[1:]}" in README


def test_the_sizes_are_the_arithmetic_of_the_parts() -> None:
    parts = {
        name: float(figure.replace(" ", ""))
        for name, figure in re.findall(r"^\| ([^|]+?) \| ([\d ]+) \|$", README, re.MULTILINE)
    }
    rows = dict(re.findall(r"^\| ([^|]+?) \| (.+) \|$", README, re.MULTILINE))
    per_day = {n: n * 8640 for n in (10, 1000, 100_000)}
    sqlite = parts["bytes a record, SQLite, indexes included"]
    postgres = parts["bytes a record, PostgreSQL, indexes included"]
    found = rows["store a day"].split(" | ")
    assert found[0] == f"{per_day[10] * sqlite / 1e6:.0f} MB"
    assert found[1] == f"{per_day[1000] * sqlite / 1e9:.1f} GB"
    assert found[2].startswith(f"{per_day[100_000] * postgres / 1e9 / 10:.0f}0 GB")
    ones = rows["cores, one record a request"].split(" | ")
    one = parts["records a second and core, PostgreSQL, one a request"]
    assert float(ones[2].split()[0]) == pytest.approx(10_000 / one, abs=0.05)
    rest, own = parts["MB of a service at rest"], parts["KB a member of its own, in memory"]
    sent = parts["KB a source that has sent, in memory"]
    memory = rows["memory, every source with its own member"].split(" | ")
    for text, n in zip(memory, per_day, strict=True):
        wanted = (rest + n * (own + sent) / 1000) / 1000
        assert float(text.split()[0]) == pytest.approx(wanted, rel=0.2)
