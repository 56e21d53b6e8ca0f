"""Numbers for Prometheus: what they count, and that its own programs find nothing to say."""

from __future__ import annotations

import json
import math
import shutil
import socket
import subprocess
import time
from collections.abc import Iterator
from pathlib import Path

import httpx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.metrics import Histogram
from tests.conftest import need_program
from tests.service_fakes import write_fake
from tests.service_http import Api, record, running, serving


@pytest.fixture
def api(tmp_path: Path) -> Iterator[Api]:
    with running(tmp_path) as found:
        yield found


def value(api: Api, name: str, **labels: str) -> float | None:
    return api.service.metrics.registry.get_sample_value(f"oddbranch_{name}", labels)


def test_records_are_counted_by_what_became_of_them(api: Api) -> None:
    api.post([record(5), record(6), record(6), record(6, flow=1.0), record(1), record(900), 3])
    counts = {
        outcome: value(api, "records_total", outcome=outcome)
        for outcome in ("stored", "known", "conflict", "late", "ahead", "refused")
    }
    assert counts == {"stored": 2, "known": 1, "conflict": 1, "late": 1, "ahead": 1, "refused": 1}


def test_records_over_a_level_are_counted_by_kind_source_and_suspect(api: Api) -> None:
    api.post([record(i, "a", flow=390.0) for i in range(3)] + [record(9, "b")])
    assert value(api, "records_over_level_total", kind="record") == 3
    assert value(api, "source_records_over_level_total", source="a") == 3
    assert value(api, "source_records_over_level_total", source="b") == 0
    assert value(api, "suspects_total", channel="flow") == 3


def test_records_with_too_few_readings_are_counted_beside_the_outcomes(api: Api) -> None:
    empty = dict.fromkeys(("flow", "power", "pump", "speed"))
    api.post([record(0), record(1, **empty)])
    assert value(api, "records_total", outcome="stored") == 2
    assert value(api, "records_not_judged_total") == 1


def test_what_can_be_counted_is_shown_from_the_start(api: Api) -> None:
    """A rule sees the first one only where there was a zero before."""
    for outcome in ("stored", "late", "ahead", "known", "conflict", "no_room", "refused"):
        assert value(api, "records_total", outcome=outcome) == 0
    for kind in ("record", "sustained"):
        assert value(api, "records_over_level_total", kind=kind) == 0
    for channel in ("flow", "power", "pump", "speed"):
        assert value(api, "suspects_total", channel=channel) == 0
        assert value(api, "missing_readings_total", channel=channel) == 0
    for kind in ("scored", "stuck", "absent", "span", "silent", "clock"):
        assert value(api, "alerts", state="raised", kind=kind) == 0
        assert value(api, "alerts_quiet", kind=kind) == 0
    for outcome in ("taken", "refused"):
        assert value(api, "model_reloads_total", outcome=outcome) == 0


def test_a_model_that_is_refused_shows_until_another_is_taken(tmp_path: Path) -> None:
    with running(tmp_path, model={"reload_s": 0.1}) as api:
        assert value(api, "model_refused") == 0
        write_fake(tmp_path / "model", "broken")
        api.call(api.service.models.look())
        assert value(api, "model_refused") == 1
        write_fake(tmp_path / "model", "fedcba9876543210")
        api.call(api.service.models.look())
        assert value(api, "model_refused") == 0


def test_missing_readings_are_counted_by_channel(api: Api) -> None:
    api.post([record(0, speed=None, flow=900.0), record(1)])
    assert value(api, "readings_total") == 8
    assert value(api, "missing_readings_total", channel="speed") == 1
    assert value(api, "missing_readings_total", channel="flow") == 1


def test_excess_is_a_classic_histogram(api: Api) -> None:
    api.post([record(i, flow=flow) for i, flow in enumerate((0.0, 30.0, 130.0, 360.0))])
    assert value(api, "excess_nats_count") == 4
    assert value(api, "excess_nats_sum") == pytest.approx(2 + 12 + 35)
    assert value(api, "excess_nats_bucket", le="2.0") == 2
    assert value(api, "excess_nats_bucket", le="15.0") == 3
    assert value(api, "excess_nats_bucket", le="+Inf") == 4


def test_a_source_shows_its_last_record_and_sustained(api: Api) -> None:
    sustained = api.post(record(3, "a")).json()["sustained"]
    api.post([record(1, "a"), record(990, "a")])
    assert value(api, "source_last_record_timestamp_seconds", source="a") == 1764561600 + 180
    assert value(api, "source_sustained_nats", source="a") == pytest.approx(sustained)


def test_what_a_source_shows_survives_a_restart(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        api.post(record(3, "a", flow=390.0))
    with running(tmp_path) as api:
        assert value(api, "source_last_record_timestamp_seconds", source="a") == 1764561600 + 180
        assert value(api, "source_records_over_level_total", source="a") == 1


def test_many_sources_are_summed(tmp_path: Path) -> None:
    with running(tmp_path, metrics={"n_sources": 3}) as api:
        api.post([record(i, f"s{i}", flow=390.0) for i in range(5)])
        assert value(api, "source_records_over_level_total", source="all") == 5
        assert value(api, "source_records_over_level_total", source="s0") is None
        assert value(api, "source_quiet", source="s0", kind="scored") is None
        assert value(api, "sources") == 5


def test_sources_are_no_label_where_that_is_switched_off(tmp_path: Path) -> None:
    with running(tmp_path, metrics={"per_source": False}) as api:
        api.post(record(0, "a"))
        assert value(api, "source_sustained_nats", source="a") is None
        assert value(api, "source_quiet", source="a", kind="scored") is None


def test_requests_are_counted_by_route_and_unknown_paths_are_one(api: Api) -> None:
    api.post(record())
    for i in range(3):
        api.get(f"/nothing/{i}")
    assert value(api, "requests_total", route="/records", method="POST", status="200") == 1
    assert value(api, "requests_total", route="other", method="GET", status="404") == 3
    assert value(api, "request_seconds_count", route="/records") == 1
    assert value(api, "commit_seconds_count") == 1
    assert value(api, "batch_records_sum") == 1


def test_the_model_and_the_store_are_shown(api: Api, tmp_path: Path) -> None:
    assert value(api, "model_info", model="0123456789abcdef") == 1
    assert value(api, "level_nats", kind="record") == 30
    assert value(api, "alarm_budget_alerts_per_day") == 2
    published = value(api, "model_published_timestamp_seconds")
    assert published == pytest.approx((tmp_path / "model" / "model.json").stat().st_mtime)
    size, free, queue = (
        value(api, n) for n in ("store_size_bytes", "store_free_bytes", "queue_records")
    )
    assert size is not None
    assert free is not None
    assert size > 8192
    assert free > 0
    assert queue == 0


@given(st.lists(st.floats(-1e3, 1e3), max_size=40))
def test_many_at_once_are_counted_like_one_by_one(values: list[float]) -> None:
    edges = (-5.0, 0.0, 2.0, 100.0)
    together, apart = Histogram(edges), Histogram(edges)
    together.add_many(np.array(values))
    for one in values:
        apart.add(one)
    assert together.counts == apart.counts
    assert math.isclose(together.sum, apart.sum, rel_tol=1e-9, abs_tol=1e-9)
    at_most_two = sum(1 for one in values if one <= 2.0)
    assert dict(apart.buckets())["2.0"] == at_most_two


def test_the_checker_finds_nothing_to_say(api: Api) -> None:
    promtool = need_program("promtool")
    api.post([record(i, flow=390.0, speed=None) for i in range(3)] + [record(0), 3])
    api.get("/nothing")
    text = api.get("/metrics")
    assert text.headers["content-type"] == "text/plain; version=0.0.4; charset=utf-8"
    done = subprocess.run(
        [promtool, "check", "metrics"], input=text.content, capture_output=True, check=False
    )
    assert (done.returncode, done.stdout, done.stderr) == (0, b"", b"")


def test_a_real_prometheus_scrapes_it(tmp_path: Path) -> None:
    prometheus = need_program("prometheus")
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    (tmp_path / "served").mkdir()
    with serving(tmp_path / "served") as server:
        batch = [record(i / 6, flow=390.0) for i in range(5)]
        assert httpx.post(f"{server.url}/records", json=batch).status_code == 200
        config = {
            "global": {"scrape_interval": "200ms", "scrape_timeout": "200ms"},
            "scrape_configs": [
                {
                    "job_name": "oddbranch",
                    "static_configs": [{"targets": [f"127.0.0.1:{server.port}"]}],
                }
            ],
        }
        path = tmp_path / "prometheus.yml"
        # Every JSON text is YAML too.
        path.write_text(json.dumps(config), encoding="utf-8")
        process = subprocess.Popen(
            [prometheus, f"--config.file={path}", f"--storage.tsdb.path={tmp_path / 'tsdb'}",
             f"--web.listen-address=127.0.0.1:{port}", "--log.level=error"],
            stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
        )  # fmt: skip
        try:
            queries = {
                "up": 1.0,
                "sum(oddbranch_source_records_over_level_total)": 5.0,
                'oddbranch_excess_nats_bucket{le="+Inf"}': 5.0,
                "oddbranch_source_sustained_nats > bool 0": 1.0,
            }
            found = _ask(f"http://127.0.0.1:{port}/api/v1/query", queries)
        finally:
            process.kill()
            process.wait(10)
            shutil.rmtree(tmp_path / "tsdb", ignore_errors=True)
    assert found == queries


def _ask(url: str, queries: dict[str, float]) -> dict[str, float]:
    """Ask until every query has an answer, or some seconds have passed."""
    found: dict[str, float] = {}
    end = time.monotonic() + 30
    while len(found) < len(queries) and time.monotonic() < end:
        time.sleep(0.2)
        for query in queries:
            try:
                answer = httpx.get(url, params={"query": query}, timeout=2).json()
            except (httpx.TransportError, ValueError):
                continue
            for series in answer.get("data", {}).get("result", []):
                found[query] = float(series["value"][1])
    return found
