"""Groups: what waits together, and for what."""

from __future__ import annotations

import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest

from tests.service_http import Api, record, running


def n_commits_of_two(api: Api, minute: int) -> int:
    """Post a record and, while it may wait, another; return in how many commits they were."""
    before = sum(api.service.metrics.commit_seconds.counts)
    with ThreadPoolExecutor(2) as threads:
        first = threads.submit(api.post, record(minute, "a"))
        time.sleep(0.1)
        second = threads.submit(api.post, record(minute, "b"))
        assert first.result().status_code == second.result().status_code == 200
    return sum(api.service.metrics.commit_seconds.counts) - before


def test_a_group_waits_for_requests_that_are_on_their_way(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("service.writer.GATHER_S", 0.5)
    with running(tmp_path) as api:
        api.service.writer.n_requests = lambda: 2
        assert n_commits_of_two(api, 1) == 1
        # Nobody else is there: a record alone is stored at once.
        api.service.writer.n_requests = lambda: 1
        started = time.perf_counter()
        assert n_commits_of_two(api, 2) == 2
        assert time.perf_counter() - started < 0.5


def test_the_front_says_how_many_requests_there_are(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        seen: list[int] = []
        ask = api.service.writer.n_requests

        def note() -> int:
            seen.append(ask())
            return seen[-1]

        api.service.writer.n_requests = note
        assert api.post(record(0)).status_code == 200
        assert seen == [1]
        assert ask() == 0
