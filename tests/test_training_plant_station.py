"""The station's loop against its own curves, balances and limits, computed apart."""

from __future__ import annotations

from datetime import UTC, datetime

import numpy as np
import pytest
from numpy.typing import NDArray

from training.plant import channels as ch
from training.plant import columns as col
from training.plant.asked import ask
from training.plant.demand import draw_weather
from training.plant.hydraulics import BAR_PER_M
from training.plant.station import autoregress, initial_state, run_station
from training.plant.utility import RATED_RPM, Physics, build_stations

Floats = NDArray[np.float64]
STEP_S = 60.0
ORIGIN_S = datetime(2026, 7, 6, tzinfo=UTC).timestamp()
STATION = build_stations(4, 1)[0]
PHYSICS = STATION.physics


def run(
    physics: Physics = PHYSICS,
    n: int = 1440,
    wander: Floats | None = None,
    faults: dict[int, float] | None = None,
    asked: Floats | None = None,
) -> tuple[Floats, Floats, Floats]:
    """Return asked, truth and the state at the end of a run."""
    if asked is None:
        asked = ask(STATION, draw_weather(4), ORIGIN_S, ORIGIN_S + STEP_S * np.arange(float(n)))
    wander = np.zeros((n, col.N_WANDERS)) if wander is None else wander
    severities = np.zeros((n, col.N_FAULTS))
    for column, severity in (faults or {}).items():
        severities[:, column] = severity
    state, truth = initial_state(physics), np.empty((n, ch.N_CHANNELS))
    run_station(physics, STEP_S, asked, wander, severities, state, truth)
    return asked, truth, state


def heads(truth: Floats) -> tuple[Floats, Floats, Floats]:
    """Return outlet, inlet and pump head in m, worked out from the channels."""
    outlet = truth[:, ch.DISCHARGE_PRESSURE] / BAR_PER_M
    inlet = truth[:, ch.SUCTION_PRESSURE] / BAR_PER_M
    valve = truth[:, ch.VALVE_POSITION] / 100.0
    return outlet, inlet, outlet + PHYSICS.valve * (truth[:, ch.FLOW] / valve) ** 2 - inlet


def test_every_record_lies_on_the_system_curve() -> None:
    asked, truth, _ = run()
    outlet, inlet, _ = heads(truth)
    flow = truth[:, ch.FLOW]
    static = PHYSICS.static_m + truth[:, ch.RESERVOIR_LEVEL]
    assert outlet == pytest.approx(static + PHYSICS.resistance * flow**2, rel=1e-12)
    assert inlet == pytest.approx(asked[:, col.ASKED_SUPPLY] - PHYSICS.strainer * flow**2)


def test_every_record_of_one_pump_lies_on_that_pumps_curve() -> None:
    _, truth, _ = run(n=2 * 1440)
    head, flow = heads(truth)[2], truth[:, ch.FLOW]
    for k, pump in enumerate(PHYSICS.pumps):
        alone = (truth[:, ch.PUMP_1 + k] == 1) & (truth[:, ch.PUMP_2 - k] == 0)
        speed = truth[alone, ch.SPEED_1 + k] / RATED_RPM
        assert alone.sum() > 200
        curve = pump.shutoff_m * speed**2 - pump.fall * flow[alone] ** 2
        assert head[alone] == pytest.approx(curve, rel=1e-9)


def test_two_pumps_together_lie_on_both_curves_at_one_speed() -> None:
    asked = run()[0].copy()
    asked[:, col.ASKED_OVERLAP] = 1.0
    _, truth, _ = run(asked=asked)
    head = heads(truth)[2]
    speed = truth[:, ch.SPEED_1] / RATED_RPM
    assert np.array_equal(truth[:, ch.SPEED_1], truth[:, ch.SPEED_2])
    flows = [np.sqrt((p.shutoff_m * speed**2 - head) / p.fall) for p in PHYSICS.pumps]
    assert flows[0] + flows[1] == pytest.approx(truth[:, ch.FLOW], rel=1e-6)


def test_the_reservoir_balances_to_the_last_drop() -> None:
    rng = np.random.default_rng(8)
    wander = np.zeros((1440, col.N_WANDERS))
    wander[:, col.WANDER_DEMAND_SLOW] = 0.05 * rng.standard_normal(1440)
    asked, truth, state = run(wander=wander)
    drawn = asked[:, col.ASKED_DEMAND] * (1.0 + wander[:, col.WANDER_DEMAND_SLOW])
    stored = (state[col.STATE_LEVEL] - truth[0, ch.RESERVOIR_LEVEL]) * PHYSICS.area_m2
    balance = (truth[:, ch.FLOW] - drawn).sum() * STEP_S / 3600.0
    assert stored == pytest.approx(balance, abs=1e-6)


def test_a_leak_is_missing_from_the_balance_and_nothing_else_is() -> None:
    asked, truth, state = run(faults={col.LEAK: 20.0})
    stored = (state[col.STATE_LEVEL] - truth[0, ch.RESERVOIR_LEVEL]) * PHYSICS.area_m2
    balance = (truth[:, ch.FLOW] - 20.0 - asked[:, col.ASKED_DEMAND]).sum() * STEP_S / 3600.0
    assert stored == pytest.approx(balance, abs=1e-6)


def test_a_reservoir_stops_at_its_overflow_and_at_its_floor() -> None:
    asked = run()[0].copy()
    asked[:, col.ASKED_DEMAND] = 0.0
    assert run(asked=asked)[1][:, ch.RESERVOIR_LEVEL].max() <= PHYSICS.overflow_m
    asked[:, col.ASKED_DEMAND] = 2000.0
    assert run(asked=asked)[1][:, ch.RESERVOIR_LEVEL].min() == 0.0


def test_a_run_in_two_parts_equals_the_run_whole() -> None:
    asked, whole, _ = run()
    state, truth = initial_state(PHYSICS), np.empty_like(whole)
    wander, faults = np.zeros((1440, col.N_WANDERS)), np.zeros((1440, col.N_FAULTS))
    for part in (slice(0, 700), slice(700, 1440)):
        run_station(PHYSICS, STEP_S, asked[part], wander[part], faults[part], state, truth[part])
    assert np.array_equal(truth, whole)


def test_the_drive_never_turns_faster_than_its_limit() -> None:
    high = PHYSICS._replace(static_m=PHYSICS.static_m + 14.0)
    _, truth, _ = run(physics=high)
    speed = np.maximum(truth[:, ch.SPEED_1], truth[:, ch.SPEED_2]) / RATED_RPM
    assert speed.max() == pytest.approx(1.08, abs=1e-6)
    assert truth[:, ch.FLOW].max() < 0.95 * run()[1][:, ch.FLOW].max()


def test_the_second_pump_joins_when_much_is_wanted_for_long() -> None:
    asked = run(n=240)[0].copy()
    asked[:, col.ASKED_FORECAST] = PHYSICS.demand_m3h
    asked[:, col.ASKED_OVERLAP] = 0.0
    asked[60:120, col.ASKED_FORECAST] = 1.5 * PHYSICS.demand_m3h
    both = run(n=240, asked=asked)[1][:, [ch.PUMP_1, ch.PUMP_2]].sum(axis=1) == 2
    # On-delay of five minutes at both ends.
    assert not both[:64].any()
    assert both[66:124].all()
    assert not both[126:].any()


def test_flow_follows_demand_and_the_level_stays_near_its_set_point() -> None:
    asked, truth, _ = run(n=7 * 1440)
    assert np.corrcoef(truth[:, ch.FLOW], asked[:, col.ASKED_DEMAND])[0, 1] > 0.9
    assert np.abs(truth[:, ch.RESERVOIR_LEVEL] - PHYSICS.level_set_m).max() < 1.2


def test_the_valve_moves_in_steps_wider_than_its_deadband() -> None:
    position = run()[1][:, ch.VALVE_POSITION]
    assert (np.diff(position) == 0.0).mean() > 0.3
    assert np.ptp(position) > 20.0


def test_wander_has_the_stated_spread_and_memory() -> None:
    keep, spread = np.array([0.9, 0.0]), np.array([2.0, 0.5])
    normals = np.random.default_rng(1).standard_normal((200_000, 2))
    twin, last = normals.copy(), np.zeros(2)
    autoregress(normals, keep, spread, np.zeros(2))
    for i in range(50):
        last = keep * last + spread * np.sqrt(1.0 - keep**2) * twin[i]
        assert normals[i] == pytest.approx(last, rel=1e-12)
    assert normals.std(axis=0) == pytest.approx(spread, rel=0.03)
    assert np.corrcoef(normals[:-1, 0], normals[1:, 0])[0, 1] == pytest.approx(0.9, abs=0.01)
