"""A service in a process of its own, and a client that posts records to it.

The process is `oddbranch serve` itself: what is posted here goes the way that every
record goes. Standard library alone, because the client of a test is no dependency.
"""

from __future__ import annotations

import contextlib
import http.client
import json
import os
import re
import signal
import subprocess
import sys
import time
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import orjson

from scoring.errors import OddbranchError

# Reading the model and compiling the kernels for the first time takes some ten seconds.
_START_S = 180.0
_STOP_S = 20.0
_POLL_S = 0.05
_REQUEST_S = 120.0
_ENVIRONMENT_PREFIX = "ODDBRANCH_"
_WHERE = re.compile(r"http://([\w.]+):(\d+)")


class ServiceFailed(OddbranchError):
    """The service did not start, ended by itself, or refused what was sent."""


class Served:
    """A running service; `post` sends records. A context manager that ends the process."""

    def __init__(self, process: subprocess.Popen[bytes], host: str, port: int, log: Path) -> None:
        self.process, self.host, self.port, self._log = process, host, port, log
        self._connection = http.client.HTTPConnection(host, port, timeout=_REQUEST_S)

    @property
    def url(self) -> str:
        """Where it listens."""
        return f"http://{self.host}:{self.port}"

    def post(self, records: Sequence[dict[str, Any]]) -> list[dict[str, Any]]:
        """Post records as one array and return their answers, in order.

        Raises ServiceFailed with the service's own words if any is refused.
        """
        body = self._request("POST", "/records", orjson.dumps(records))
        answers: list[dict[str, Any]] = orjson.loads(body)
        for answer in answers:
            if "problem" in answer:
                raise ServiceFailed(f"{self.url}: a record was refused: {json.dumps(answer)}")
        return answers

    def get(self, path: str) -> bytes:
        """Return the body of a path."""
        return self._request("GET", path)

    def _request(self, method: str, path: str, body: bytes | None = None) -> bytes:
        headers = {} if body is None else {"content-type": "application/json"}
        try:
            self._connection.request(method, path, body, headers)
            response = self._connection.getresponse()
            answer = response.read()
        except (OSError, http.client.HTTPException) as error:
            raise ServiceFailed(
                f"{self.url}: {type(error).__name__} {error}{_said(self._log)}"
            ) from None
        if response.status >= 300:
            words = answer[:500].decode("utf-8", "replace")
            raise ServiceFailed(f"{self.url}{path}: answered {response.status}: {words}")
        return answer

    def wait_until_ready(self) -> None:
        """Return when it takes records; raises ServiceFailed if it never does."""
        end_s = time.monotonic() + _START_S
        while True:
            try:
                self.get("/health/ready")
                return
            except ServiceFailed as error:
                if self.process.poll() is not None or time.monotonic() > end_s:
                    raise ServiceFailed(f"the service does not get ready: {error}") from None
                self._connection.close()
                time.sleep(_POLL_S)

    def wait(self) -> None:
        """Return when the service ends by itself or is interrupted from the terminal."""
        with contextlib.suppress(KeyboardInterrupt):
            self.process.wait()

    def stop(self) -> None:
        """End the service as an operator would; may be called twice."""
        self._connection.close()
        if self.process.poll() is None:
            self.process.send_signal(signal.SIGTERM)
            try:
                self.process.wait(_STOP_S)
            except subprocess.TimeoutExpired:
                self.process.kill()
                self.process.wait()


@contextlib.contextmanager
def serve(
    folder: Path, options: Sequence[str], program: Sequence[str] = ("-m", "oddbranch", "serve")
) -> Iterator[Served]:
    """Run a service on a free port of this machine until the block ends.

    folder: its working directory, where it also writes `serve.log`. options: of
    `oddbranch serve`. program: what Python is to run. Settings in the environment of
    whoever calls are kept from it. Raises ServiceFailed.
    """
    log = folder / "serve.log"
    environment = {k: v for k, v in os.environ.items() if not k.startswith(_ENVIRONMENT_PREFIX)}
    with log.open("wb") as out:
        process = subprocess.Popen(  # noqa: S603 - our own program, no shell
            [sys.executable, *program, *options, "--host", "127.0.0.1", "--port", "0"],
            cwd=folder,
            env=environment,
            stdin=subprocess.DEVNULL,
            stdout=out,
            stderr=subprocess.STDOUT,
        )
    served: Served | None = None
    try:
        served = Served(process, *_where(process, log), log)
        served.wait_until_ready()
        yield served
    finally:
        if served is not None:
            served.stop()
        elif process.poll() is None:
            process.kill()
            process.wait()


def _where(process: subprocess.Popen[bytes], log: Path) -> tuple[str, int]:
    """Return host and port as the service prints them."""
    end_s = time.monotonic() + _START_S
    while time.monotonic() < end_s:
        found = _WHERE.search(log.read_text(encoding="utf-8", errors="replace"))
        if found:
            return found[1], int(found[2])
        if process.poll() is not None:
            raise ServiceFailed(f"the service ended with {process.returncode}{_said(log)}")
        time.sleep(_POLL_S)
    raise ServiceFailed(f"the service did not say where it listens within {_START_S:g} s")


def _said(log: Path) -> str:
    """Return the last lines of the service's own output, for a sentence."""
    lines = log.read_text(encoding="utf-8", errors="replace").strip().splitlines()[-5:]
    return "; it said: " + " / ".join(lines) if lines else ""
