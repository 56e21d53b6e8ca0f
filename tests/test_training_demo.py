"""The demo's parts, and (soak) the demo itself."""

from __future__ import annotations

import math
import re
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from scoring.channels import load_channels
from training.channel_toml import ProposedChannel, write_channels
from training.demo import (
    FIGURE_SEED,
    LIVE_DAYS,
    N_STATIONS,
    RECOVERY_NS,
    START,
    add_data_sheets,
    call_of,
    joined,
    judge_all,
    over_level_of,
    post_live,
    simulate_plant,
    truth_of,
)
from training.history.times import parse_time
from training.served import Served
from training.stretches import OverLevel, Stretch

ANSWER = {
    "source": "mill-lane",
    "time": "2024-07-27T04:00:00Z",
    "alert": "record",
    "suspect": {
        "channel": "flow",
        "surprise": 17.0,
        "reading": 241.3,
        "expected": {"low": 268.0, "high": None, "best": 274.0},
    },
}


def test_an_answer_without_an_alert_is_not_over_a_level() -> None:
    assert over_level_of(ANSWER | {"alert": None}) is None


def test_an_answer_over_a_level_keeps_its_suspect_and_what_it_should_have_read() -> None:
    over = over_level_of(ANSWER)
    assert over is not None
    assert (over.source, over.kind, over.suspect, over.weight) == (
        "mill-lane",
        "record",
        "flow",
        17,
    )
    assert (over.reading, over.low, over.high) == (241.3, 268.0, math.inf)
    assert over.time_ns == parse_time("2024-07-27T04:00:00Z")


def test_a_suspect_state_is_told_with_its_likeliest_word() -> None:
    suspect = {
        "channel": "pump_1",
        "surprise": 9.0,
        "reading": "stopped",
        "expected": {"words": {"stopped": 0.1, "running": 0.9}},
    }
    over = over_level_of(ANSWER | {"suspect": suspect})
    assert over is not None
    assert (over.suspect, over.word, over.word_expected) == ("pump_1", "stopped", "running")


def test_an_answer_with_no_suspect_is_over_its_level_all_the_same() -> None:
    over = over_level_of(ANSWER | {"suspect": None})
    assert over is not None
    assert over.suspect == ""


def test_data_sheets_add_units_and_spans_to_a_proposed_table(tmp_path: Path) -> None:
    path = tmp_path / "channels.toml"
    proposed = [ProposedChannel("flow"), ProposedChannel("pump_1", words=("running", "stopped"))]
    path.write_text(write_channels(proposed, 60.0), encoding="utf-8")
    add_data_sheets(path)
    flow, pump = load_channels(path).instruments
    assert (flow.unit, flow.span) == ("m3/h", (0.0, 600.0))
    assert (pump.unit, pump.words) == ("", ("running", "stopped"))


def test_history_is_without_incidents_and_live_days_are_not() -> None:
    plant = simulate_plant(7, 1, 1)
    border_ns = int(START.timestamp()) * 10**9 + 86_400 * 10**9
    assert len(plant.history) == len(plant.live) == N_STATIONS
    assert plant.incidents
    assert all(i.start_ns >= border_ns for i in plant.incidents)
    assert all(chunk.times_ns.max() < border_ns for chunk in plant.history)


def test_the_live_days_are_past_on_any_clock() -> None:
    # A record ahead of the service's clock would leave the standing alone.
    assert START.timestamp() + 40 * 86_400 < time.time()


def test_records_are_posted_in_the_order_of_time_and_stretches_told_as_they_end() -> None:
    plant = simulate_plant(7, 1, 1)
    service = LikeAService()
    told = list(post_live(service, plant))
    n_records = sum(len(chunk.times_ns) for chunk in plant.live)
    assert len(service.times) == n_records
    assert service.times == sorted(service.times)
    assert max(service.batches) <= N_STATIONS * 120
    # The stand-in is over its level in the first minute of every hour.
    assert len(told) == pytest.approx(24 * N_STATIONS, abs=N_STATIONS)
    assert len({stretch.source for stretch in told}) == N_STATIONS


class LikeAService(Served):
    """Answers as the service does, over its level in the first minute of every hour."""

    def __init__(self) -> None:
        self.times: list[str] = []
        self.batches: list[int] = []

    def post(self, records):  # type: ignore[no-untyped-def]  # as in Served
        self.batches.append(len(records))
        self.times += [record["time"] for record in records]
        return [
            ANSWER | {"source": r["source"], "time": r["time"]}
            if r["time"].endswith(":00:00Z")
            else ANSWER | {"alert": None}
            for r in records
        ]


def test_joining_keeps_every_record_of_a_source_in_order() -> None:
    plant = simulate_plant(7, 1, 2)
    records = joined(plant.live)
    assert len(records) == N_STATIONS
    for times_ns, values in records.values():
        assert (np.diff(times_ns) > 0).all()
        assert len(times_ns) == len(values)
    assert sum(len(times_ns) for times_ns, _ in records.values()) == sum(
        len(chunk.times_ns) for chunk in plant.live
    )


def test_a_stretch_is_judged_by_its_start_and_its_suspects_in_order() -> None:
    over = [
        OverLevel("mill-lane", 5, "record", "power", 2.0),
        OverLevel("mill-lane", 9, "sustained", "flow", 3.0),
    ]
    call = call_of(Stretch("mill-lane", tuple(over)))
    assert (call.raised_ns, call.cleared_ns, call.at_first) == (5, 9, "power")
    assert (call.suspects, call.kind) == (("flow", "power"), "sustained")


def test_methods_are_judged_on_the_same_live_days() -> None:
    plant = simulate_plant(7, 1, 1)
    incident = plant.incidents[0]
    at_ns = (incident.start_ns + incident.end_ns) // 2
    inside = Stretch(incident.source, (OverLevel(incident.source, at_ns, "record", "flow"),))
    judged = judge_all(plant, {"one": [inside], "none": []})
    assert [len(one.verdict.caught) for one in judged.values()] == [1, 0]
    assert {len(one.verdict.findings) for one in judged.values()} == {len(plant.incidents)}
    assert judged["one"].quiet_share == judged["none"].quiet_share == 0.0


def test_a_method_over_its_level_all_day_is_over_it_in_quiet_time() -> None:
    plant = simulate_plant(7, 1, 1)
    always = [
        Stretch(chunk.source, tuple(OverLevel(chunk.source, int(t)) for t in chunk.times_ns))
        for chunk in plant.live
    ]
    judged = judge_all(plant, {"always": always})["always"]
    # Silent lines leave some grid points without a record.
    assert judged.quiet_share == pytest.approx(1.0, abs=0.05)


def test_the_truth_of_a_stretch_is_the_incident_it_touches() -> None:
    plant = simulate_plant(7, 1, 1)
    incident = plant.incidents[0]
    for at_ns, touches in (
        (incident.start_ns, True),
        (incident.end_ns + RECOVERY_NS - 1, True),
        (incident.start_ns - 1, False),
    ):
        stretch = Stretch(incident.source, (OverLevel(incident.source, at_ns),))
        assert (truth_of(stretch, [incident]) is incident) == touches


def test_figures_are_published_with_a_seed_kept_for_them() -> None:
    assert FIGURE_SEED >= 9000


def table_headings(text: str) -> list[str]:
    """Return the lines of a text that are headings of the demo's two tables."""
    return [line for line in text.splitlines() if re.match(r"(kind +spreads| +oddbranch) +", line)]


@pytest.mark.soak
def test_the_demo_shows_the_whole_job_and_leaves_nothing_behind(tmp_path: Path) -> None:
    words = [sys.executable, "-m", "oddbranch", "demo", "--once", "--seed", "7"]
    done = subprocess.run(
        words, capture_output=True, text=True, check=False, cwd=tmp_path, timeout=600
    )
    assert done.returncode == 0, done.stderr
    assert f"{LIVE_DAYS} live days" in done.stdout
    assert "$ oddbranch serve" in done.stdout
    assert "truth    " in done.stdout
    assert len(table_headings(done.stdout)) == 2
    assert not list(tmp_path.iterdir())
