"""Many trials at once are the online path one by one, from where a source really stood."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

from scoring.alerts import ABSENT, SCORED, SPAN, STUCK
from tests.pump import N_LEARNED, SOURCES, pump_model, pump_times, pump_values
from tests.spools import spool_of
from training.planting import OFFSET, plant, stick
from training.trials import BadTrials, OnlinePath, Trials, find_trials

N_ROWS = 80
KINDS = (SCORED, STUCK, ABSENT, SPAN)


@cache
def the_path() -> OnlinePath:
    return OnlinePath(pump_model())


@cache
def some_trials() -> tuple[Trials, ...]:
    values = {s: pump_values(s, 1500, N_LEARNED) for s in SOURCES}
    values[SOURCES[0]][::50, 2] = np.nan
    with spool_of(values) as spool:
        return tuple(find_trials(the_path(), spool, 20, N_ROWS, np.random.default_rng(1)))


@pytest.mark.parametrize(
    ("channel", "size"), [(1, 4.0), (1, 15.0), (2, 200.0), (3, 0.05), (4, 3.0)]
)
def test_all_at_once_is_the_online_path_one_by_one(channel: int, size: float) -> None:
    for trials in some_trials():
        n = len(trials)
        direction = np.resize([1.0, -1.0], n)
        drawn = np.zeros((n, N_ROWS))
        values = plant(OFFSET, trials.values, channel, size, direction, drawn, 0.0)
        found = the_path().first_alerts(trials, values).tolist()
        one_by_one = [the_path().watch(trials, k, values[k], KINDS)[0] for k in range(n)]
        assert found == one_by_one


def test_a_stuck_channel_is_found_as_the_online_path_finds_it() -> None:
    for trials in some_trials():
        values = stick(trials.values, trials.before, 1)
        found = the_path().first_alerts(trials, values)
        assert (found >= 0).any()
        for k in np.flatnonzero(found >= 0).tolist():
            row, alert = the_path().watch(trials, k, values[k], KINDS)
            assert row == found[k]
            assert alert is not None


def test_normal_records_raise_nothing_by_themselves() -> None:
    trials = some_trials()
    assert sum(len(one) for one in trials) == 20
    assert {one.source for one in trials} == set(SOURCES)
    for one in trials:
        assert (the_path().first_alerts(one, one.values) == -1).all()


def test_a_trial_starts_from_where_the_source_stood() -> None:
    for trials in some_trials():
        for k in range(len(trials)):
            assert trials.standings[k].time_ns == trials.times_ns[k, 0] - 60 * 10**9
            assert trials.alerts[k].last_ns == trials.standings[k].time_ns
            assert not trials.alerts[k].open


def test_records_that_are_too_few_are_refused() -> None:
    with (
        spool_of({SOURCES[0]: pump_values(SOURCES[0], 100, N_LEARNED)}) as spool,
        pytest.raises(BadTrials, match="only 0 quiet stretches of .* records.*--within"),
    ):
        find_trials(the_path(), spool, 20, N_ROWS, np.random.default_rng(1))


def test_a_gap_in_time_is_no_stretch_of_normal_records() -> None:
    n = 400
    times_ns = pump_times(n, N_LEARNED)
    assert np.diff(times_ns).max() == 60 * 10**9
    # Hourly records: every two neighbours are far apart for a model of minutes.
    with (
        spool_of({SOURCES[0]: pump_values(SOURCES[0], n, N_LEARNED)}, step_s=3600.0) as spool,
        pytest.raises(BadTrials, match="only 0 quiet stretches"),
    ):
        find_trials(the_path(), spool, 20, N_ROWS, np.random.default_rng(1))
