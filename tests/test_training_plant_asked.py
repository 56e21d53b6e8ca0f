"""What is asked of a station: turns of duty, demand, supply."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime

import numpy as np
import pytest

from training.plant import columns as col
from training.plant.asked import OVERLAP_S, ask, duty_at
from training.plant.demand import draw_weather
from training.plant.utility import build_stations

ORIGIN_S = datetime(2026, 3, 2, tzinfo=UTC).timestamp()
STATION = build_stations(3, 1)[0]


def test_pumps_take_turns_of_equal_length() -> None:
    station = replace(STATION, duty_period_h=8.0, duty_offset_h=3.0)
    hours = np.arange(0.0, 48.0) + 0.5
    duty, since_s = duty_at(station, ORIGIN_S, ORIGIN_S + 3600.0 * hours)
    changes = np.flatnonzero(np.diff(duty))
    assert list(changes) == [2, 10, 18, 26, 34, 42]
    assert since_s[3] == pytest.approx(1800.0)
    assert duty.mean() == pytest.approx(0.5, abs=0.1)


def test_both_pumps_run_only_just_after_a_change() -> None:
    times_s = ORIGIN_S + 10.0 * np.arange(8640.0 * 4)
    asked = ask(STATION, draw_weather(3), ORIGIN_S, times_s)
    changes = np.flatnonzero(np.diff(asked[:, col.ASKED_DUTY])) + 1
    overlap = asked[:, col.ASKED_OVERLAP]
    assert len(changes) >= 3
    assert np.all(overlap[changes] == 1)
    n_overlap = len(changes) * OVERLAP_S / 10.0
    assert overlap.sum() == pytest.approx(n_overlap, abs=OVERLAP_S / 10.0)


def test_demand_has_the_stations_mean_over_a_year() -> None:
    times_s = ORIGIN_S + 3600.0 * np.arange(8766.0)
    asked = ask(STATION, draw_weather(3), ORIGIN_S, times_s)
    mean = STATION.physics.demand_m3h
    assert asked[:, col.ASKED_DEMAND].mean() == pytest.approx(mean, rel=0.01)
    assert asked[:, col.ASKED_FORECAST].mean() == pytest.approx(mean, rel=0.01)


def test_the_suction_main_sags_when_the_town_draws_most() -> None:
    times_s = ORIGIN_S + 600.0 * np.arange(144.0)
    asked = ask(STATION, draw_weather(3), ORIGIN_S, times_s)
    assert asked[:, col.ASKED_DEMAND].argmax() == asked[:, col.ASKED_SUPPLY].argmin()


def test_a_stretch_of_time_needs_nothing_before_it() -> None:
    times_s = ORIGIN_S + 60.0 * np.arange(3000.0)
    whole = ask(STATION, draw_weather(3), ORIGIN_S, times_s)
    part = ask(STATION, draw_weather(3), ORIGIN_S, times_s[1000:1500])
    assert np.array_equal(whole[1000:1500], part)
