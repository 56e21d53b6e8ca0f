"""Lines in, answers out: what waits for a late reader, and what happens when it has no room."""

from __future__ import annotations

import asyncio
import gzip
import json
import os
import socket
import time
from collections.abc import Callable, Iterator
from http.client import HTTPResponse
from pathlib import Path
from typing import Any

import httpx
import pytest

from service.app import create_app
from service.stream import AnswerSpool
from tests.service_http import NDJSON, Api, Server, record, running, serving
from tests.small_disk import small_disk

# Answers of all channels are longer than what a test has to store to fill something.
PATH = "/records?channels=true"


async def everything(spool: AnswerSpool) -> bytes:
    spool.end()
    found = b""
    while piece := await spool.take():
        found += piece
    return found


def put_all(spool: AnswerSpool, pieces: list[bytes]) -> int:
    """Put pieces until one finds no room; return how many were put."""
    for number, piece in enumerate(pieces, 1):
        try:
            spool.put(piece)
        except OSError:
            return number
    return len(pieces)


@pytest.fixture
def full_folder(monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """The kernel's own full device in place of temporary files."""
    with Path("/dev/full").open("r+b", buffering=0) as file:
        monkeypatch.setattr("tempfile.TemporaryFile", lambda **_words: file)
        yield


def test_what_waits_comes_in_its_order_from_memory_and_file() -> None:
    async def work() -> None:
        pieces = [bytes([65 + i % 26]) * 700_000 for i in range(30)]
        spool = AnswerSpool()
        assert put_all(spool, pieces[:20]) == 20
        first = [await spool.take() for _ in range(3)]
        assert first == pieces[:3]
        assert put_all(spool, pieces[20:]) == 10
        assert await everything(spool) == b"".join(pieces[3:])
        spool.close()
        spool.close()

    asyncio.run(work())


@pytest.mark.usefixtures("full_folder")
def test_a_piece_without_room_is_sent_from_memory_and_the_last_words_after_it() -> None:
    async def work() -> None:
        pieces = [bytes([65 + i]) * 1_000_000 for i in range(9)]
        spool = AnswerSpool()
        assert put_all(spool, pieces) == 5
        spool.put_last(b"last")
        assert await everything(spool) == b"".join(pieces[:5]) + b"last"
        spool.close()

    asyncio.run(work())


def test_where_no_temporary_file_can_be_made_it_is_the_same(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    def refuse(**_words: Any) -> None:
        raise FileNotFoundError("no usable temporary directory found")

    monkeypatch.setattr("tempfile.TemporaryFile", refuse)

    async def work() -> None:
        spool = AnswerSpool()
        assert put_all(spool, [b"a" * 3_000_000, b"b" * 3_000_000, b"c"]) == 2
        spool.put_last(b"last")
        assert (await everything(spool))[-5:] == b"blast"
        spool.close()

    asyncio.run(work())


def check_answers(lines: list[dict[str, Any]], source: str, n_lines: int) -> int:
    """Every line before the last is answered and the last says where it ended; return where."""
    *answers, last = lines
    problem = last["problem"]
    assert (problem["type"], problem["status"]) == ("/problems/answers-full", 503)
    assert "none from here on was stored" in problem["detail"]
    assert "send the lines from `index` on again" in problem["way_out"]
    assert problem["index"] == len(answers) < n_lines
    assert {answer["source"] for answer in answers} == {source}
    assert [answer["time"] for answer in answers] == sorted(answer["time"] for answer in answers)
    return len(answers)


@pytest.mark.parametrize("packed", [False, True], ids=["plain", "gzip"])
def test_a_stream_over_its_limit_is_answered_up_to_there(tmp_path: Path, packed: bool) -> None:
    n_lines = 20_000
    body = lines_of("mill-lane-5", n_lines)
    headers = NDJSON | ({"content-encoding": "gzip"} if packed else {})
    with serving(tmp_path, "limits.stream_mb=1") as server:
        content = gzip.compress(body) if packed else body
        found = httpx.post(f"{server.url}/records", content=content, headers=headers)
        *answers, last = [json.loads(line) for line in found.text.splitlines()]
        problem = last["problem"]
        assert (problem["type"], problem["status"]) == ("/problems/too-large", 413)
        assert "limits.stream_mb" in problem["detail"]
        assert 0 < problem["index"] == len(answers) == n_stored(server.url, "mill-lane-5") < n_lines


def n_stored(url: str, source: str) -> int:
    items = httpx.get(f"{url}/sources").json()["items"]
    return sum(item["records"] for item in items if item["source"] == source)


def room_used(folder: Path) -> int:
    """Return the bytes that are taken on the disk there, named or not."""
    room = os.statvfs(folder)
    return (room.f_blocks - room.f_bfree) * room.f_frsize


def lines_of(source: str, n_lines: int) -> bytes:
    return b"".join(json.dumps(record(i / 60, source)).encode() + b"\n" for i in range(n_lines))


async def _post_reading_late(api: Api, body: bytes) -> bytes:
    """Send every piece of a body, and only then let the answer go out."""
    all_sent = asyncio.Event()
    found = bytearray()
    pieces = [body[at : at + 60_000] for at in range(0, len(body), 60_000)]

    async def receive() -> dict[str, Any]:
        if not pieces:
            await asyncio.Event().wait()
        piece = pieces.pop(0)
        if not pieces:
            all_sent.set()
        return {"type": "http.request", "body": piece, "more_body": bool(pieces)}

    async def send(message: Any) -> None:
        await all_sent.wait()
        found.extend(message.get("body", b""))

    path, _, query = PATH.partition("?")
    headers = [(b"host", b"127.0.0.1"), (b"content-type", b"application/x-ndjson")]
    scope = {
        "type": "http",
        "method": "POST",
        "path": path,
        "query_string": query.encode(),
        "headers": headers,
    }
    app = create_app(api.service)
    await asyncio.wait_for(app(scope, receive, send), 30)
    return bytes(found)


@pytest.mark.usefixtures("full_folder")
def test_a_client_that_reads_only_when_all_is_sent_is_told_too(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    n_lines = 20_000
    with running(tmp_path) as api:
        found = api.call(_post_reading_late(api, lines_of("mill-lane-7", n_lines)))
        lines = [json.loads(line) for line in found.splitlines()]
        n_answers = check_answers(lines, "mill-lane-7", n_lines)
        (item,) = api.get("/sources").json()["items"]
        assert item["records"] == n_answers
        assert api.service.n_body_bytes == 0
        assert api.post(record(0)).status_code == 200
    log = capsys.readouterr().err
    assert log.count('"answers_full"') == 1
    assert '"fault"' not in log


def post_reading_late(
    server: Server, body: bytes, is_done: Callable[[], bool]
) -> list[dict[str, Any]]:
    """Send everything, read when the server has done with it; return the answered lines."""
    head = (
        f"POST {PATH} HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Type: application/x-ndjson\r\n"
        f"Content-Length: {len(body)}\r\nConnection: close\r\n\r\n"
    )
    with socket.socket() as line:
        # A small window: what the kernel holds for the reader does not reach the server's file.
        line.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 65_536)
        line.settimeout(60)
        line.connect(("127.0.0.1", server.port))
        line.sendall(head.encode() + body)
        end = time.monotonic() + 30
        while not is_done():
            assert time.monotonic() < end, "the server does not come to an end with the lines"
            time.sleep(0.02)
        answer = HTTPResponse(line)
        answer.begin()
        return [json.loads(text) for text in answer]


def test_a_full_folder_of_temporary_files_ends_a_stream_with_the_way_out(tmp_path: Path) -> None:
    """On a real small disk: every stored line is answered, and the room is given back."""
    spill = tmp_path / "spill"
    spill.mkdir()
    source, n_lines = "mill-lane-8", 24_000
    body = lines_of(source, n_lines)
    with small_disk(spill, "1m") as resize:
        if resize is None:
            pytest.skip("no disk can be mounted here")
        with serving(tmp_path, f"TMPDIR={spill}") as server:
            answers = post_reading_late(server, body, lambda: "answers_full" in server.log_text())
            n_answers = check_answers(answers, source, n_lines)
            assert n_stored(server.url, source) == n_answers
            assert room_used(spill) == 0
            # The way out works: send the lines from there on again, and read while sending.
            rest = body.splitlines(keepends=True)[n_answers - 1000 :]
            again = httpx.post(f"{server.url}/records", content=iter(rest), headers=NDJSON)
            known = [json.loads(text).get("known", False) for text in again.text.splitlines()]
            assert known == [True] * 1000 + [False] * (n_lines - n_answers)
            resize("200m")
            body = lines_of("mill-lane-9", n_lines)
            answers = post_reading_late(server, body, lambda: room_used(spill) > 2 * 2**20)
            assert len(answers) == n_stored(server.url, "mill-lane-9") == n_lines
            assert room_used(spill) == 0
            assert '"fault"' not in server.log_text()
