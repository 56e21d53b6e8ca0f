"""The invented utility: alike in design, different in offsets, the same for a seed."""

from __future__ import annotations

import numpy as np
import pytest

from training.plant.channels import INSTRUMENTS
from training.plant.utility import (
    MAX_STATIONS,
    UTILITY,
    BadPlant,
    build_stations,
    station_name,
)


def test_every_station_has_a_name_of_its_own() -> None:
    names = {station_name(number) for number in range(MAX_STATIONS)}
    assert len(names) == MAX_STATIONS
    assert station_name(0) == "mill-lane"
    assert UTILITY == "Fennmoor Water"


def test_a_longer_list_of_stations_starts_with_the_shorter() -> None:
    few, many = build_stations(3, 6), build_stations(3, 60)
    assert [s.name for s in few] == [s.name for s in many[:6]]
    assert all(a.physics == b.physics for a, b in zip(few, many, strict=False))


def test_stations_differ_in_their_offsets_and_seeds_in_their_stations() -> None:
    stations = build_stations(3, 6)
    for key in ("static_m", "supply_m", "demand_m3h", "resistance", "area_m2"):
        assert len({getattr(s.physics, key) for s in stations}) == 6
    assert build_stations(4, 1)[0].physics != stations[0].physics


def test_the_two_pumps_of_a_station_differ_by_wear() -> None:
    for station in build_stations(5, 6):
        first, second = station.physics.pumps
        assert first.shutoff_m != second.shutoff_m
        assert first.shutoff_m == pytest.approx(second.shutoff_m, rel=0.05)


def test_bias_and_gain_stay_inside_the_accuracy_class() -> None:
    accuracy = np.array([i.accuracy for i in INSTRUMENTS])
    of_reading = np.array([i.accuracy_of_reading for i in INSTRUMENTS])
    for station in build_stations(7, 20):
        assert np.all(np.abs(station.bias) <= accuracy)
        assert np.all(np.abs(station.gain - 1.0) <= of_reading + 1e-12)
    assert np.any(build_stations(7, 1)[0].bias != 0.0)


@pytest.mark.parametrize("n_stations", [0, MAX_STATIONS + 1])
def test_a_number_of_stations_out_of_range_is_refused(n_stations: int) -> None:
    with pytest.raises(BadPlant, match=f"n_stations = {n_stations} is outside 1 to {MAX_STATIONS}"):
        build_stations(1, n_stations)
