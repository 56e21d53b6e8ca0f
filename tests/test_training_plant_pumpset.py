"""Power, current, heat and vibration of a pump set, read off settled stations."""

from __future__ import annotations

import math

import numpy as np
import pytest

from training.plant import channels as ch
from training.plant import columns as col
from training.plant.hydraulics import BAR_PER_M, hydraulic_kw
from training.plant.severity import settled
from training.plant.station import initial_state, run_station
from training.plant.utility import build_stations

STATIONS = build_stations(5, 6)
HEALTH = [settled(s.physics, "impeller_wear", 1, 0.0) for s in STATIONS]


def test_current_and_power_agree_with_a_three_phase_motor_at_400_volts() -> None:
    for station, row in zip(STATIONS, HEALTH, strict=True):
        motor_kw = row[ch.POWER] - station.physics.auxiliary_kw
        cos_phi = 1000.0 * motor_kw / (math.sqrt(3.0) * 400.0 * row[ch.CURRENT_1])
        # Common practice for a 45 kW motor: power factor 0.84 to 0.88.
        assert 0.82 < cos_phi < 0.88


def test_wire_to_water_efficiency_is_what_such_stations_reach() -> None:
    for station, row in zip(STATIONS, HEALTH, strict=True):
        lift_m = (row[ch.DISCHARGE_PRESSURE] - row[ch.SUCTION_PRESSURE]) / BAR_PER_M
        motor_kw = row[ch.POWER] - station.physics.auxiliary_kw
        assert 0.60 < hydraulic_kw(row[ch.FLOW], lift_m) / motor_kw < 0.78


def test_settled_temperatures_and_vibration_are_those_of_a_sound_45_kw_pump() -> None:
    # Judgement of the trade: bearing 45 to 65 degC, winding 60 to 90, vibration 1.2 to 2.5
    # mm/s; suction 0.3 to 1 bar, discharge 3 to 4, flow 200 to 360 m3/h.
    median = np.median(HEALTH, axis=0)
    assert 45 < median[ch.BEARING_TEMPERATURE_1] < 65
    assert 60 < median[ch.WINDING_TEMPERATURE_1] < 90
    assert 1.2 < median[ch.VIBRATION_1] < 2.5
    assert 0.3 < median[ch.SUCTION_PRESSURE] < 1.0
    assert 3.0 < median[ch.DISCHARGE_PRESSURE] < 4.0
    assert 200 < median[ch.FLOW] < 360


def test_a_stopped_pump_draws_nothing_and_is_as_cold_as_its_surroundings() -> None:
    for row in HEALTH:
        assert row[ch.PUMP_2] == row[ch.SPEED_2] == row[ch.CURRENT_2] == 0.0
        assert row[ch.WINDING_TEMPERATURE_2] == pytest.approx(row[ch.ROOM_TEMPERATURE], abs=0.5)
        assert row[ch.VIBRATION_2] < 0.25 * row[ch.VIBRATION_1]


def test_a_winding_warms_with_the_time_constant_of_its_motor() -> None:
    physics = STATIONS[0].physics
    asked = np.zeros((240, col.N_ASKED))
    asked[:, [col.ASKED_DEMAND, col.ASKED_FORECAST]] = physics.demand_m3h
    asked[:, col.ASKED_SUPPLY] = physics.supply_m
    state, truth = initial_state(physics), np.empty((240, ch.N_CHANNELS))
    state[col.STATE_WINDING] = state[col.STATE_ROOM] = 20.0
    run_station(
        physics,
        60.0,
        asked,
        np.zeros((240, col.N_WANDERS)),
        np.zeros((240, col.N_FAULTS)),
        state,
        truth,
    )
    above_room = truth[:, ch.WINDING_TEMPERATURE_1] - truth[:, ch.ROOM_TEMPERATURE]
    risen = above_room[24] / above_room[-1]
    # After 25 minutes, its time constant, 63 % of the way; the room moves a little meanwhile.
    assert risen == pytest.approx(1.0 - math.exp(-1.0), abs=0.04)


def test_vibration_rises_away_from_the_best_point() -> None:
    physics = STATIONS[0].physics
    less = physics._replace(demand_m3h=0.6 * physics.demand_m3h)
    row = settled(less, "impeller_wear", 1, 0.0)
    speed = row[ch.SPEED_1] / HEALTH[0][ch.SPEED_1]
    assert row[ch.VIBRATION_1] / HEALTH[0][ch.VIBRATION_1] > speed**2
