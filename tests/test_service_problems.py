"""Whoever posts nonsense, twice, late, too much or without a token is told what to do."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import httpx
import pytest

from service.problems import KINDS, RETRY_AFTER_S, Problem
from tests.service_http import JSON, NDJSON, Server, record, serving
from tests.test_service_access import bearer, made

GOOD = record(10)
TEXT = json.dumps(GOOD)


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Server]:
    limits = ("limits.body_mb=0.01", "limits.n_batch=20", "limits.n_sources=2")
    with serving(tmp_path_factory.mktemp("newcomer"), *limits) as found:
        assert httpx.post(f"{found.url}/records", json=GOOD).status_code == 200
        assert httpx.post(f"{found.url}/records", json=record(10, "mill-lane-3")).is_success
        yield found


def check_refusal(answer: httpx.Response, status: int, detail: str) -> None:
    """The answer is a problem that says what is wrong, and how to go on."""
    assert answer.status_code == status, answer.text
    assert answer.headers["content-type"] == "application/problem+json"
    problem = answer.json()
    kind = KINDS[problem["type"].removeprefix("/problems/")]
    assert (problem["status"], problem["title"]) == (status, kind.title)
    assert problem["way_out"] == kind.way_out
    assert detail in problem["detail"]
    assert answer.headers["x-request-id"]


@pytest.mark.parametrize(
    ("body", "headers", "status", "detail"),
    [
        ("hello", JSON, 400, "not JSON at line 1, column 1"),
        ("", JSON, 400, "the body is empty; send one record, an array, or NDJSON"),
        (TEXT.replace('"', "'"), JSON, 400, "not JSON at line 1, column 2"),
        (TEXT[:40], JSON, 400, "unexpected end of data"),
        (TEXT, {}, 415, "with curl: -H 'Content-Type: application/json'"),
        ("time,flow", {"content-type": "text/csv"}, 415, "send application/json or"),
        ("{}", JSON, 422, "no source; it needs source, time and readings"),
        (TEXT.replace("source", "sourc"), JSON, 422, "is 'sourc' meant?"),
        (TEXT.replace("00Z", "00"), JSON, 422, "end it with Z or +hh:mm, for example"),
        (TEXT.replace(f'"{GOOD["time"]}"', "17"), JSON, 422, 'such as "2026-12-01T04:00:10Z"'),
        (TEXT.replace("120.0", '"120,5"'), JSON, 422, "measurement in m3/h; send a number or"),
        (TEXT.replace("120.0", "NaN"), JSON, 422, "send null where there is no reading"),
        (TEXT.replace("120.0", "1e999"), JSON, 422, "send null where there is no reading"),
        (TEXT.replace("120.0", "121.0"), JSON, 409, "with other readings; the first one stands"),
        (TEXT.replace("lane-2", "lane-22"), JSON, 403, "is new, and as many sources are known"),
        (json.dumps([GOOD] * 21), JSON, 413, "at most 20"),
        (TEXT + " " * 10_000, JSON, 413, "or stream them as application/x-ndjson"),
        (TEXT, {**JSON, "content-encoding": "gzip"}, 400, "the body is not gzip data"),
        (TEXT, {**JSON, "host": "plant.example"}, 400, "'plant.example', no name of this"),
    ],
)
def test_what_cannot_be_used_is_answered_with_the_way_out(
    server: Server, body: str, headers: dict[str, str], status: int, detail: str
) -> None:
    if not headers:
        # What curl says of a body when it is told nothing.
        headers = {"content-type": "application/x-www-form-urlencoded"}
    answer = httpx.post(f"{server.url}/records", content=body, headers=headers)
    check_refusal(answer, status, detail)


def test_what_comes_twice_late_early_or_misspelt_is_marked(server: Server) -> None:
    marks: list[tuple[dict[str, Any], dict[str, Any]]] = [
        (GOOD, {"known": True}),
        (record(5), {"late": True}),
        ({**GOOD, "time": "2099-01-01T00:00:00Z"}, {"ahead": True}),
        ({**record(11), "readings": {"flwo": 1}}, {"unknown": ["flwo"], "judged": False}),
    ]
    for item, mark in marks:
        answer = httpx.post(f"{server.url}/records", json=item)
        assert answer.status_code == 200
        assert {name: answer.json().get(name) for name in mark} == mark


def test_a_bad_item_is_told_the_way_out_in_its_place(server: Server) -> None:
    body = f"{TEXT}\nnonsense\n[1]\n".encode()
    stream = httpx.post(f"{server.url}/records", content=body, headers=NDJSON)
    answers = [json.loads(line) for line in stream.text.splitlines()]
    batch = httpx.post(f"{server.url}/records", json=[GOOD, "nonsense", [1]]).json()
    for found in (answers, batch):
        assert found[0]["known"] is True
        assert [item["index"] for item in found[1:]] == [1, 2]
        for item in found[1:]:
            assert item["problem"]["way_out"].startswith(("Send UTF-8 JSON", "Correct the member"))


def test_whoever_has_no_token_or_the_wrong_one_is_told_how_to_get_one(tmp_path: Path) -> None:
    token = made(tmp_path / "data", "forwarder", "send")
    with serving(tmp_path) as server:
        check_refusal(
            httpx.post(f"{server.url}/records", json=GOOD), 401, "a token with the role send"
        )
        wrong = httpx.get(f"{server.url}/records", headers=bearer("x" + token))
        check_refusal(wrong, 401, "the token is not known here, or has ended")
        assert "oddbranch token add" in wrong.json()["way_out"]
        other = httpx.get(f"{server.url}/records", headers=bearer(token))
        check_refusal(other, 403, "the token has the roles send; this needs read")
        assert "--role" in other.json()["way_out"]


@pytest.mark.parametrize("kind", RETRY_AFTER_S)
def test_what_is_refused_for_now_says_when_to_come_again(kind: str) -> None:
    problem = Problem(kind, "for now")
    assert problem.status == 503
    assert int(problem.headers()["retry-after"]) > 0


def test_every_way_out_is_a_sentence() -> None:
    for kind in KINDS.values():
        assert kind.way_out.endswith(".")
        assert kind.way_out[0].isupper()
        assert 400 <= kind.status < 600
