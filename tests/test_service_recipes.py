"""The recipes of the README run as they are printed."""

from __future__ import annotations

import contextlib
import json
import re
import signal
import subprocess
import sys
import threading
import time
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any, ClassVar

import httpx
import pytest
from click.testing import CliRunner

import oddbranch
from service.problems import Problem
from tests.conftest import ROOT, need_program
from tests.service_http import Server, record, serving

README = (ROOT / "README.md").read_text(encoding="utf-8")


def recipe(name: str) -> str:
    """Return the block after a recipe's mark."""
    found = re.search(rf"<!-- recipe: {name} -->\n```\w+\n(.*?)```", README, re.DOTALL)
    assert found, f"the README has no recipe {name}"
    return found.group(1)


def n_stored(server: Server) -> int:
    answer = httpx.get(f"{server.url}/sources").json()["items"]
    return sum(item["records"] for item in answer)


def test_the_curl_recipe_posts_a_record(tmp_path: Path) -> None:
    need_program("curl")
    with serving(tmp_path) as server:
        text = recipe("curl").replace("http://127.0.0.1:8321", server.url)
        done = subprocess.run(["sh", "-c", text], capture_output=True, check=True)
        answer = json.loads(done.stdout)
        assert answer["source"] == "mill-lane-2"
        assert answer["suspect"]["reading"] == 241.3
        assert n_stored(server) == 1


def test_the_recipe_for_lines_posts_a_file(tmp_path: Path) -> None:
    need_program("curl")
    lines = [json.dumps(record(i / 6)) for i in range(2500)]
    lines[1200] = "nonsense"
    (tmp_path / "records.ndjson").write_text("\n".join(lines) + "\n", encoding="utf-8")
    with serving(tmp_path) as server:
        text = recipe("lines").replace("http://127.0.0.1:8321", server.url)
        subprocess.run(["sh", "-c", text], cwd=tmp_path, check=True)
        assert n_stored(server) == 2499
    answers = (tmp_path / "answers.ndjson").read_text(encoding="utf-8").splitlines()
    refused = [json.loads(line) for line in answers if "problem" in line]
    assert len(answers) == 2500
    assert [item["index"] for item in refused] == [1200]


def test_the_httpx_recipe_posts_an_array(tmp_path: Path) -> None:
    with serving(tmp_path) as server:
        text = recipe("httpx").replace("http://127.0.0.1:8321", server.url)
        done = subprocess.run(
            [sys.executable, "-c", text], capture_output=True, text=True, check=True
        )
        assert done.stdout == "24.13\n" * 5
        assert n_stored(server) == 5


def test_the_forwarder_is_twenty_lines_and_keeps_its_place(tmp_path: Path) -> None:
    text = recipe("forwarder")
    assert len([line for line in text.splitlines() if line.strip()]) <= 20
    lines = tmp_path / "records.ndjson"
    items = [json.dumps(record(i / 6)) for i in range(1200)]
    items[700] = "nonsense"
    lines.write_text("\n".join(items[:900]) + "\n", encoding="utf-8")
    server = Server(tmp_path)
    program = [sys.executable, "-c", text, str(lines), f"{server.url}/records"]
    first = subprocess.Popen(program, stderr=subprocess.DEVNULL)
    try:
        assert reached(server, 899)
        server.kill()
        with lines.open("a", encoding="utf-8") as file:
            file.write("\n".join(items[900:1100]) + "\n" + items[1100][:20])
        time.sleep(0.5)
        # The same port again, as after a restart of the service.
        server = Server(tmp_path, f"server.port={server.port}")
        assert reached(server, 1099)
    finally:
        end(first)
    assert (tmp_path / "records.place").read_text() == str(len("\n".join(items[:1100])) + 1)
    with lines.open("a", encoding="utf-8") as file:
        file.write(items[1100][20:] + "\n" + "\n".join(items[1101:]) + "\n")
    second = subprocess.Popen(program, stderr=subprocess.PIPE)
    try:
        assert reached(server, 1199)
    finally:
        end(second)
        server.stop()


class Moody(BaseHTTPRequestHandler):
    """Answers as told: first no, for two seconds, then no to a line, then to all as they are."""

    seen: ClassVar[list[tuple[float, int]]] = []

    def do_POST(self) -> None:
        """Answer one request."""
        lines = self.rfile.read(int(self.headers["content-length"])).splitlines()
        self.seen.append((time.monotonic(), len(lines)))
        answers: list[dict[str, Any]] = [{"surprise": 1.0}] * len(lines)
        if len(self.seen) == 1:
            problem = Problem("overload", "for now")
            self.send_response(problem.status)
            for name, value in {**problem.headers(), "retry-after": "2"}.items():
                self.send_header(name, value)
            answers = [problem.as_dict()]
        else:
            self.send_response(200)
            if len(self.seen) == 2:
                answers[3:] = [Problem("store-away", "not now").as_item(3)]
            elif lines:
                answers[1] = Problem("bad-record", "line of nonsense").as_item(1)
        self.end_headers()
        self.wfile.writelines(json.dumps(answer).encode() + b"\n" for answer in answers)

    def log_message(self, *_words: Any) -> None:
        """Say nothing."""


def test_the_forwarder_waits_as_told_and_says_what_is_refused(tmp_path: Path) -> None:
    path, place = tmp_path / "records.ndjson", tmp_path / "records.place"
    path.write_text("{}\n" * 5, encoding="utf-8")
    server = ThreadingHTTPServer(("127.0.0.1", 0), Moody)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    url = f"http://127.0.0.1:{server.server_port}/records"
    program = [sys.executable, "-c", recipe("forwarder"), str(path), url]
    process = subprocess.Popen(program, stderr=subprocess.PIPE, text=True)
    try:
        end_s = time.monotonic() + 30
        while len(Moody.seen) < 4:
            assert len(Moody.seen) > 2 or not place.exists(), "a place before all was answered"
            assert time.monotonic() < end_s
            time.sleep(0.01)
        assert place.read_text() == "15"
    finally:
        process.kill()
        said = process.communicate()[1]
        server.shutdown()
        thread.join()
        server.server_close()
    times, n_lines = zip(*Moody.seen[:4], strict=True)
    assert n_lines == (5, 5, 5, 0)
    assert times[1] - times[0] >= 2
    assert times[2] - times[1] >= 1
    assert json.loads(said.splitlines()[0]) == Problem("overload", "for now").as_dict()
    assert said.splitlines()[-2:] == ["not now", "line of nonsense"]
    assert [p.name for p in tmp_path.iterdir() if p != path] == ["records.place"]


def test_the_forwarder_begins_anew_when_its_file_does(tmp_path: Path) -> None:
    path, place = tmp_path / "records.ndjson", tmp_path / "records.place"

    def lines(start: int, end: int) -> str:
        return "".join(json.dumps(record(i / 6)) + "\n" for i in range(start, end))

    path.write_text(lines(0, 20), encoding="utf-8")
    with serving(tmp_path) as server:
        program = [sys.executable, "-c", recipe("forwarder"), str(path), f"{server.url}/records"]
        process = subprocess.Popen(program)
        try:
            assert reached(server, 20)
            # Copied away and emptied by whoever rotates logs; the file stays the same.
            path.write_text(lines(20, 25), encoding="utf-8")
            assert reached(server, 25)
        finally:
            end(process)
        # The same while it was not running, with the place of a longer file.
        place.write_text("999999", encoding="utf-8")
        path.write_text(lines(25, 28), encoding="utf-8")
        process = subprocess.Popen(program)
        try:
            assert reached(server, 28)
        finally:
            end(process)


def test_the_forwarder_says_what_the_service_says_and_takes_a_token(tmp_path: Path) -> None:
    path, text = tmp_path / "records.ndjson", recipe("forwarder")
    path.write_text(json.dumps(record()) + "\n", encoding="utf-8")
    words = ["token", "add", "all", "--role", "send", "--data", str(tmp_path / "data")]
    output = CliRunner().invoke(oddbranch.cli, words, catch_exceptions=False).output
    token = output.splitlines()[-1]
    found = re.search(r'`("authorization": "Bearer TOKEN")`', README)
    assert found
    pair = found.group(1).replace("TOKEN", token)
    with_token = text.replace('"application/x-ndjson"}', f'"application/x-ndjson", {pair}}}')
    assert with_token.count(token) == 1
    with serving(tmp_path) as server:
        assert first_words(text, path, f"{server.url}/records")["status"] == 401
        wrong = first_words(with_token, path, f"{server.url}/recrods")
        assert wrong["detail"] == "the token has the roles send; this needs operate"
        process = subprocess.Popen(
            [sys.executable, "-c", with_token, str(path), f"{server.url}/records"]
        )
        end_s = time.monotonic() + 30
        while not (tmp_path / "records.place").exists() and time.monotonic() < end_s:
            time.sleep(0.05)
        end(process)
    assert (tmp_path / "records.place").read_text() == str(path.stat().st_size)


def first_words(text: str, path: Path, url: str) -> dict[str, Any]:
    """Return the problem that a forwarder says first."""
    program = [sys.executable, "-c", text, str(path), url]
    process = subprocess.Popen(program, stderr=subprocess.PIPE)
    assert process.stderr is not None
    try:
        said: dict[str, Any] = json.loads(process.stderr.readline())
    finally:
        end(process)
    return said


def end(process: subprocess.Popen[bytes]) -> None:
    process.send_signal(signal.SIGKILL)
    process.wait(10)
    if process.stderr is not None:
        process.stderr.close()


def reached(server: Server, n_records: int) -> bool:
    end_s = time.monotonic() + 30
    while time.monotonic() < end_s:
        with contextlib.suppress(httpx.TransportError):
            if n_stored(server) == n_records:
                return True
        time.sleep(0.05)
    return False


@pytest.mark.parametrize("role", ["send", "read", "operate"])
def test_the_readme_names_every_role(role: str) -> None:
    assert f"`{role}` may" in README


def test_the_token_recipe_makes_a_token(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    words = recipe("token").split()
    assert words[0] == "oddbranch"
    output = CliRunner().invoke(oddbranch.cli, words[1:], catch_exceptions=False).output
    assert "shown only now" in output
