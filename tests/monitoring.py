"""A real Prometheus, a real Alertmanager and a webhook, all on loopback, for the tests."""

from __future__ import annotations

import contextlib
import json
import re
import socket
import subprocess
import threading
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any

import httpx
import yaml

from tests.conftest import ROOT, need_program

FOLDER = ROOT / "deploy" / "prometheus"
# What takes two minutes at a plant takes a second in a test.
FASTER = 120
_SECONDS = {"s": 1, "m": 60, "h": 3600, "d": 86_400}


def faster(text: str) -> str:
    """Return a configuration with every duration divided by FASTER."""

    def shorter(met: re.Match[str]) -> str:
        return f"{int(met[1]) * _SECONDS[met[2]] * 1000 // FASTER}ms"

    return re.sub(r"(?<![\w.:-])(\d+)([smhd])\b", shorter, text)


def free_port() -> int:
    """Return a port that nobody listens on."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextmanager
def program(words: Sequence[str | Path], folder: Path) -> Iterator[subprocess.Popen[bytes]]:
    """Run a program until the block ends; what it says is in a file of its name."""
    name = Path(words[0]).name
    with (folder / f"{name}.log").open("wb") as log:
        process = subprocess.Popen(
            list(map(str, words)), stdout=log, stderr=subprocess.STDOUT, cwd=folder
        )
        try:
            yield process
        finally:
            process.terminate()
            try:
                process.wait(10)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait(10)


class Webhook:
    """Takes what an Alertmanager sends; `told` is by receiver, in the order of arrival."""

    def __init__(self) -> None:
        told: list[tuple[str, dict[str, Any]]] = []

        class Handler(BaseHTTPRequestHandler):
            def do_POST(self) -> None:
                body = self.rfile.read(int(self.headers["content-length"]))
                for alert in json.loads(body)["alerts"]:
                    told.append((self.path.strip("/"), alert))
                self.send_response(200)
                self.end_headers()

            def log_message(self, *_words: Any) -> None:
                """Say nothing."""

        self.told = told
        self.server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
        self.port = int(self.server.server_address[1])
        self._thread = threading.Thread(target=self.server.serve_forever, daemon=True)
        self._thread.start()

    def close(self) -> None:
        """End it."""
        self.server.shutdown()
        self.server.server_close()
        self._thread.join()

    def called(self, status: str) -> set[tuple[str, str, str]]:
        """Return (receiver, alert, source) of what was told as `firing` or `resolved`."""
        return {
            (receiver, alert["labels"]["alertname"], alert["labels"].get("source", ""))
            for receiver, alert in list(self.told)
            if alert["status"] == status
        }


@contextmanager
def alerting(
    folder: Path, targets: dict[str, list[str]], token: str, change: Callable[[str], str] = faster
) -> Iterator[tuple[str, Webhook]]:
    """Run Prometheus and Alertmanager on the shipped files; yield the first's URL and the webhook.

    targets: by job; a job that the shipped file does not have is added like its first.
    """
    prometheus, alertmanager = need_program("prometheus"), need_program("prometheus-alertmanager")
    webhook = Webhook()
    manager_port, port = free_port(), free_port()
    (folder / "token").write_text(token, encoding="utf-8")
    rules = folder / "rules.yml"
    rules.write_text(change((FOLDER / "oddbranch.rules.yml").read_text()), encoding="utf-8")
    config = yaml.safe_load(change((FOLDER / "prometheus.yml").read_text()))
    config["rule_files"] = [str(rules)]
    config["alerting"]["alertmanagers"][0]["static_configs"][0]["targets"] = [
        f"127.0.0.1:{manager_port}"
    ]
    shipped = {one["job_name"]: one for one in config["scrape_configs"]}
    config["scrape_configs"] = []
    for job, addresses in targets.items():
        one = {**shipped.get(job, shipped["oddbranch"]), "job_name": job}
        if "authorization" in one:
            one["authorization"] = {"credentials_file": str(folder / "token")}
        config["scrape_configs"].append(one | {"static_configs": [{"targets": addresses}]})
    (folder / "prometheus.yml").write_text(yaml.safe_dump(config), encoding="utf-8")
    told = change((FOLDER / "alertmanager.yml").read_text())
    told = told.replace("127.0.0.1:9095", f"127.0.0.1:{webhook.port}")
    (folder / "alertmanager.yml").write_text(told, encoding="utf-8")
    with contextlib.ExitStack() as stack:
        stack.callback(webhook.close)
        stack.enter_context(
            program(
                [alertmanager, "--config.file=alertmanager.yml", "--storage.path=manager",
                 f"--web.listen-address=127.0.0.1:{manager_port}", "--cluster.listen-address="],
                folder,
            )
        )  # fmt: skip
        stack.enter_context(
            program(
                [prometheus, "--config.file=prometheus.yml", "--storage.tsdb.path=tsdb",
                 f"--web.listen-address=127.0.0.1:{port}", "--log.level=warn"],
                folder,
            )
        )  # fmt: skip
        yield f"http://127.0.0.1:{port}", webhook


def query(url: str, words: str) -> list[dict[str, Any]]:
    """Return the series that a Prometheus answers; none while it does not answer."""
    try:
        answer = httpx.get(f"{url}/api/v1/query", params={"query": words}, timeout=5)
        return list(answer.json()["data"]["result"])
    except (httpx.TransportError, ValueError, KeyError):
        return []
