"""The demo's plant: quiet history, live days with incidents, requests in order."""

from __future__ import annotations

import time

import numpy as np
import pytest

from training.demo_plant import (
    N_STATIONS,
    POST_HOURS,
    RECOVERY_NS,
    START,
    STEP_S,
    Plant,
    joined,
    quiet_station,
    simulate_plant,
)
from training.judging import Call

BORDER_NS = int(START.timestamp()) * 10**9 + 86_400 * 10**9


@pytest.fixture(scope="module")
def plant() -> Plant:
    """Return a day of history and a live day."""
    return simulate_plant(7, 1, 1)


def test_history_is_without_incidents_and_live_days_are_not(plant: Plant) -> None:
    assert len(plant.history) == len(plant.live) == N_STATIONS
    assert plant.incidents
    assert all(one.start_ns >= BORDER_NS for one in plant.incidents)
    assert all(chunk.times_ns.max() < BORDER_NS for chunk in plant.history)
    assert list(plant.incidents) == sorted(plant.incidents, key=lambda i: (i.source, i.start_ns))


def test_the_live_days_are_past_on_any_clock() -> None:
    # A record ahead of the service's clock would leave the standing alone.
    assert START.timestamp() + 40 * 86_400 < time.time()


def test_requests_hold_every_live_record_in_the_order_of_time(plant: Plant) -> None:
    requests = list(plant.requests())
    times = [record["time"] for records in requests for record in records]
    assert len(times) == plant.n_live
    assert times == sorted(times)
    assert max(map(len, requests)) <= N_STATIONS * POST_HOURS * 3600 // STEP_S


def test_the_station_of_the_drill_lives_the_same_days_without_incidents(plant: Plant) -> None:
    (quiet,) = quiet_station(7, 1, 1)
    live = next(chunk for chunk in plant.live if chunk.source == quiet.source)
    own = [one for one in plant.incidents if one.source == quiet.source]
    assert quiet.times_ns[0] >= BORDER_NS
    there = np.isin(live.times_ns, quiet.times_ns)
    same = np.isin(quiet.times_ns, live.times_ns)
    before = live.times_ns[there] < min(one.start_ns for one in own)
    assert before.any()
    np.testing.assert_array_equal(live.values[there][before], quiet.values[same][before])
    assert not np.array_equal(live.values[there], quiet.values[same], equal_nan=True)


def test_joining_keeps_every_record_of_a_source_in_order() -> None:
    live = simulate_plant(7, 1, 2).live
    records = joined(live)
    assert len(records) == N_STATIONS
    for times_ns, values in records.values():
        assert (np.diff(times_ns) > 0).all()
        assert len(times_ns) == len(values)
    n_records = sum(len(times_ns) for times_ns, _ in records.values())
    assert n_records == sum(len(chunk.times_ns) for chunk in live)


def test_every_method_is_judged_on_the_live_days_and_their_incidents(plant: Plant) -> None:
    judge = plant.judge()
    one = plant.incidents[0]
    caught = judge.verdict([Call(one.source, one.start_ns, one.end_ns)])
    assert len(caught.caught) == 1
    assert len(caught.findings) == len(plant.incidents)
    assert caught.source_days == pytest.approx(N_STATIONS, abs=0.05)
    # Within the recovery an alert is neither a catch nor false.
    after = judge.verdict(
        [Call(one.source, one.end_ns + RECOVERY_NS - 1, one.end_ns + RECOVERY_NS)]
    )
    assert (len(after.caught), len(after.false)) == (0, 0)
