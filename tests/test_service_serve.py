"""`oddbranch serve` as a person runs it."""

from __future__ import annotations

import re
import signal
import socket
import subprocess
import sys
from pathlib import Path

import httpx
import pytest

from scoring.artefact import write_model
from service.store.database import Database
from tests.conftest import ROOT
from tests.models import a_model


@pytest.fixture(scope="module")
def model(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("kept") / "model"
    write_model(a_model(), folder)
    return folder


def command(*words: str | Path) -> list[str | Path]:
    return [sys.executable, ROOT / "oddbranch.py", *words]


def refused(*words: str | Path) -> str:
    """Run a command that must refuse, and return its one sentence."""
    done = subprocess.run(command(*words), capture_output=True, text=True, timeout=60, check=False)
    assert done.returncode == 1, done.stderr
    assert "Traceback" not in done.stderr
    lines = done.stderr.strip().splitlines()
    assert len(lines) == 1, done.stderr
    return lines[0]


def test_it_serves_until_it_is_told_to_stop(model: Path, tmp_path: Path) -> None:
    config = tmp_path / "service.toml"
    config.write_text("[alerts]\nspan_steps = 0\n", encoding="utf-8")
    words = ("--config", config, "--model", model, "--data", tmp_path / "data", "--port", "0")
    process = subprocess.Popen(
        command("serve", *words),
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    assert process.stdout is not None
    try:
        line = process.stdout.readline()
        found = re.match(r"Serving on (http://127\.0\.0\.1:\d+) \(stop with Ctrl-C\)", line)
        assert found, line
        assert process.stdout.readline().startswith("Advice only")
        readings = {"in": 12.0, "out": 16.0, "power": 111.0, "pump": "running"}
        body = {"source": "a", "time": "2025-12-01T04:00:10Z", "readings": readings}
        answer = httpx.post(f"{found.group(1)}/records", json=body, timeout=20)
        assert answer.status_code == 200
        assert answer.json()["member"] == "own"
        # Beyond its span for one interval; it would take six if the file did not say otherwise.
        body["time"] = "2025-12-01T04:00:20Z"
        assert httpx.post(f"{found.group(1)}/records", json=body, timeout=20).is_success
        alerts = httpx.get(f"{found.group(1)}/alerts", timeout=20).json()["items"]
        assert "span" in {alert["kind"] for alert in alerts}
    finally:
        process.send_signal(signal.SIGTERM)
        _, log = process.communicate(timeout=30)
    assert '"event":"stopped"' in log
    assert "Traceback" not in log


def test_a_start_imports_nothing_that_a_running_service_does_not_need(
    model: Path, tmp_path: Path
) -> None:
    database = Database(tmp_path)
    database.migrate()
    database.close()
    words = ("-X", "importtime", *command("serve", "--model", model, "--data", tmp_path)[1:])
    log = tmp_path / "log"
    with log.open("wb") as file:
        process = subprocess.Popen(
            [sys.executable, *words, "--port", "0"], stdout=subprocess.PIPE, stderr=file, text=True
        )
        assert process.stdout is not None
        assert process.stdout.readline().startswith("Serving on")
        process.send_signal(signal.SIGTERM)
        process.communicate(timeout=30)
    lines = log.read_text(encoding="utf-8").splitlines()
    imported = {line.rpartition("|")[2].strip() for line in lines if "|" in line}
    assert {"service.running", "numba.np.arraymath"} <= imported
    # Migrations are for a store of an earlier version; the others are for learning.
    assert not imported & {"alembic", "scipy.linalg", "pandas", "pyarrow", "training.fit"}


def test_what_keeps_it_from_serving_is_one_sentence(model: Path, tmp_path: Path) -> None:
    data = ("--data", tmp_path / "data")
    assert "--role send" in refused("serve", "--model", model, *data, "--host", "0.0.0.0")
    assert "nowhere" in refused("serve", "--model", tmp_path / "nowhere", *data)
    with socket.create_server(("127.0.0.1", 0)) as taken:
        port = str(taken.getsockname()[1])
        sentence = refused("serve", "--model", model, *data, "--port", port)
    assert f"cannot listen on 127.0.0.1 port {port}" in sentence
    assert "choose another with --port" in sentence
    config = tmp_path / "service.toml"
    config.write_text("[server]\nprot = 3\n", encoding="utf-8")
    assert "is port meant?" in refused("serve", "--config", config)
    sentence = refused("serve", "--model", model, *data, "--port", "99999")
    assert "option --port: server.port = 99999 cannot be used: a whole number from 0 to" in sentence
