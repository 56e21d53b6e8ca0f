"""What the towns draw and what the weather does, by hour, weekday and season.

All of it is a function of time and seed alone, so that any stretch of time can be
computed without the one before it. Random wander on top belongs to the station's run.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from training.plant.utility import SEED_WEATHER

HOUR_S: Final = 3600.0
DAY_S: Final = 86400.0
YEAR_S: Final = 365.25 * DAY_S
# 1970-01-01 was a Thursday; the week below starts on Monday.
_EPOCH_HOUR_OF_WEEK: Final = 72.0

# Shares of the daily mean at each full hour: two peaks on working days, a late and
# broad one at weekends. Invented in the usual shape of household water.
_WORKDAY: Final = (
    "0.52 0.46 0.44 0.45 0.55 0.82 1.22 1.46 1.40 1.20 1.08 1.04 "
    "1.06 1.02 0.98 0.98 1.04 1.20 1.38 1.40 1.28 1.10 0.88 0.66"
)
_WEEKEND: Final = (
    "0.60 0.52 0.47 0.46 0.48 0.58 0.78 1.06 1.32 1.44 1.40 1.30 "
    "1.22 1.16 1.10 1.06 1.08 1.16 1.26 1.28 1.20 1.06 0.90 0.72"
)


def _week() -> NDArray[np.float64]:
    workday = np.array(_WORKDAY.split(), dtype=np.float64)
    weekend = np.array(_WEEKEND.split(), dtype=np.float64)
    # Weekends ask for four percent more in all.
    week = np.concatenate([workday / workday.mean()] * 5 + [1.04 * weekend / weekend.mean()] * 2)
    return np.asarray(week / week.mean(), dtype=np.float64)


_WEEK: Final = _week()


@dataclass(frozen=True, slots=True)
class Weather:
    """A utility's weather: a sum of slow waves of drawn phase, about one in spread.

    period_s, phase: (n_waves,) seconds and radians.
    """

    period_s: NDArray[np.float64]
    phase: NDArray[np.float64]

    def at(self, times_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the weather, (n,), without unit, positive when warm."""
        waves = np.cos(2.0 * np.pi * times_s[:, None] / self.period_s + self.phase)
        total: NDArray[np.float64] = waves.sum(axis=1) * np.sqrt(2.0 / len(self.period_s))
        return total


def draw_weather(seed: int) -> Weather:
    """Return a seed's weather, the same for all stations: waves of 2 to 24 days."""
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(SEED_WEATHER,)))
    period_s = DAY_S * np.geomspace(2.0, 24.0, 8) * rng.uniform(0.9, 1.1, 8)
    return Weather(period_s, rng.uniform(0.0, 2.0 * np.pi, 8))


def hourly_share(times_s: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return demand by hour and weekday as a share of the weekly mean, (n,).

    times_s: UTC seconds since 1970; the utility keeps UTC all year.
    """
    hour_of_week = (times_s / HOUR_S + _EPOCH_HOUR_OF_WEEK) % 168.0
    share: NDArray[np.float64] = np.interp(hour_of_week, np.arange(168.0), _WEEK, period=168.0)
    return share


def season(times_s: NDArray[np.float64], peak_day: float) -> NDArray[np.float64]:
    """Return a yearly wave, (n,), +1 on `peak_day`, counted from 1 January."""
    return np.cos(2.0 * np.pi * (times_s / YEAR_S - peak_day / 365.25))


def day_wave(times_s: NDArray[np.float64], peak_hour: float) -> NDArray[np.float64]:
    """Return a daily wave, (n,), +1 at `peak_hour`."""
    return np.cos(2.0 * np.pi * (times_s / DAY_S - peak_hour / 24.0))


def seasonal_demand(
    times_s: NDArray[np.float64], weather: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return demand by season and weather as a share of the yearly mean, (n,).

    Summer asks for a tenth more; a warm spell adds, half as much in the cold half.
    """
    summer = season(times_s, 200.0)
    return (1.0 + 0.10 * summer) * (1.0 + 0.015 * weather * (1.0 + 0.5 * summer))


def outdoor_c(times_s: NDArray[np.float64], weather: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return outdoor temperature in degC, (n,)."""
    return 10.0 + 8.0 * season(times_s, 205.0) + 2.5 * weather + 3.0 * day_wave(times_s, 15.0)


def water_c(times_s: NDArray[np.float64], weather: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the mains water's temperature in degC, (n,): late, flat seasons."""
    return 11.0 + 5.5 * season(times_s, 230.0) + 0.4 * weather + 0.1 * day_wave(times_s, 18.0)
