"""Demand by hour, weekday and season, and the weather."""

from __future__ import annotations

from datetime import UTC, datetime

import numpy as np
import pytest
from numpy.typing import NDArray

from training.plant import demand as dm


def seconds(*when: int) -> NDArray[np.float64]:
    return np.array([datetime(*when, tzinfo=UTC).timestamp()])  # type: ignore[arg-type, misc]


def test_a_week_of_demand_has_the_mean_one() -> None:
    hours = seconds(2026, 3, 2)[0] + 3600.0 * np.arange(168)
    assert dm.hourly_share(hours).mean() == pytest.approx(1.0)


def test_working_days_wake_early_and_weekends_late() -> None:
    # 2026-03-04 was a Wednesday, 2026-03-07 a Saturday.
    working, free = dm.hourly_share(seconds(2026, 3, 4, 7)), dm.hourly_share(seconds(2026, 3, 7, 7))
    assert working > 1.2 * free
    night = dm.hourly_share(seconds(2026, 3, 4, 2))
    assert night < 0.5 * working


def test_demand_runs_smoothly_across_midnight_and_the_week() -> None:
    minutes = seconds(2026, 3, 1)[0] + 60.0 * np.arange(15 * 1440)
    assert np.abs(np.diff(dm.hourly_share(minutes))).max() < 0.01


def test_summer_asks_for_more_than_winter() -> None:
    calm = np.zeros(1)
    july = dm.seasonal_demand(seconds(2026, 7, 20), calm)
    january = dm.seasonal_demand(seconds(2026, 1, 18), calm)
    assert july == pytest.approx(1.10, abs=0.005)
    assert january == pytest.approx(0.90, abs=0.005)


def test_water_follows_the_seasons_later_and_flatter_than_the_air() -> None:
    days = seconds(2026, 1, 1, 12)[0] + dm.DAY_S * np.arange(365)
    calm = np.zeros(365)
    air, water = dm.outdoor_c(days, calm), dm.water_c(days, calm)
    assert np.ptp(water) < np.ptp(air)
    assert water.argmax() > air.argmax()


def test_weather_is_the_same_for_a_seed_and_about_one_in_spread() -> None:
    hours = seconds(2026, 1, 1)[0] + 3600.0 * np.arange(8760)
    once, again = dm.draw_weather(5).at(hours), dm.draw_weather(5).at(hours)
    assert np.array_equal(once, again)
    assert not np.array_equal(once, dm.draw_weather(6).at(hours))
    # The waves are eight, each of amplitude one half.
    assert once.std() == pytest.approx(1.0, abs=0.15)
