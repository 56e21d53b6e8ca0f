"""The service over HTTP: what a client sends and what it reads."""

from __future__ import annotations

import asyncio
import gzip
import json
from collections.abc import AsyncIterator, Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import orjson
import pytest
import sqlalchemy as sa
from pydantic import TypeAdapter

from service import alert_schemas, schemas
from service.access import add_token
from service.pipeline import AHEAD_NS, Detail, Run, pack_words, unpack_detail
from service.problems import KINDS
from service.store.group import Group
from tests.service_fakes import FakeEngine
from tests.service_http import JSON, NDJSON, NOW_NS, START_S, Api, record, running
from tests.service_postgres import Cluster, cluster


@pytest.fixture(scope="module")
def postgres() -> Iterator[Cluster]:
    with cluster() as found:
        yield found


@pytest.fixture
def local(tmp_path: Path) -> Iterator[Api]:
    """For tests to which the store does not matter."""
    with running(tmp_path) as found:
        yield found


@pytest.fixture(params=["sqlite", "postgresql"])
def api(tmp_path: Path, request: pytest.FixtureRequest) -> Iterator[Api]:
    store: dict[str, Any] = {}
    if request.param == "postgresql":
        store["url"] = request.getfixturevalue("postgres").emptied_database()
    with running(tmp_path, store=store) as found:
        yield found


def lines(*items: Any) -> bytes:
    return b"".join(json.dumps(item).encode() + b"\n" for item in items)


def stored(api: Api, **query: Any) -> list[dict[str, Any]]:
    items: list[dict[str, Any]] = api.get("/records", params=query).json()["items"]
    return items


def test_a_record_is_answered_with_its_scores(api: Api) -> None:
    answer = api.post(record(flow=241.3, speed=None, valve=1))
    assert answer.status_code == 200
    assert answer.json() == {
        "source": "mill-lane-2",
        "time": "2025-12-01T04:00:00Z",
        "model": "0123456789abcdef",
        "member": "own",
        "surprise": 24.13,
        "excess": 23.13,
        "sustained": 2.313,
        "missing": ["speed"],
        "unknown": ["valve"],
        "suspect": {
            "channel": "flow",
            "surprise": 12.065,
            "reading": 241.3,
            "expected": {"low": 242.3, "high": None, "best": 243.3},
            "neighbours": ["power"],
        },
        "alert": None,
    }


def test_a_batch_is_answered_in_order_and_a_bad_item_harms_no_other(api: Api) -> None:
    answer = api.post([record(0), {"source": 1}, record(1, flow=350.0)])
    assert answer.status_code == 200
    first, bad, last = answer.json()
    assert (first["time"], last["time"]) == ("2025-12-01T04:00:00Z", "2025-12-01T04:01:00Z")
    assert last["alert"] == "record"
    assert bad["index"] == bad["problem"]["index"] == 1
    assert bad["problem"]["status"] == 422
    assert len(stored(api)) == 2


def test_lines_are_answered_line_by_line(api: Api) -> None:
    body = lines(record(0)) + b"nonsense\n\n" + lines(record(1))[:-1]
    answers = api.post_lines(body)
    assert [a.get("index") for a in answers] == [None, 1, None]
    assert answers[1]["problem"]["type"] == "/problems/bad-json"
    assert len(stored(api)) == 2


def test_many_lines_keep_their_places(api: Api) -> None:
    items: list[Any] = [record(i / 60) for i in range(2500)]
    items[1700] = "nonsense"
    answers = api.post_lines(lines(*items))
    assert len(answers) == 2500
    assert [i for i, a in enumerate(answers) if "problem" in a] == [1700]
    assert answers[1700]["index"] == 1700


def test_a_line_over_the_limit_is_refused_in_its_place(tmp_path: Path) -> None:
    with running(tmp_path, limits={"line_kb": 1.0}) as api:
        answers = api.post_lines(lines(record(0), {"x": "y" * 3000}, record(1)))
        assert [a.get("problem", {}).get("status") for a in answers] == [None, 413, None]


def test_the_same_record_again_is_answered_as_known_with_its_score(api: Api) -> None:
    first = api.post(record(0, flow=200.0)).json()
    api.post(record(1))
    again = api.post(record(0, flow=200.0)).json()
    assert again == {**first, "known": True}
    assert len(stored(api)) == 2


def test_other_readings_at_the_same_time_are_a_conflict(api: Api) -> None:
    api.post(record(0, flow=200.0))
    answer = api.post(record(0, flow=201.0))
    assert answer.status_code == 409
    assert "stored with other readings; the first one stands" in answer.json()["detail"]
    batch = api.post([record(0, flow=201.0), record(1)]).json()
    assert batch[0]["problem"]["status"] == 409
    assert [item["readings"]["flow"] for item in stored(api)] == [200.0, 120.0]


def test_a_batch_may_hold_a_record_twice(api: Api) -> None:
    answers = api.post([record(0), record(0), record(0, flow=9.0), record(1)]).json()
    assert answers[1] == {**answers[0], "known": True}
    assert answers[2]["problem"]["status"] == 409
    assert len(stored(api)) == 2


def test_an_unseen_word_makes_a_record_another_one(api: Api) -> None:
    assert api.post(record(0, pump="creeping")).status_code == 200
    assert api.post(record(0, pump="crawling")).status_code == 409
    assert api.post(record(0, pump="creeping")).json()["known"] is True
    assert stored(api)[0]["readings"]["pump"] == "creeping"


def test_a_suspect_state_is_expected_in_words_then_and_later(api: Api) -> None:
    expected = {"words": {"running": 0.75, "stopped": 0.25}}
    for answer in (api.post(record(0, pump="creeping")), api.post(record(0, pump="creeping"))):
        suspect = answer.json()["suspect"]
        assert (suspect["channel"], suspect["reading"]) == ("pump", "creeping")
        assert suspect["expected"] == expected
    suspect = stored(api)[0]["suspect"]
    assert (suspect["reading"], suspect["expected"]) == ("creeping", expected)


@pytest.mark.parametrize("n_letters", range(1, 20))
def test_words_of_any_length_come_back_from_the_store(n_letters: int) -> None:
    words = {"w" * n_letters: 0.5}
    packed = pack_words(np.array([1.5, 1, 2, 3]).tobytes(), words)
    assert unpack_detail(packed) == Detail(1.5, words=words)


def test_a_late_record_is_scored_and_leaves_the_standing_alone(api: Api) -> None:
    api.post(record(5))
    before = api.get("/sources").json()["items"][0]
    late = api.post(record(3, flow=399.0)).json()
    assert late["late"] is True
    assert late["surprise"] == 39.9
    after = api.get("/sources").json()["items"][0]
    assert after == {**before, "records": 2, "over_level": 1}


def test_a_record_ahead_of_the_clock_leaves_the_standing_alone(api: Api) -> None:
    ahead_min = (NOW_NS // 10**9 - START_S) / 60 + AHEAD_NS / 60e9
    assert "ahead" not in api.post(record(ahead_min)).json()
    assert api.post(record(ahead_min + 1)).json()["ahead"] is True
    assert api.get("/sources").json()["items"][0]["last"] == "2025-12-01T05:05:00Z"
    # What follows in order is not late because of it.
    assert "late" not in api.post(record(ahead_min + 0.5)).json()


def test_one_by_one_and_in_one_batch_give_the_same(tmp_path: Path) -> None:
    items = [record(m, flow=100 + 7 * m) for m in (0, 1, 5, 3, 3, 6, 400, 7, 8, 2)]
    with running(tmp_path / "one") as api:
        singly = [api.post(item).json() for item in items]
        standing = api.get("/sources").json()
    with running(tmp_path / "many") as api:
        assert api.post(items).json() == singly
        assert api.get("/sources").json() == standing


def test_bad_quality_and_out_of_span_count_as_missing(api: Api) -> None:
    bad = record(0, flow=900.0, power={"value": 3.0, "quality": "bad"})
    assert api.post(bad).json()["missing"] == ["flow", "power"]
    item = stored(api)[0]
    assert item["missing"] == ["flow", "power"]
    assert item["readings"]["power"] == {"value": 3.0, "quality": "bad"}
    assert item["readings"]["flow"] == 900.0


def test_every_channel_comes_when_asked_for(local: Api) -> None:
    answer = local.post(record(), "/records?channels=true").json()
    assert [c["channel"] for c in answer["channels"]] == ["flow", "power", "pump", "speed"]
    assert "channels" not in local.post(record(1), "/records?channels=false").json()


@pytest.mark.parametrize(
    ("query", "message"),
    [("chanels=true", "channels=true is the only one, is it meant"), ("channels=ja", "neither")],
)
def test_a_query_that_is_not_known_is_refused(local: Api, query: str, message: str) -> None:
    answer = local.post(record(), f"/records?{query}")
    assert answer.status_code == 422
    assert message in answer.json()["detail"]


def test_gzip_bodies_are_unpacked(api: Api) -> None:
    packed = gzip.compress(json.dumps(record()).encode())
    assert api.post(packed, headers={"content-encoding": "gzip"}).status_code == 200
    twice = gzip.compress(lines(record(1))) + gzip.compress(lines(record(2)))
    assert len(api.post_lines(twice, headers={"content-encoding": "gzip"})) == 2


@pytest.mark.parametrize(
    ("body", "kind"),
    [
        (b"no gzip", "bad-encoding"),
        (gzip.compress(b"{}")[:-9], "bad-encoding"),
        (gzip.compress(b" " * 40_000_000), "too-large"),
    ],
)
def test_a_packed_body_that_cannot_be_used_is_refused(local: Api, body: bytes, kind: str) -> None:
    answer = local.post(body, headers={"content-encoding": "gzip"})
    assert answer.json()["type"] == f"/problems/{kind}"
    assert answer.status_code == KINDS[kind].status


@pytest.mark.parametrize(
    ("headers", "status", "message"),
    [
        ({"content-type": "application/x-www-form-urlencoded"}, 415, "with curl: -H"),
        ({"content-type": "application/json; charset=utf-16"}, 415, "only UTF-8 is taken"),
        ({"content-encoding": "br"}, 415, "send gzip or none"),
        ({"host": "elsewhere.example"}, 400, "no name of this service"),
        ({"origin": "https://elsewhere.example"}, 403, "another origin"),
    ],
)
def test_a_header_that_cannot_be_taken_is_refused(
    local: Api, headers: dict[str, str], status: int, message: str
) -> None:
    answer = local.post(record(), headers=headers)
    assert answer.status_code == status
    assert message in answer.json()["detail"]
    assert not stored(local)


def test_a_body_over_the_limit_is_refused_with_the_way_out(tmp_path: Path) -> None:
    with running(tmp_path, limits={"body_mb": 0.001}) as api:
        answer = api.post([record(i) for i in range(20)])
        assert answer.status_code == 413
        assert "application/x-ndjson" in answer.json()["detail"]


def test_an_array_over_the_limit_is_refused_with_the_way_out(tmp_path: Path) -> None:
    with running(tmp_path, limits={"n_batch": 3}) as api:
        answer = api.post([record(i) for i in range(4)])
        assert answer.status_code == 413
        assert "at most 3 are taken" in answer.json()["detail"]


def test_a_source_over_the_limit_is_refused_and_known_ones_go_on(tmp_path: Path) -> None:
    with running(tmp_path, limits={"n_sources": 2}) as api:
        answers = api.post([record(0, "a"), record(0, "b"), record(0, "c"), record(1, "a")]).json()
        assert [a.get("problem", {}).get("status") for a in answers] == [None, None, 403, None]
        assert api.post(record(0, "d")).status_code == 403
        assert api.post(record(2, "b")).status_code == 200


def test_a_full_queue_answers_503_with_retry_after(tmp_path: Path) -> None:
    with running(tmp_path, limits={"memory_mb": 0.001}) as api:
        answer = api.post([record(i) for i in range(20)])
        assert answer.status_code == 503
        assert answer.headers["retry-after"] == "1"
        assert api.service.n_body_bytes == 0


def test_an_empty_array_is_answered_with_one(local: Api) -> None:
    assert local.post([]).json() == []
    assert local.post(b"[1]").json()[0]["problem"]["status"] == 422
    assert local.post(b"3").status_code == 422


def test_a_fault_in_one_request_harms_no_other_and_tells_nothing(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        engine = api.service.engine
        assert isinstance(engine, FakeEngine)
        engine.fail_on = "poison"
        answer = api.post(record(0, "poison"))
        assert answer.status_code == 500
        assert "told to fail" not in answer.text
        assert api.post(record(0)).status_code == 200
        assert [s["source"] for s in api.get("/sources").json()["items"]] == ["mill-lane-2"]


def test_every_answer_has_a_request_id_that_goes_to_the_store(api: Api) -> None:
    answer = api.post(record(0), headers={"x-request-id": "forwarder-17"})
    assert answer.headers["x-request-id"] == "forwarder-17"
    assert stored(api)[0]["request"] == "forwarder-17"
    odd = api.post(record(1), headers={"x-request-id": "spaces are not taken"})
    assert " " not in odd.headers["x-request-id"]


def test_pages_follow_each_other_without_gaps(api: Api) -> None:
    api.post([record(i, source) for source in ("a", "b") for i in range(5)])
    seen, after = [], None
    while True:
        query = {"limit": 3} | ({"after": after} if after else {})
        page = api.get("/records", params=query).json()
        seen += [(item["source"], item["time"][14:16]) for item in page["items"]]
        after = page["next"]
        if after is None:
            break
    assert seen == [(s, f"{i:02d}") for s in ("a", "b") for i in range(5)]


def test_records_are_chosen_by_source_and_time(api: Api) -> None:
    api.post([record(i, source) for source in ("a", "b") for i in range(5)])
    found = stored(
        api, source="b", **{"from": "2025-12-01T04:01:00Z", "to": "2025-12-01T05:03:00+01:00"}
    )
    assert [item["time"][14:16] for item in found] == ["01", "02"]
    newest = stored(api, source="b", newest=True, limit=2)
    assert [item["time"][14:16] for item in newest] == ["04", "03"]


def test_all_records_come_as_lines_when_asked_for(api: Api) -> None:
    api.post([record(i / 60) for i in range(250)])
    answer = api.get("/records", headers={"accept": "application/x-ndjson"})
    assert answer.headers["content-type"].startswith("application/x-ndjson")
    assert len(answer.text.splitlines()) == 250


@pytest.mark.parametrize(
    ("path", "message"),
    [
        ("/records?from=yesterday", "from = 'yesterday' is not an RFC 3339 time"),
        ("/records?limit=0", "limit"),
        ("/records?limit=many", "limit"),
        ("/records?after=xyz", "after = 'xyz' is not the `next` of a page before"),
        ("/records?after=1-", "after = '1-' is not the `next` of a page before"),
        ("/sources?after=%00", "after"),
        ("/records?sourc=a", "'sourc' is not known here; is source meant"),
        ("/model?source=", "source"),
    ],
)
def test_a_page_that_cannot_be_given_says_why(local: Api, path: str, message: str) -> None:
    answer = local.get(path)
    assert answer.status_code == 422
    assert answer.headers["content-type"] == "application/problem+json"
    assert message in answer.json()["detail"]


@pytest.mark.parametrize(
    ("path", "model"),
    [
        ("/records", schemas.RecordsPage),
        ("/alerts", alert_schemas.AlertsPage),
        ("/actions", alert_schemas.ActionsPage),
        ("/sources", schemas.SourcesPage),
        ("/model", schemas.ModelPage),
        ("/model?source=mill-lane-1", schemas.ModelPage),
        ("/pruned", schemas.PrunedPage),
        ("/health/live", schemas.Health),
        ("/health/ready", schemas.Health),
    ],
)
def test_pages_are_as_they_are_described(api: Api, path: str, model: type[Any]) -> None:
    api.post([record(i, flow=390.0, pump="creeping", x=1) for i in range(3)])
    TypeAdapter(model).validate_json(api.get(path).content)


def test_answers_are_as_they_are_described(api: Api) -> None:
    answers = api.post([record(0), 3, record(0), record(-5)], "/records?channels=1").json()
    TypeAdapter(list[schemas.Score | schemas.ProblemItem]).validate_python(answers)


def test_what_is_not_there_is_a_problem_too(local: Api) -> None:
    for method, path, status, detail in (
        ("GET", "/nothing", 404, "there is nothing at '/nothing'"),
        ("GET", "/record", 404, "there is nothing at '/record'; is /records meant?"),
        ("DELETE", "/records", 405, "DELETE is not answered at '/records'; use GET or POST"),
        ("PUT", "/sources", 405, "PUT is not answered at '/sources'; use GET"),
        ("GET", "/problems/none", 404, "there is no such sort of refusal"),
        ("GET", "/actions?alert=x", 422, "alert: an alert's id is 16 digits from 0 to f"),
    ):
        answer = local.request(method, path)
        assert answer.status_code == status
        assert answer.json()["detail"].startswith(detail)
        assert answer.headers["content-type"] == "application/problem+json"
    assert "GET" in local.request("PUT", "/sources").headers["allow"]


def test_every_kind_of_problem_is_explained(local: Api) -> None:
    for name, kind in KINDS.items():
        answer = local.get(f"/problems/{name}")
        assert answer.status_code == 200
        assert kind.way_out in answer.text


def test_no_page_of_another_origin_is_let_in(local: Api) -> None:
    answer = local.request("OPTIONS", "/records", headers={"origin": "http://127.0.0.1:8321"})
    assert "access-control-allow-origin" not in answer.headers
    assert answer.status_code == 405


def test_the_page_shows_sources_against_their_level_and_the_caution(local: Api) -> None:
    local.post([record(i, "<b>mill</b>", flow=390.0) for i in range(30)])
    page = local.get("/")
    assert page.status_code == 200
    assert schemas.ADVICE in page.text
    assert "&lt;b&gt;mill&lt;/b&gt;" in page.text
    assert 'class="track over"' in page.text
    assert "look at flow first, it read 390" in page.text
    assert "http" not in page.text.replace("http-equiv", "")


def test_the_description_names_every_channel_with_its_unit(local: Api) -> None:
    document = local.get("/openapi.json").json()
    readings = document["components"]["schemas"]["Record"]["properties"]["readings"]["properties"]
    assert readings["flow"]["description"] == "measurement, unit m3/h"
    assert readings["pump"]["description"] == "state, no unit; words: running, stopped"


def test_every_field_is_described_with_a_unit_and_an_example(local: Api) -> None:
    schemas_found = local.get("/openapi.json").json()["components"]["schemas"]
    wanting = []
    units = ("no unit", "nats", "unit", "RFC 3339", "count", "ratio")
    for name, schema in schemas_found.items():
        for key, described in schema.get("properties", {}).items():
            if not any(unit in described.get("description", "") for unit in units):
                wanting.append(f"{name}.{key} has no unit")
            if key != "items" and "examples" not in described:
                wanting.append(f"{name}.{key} has no example")
    assert not wanting, "\n".join(wanting)


def test_a_restarted_service_has_every_record_and_standing(tmp_path: Path) -> None:
    items = [record(i, flow=100.0 + i) for i in range(40)]
    with running(tmp_path / "whole") as api:
        unbroken = api.post(items).json()
        standing = api.get("/sources").json()
    with running(tmp_path / "two") as api:
        first = api.post(items[:17]).json()
    with running(tmp_path / "two") as api:
        assert first + api.post(items[17:]).json() == unbroken
        assert api.get("/sources").json() == standing
        assert len(stored(api)) == 40


class Gatherer:
    """An alert sink that notes what it was given, and may refuse it."""

    def __init__(self) -> None:
        self.seen: list[tuple[str, list[int], list[int]]] = []
        self.still: list[int] = []
        self.ahead: list[bool] = []
        self.fail = False

    def take(self, group: Group, runs: Sequence[Run]) -> None:
        if self.fail:
            raise RuntimeError("the sink was told to fail")
        count = group.connection.exec_driver_sql("SELECT count(*) FROM record").scalar_one()
        assert count > 0, "the records are in the same transaction"
        for run in runs:
            minutes = ((run.times_ns // 10**9 - START_S) // 60).tolist()
            if not run.still:
                assert run.ahead is None
                self.seen.append((run.source.name, minutes, run.scored.alert[run.rows].tolist()))
            else:
                assert run.ahead is not None
                self.still += minutes
                self.ahead += run.ahead.tolist()


def test_an_alert_sink_is_told_what_moved_a_standing_in_order(tmp_path: Path) -> None:
    sink = Gatherer()
    with running(tmp_path, sink=sink) as api:
        items = [record(m, flow=390.0 if m == 6 else 120.0) for m in (5, 6, 2, 900, 6, 7)]
        api.post([*items, record(1, "b")])
        assert sink.seen == [
            ("mill-lane-2", [5, 6], [0, 1]),
            ("b", [1], [0]),
            ("mill-lane-2", [7], [0]),
        ]
        assert (sink.still, sink.ahead) == ([2, 900], [False, True])
        sink.fail = True
        assert api.post(record(8)).status_code == 500
        sink.fail = False
        # What the sink refused is not stored either.
        assert "known" not in api.post(record(8)).json()


def test_more_requests_at_once_than_the_limit_get_503(tmp_path: Path) -> None:
    with running(tmp_path, server={"n_connections": 2}) as api:

        async def many() -> list[int]:
            calls = [api.client.get("/sources") for _ in range(30)]
            return [answer.status_code for answer in await asyncio.gather(*calls)]

        statuses = api.call(many())
        assert set(statuses) == {200, 503}
        assert api.get("/health/live").status_code == 200


def test_a_store_that_cannot_be_read_answers_503(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fail(*_words: object, **_more: object) -> None:
        raise sa.exc.OperationalError("SELECT", {}, Exception("gone away, password hush"))

    with running(tmp_path) as api:
        monkeypatch.setattr("service.store.pages.sources_page", fail)
        for path in ("/sources", "/"):
            answer = api.get(path)
            assert answer.status_code == 503
            assert answer.headers["retry-after"] == "5"
            assert "hush" not in answer.text


def test_logs_hold_ids_and_no_readings(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    with running(tmp_path, log={"requests": "all"}) as api:
        api.post(record(flow=123.456), headers={"authorization": "Bearer hush.secret"})
        api.post(record(flow="123.456"))
    written = capsys.readouterr().err
    assert "123.456" not in written
    assert "hush" not in written
    events = [orjson.loads(line) for line in written.splitlines()]
    requests = [event for event in events if event["event"] == "request"]
    assert [event["status"] for event in requests] == [200, 422]
    assert all(event["request"] for event in requests)


@pytest.mark.parametrize(
    ("method", "path", "body", "status", "problem"),
    [
        ("GET", "/nothing", None, 404, "not-found"),
        ("PUT", "/model", None, 405, "bad-method"),
        ("GET", "/alerts?stat=open", None, 422, "bad-query"),
        ("GET", "/alerts?state=sleeping", None, 422, "bad-query"),
        ("POST", "/alerts/0000000000000000/note", {"comment": "x"}, 404, "not-found"),
        ("POST", "/sources/mill-lane-2/in-service", {}, 409, "impossible-action"),
        ("POST", "/records", {}, 422, "bad-record"),
    ],
)
def test_the_line_of_a_refusal_names_its_problem_and_who(
    tmp_path: Path, capsys: pytest.CaptureFixture[str],
    method: str, path: str, body: Any, status: int, problem: str,
) -> None:  # fmt: skip
    with running(tmp_path) as api:
        api.post(record())
        content = {} if body is None else {"content": orjson.dumps(body), "headers": JSON}
        answer = api.request(method, path, **content)
    assert (answer.status_code, answer.json()["type"]) == (status, f"/problems/{problem}")
    lines = [orjson.loads(line) for line in capsys.readouterr().err.splitlines()]
    told = [
        (line["status"], line["problem"], line["by"])
        for line in lines
        if line["event"] == "request"
    ]
    assert told == [(status, problem, "local")]


def test_a_stream_that_breaks_off_names_its_problem(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    async def lines() -> AsyncIterator[bytes]:
        for i in range(50):
            yield b"".join(orjson.dumps(record(i + j / 100)) + b"\n" for j in range(100))

    with running(tmp_path, limits={"stream_mb": 0.5}) as api:
        answer = api.request("POST", "/records", content=lines(), headers=NDJSON)
        assert answer.status_code == 200
        assert orjson.loads(answer.text.splitlines()[-1])["problem"]["status"] == 413
    lines_ = [orjson.loads(line) for line in capsys.readouterr().err.splitlines()]
    told = [(line["status"], line["problem"]) for line in lines_ if line["event"] == "request"]
    assert told == [(200, "too-large")]


def test_lines_say_whose_token_it_was_and_never_the_token(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with running(tmp_path, log={"requests": "all"}) as api:
        with api.service.database.write.begin() as connection:
            token = add_token(connection, "forwarder", ("send",), None)
        with api.service.database.read.connect() as connection:
            api.service.tokens.read(connection)
        headers = {"authorization": f"Bearer {token}"}
        answers = [
            api.post(record(), headers=headers), api.get("/alerts", headers=headers),
            api.get("/alerts"), api.get("/health/live"),
        ]  # fmt: skip
    assert [answer.status_code for answer in answers] == [200, 403, 401, 200]
    written = capsys.readouterr().err
    assert token not in written
    assert token.partition(".")[2] not in written
    lines = [orjson.loads(line) for line in written.splitlines()]
    told = [(line["by"], line["problem"]) for line in lines if line["event"] == "request"]
    assert told == [
        ("forwarder", None), ("forwarder", "no-right"), (None, "no-token"), (None, None),
    ]  # fmt: skip
