"""Helpers of the service's tests: an app in this process, or a server in its own."""

from __future__ import annotations

import asyncio
import atexit
import contextlib
import json
import os
import re
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Coroutine, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any, TypeVar

import httpx

from service.app import create_app
from service.engine import Engine
from service.pipeline import AlertSink
from service.running import Service
from service.settings import Settings, load_settings
from tests.conftest import ROOT
from tests.service_fakes import load_fake, write_fake

T = TypeVar("T")

JSON = {"content-type": "application/json"}
NDJSON = {"content-type": "application/x-ndjson"}
# The stand-in's clock in tests, 2025-12-01T05:00:00Z, and an hour before: both are past
# wherever the tests run, so that a real server's clock takes no record for one ahead.
NOW_NS = 1_764_565_200 * 10**9
START_S = 1_764_561_600


@dataclass
class Clock:
    """The service's clock, set by hand; an hour after the first record unless said."""

    now_ns: int = NOW_NS

    def __call__(self) -> int:
        return self.now_ns


def record(minute: Any = 0.0, source: Any = "mill-lane-2", **readings: Any) -> dict[str, Any]:
    """Return one record at some minutes after 2025-12-01T04:00:00Z."""
    seconds = START_S + round(minute * 60)
    moment = time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(seconds))
    given = {"flow": 120.0, "power": 31.5, "pump": "running", "speed": 1450.0, **readings}
    return {"source": source, "time": moment, "readings": given}


class Api:
    """A started service and a client that speaks to it; calls wait for their answers."""

    def __init__(self, service: Service, loop: asyncio.AbstractEventLoop) -> None:
        self.service, self.loop = service, loop
        transport = httpx.ASGITransport(create_app(service), raise_app_exceptions=False)
        self.client = httpx.AsyncClient(
            transport=transport, base_url="http://127.0.0.1:8321", timeout=30
        )

    def call(self, work: Coroutine[Any, Any, T]) -> T:
        """Run a coroutine on the service's loop and return what it returns."""
        return asyncio.run_coroutine_threadsafe(work, self.loop).result(60)

    def request(self, method: str, path: str, **more: Any) -> httpx.Response:
        """Send one request."""
        return self.call(self.client.request(method, path, **more))

    def get(self, path: str, **more: Any) -> httpx.Response:
        """Send one GET request."""
        return self.request("GET", path, **more)

    def post(self, body: Any, path: str = "/records", **more: Any) -> httpx.Response:
        """Post a body: bytes as they are, anything else as JSON."""
        content = body if isinstance(body, bytes) else json.dumps(body).encode()
        headers = {**JSON, **more.pop("headers", {})}
        return self.request("POST", path, content=content, headers=headers, **more)

    def post_lines(self, body: bytes, **more: Any) -> list[dict[str, Any]]:
        """Post NDJSON and return the answers."""
        headers = {**NDJSON, **more.pop("headers", {})}
        answer = self.request("POST", "/records", content=body, headers=headers, **more)
        assert answer.status_code == 200, answer.text
        return [json.loads(line) for line in answer.text.splitlines()]


def settings_for(folder: Path, **sections: Mapping[str, Any]) -> Settings:
    """Return settings with everything in one folder."""
    options: dict[str, dict[str, Any]] = {
        "model": {"path": folder / "model"},
        "store": {"data": folder / "data"},
    }
    for section, keys in sections.items():
        options.setdefault(section, {}).update(keys)
    return load_settings(None, options)


@contextmanager
def running(
    folder: Path,
    *,
    load: Callable[[Path], Engine] = load_fake,
    sink: AlertSink | None = None,
    clock_ns: Callable[[], int] = lambda: NOW_NS,
    **sections: Mapping[str, Any],
) -> Iterator[Api]:
    """Run a service in this process over a stand-in model."""
    if not (folder / "model").exists():
        write_fake(folder / "model")
    service = Service(settings_for(folder, **sections), load, sink=sink, clock_ns=clock_ns)
    service.open()
    loop = asyncio.new_event_loop()
    thread = threading.Thread(target=loop.run_forever, daemon=True)
    thread.start()
    api = Api(service, loop)
    api.call(service.start())
    try:
        yield api
    finally:
        api.call(api.client.aclose())
        api.call(service.stop())
        loop.call_soon_threadsafe(loop.stop)
        thread.join()
        loop.close()


class Spawner:
    """A process that has imported the service and forks a server at once when asked."""

    def __init__(self) -> None:
        self.process = subprocess.Popen(
            [sys.executable, "-m", "tests.service_server", "--spawn"],
            cwd=ROOT,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )

    def spawn(self, folder: Path, words: Sequence[str]) -> int:
        """Return the process id of a new server."""
        assert self.process.stdin is not None
        assert self.process.stdout is not None
        self.process.stdin.write(json.dumps([str(folder), *words]) + "\n")
        self.process.stdin.flush()
        return int(self.process.stdout.readline())

    def close(self) -> None:
        """End the process; its servers must have ended before."""
        assert self.process.stdin is not None
        assert self.process.stdout is not None
        self.process.stdin.close()
        self.process.wait(10)
        self.process.stdout.close()


@cache
def spawner() -> Spawner:
    """Return the one spawner of this test run."""
    found = Spawner()
    atexit.register(found.close)
    return found


class Server:
    """A real server in a process of its own, over a stand-in model."""

    def __init__(self, folder: Path, *words: str) -> None:
        if not (folder / "model").exists():
            write_fake(folder / "model")
        self.folder = folder
        self._out = folder / "server.out"
        self._out.unlink(missing_ok=True)
        self.pid = spawner().spawn(folder, words)
        self.port = self._wait_for_port()

    def _wait_for_port(self) -> int:
        end = time.monotonic() + 30
        while time.monotonic() < end:
            text = self._out.read_text(encoding="utf-8") if self._out.exists() else ""
            found = re.search(r":(\d+) ", text)
            if found:
                return int(found.group(1))
            assert self.is_alive, f"the server did not start: {self.log_text()}"
            time.sleep(0.01)
        raise AssertionError(f"the server does not say where it listens: {self.log_text()}")

    @property
    def is_alive(self) -> bool:
        """Whether its process is there."""
        try:
            os.kill(self.pid, 0)
        except ProcessLookupError:
            return False
        return True

    def log_text(self) -> str:
        """Return what the server logged so far."""
        return (self.folder / "server.log").read_text(encoding="utf-8")

    @property
    def url(self) -> str:
        """Where it listens."""
        return f"http://127.0.0.1:{self.port}"

    def kill(self) -> None:
        """End it as a power cut would."""
        os.kill(self.pid, signal.SIGKILL)
        self._wait()

    def stop(self) -> None:
        """End it as an operator would."""
        with contextlib.suppress(ProcessLookupError):
            os.kill(self.pid, signal.SIGTERM)
        self._wait()

    def _wait(self) -> None:
        end = time.monotonic() + 30
        while self.is_alive:
            if time.monotonic() > end:
                os.kill(self.pid, signal.SIGKILL)
                raise AssertionError("the server does not end")
            time.sleep(0.005)


@contextmanager
def serving(folder: Path, *words: str) -> Iterator[Server]:
    """Run a server until the block ends."""
    server = Server(folder, *words)
    try:
        yield server
    finally:
        if server.is_alive:
            server.stop()
