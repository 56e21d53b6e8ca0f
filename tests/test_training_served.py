"""A service in a second process, over a stand-in model, and what happens when it fails."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from tests.conftest import ROOT
from tests.service_fakes import write_fake
from tests.service_http import record
from training.served import Served, ServiceFailed, serve

# What the demo runs is `-m oddbranch serve`; the stand-in needs no learned model.
STAND_IN = ("-c", "import sys, pathlib as p, tests.service_server as s; s.main(p.Path('.'), [])")


@pytest.fixture
def find_tests(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let a process that starts elsewhere import the tests."""
    monkeypatch.setenv("PYTHONPATH", str(ROOT))


@pytest.mark.usefixtures("find_tests")
def test_records_go_through_the_real_endpoint_and_the_process_ends_with_the_block(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    # Settings of whoever runs the demo stay out of it.
    monkeypatch.setenv("ODDBRANCH_SERVER__PORT", "no number")
    write_fake(tmp_path / "model")
    with serve(tmp_path, (), STAND_IN) as served:
        assert served.url.startswith("http://127.0.0.1:")
        assert served.process.pid != os.getpid()
        answers = served.post([record(0), record(1)])
        assert [a["source"] for a in answers] == ["mill-lane-2", "mill-lane-2"]
        assert b"oddbranch_records_total" in served.get("/metrics")
        with pytest.raises(ServiceFailed, match="a record was refused.*has no offset"):
            served.post([record(2) | {"time": "2025-12-01T04:00:00"}])
        with pytest.raises(ServiceFailed, match="/nowhere: answered 404"):
            served.get("/nowhere")
    assert served.process.poll() is not None
    with pytest.raises(ServiceFailed, match="ConnectionRefused"):
        served.get("/health/live")


def test_a_service_that_ends_at_once_is_told_in_its_own_words(tmp_path: Path) -> None:
    code = "import sys; sys.exit('no model there')"
    with pytest.raises(ServiceFailed, match="ended with 1; it said: no model there"):
        enter(tmp_path, code)


def test_a_service_that_listens_and_dies_is_not_waited_for(tmp_path: Path) -> None:
    code = "print('Serving on http://127.0.0.1:9 (stop with Ctrl-C)', flush=True)"
    with pytest.raises(ServiceFailed, match="does not get ready"):
        enter(tmp_path, code)


def enter(folder: Path, code: str) -> Served:
    """Start a program in place of the service."""
    with serve(folder, (), ("-c", code)) as served:
        return served
