"""What the world asks of one station over a stretch of time: demand, supply, duty.

Everything here is a function of time, station and weather alone.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from training.plant import columns as col
from training.plant import demand as dm
from training.plant.station import FORECAST_SHARE
from training.plant.utility import Station

# Both pumps run this long when the duty changes, so that the town notices nothing.
OVERLAP_S: Final = 120.0


def duty_at(
    station: Station, origin_s: float, times_s: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return which pump has the duty, 0 or 1, and the seconds since it took over, both (n,).

    origin_s: time of the run's first record, from which the turns are counted.
    """
    turns = (times_s - origin_s) / 3600.0 - station.duty_offset_h
    turns /= station.duty_period_h
    whole = np.floor(turns)
    return whole % 2.0, (turns - whole) * station.duty_period_h * 3600.0


def ask(
    station: Station, weather: dm.Weather, origin_s: float, times_s: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return the columns `asked` for these times, (n, N_ASKED)."""
    p, warmth = station.physics, weather.at(times_s)
    share = dm.hourly_share(times_s - 3600.0 * station.demand_shift_h)
    expected = dm.seasonal_demand(times_s, np.zeros_like(times_s))
    duty, since_s = duty_at(station, origin_s, times_s)
    asked = np.empty((len(times_s), col.N_ASKED))
    asked[:, col.ASKED_DEMAND] = p.demand_m3h * dm.seasonal_demand(times_s, warmth) * share
    follow = 1.0 + FORECAST_SHARE * (share - 1.0)
    asked[:, col.ASKED_FORECAST] = p.demand_m3h * expected * follow
    asked[:, col.ASKED_SUPPLY] = p.supply_m - p.sag_m * (share - 1.0)
    asked[:, col.ASKED_OUTDOOR] = dm.outdoor_c(times_s, warmth)
    asked[:, col.ASKED_WATER] = dm.water_c(times_s, warmth) + p.water_offset_k
    asked[:, col.ASKED_DUTY] = duty
    asked[:, col.ASKED_OVERLAP] = since_s < OVERLAP_S
    return asked
