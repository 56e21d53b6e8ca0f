"""Broken bodies, kept: each is answered as its file is named, and nothing breaks.

The first three characters of a file's name are the status that its body must get.
"""

from __future__ import annotations

import json
import os
import socket
import sqlite3
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import httpx
import numpy as np
import pytest

from scoring.artefact import write_model
from service.problems import KINDS
from tests.conftest import ROOT, need_program
from tests.models import a_model
from tests.service_http import JSON, Api, Server, record, running, serving

BODIES = sorted((ROOT / "tests" / "data" / "bodies").iterdir())


@pytest.fixture(scope="module")
def api(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Api]:
    with running(tmp_path_factory.mktemp("bodies")) as found:
        yield found


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Server]:
    with serving(tmp_path_factory.mktemp("raw"), "limits.body_s=0.3") as found:
        yield found


@pytest.mark.parametrize("path", BODIES, ids=lambda path: str(path.name))
def test_a_kept_body_is_answered_as_its_name_says(api: Api, path: Path) -> None:
    started = time.perf_counter()
    answer = api.post(path.read_bytes())
    assert time.perf_counter() - started < 5
    assert answer.status_code == int(path.name[:3]), answer.text
    if answer.status_code == 200:
        return
    assert answer.headers["content-type"] == "application/problem+json"
    problem = answer.json()
    kind = problem["type"].removeprefix("/problems/")
    assert problem["status"] == KINDS[kind].status == answer.status_code
    assert len(problem["detail"]) < 500
    for leak in ("Traceback", ".py", "orjson", "numpy", "object at 0x"):
        assert leak not in answer.text


@pytest.mark.parametrize("path", BODIES, ids=lambda path: str(path.name))
def test_a_kept_body_as_a_line_is_answered_in_its_place(api: Api, path: Path) -> None:
    body = path.read_bytes().replace(b"\n", b" ").replace(b"\r", b" ")
    good = json.dumps(record(1)).encode()
    answers = api.post_lines(good + b"\n" + body + b"\n" + good)
    assert "problem" not in answers[0]
    assert "problem" not in answers[-1]
    # A blank body is no line at all; an array is no record.
    assert len(answers) == (3 if body.strip() else 2)


def raw(server: Server, *pieces: bytes, pause_s: float = 0.0) -> bytes:
    """Send bytes as they are and return what comes back until the end."""
    with socket.create_connection(("127.0.0.1", server.port), timeout=10) as line:
        for piece in pieces:
            line.sendall(piece)
            time.sleep(pause_s)
        line.shutdown(socket.SHUT_WR)
        found = b""
        while piece := line.recv(65536):
            found += piece
        return found


HEAD = b"POST /records HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Type: application/json\r\n"


def test_a_body_that_pauses_is_given_up(server: Server) -> None:
    with socket.create_connection(("127.0.0.1", server.port), timeout=10) as line:
        line.sendall(HEAD + b"Content-Length: 100\r\n\r\n{")
        assert line.recv(65536).startswith(b"HTTP/1.1 408")


def test_a_client_that_goes_away_leaves_nothing_behind(server: Server) -> None:
    for _ in range(20):
        with socket.create_connection(("127.0.0.1", server.port), timeout=10) as line:
            line.sendall(HEAD + b'Content-Length: 1000\r\n\r\n{"source":')
    answer = httpx.post(f"{server.url}/records", json=record(3), headers=JSON)
    assert answer.status_code == 200
    time.sleep(0.5)
    metrics = httpx.get(f"{server.url}/metrics").text
    assert "oddbranch_body_memory_bytes 0.0" in metrics


def test_a_body_larger_than_said_is_refused_before_it_is_read(server: Server) -> None:
    answer = raw(server, HEAD + b"Content-Length: 99999999999\r\n\r\n{")
    assert answer.startswith(b"HTTP/1.1 413")


@pytest.mark.parametrize(
    "request_bytes",
    [
        b"\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03",
        b"GET / HTTP/9.9\r\n\r\n",
        b"nonsense\r\n\r\n",
        HEAD + b"Content-Length: -1\r\n\r\n",
        HEAD + b"Transfer-Encoding: chunked\r\n\r\nZZ\r\n",
        HEAD + b"Content-Length: 2\r\nContent-Length: 3\r\n\r\n{}",
        b"GET /records HTTP/1.1\r\nHost: 127.0.0.1\r\nX: " + b"y" * 200_000 + b"\r\n\r\n",
    ],
)
def test_what_is_no_http_harms_nobody(server: Server, request_bytes: bytes) -> None:
    try:
        answer = raw(server, request_bytes)
    except ConnectionError:
        answer = b""
    assert not answer.startswith(b"HTTP/1.1 5")
    assert httpx.get(f"{server.url}/health/live").status_code == 200


def test_a_client_that_reads_late_gets_every_answer(server: Server) -> None:
    """It sends everything before it reads anything, more than sockets hold."""
    items = [json.dumps(record(i / 60, "late-reader")) for i in range(20_000)]
    body = ("\n".join(items) + "\n").encode()
    head = HEAD.replace(b"application/json", b"application/x-ndjson")
    with socket.create_connection(("127.0.0.1", server.port), timeout=60) as line:
        line.sendall(head + f"Content-Length: {len(body)}\r\nConnection: close\r\n\r\n".encode())
        line.sendall(body)
        time.sleep(0.5)
        found = b""
        while piece := line.recv(1 << 20):
            found += piece
    assert found.count(b'"source":"late-reader"') == 20_000


def test_a_stream_answers_before_it_ends(server: Server) -> None:
    """What has come is answered when the sender pauses."""
    head = HEAD.replace(b"application/json", b"application/x-ndjson")
    line_bytes = json.dumps(record(7, "slow-sender")).encode() + b"\n"
    with socket.create_connection(("127.0.0.1", server.port), timeout=10) as line:
        line.sendall(head + f"Content-Length: {len(line_bytes) + 99}\r\n\r\n".encode() + line_bytes)
        found = b""
        while b'"source":"slow-sender"' not in found:
            piece = line.recv(65536)
            assert piece, found
            found += piece


def write_lines(path: Path, n_lines: int) -> None:
    """Write usual records of the small model's source, ten seconds apart, as lines."""
    with path.open("w", encoding="ascii") as file:
        for i in range(n_lines):
            moment = time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(1_700_000_000 + 10 * i))
            x = i % 7 / 10
            file.write(
                f'{{"source":"a","time":"{moment}","readings":{{"in":{6 + x:.1f},'
                f'"out":{14 + x:.1f},"power":{10 + x:.1f},"pump":"stopped"}}}}\n'
            )


def post_with_curl(folder: Path, n_lines: int) -> tuple[list[float], float]:
    """Post a file of lines with curl to a real model; return memory in MB as it went, and seconds.

    Every line is answered in order, and the first answers come long before the last line goes.
    """
    curl = need_program("curl")
    path = folder / "records.ndjson"
    write_lines(path, n_lines)
    write_model(a_model(), folder / "model")
    with serving(folder) as server:
        words = [curl, "-sS", "-N", "-X", "POST", "-T", str(path), f"{server.url}/records"]
        words += ["-H", "Content-Type: application/x-ndjson"]
        started = time.perf_counter()
        sizes, n_answers, last = [], 0, ""
        with subprocess.Popen(words, stdout=subprocess.PIPE) as process:
            assert process.stdout is not None
            for line in process.stdout:
                if n_answers % 1000 == 0:
                    statm = Path(f"/proc/{server.pid}/statm").read_text(encoding="ascii")
                    sizes.append(int(statm.split()[1]) * os.sysconf("SC_PAGE_SIZE") / 1e6)
                    # Times rise and nothing is refused: the answers are in the order of the lines.
                    answer = json.loads(line)
                    assert answer["time"] > last
                    assert answer["surprise"] > 0
                    last = answer["time"]
                if n_answers == 0:
                    with closing(sqlite3.connect(folder / "data" / "records.sqlite3")) as store:
                        n_early = store.execute("SELECT count(*) FROM record").fetchone()[0]
                n_answers += 1
        seconds = time.perf_counter() - started
        assert process.returncode == 0
        items = httpx.get(f"{server.url}/sources").json()["items"]
    assert n_answers == n_lines == items[0]["records"]
    assert 0 < n_early < n_lines
    return sizes, seconds


def test_a_file_of_lines_posted_with_curl_is_answered_line_by_line(tmp_path: Path) -> None:
    post_with_curl(tmp_path, 60_000)


@pytest.mark.soak
def test_a_million_lines_are_answered_in_constant_memory(tmp_path: Path) -> None:
    n_lines = int(os.environ.get("ODDBRANCH_TEST_SOAK_LINES", "1000000"))
    sizes, seconds = post_with_curl(tmp_path, n_lines)
    tenths = [round(max(part)) for part in np.array_split(sizes, 10)]
    sys.stdout.write(
        f"{n_lines:,} lines in {seconds:.0f} s; most memory in MB by tenth: {tenths}\n"
    )
    # Caches fill in the first fifth; from there on nothing may grow with lines.
    assert max(tenths[-3:]) < 1.1 * max(tenths[1:3]) + 8
