"""Alerts in the service: raised with their records, kept through everything, acted on."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from contextlib import closing
from dataclasses import replace
from pathlib import Path
from typing import Any

import httpx
import orjson
import pytest
import sqlalchemy as sa
from pydantic import TypeAdapter

from scoring.alert_standing import AlertStanding
from scoring.artefact import write_model
from service.access import add_token
from service.alert_schemas import ActionsPage, AlertItem, AlertsPage, SourceService
from service.schemas import ADVICE, SourceItem
from service.scoring_engine import load_engine
from service.store.database import Database
from service.store.group import Group, SqliteGroup
from service.times import format_time
from tests.models import a_model
from tests.service_http import START_S, Api, Clock, Server, running
from tests.service_postgres import Cluster, cluster

S = 1_000_000_000
ALERTS, ACTIONS = TypeAdapter(AlertsPage), TypeAdapter(ActionsPage)


@pytest.fixture(scope="module")
def postgres() -> Iterator[Cluster]:
    with cluster() as found:
        yield found


@pytest.fixture(scope="module")
def models(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Write two models of the same channels, of other names."""
    folder = tmp_path_factory.mktemp("models")
    model = a_model()
    # Above where the small model's usual records rest, so that an alert ends.
    model = replace(model, levels=replace(model.levels, sustained=20.0))
    write_model(model, folder / "first")
    write_model(replace(model, levels=replace(model.levels, tau_s=200.0)), folder / "second")
    return folder


@pytest.fixture
def clock() -> Clock:
    return Clock()


@pytest.fixture(params=["sqlite", "postgresql"])
def store(request: pytest.FixtureRequest) -> dict[str, Any]:
    if request.param == "postgresql":
        return {"url": request.getfixturevalue("postgres").emptied_database()}
    return {}


def serve(folder: Path, models: Path, clock: Clock, **more: Any) -> Any:
    """Run a service over the small model; records of `a` every ten seconds."""
    link = folder / "model"
    if not link.exists():
        link.symlink_to(models / "first")
    return running(folder, load=load_engine, clock_ns=clock, **more)


def sent(step: int, source: str = "a", odd: bool = False) -> dict[str, Any]:
    """Return a record; usual ones move, so that nothing is stuck."""
    shift = 0.5 if step % 2 else 0.0
    usual = (6.2, 14.2, 10.2) if source == "a" else (7.2, 19.2, 7.2)
    given = (-45.0, 700.0, 1.0) if odd else tuple(x + shift for x in usual)
    readings = dict(zip(("in", "out", "power"), given, strict=True)) | {"pump": "stopped"}
    moment = format_time((START_S + 10 * step) * S)
    return {"source": source, "time": moment, "readings": readings}


def raise_one(api: Api, source: str = "a", start: int = 0) -> dict[str, Any]:
    """Send odd records and return the alert that was raised."""
    api.post([sent(start + i, source, odd=i >= 4) for i in range(9)])
    found = alerts(api, source=source, state="open")
    scored = [one for one in found if one["kind"] == "scored"]
    assert len(scored) == 1
    return scored[0]


def alerts(api: Api, **query: Any) -> list[dict[str, Any]]:
    content = api.get("/alerts", params=query).content
    ALERTS.validate_json(content)
    page: list[dict[str, Any]] = api.get("/alerts", params=query).json()["items"]
    return page


def act(api: Api, path: str, body: Any = None, **more: Any) -> httpx.Response:
    return api.post({} if body is None else body, path, **more)


def test_an_alert_says_what_a_technician_needs(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any]
) -> None:
    with serve(tmp_path, models, clock, store=store) as api:
        alert = raise_one(api)
        assert alert["state"] == "raised"
        assert alert["in_budget"] is True
        assert "a" in alert["sentence"]
        assert alert["suspects"][0]["channel"] in ("in", "out", "power", "pump")
        assert alert["advice"].startswith("Advice")
        assert alert["since"] <= alert["raised"] <= alert["worst"]
        assert api.get("/alerts").json()["advice"] == ADVICE
        page = api.get("/").text
        assert alert["id"] in page
        assert alert["sentence"] in page
        metrics = api.get("/metrics").text
        assert 'oddbranch_alerts{kind="scored",state="raised"} 1.0' in metrics
        assert "oddbranch_alarm_budget_alerts_last_day 1.0" in metrics


def test_pages_choose_by_source_state_and_time_and_go_on(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any]
) -> None:
    with serve(tmp_path, models, clock, store=store) as api:
        first, second = raise_one(api), raise_one(api, "b", start=30)
        every = alerts(api)
        one = api.get("/alerts", params={"limit": 1}).json()
        got = list(one["items"])
        while one["next"]:
            one = api.get("/alerts", params={"limit": 1, "after": one["next"]}).json()
            got += one["items"]
        assert got == every
        assert [x["raised"] for x in every] == sorted((x["raised"] for x in every), reverse=True)
        assert first["id"] in {x["id"] for x in alerts(api, source="a")}
        assert second["id"] not in {x["id"] for x in alerts(api, source="a")}
        assert first["id"] not in {x["id"] for x in alerts(api, **{"from": second["raised"]})}
        assert second["id"] not in {x["id"] for x in alerts(api, to=second["raised"])}
        assert alerts(api, state="cleared") == []
        assert api.get("/alerts", params={"state": "sleeping"}).status_code == 422


def test_one_alert_and_one_source_are_answered_as_their_lists_have_them(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any]
) -> None:
    with serve(tmp_path, models, clock, store=store) as api:
        alert = raise_one(api)
        api.post(sent(0, "north/b"))
        one = api.get(f"/alerts/{alert['id']}")
        TypeAdapter(AlertItem).validate_json(one.content)
        assert one.json() == alert
        act(api, "/sources/a/out-of-service", {"reason": "new pump"})
        assert api.get(f"/alerts/{alert['id']}").json()["state"] == "cleared"
        listed = api.get("/sources").json()["items"]
        assert [item["source"] for item in listed] == ["a", "north/b"]
        for item in listed:
            one = api.get(f"/sources/{item['source']}")
            TypeAdapter(SourceItem).validate_json(one.content)
            assert one.json() == item
        described = api.get("/openapi.json").json()["paths"]
        for path in ("/alerts/{id}", "/sources/{source}"):
            assert {"200", "404"} <= set(described[path]["get"]["responses"])
        metrics = api.get("/metrics").text
        assert 'route="/alerts/{id}",status="200"' in metrics
        assert alert["id"] not in metrics


@pytest.mark.parametrize(
    ("method", "path", "status", "words"),
    [
        ("GET", "/alerts/0000000000000000", 404, "there is no alert '0000000000000000'; GET /al"),
        ("GET", "/alerts/nonsense", 422, "an alert's id is 16 digits"),
        ("GET", "/alerts/0000000000000000?source=a", 422, "parameter 'source' is not known"),
        ("GET", "/sources/nowhere", 404, "there is no source 'nowhere'; GET /sources lists them"),
        ("GET", "/sources/a/in-service", 405, "use POST"),
        ("PUT", "/sources/a/in-service", 405, "use POST"),
        ("PUT", "/sources/a", 405, "use GET"),
        ("GET", "/alerts/0000000000000000/note", 405, "use POST"),
    ],
)
def test_what_is_not_one_is_refused_with_the_way_out(
    tmp_path: Path, models: Path, clock: Clock,
    method: str, path: str, status: int, words: str,
) -> None:  # fmt: skip
    with serve(tmp_path, models, clock) as api:
        api.post(sent(0))
        refused = api.request(method, path)
    assert refused.status_code == status
    assert words in refused.json()["detail"]


def test_every_action_is_stored_with_who_and_when(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any]
) -> None:
    with serve(tmp_path, models, clock, store=store) as api:
        alert = raise_one(api)
        path = f"/alerts/{alert['id']}"
        seen = act(api, f"{path}/acknowledge", {"comment": "on my way"})
        assert seen.status_code == 200, seen.text
        TypeAdapter(AlertItem).validate_json(seen.content)
        assert (seen.json()["state"], seen.json()["acknowledged_by"]) == ("acknowledged", "local")
        assert act(api, f"{path}/note", {"comment": "meter cleaned"}).status_code == 200
        assert act(api, f"{path}/label", {"label": "real"}).json()["label"] == "real"
        until = format_time(clock.now_ns + 3600 * S)
        shelf = act(api, f"{path}/shelve", {"until": until, "reason": "valve work"})
        assert shelf.json()["quiet"] == "shelved"
        assert act(api, f"{path}/unshelve").json()["quiet"] == ""
        content = api.get("/actions", params={"alert": alert["id"]}).content
        ACTIONS.validate_json(content)
        items = api.get("/actions", params={"source": "a"}).json()["items"]
        assert [item["what"] for item in items] == [
            "unshelved", "shelved", "labelled", "noted", "acknowledged",
        ]  # fmt: skip
        assert {(i["by"], i["at"], i["alert"]) for i in items} == {
            ("local", format_time(clock.now_ns), alert["id"])
        }
        assert items[1]["comment"] == "valve work"
        assert [n["text"] for n in alerts(api, source="a", state="open")[0]["notes"]] == [
            "on my way", "meter cleaned",
        ]  # fmt: skip


def test_a_source_out_of_service_raises_nothing_until_it_is_back(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any]
) -> None:
    with serve(tmp_path, models, clock, store=store) as api:
        alert = raise_one(api)
        out = act(api, "/sources/a/out-of-service", {"reason": "new pump"})
        assert out.status_code == 200, out.text
        TypeAdapter(SourceService).validate_json(out.content)
        assert out.json()["out_of_service"][0]["by"] == "local"
        assert alerts(api, state="open") == []
        closed = alerts(api, state="cleared")
        assert alert["id"] in {one["id"] for one in closed}
        assert closed[0]["why_cleared"] == "out of service"
        # Records from now on are inside the period.
        step = (clock.now_ns // S - START_S) // 10
        clock.now_ns += 600 * S
        answers = api.post([sent(step + i, odd=True) for i in range(1, 6)]).json()
        assert any(answer["alert"] for answer in answers)
        assert alerts(api, state="open") == []
        again = act(api, "/sources/a/out-of-service", {"reason": "new pump"})
        assert again.status_code == 409
        assert "out of service" in again.json()["detail"]
        assert act(api, "/sources/a/in-service").json()["out_of_service"] == []
        whats = [item["what"] for item in api.get("/actions").json()["items"]]
        assert whats == ["back_in_service", "out_of_service"]
        # What is cleared takes a label still, and no second life.
        label = act(api, f"/alerts/{alert['id']}/label", {"label": "nuisance"})
        assert (label.json()["label"], label.json()["state"]) == ("nuisance", "cleared")


def test_what_calls_nobody_shows_in_the_numbers(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any]
) -> None:
    """A shelf shows for its kind at its source, a time out of service for all of them."""
    with serve(tmp_path, models, clock, store=store) as api:

        def quiet() -> dict[str, float | None]:
            ask = api.service.metrics.registry.get_sample_value
            found = {
                f"{source} {kind}": ask("oddbranch_source_quiet", {"source": source, "kind": kind})
                for source in ("a", "b")
                for kind in ("scored", "silent")
            }
            return found | {"alerts": ask("oddbranch_alerts_quiet", {"kind": "scored"})}

        nothing = dict.fromkeys(("a scored", "a silent", "b scored", "b silent", "alerts"), 0.0)
        path = f"/alerts/{raise_one(api)['id']}"
        api.post(sent(0, "b"))
        assert quiet() == nothing
        until = format_time(clock.now_ns + 3600 * S)
        assert act(api, f"{path}/shelve", {"until": until, "reason": "work"}).status_code == 200
        assert quiet() == nothing | {"a scored": 1.0, "alerts": 1.0}
        # Seen is seen: it is no longer among those that are raised.
        act(api, f"{path}/acknowledge")
        assert quiet() == nothing | {"a scored": 1.0}
        clock.now_ns += 3601 * S
        assert quiet() == nothing
        reason = {"reason": "new pump", "until": format_time(clock.now_ns + 60 * S)}
        assert act(api, "/sources/b/out-of-service", reason).status_code == 200
        assert quiet() == nothing | {"b scored": 1.0, "b silent": 1.0}
        clock.now_ns += 61 * S
        assert quiet() == nothing


def test_the_log_tells_of_each_alert_and_of_no_reading(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any],
    capsys: pytest.CaptureFixture[str],
) -> None:  # fmt: skip
    def told() -> list[tuple[str, ...]]:
        lines = [orjson.loads(line) for line in capsys.readouterr().err.splitlines()]
        assert all("700" not in str(line) for line in lines)
        return [
            (line["event"], line["source"], line["kind"], line["alert"], line["quiet"])
            for line in lines
            if line["event"].startswith("alert_")
        ]

    with serve(tmp_path, models, clock, store=store) as api:
        alert = raise_one(api)
        assert ("alert_raised", "a", "scored", alert["id"], "") in told()
        until = format_time(clock.now_ns + 3600 * S)
        act(api, f"/alerts/{alert['id']}/shelve", {"until": until, "reason": "work"})
        assert told() == []
        act(api, "/sources/a/out-of-service", {"reason": "new pump"})
        assert ("alert_cleared", "a", "scored", alert["id"], "shelved") in told()


def test_the_log_tells_of_no_alert_that_was_not_stored(
    tmp_path: Path, models: Path, clock: Clock, capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:  # fmt: skip
    def full(_group: Group) -> None:
        raise sa.exc.OperationalError("COMMIT", {}, Exception("database or disk is full"))

    batch = [sent(i, odd=i >= 4) for i in range(9)]
    with serve(tmp_path, models, clock) as api:
        with monkeypatch.context() as broken:
            broken.setattr(SqliteGroup, "commit", full)
            assert api.post(batch).status_code == 503
        assert "alert_raised" not in capsys.readouterr().err
        assert api.post(batch).status_code == 200
    assert "alert_raised" in capsys.readouterr().err


def test_alerts_cleared_long_ago_go_with_their_actions_and_it_is_on_record(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any]
) -> None:
    """What is open stays, however old, and so does a time out of service that lasts."""
    kept = {**store, "keep_days": 2.0, "keep_alerts_days": 1.0}
    day_ns = 86_400 * S
    with serve(tmp_path, models, clock, store=kept) as api:
        old = raise_one(api)
        act(api, f"/alerts/{old['id']}/label", {"label": "real"})
        act(api, "/sources/a/out-of-service", {"reason": "new pump"})
        act(api, "/sources/a/in-service")
        act(api, "/sources/a/out-of-service", {"reason": "new meter"})
        still_open = raise_one(api, "b", start=30)
        n_cleared = len(alerts(api, state="cleared"))
        clock.now_ns += day_ns + 3600 * S
        api.call(api.service.retention.prune())
        assert api.get("/pruned").json()["items"] == [], "sooner than its records no alert goes"
        clock.now_ns += day_ns
        api.call(api.service.retention.prune())
        assert alerts(api, state="cleared") == []
        assert still_open["id"] in {one["id"] for one in alerts(api, state="open")}
        actions = api.get("/actions").json()["items"]
        assert [(item["what"], item["comment"]) for item in actions] == [
            ("out_of_service", "new meter")
        ]
        assert act(api, f"/alerts/{old['id']}/label", {"label": "real"}).status_code == 404
        went = {item["alerts"]: item for item in api.get("/pruned").json()["items"]}
        # Of actions: the label, and the time out of service that had ended.
        assert went[n_cleared]["actions"] == 3
        assert went[n_cleared]["before"] == format_time(clock.now_ns - 2 * day_ns)
        assert went[0]["records"] == 18
        api.call(api.service.retention.prune())
        assert len(api.get("/pruned").json()["items"]) == 2, "nothing more to take out"
        # The source that lasted out of service is still known to be.
        assert act(api, "/sources/a/in-service").status_code == 200


@pytest.mark.parametrize(
    ("path", "body", "status", "message"),
    [
        ("/alerts/0000000000000000/acknowledge", {}, 404, "there is no alert"),
        ("/alerts/nonsense/acknowledge", {}, 422, "id"),
        ("/alerts/ID/shelve", {"reason": "x"}, 422, "until: Field required"),
        ("/alerts/ID/shelve", {"reason": "x", "until": "2001-01-01T00:00:00Z"}, 409, "later"),
        ("/alerts/ID/shelve", {"reason": "x", "until": "2200-01-01T00:00:00Z"}, 409, "too long"),
        ("/alerts/ID/unshelve", {}, 409, "no scored alerts of a are shelved"),
        ("/alerts/ID/note", {"comment": " "}, 409, "note needs its text"),
        ("/alerts/ID/note", {}, 422, "comment: Field required"),
        ("/alerts/ID/label", {"label": "maybe"}, 422, "label: Input should be 'real'"),
        ("/alerts/ID/acknowledge", {"coment": "x"}, 422, "coment: Extra inputs"),
        ("/alerts/ID/acknowledge", [], 422, "the body: Input should be"),
        ("/alerts/ID/acknowledge", b"{", 400, "not JSON"),
        ("/alerts/ID/acknowledge?by=me", {}, 422, "parameter 'by' is not known"),
        ("/sources/nowhere/out-of-service", {"reason": "x"}, 404, "there is no source 'nowhere'"),
        ("/sources/a/out-of-service", {}, 422, "reason: Field required"),
        ("/sources/a/in-service", {}, 409, "a is not out of service"),
    ],
)
def test_what_cannot_be_done_is_refused_with_a_sentence(
    shared: tuple[Api, str], path: str, body: Any, status: int, message: str
) -> None:
    api, alert_id = shared
    answer = api.post(body, path.replace("ID", alert_id))
    assert answer.status_code == status, answer.text
    assert answer.headers["content-type"] == "application/problem+json"
    assert message in answer.json()["detail"]


@pytest.fixture(scope="module")
def shared(tmp_path_factory: pytest.TempPathFactory, models: Path) -> Iterator[tuple[Api, str]]:
    with serve(tmp_path_factory.mktemp("shared"), models, Clock()) as api:
        yield api, raise_one(api)["id"]


def test_another_method_or_media_type_is_refused(shared: tuple[Api, str]) -> None:
    api, alert_id = shared
    wrong = api.get(f"/alerts/{alert_id}/acknowledge")
    assert (wrong.status_code, wrong.headers["allow"]) == (405, "POST")
    form = api.post(b"{}", f"/alerts/{alert_id}/note", headers={"content-type": "text/plain"})
    assert form.status_code == 415
    text = api.get("/metrics").text
    assert 'route="/alerts/{id}/acknowledge"' in text
    assert alert_id not in text


def test_an_action_carries_the_name_of_its_token(
    tmp_path: Path, models: Path, clock: Clock
) -> None:
    with serve(tmp_path, models, clock) as api:
        alert = raise_one(api)
    database = Database(tmp_path / "data")
    with database.write.begin() as connection:
        operate = add_token(connection, "control-room", ("operate", "read"), None)
        read = add_token(connection, "screen", ("read",), None)
    database.close()
    path = f"/alerts/{alert['id']}/acknowledge"
    with serve(tmp_path, models, clock) as api:
        assert act(api, path).status_code == 401
        assert act(api, path, headers={"authorization": f"Bearer {read}"}).status_code == 403
        done = act(api, path, headers={"authorization": f"Bearer {operate}"})
        assert done.json()["acknowledged_by"] == "control-room"


def test_open_alerts_survive_a_restart_and_another_model(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any]
) -> None:
    with serve(tmp_path, models, clock, store=store) as api:
        alert = raise_one(api)
    with serve(tmp_path, models, clock, store=store) as api:
        assert alerts(api, state="open", source="a")[-1] == alert
        api.post(sent(9, odd=True))
        grown = {one["id"]: one for one in alerts(api, state="open")}[alert["id"]]
        assert grown["n_records"] == alert["n_records"] + 1
        (tmp_path / "model").unlink()
        (tmp_path / "model").symlink_to(models / "second")
        name = api.service.engine.name
        api.call(api.service.models.look())
        assert api.service.engine.name != name
        api.post(sent(10, odd=True))
        after = {one["id"]: one for one in alerts(api, state="open")}[alert["id"]]
        assert after["n_records"] >= grown["n_records"]
        # Long usual again: cleared under the new model, in the same row.
        clock.now_ns += 7200 * S
        api.post([sent(11 + i) for i in range(150)])
        assert alert["id"] in {one["id"] for one in alerts(api, state="cleared")}


def test_late_repeated_and_early_records_leave_the_alert_standing_alone(
    tmp_path: Path, models: Path, clock: Clock
) -> None:
    items = [sent(i, odd=4 <= i < 9) for i in range(2, 14)]
    ahead = sent(100_000, odd=True)
    with serve(tmp_path / "plain", models, clock) as api:
        for item in items:
            api.post(item)
        wanted, wanted_alerts = standings(api), alerts(api)
    with serve(tmp_path / "spoilt", models, clock) as api:
        for item in items[:6]:
            api.post(item)
        api.post([sent(0, odd=True), sent(1, odd=True), ahead, *items[3:8]])
        for item in items[8:]:
            api.post(item)
        assert standings(api) == wanted
        assert alerts(api) == wanted_alerts


def standings(api: Api) -> list[Any]:
    """Return both standings of every source, without the watch over its clock."""
    found = []
    with api.service.database.read.connect() as connection:
        query = "SELECT standing, alert_standing FROM source ORDER BY name"
        for standing, alert_standing in connection.exec_driver_sql(query):
            remembered = AlertStanding.from_bytes(alert_standing)
            found.append((standing, remembered.cases, remembered.last_ns, remembered.raised,
                          remembered.floats.tobytes()))  # fmt: skip
    return found


@pytest.fixture(autouse=True)
def _folders(tmp_path: Path) -> None:
    for name in ("plain", "spoilt"):
        (tmp_path / name).mkdir()


def test_a_source_that_stops_sending_is_told_once_and_ends_when_it_sends(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any]
) -> None:
    with serve(tmp_path, models, clock, store=store) as api:
        api.post([sent(i) for i in range(5)])
        api.call(api.service.tick())
        assert alerts(api) == []
        clock.now_ns += 7200 * S
        for _ in range(2):
            api.call(api.service.tick())
        silent = alerts(api)
        assert [one["kind"] for one in silent] == ["silent"]
        assert silent[0]["in_budget"] is False
        assert 'oddbranch_alerts{kind="silent",state="raised"} 1.0' in api.get("/metrics").text
        assert "oddbranch_alarm_budget_alerts_last_day 0.0" in api.get("/metrics").text
        api.post(sent(700))
        assert [one["state"] for one in alerts(api)] == ["cleared"]


def test_a_flood_is_one_message_and_ends(
    tmp_path: Path, models: Path, clock: Clock, store: dict[str, Any]
) -> None:
    with serve(tmp_path, models, clock, store=store) as api:
        names = [f"s{i}" for i in range(12)]
        api.post([sent(step, name, odd=step == 1) for step in (0, 1) for name in names])
        flood = api.get("/alerts").json()["flood"]
        assert flood["alerts"] == 12
        assert flood["sentence"] in api.get("/").text
        # To the second: a person reads it.
        assert f"since {flood['since'][:19]}Z; look" in flood["sentence"]
        assert len(alerts(api, state="open")) == 12
    with serve(tmp_path, models, clock, store=store) as api:
        assert api.get("/alerts").json()["flood"] == flood
        for step in (2, 3, 4):
            # They go on sending, or a second flood would say that they are silent.
            clock.now_ns += 250 * S
            api.post([sent(step, name) for name in names])
            api.call(api.service.tick())
        assert api.get("/alerts").json()["flood"] is None
        told = api.get("/actions").json()["items"]
        assert [item["what"] for item in told] == ["flood_ended", "flood_started"]
        assert told[1]["details"]["n"] == 10
        ACTIONS.validate_json(api.get("/actions").content)


def test_a_restart_does_not_call_every_source_silent(
    tmp_path: Path, models: Path, clock: Clock
) -> None:
    with serve(tmp_path, models, clock) as api:
        api.post([sent(i) for i in range(5)])
    clock.now_ns += 7200 * S
    with serve(tmp_path, models, clock) as api:
        api.call(api.service.tick())
        assert alerts(api) == []


def test_a_store_of_the_first_tables_goes_on(tmp_path: Path, models: Path, clock: Clock) -> None:
    with serve(tmp_path, models, clock) as api:
        api.post([sent(i) for i in range(3)])
    path = tmp_path / "data" / "records.sqlite3"
    with closing(sa.create_engine(f"sqlite:///{path}").raw_connection()) as connection:
        for statement in (
            "DROP TABLE alert", "DROP TABLE action", "DROP TABLE flood",
            "ALTER TABLE source DROP COLUMN alert_standing",
            "ALTER TABLE pruned DROP COLUMN n_alerts", "ALTER TABLE pruned DROP COLUMN n_actions",
            "UPDATE alembic_version SET version_num = '001'",
        ):  # fmt: skip
            connection.cursor().execute(statement)
        connection.commit()
    with serve(tmp_path, models, clock) as api:
        assert api.get("/sources").json()["items"][0]["records"] == 3
        assert raise_one(api, start=3)["state"] == "raised"


class Sender:
    """Sends new sources until the server is gone, each once usual and once odd."""

    def __init__(self) -> None:
        self.answered: list[dict[str, Any]] = []
        self.n_sent = 0

    def run(self, url: str) -> None:
        with httpx.Client(timeout=10) as client:
            while True:
                source = f"s{self.n_sent}"
                self.n_sent += 1
                items = [sent(0, source), sent(1, source, odd=True)]
                try:
                    self.answered += client.post(f"{url}/records", json=items).json()
                except httpx.TransportError:
                    return


def test_killed_under_load_no_raised_alert_is_lost(tmp_path: Path, models: Path) -> None:
    (tmp_path / "model").symlink_to(models / "first")
    sender = Sender()
    for _ in range(3):
        server = Server(tmp_path)
        thread = threading.Thread(target=sender.run, args=(server.url,))
        thread.start()
        wanted, end = len(sender.answered) + 20, time.monotonic() + 20
        while len(sender.answered) < wanted and time.monotonic() < end:
            time.sleep(0.01)
        server.kill()
        thread.join()
    server = Server(tmp_path)
    found: set[str] = set()
    try:
        query: dict[str, Any] = {"limit": 1000}
        while query.get("after", "first") is not None:
            page = httpx.get(f"{server.url}/alerts", params=query, timeout=30).json()
            found |= {one["source"] for one in page["items"] if one["kind"] == "scored"}
            query["after"] = page["next"]
    finally:
        server.stop()
    over = {answer["source"] for answer in sender.answered if answer["alert"]}
    assert len(over) >= 30
    assert over <= found


def test_what_could_not_be_stored_has_raised_nothing(
    tmp_path: Path, models: Path, clock: Clock, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fail(*_words: Any) -> None:
        raise RuntimeError("power cut")

    with serve(tmp_path, models, clock) as api:
        api.post([sent(i) for i in range(4)])
        before = standings(api)
        with monkeypatch.context() as patch:
            patch.setattr("service.store.alerts.put_alerts", fail)
            assert api.post(sent(4, odd=True)).status_code == 500
        assert (standings(api), alerts(api)) == (before, [])
        # The same record again is new, and raises what it should have raised.
        assert "known" not in api.post(sent(4, odd=True)).json()
        assert [one["kind"] for one in alerts(api, state="open")] == ["scored"]


def test_a_replica_acts_on_what_another_raised(
    tmp_path: Path, models: Path, clock: Clock, postgres: Cluster
) -> None:
    store = {"url": postgres.emptied_database()}
    with (
        serve(tmp_path / "plain", models, clock, store=store) as first,
        serve(tmp_path / "spoilt", models, clock, store=store) as second,
    ):
        alert = raise_one(first)
        path = f"/alerts/{alert['id']}/acknowledge"
        assert act(second, path).json()["state"] == "acknowledged"
        first.post(sent(9, odd=True))
        assert alerts(second, state="acknowledged")[0]["n_records"] == alert["n_records"] + 1
        again = act(first, path)
        assert again.status_code == 409
        assert "was acknowledged by local" in again.json()["detail"]
