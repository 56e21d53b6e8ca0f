"""The shipped rules at work: a running service, a real Prometheus, a real Alertmanager."""

from __future__ import annotations

import contextlib
import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import httpx
from click.testing import CliRunner

import oddbranch
from oddbranch import ADVICE
from tests.conftest import need_program
from tests.monitoring import alerting, free_port, program
from tests.service_fakes import write_fake
from tests.service_http import serving
from tests.test_deploy_prometheus import rules

NIGHT = """\
# TYPE oddbranch_nightly_verdict gauge
oddbranch_nightly_verdict{verdict="published"} 0
oddbranch_nightly_verdict{verdict="refused"} 1
oddbranch_nightly_verdict{verdict="failed"} 0
# TYPE oddbranch_nightly_last_run_timestamp_seconds gauge
oddbranch_nightly_last_run_timestamp_seconds %d
"""

# What is wrong below, as (receiver, alert, source).
TROUBLE = {
    ("crew", "OddbranchSustainedOverLevel", "mill-lane-2"),
    ("crew", "OddbranchRecordsOverLevel", "mill-lane-3"),
    ("crew", "OddbranchSourceSilent", "quarry-rise"),
    ("keeper", "OddbranchDown", ""),
    ("keeper", "OddbranchRecordsRefused", ""),
    ("keeper", "OddbranchModelRefused", ""),
    ("keeper", "OddbranchNightlyRefused", ""),
}
MENDED = {
    ("crew", "OddbranchSustainedOverLevel", "mill-lane-2"),
    ("crew", "OddbranchRecordsOverLevel", "mill-lane-3"),
    ("keeper", "OddbranchModelRefused", ""),
}
# A record over its level is part of the lasting trouble that is told already.
INHIBITED = ("crew", "OddbranchRecordsOverLevel", "mill-lane-2")
# Prometheus looks for its targets only five seconds after its start, which are ten minutes here.
AT_THE_START = ("keeper", "OddbranchNotScraped", "")


def make_token(folder: Path, name: str, role: str) -> str:
    """Return a new token, made as an operator makes it."""
    words = ["token", "add", name, "--role", role, "--data", str(folder / "data")]
    done = CliRunner().invoke(oddbranch.cli, words, catch_exceptions=False)
    return done.output.splitlines()[-1]


def now_record(source: str, flow: float, age_s: float = 0.0) -> dict[str, Any]:
    """Return a record of this moment, or some seconds ago."""
    moment = time.time() - age_s
    text = time.strftime("%Y-%m-%dT%H:%M:%S", time.gmtime(moment)) + f".{int(moment % 1 * 1e6):06}Z"
    return {"source": source, "time": text, "readings": {"flow": flow, "power": 31.5}}


class Load:
    """Sends for three sources and one muddled sender until told to stop."""

    def __init__(self, url: str, token: str) -> None:
        self.client = httpx.Client(
            base_url=url, headers={"authorization": f"Bearer {token}"}, timeout=10
        )
        self.wrong = True
        self._ended = threading.Event()
        self._thread = threading.Thread(target=self._run)
        self._thread.start()

    def _run(self) -> None:
        turn = 0
        while not self._ended.wait(0.15):
            turn += 1
            items: list[Any] = [
                now_record("mill-lane-2", 390.0 if self.wrong else 10.0),
                now_record("mill-lane-3", 390.0 if self.wrong and turn % 20 == 5 else 10.0),
                now_record("mill-lane-4", 10.0),
            ]
            if self.wrong:
                items.append({"source": "mill-lane-5"})
            with contextlib.suppress(httpx.TransportError):
                self.client.post("/records", json=items)

    def stop(self) -> None:
        self._ended.set()
        self._thread.join()
        self.client.close()


def wait_for(done: Callable[[], bool], seconds: float) -> None:
    """Wait until something is so, or the time has passed."""
    end = time.monotonic() + seconds
    while not done() and time.monotonic() < end:
        time.sleep(0.1)


def test_trouble_reaches_a_webhook_and_is_taken_back_when_it_is_mended(tmp_path: Path) -> None:
    exporter = need_program("prometheus-node-exporter")
    reads, sends = make_token(tmp_path, "prometheus", "read"), make_token(tmp_path, "all", "send")
    (tmp_path / "texts").mkdir()
    (tmp_path / "texts" / "night.prom").write_text(NIGHT % time.time(), encoding="utf-8")
    node = free_port()
    words = [exporter, f"--web.listen-address=127.0.0.1:{node}", "--collector.disable-defaults",
             "--collector.textfile", "--collector.textfile.directory=texts"]  # fmt: skip
    with serving(tmp_path, "model.reload_s=0.2") as server, program(words, tmp_path):
        targets = {
            "oddbranch": [f"127.0.0.1:{server.port}"],
            "oddbranch-gone": [f"127.0.0.1:{free_port()}"],
            "node": [f"127.0.0.1:{node}"],
        }
        load = Load(server.url, sends)
        load.client.post("/records", json=now_record("quarry-rise", 10.0, 1200.0))
        try:
            with alerting(tmp_path, targets, reads) as (_, webhook):
                time.sleep(1.0)
                write_fake(tmp_path / "model", "broken")
                wait_for(lambda: webhook.called("firing") >= TROUBLE, 40)
                firing = webhook.called("firing")
                load.wrong = False
                write_fake(tmp_path / "model")
                wait_for(lambda: webhook.called("resolved") >= MENDED, 40)
                resolved = webhook.called("resolved")
                told = list(webhook.told)
        finally:
            load.stop()
    assert firing - {INHIBITED, AT_THE_START} == TROUBLE
    assert resolved >= MENDED
    assert ("keeper", "OddbranchDown", "") not in resolved
    _check_words(told)


def _check_words(told: list[tuple[str, dict[str, Any]]]) -> None:
    """Every message is a sentence; the crew's say that they are advice."""
    known = {str(rule["alert"]) for rule in rules() if "alert" in rule}
    for receiver, alert in told:
        assert alert["labels"]["alertname"] in known
        assert "{{" not in str(alert["annotations"])
        assert alert["annotations"]["summary"]
        if receiver == "crew":
            assert "local codes and licensed practice decide" in ADVICE
            assert "Local codes and licensed practice decide" in alert["annotations"]["advice"]
