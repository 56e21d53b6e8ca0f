"""One station over time: control, hydraulics, reservoir, room; pump sets beside it.

`run_station` steps through the time grid once and leaves the true values of every
channel; instruments come after. Everything that must be remembered between two calls
is in one state vector, so a stretch run in two parts equals the stretch run whole.
"""

from __future__ import annotations

import math
from typing import Final, NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from training.plant import channels as ch
from training.plant import columns as col
from training.plant import hydraulics as hy
from training.plant.pumpset import run_pump
from training.plant.sources import SOURCES
from training.plant.utility import Physics

# Control: flow follows the forecast and is trimmed by the level.
FORECAST_SHARE: Final = 0.6
_TRIM_M3H_PER_M: Final = 40.0
_FLOW_LAG_S: Final = 45.0
_ASSIST_DELAY_S: Final = 300.0
_VALVE_LAG_S: Final = 60.0
# An actuator that answered every hundredth would wear out in a year.
_VALVE_DEADBAND: Final = 0.015
_FASTEST: Final = 1.08  # speed ratio at the drive's upper limit
_LOWEST_FLOW_M3H: Final = 60.0
_ROOM_LAG_S: Final = 5400.0


class Setting(NamedTuple):
    """What the hydraulics of one step are solved for, before the flow is known."""

    level_m: float
    supply_m: float
    friction: float  # share of the usual
    valve: float  # 0 to 1
    run_1: bool
    run_2: bool


def initial_state(physics: Physics) -> NDArray[np.float64]:
    """Return a state to start a warm-up day from, (N_STATE,)."""
    state = np.zeros(col.N_STATE)
    state[col.STATE_LEVEL] = physics.level_set_m
    state[col.STATE_FLOW] = physics.demand_m3h
    state[col.STATE_VALVE] = 1.0
    state[col.STATE_ROOM] = 20.0
    state[col.STATE_WINDING : col.STATE_WINDING + 2] = 50.0
    state[col.STATE_BEARING : col.STATE_BEARING + 2] = 40.0
    return state


@njit()
def _wanted_flow(p: Physics, forecast: float, level: float) -> float:
    return max(forecast + _TRIM_M3H_PER_M * (p.level_set_m - level), _LOWEST_FLOW_M3H)


@njit()
def _update_assist(p: Physics, wanted: float, step_s: float, state: NDArray[np.float64]) -> None:
    """Let the second pump join or leave once the wanted flow asks for it long enough."""
    helping = state[col.STATE_ASSIST] > 0.5
    asks = wanted < p.assist_off_m3h if helping else wanted > p.assist_on_m3h
    state[col.STATE_ASSIST_TIMER_S] = state[col.STATE_ASSIST_TIMER_S] + step_s if asks else 0.0
    if state[col.STATE_ASSIST_TIMER_S] >= _ASSIST_DELAY_S:
        state[col.STATE_ASSIST], state[col.STATE_ASSIST_TIMER_S] = (0.0 if helping else 1.0), 0.0


@njit()
def _move_valve(p: Physics, wanted: float, step_s: float, position: float) -> float:
    """Return the outlet valve's next position, 0 to 1; it throttles at low flow."""
    target = min(max(0.2 + 0.7 * wanted / p.demand_m3h, 0.5), 1.0)
    if abs(target - position) < _VALVE_DEADBAND:
        return position
    return hy.toward(position, target, step_s, _VALVE_LAG_S)


@njit()
def _control(
    p: Physics,
    step_s: float,
    asked: NDArray[np.float64],
    wander: NDArray[np.float64],
    state: NDArray[np.float64],
) -> tuple[float, Setting]:
    """Return the flow the control reaches by itself, and the setting it works against."""
    level = state[col.STATE_LEVEL]
    wanted = _wanted_flow(p, asked[col.ASKED_FORECAST], level)
    _update_assist(p, wanted, step_s, state)
    state[col.STATE_VALVE] = _move_valve(p, wanted, step_s, state[col.STATE_VALVE])
    both = state[col.STATE_ASSIST] > 0.5 or asked[col.ASKED_OVERLAP] > 0.5
    setting = Setting(
        level,
        asked[col.ASKED_SUPPLY] + wander[col.WANDER_SUPPLY],
        1.0 + wander[col.WANDER_FRICTION],
        state[col.STATE_VALVE],
        both or asked[col.ASKED_DUTY] < 0.5,
        both or asked[col.ASKED_DUTY] > 0.5,
    )
    return hy.toward(state[col.STATE_FLOW], wanted, step_s, _FLOW_LAG_S), setting


@njit()
def _heads(
    p: Physics, now: Setting, flow: float, faults: NDArray[np.float64]
) -> tuple[float, float, float]:
    """Return heads at the outlet, at the pump inlet, and over the pumps, in m."""
    beyond_leak = max(flow - faults[col.LEAK], 0.0)
    static = p.static_m + now.level_m
    outlet = hy.system_head_m(beyond_leak, static, p.resistance * now.friction)
    inlet = now.supply_m - p.strainer * (1.0 + faults[col.STRAINER]) * flow * flow
    return outlet, inlet, outlet + p.valve * (flow / now.valve) ** 2 - inlet


@njit()
def _drive(
    p: Physics, now: Setting, flow: float, head: float, faults: NDArray[np.float64]
) -> tuple[float, float, float]:
    """Return the common speed ratio and each running pump's flow that give `flow`."""
    shutoff_1 = p.pumps[0].shutoff_m * (1.0 - faults[col.WEAR_1])
    shutoff_2 = p.pumps[1].shutoff_m * (1.0 - faults[col.WEAR_2])
    root = math.sqrt(max(head, 0.0))
    if now.run_1 and now.run_2:
        share = hy.first_share_m3h(
            flow, head, shutoff_1, p.pumps[0].fall, shutoff_2, p.pumps[1].fall
        )
        if share > 0.5 * flow:
            return hy.speed_for(share, head, shutoff_1, p.pumps[0].fall), share, flow - share
        rest = flow - share
        return hy.speed_for(rest, head, shutoff_2, p.pumps[1].fall), share, rest
    if now.run_1:
        through = flow + faults[col.BACKFLOW_2] * root
        return hy.speed_for(through, head, shutoff_1, p.pumps[0].fall), through, 0.0
    through = flow + faults[col.BACKFLOW_1] * root
    return hy.speed_for(through, head, shutoff_2, p.pumps[1].fall), 0.0, through


@njit()
def _within_drive_limit(
    p: Physics, now: Setting, flow: float, faults: NDArray[np.float64]
) -> float:
    """Return the flow, lowered to what the drive's highest speed can give."""
    head = _heads(p, now, flow, faults)[2]
    if _drive(p, now, flow, head, faults)[0] <= _FASTEST:
        return flow
    low, high = 0.0, flow
    for _ in range(40):
        middle = 0.5 * (low + high)
        head = _heads(p, now, middle, faults)[2]
        if _drive(p, now, middle, head, faults)[0] > _FASTEST:
            high = middle
        else:
            low = middle
    return low


@njit()
def _fill_reservoir(
    p: Physics,
    inflow: float,
    asked: NDArray[np.float64],
    wander: NDArray[np.float64],
    step_s: float,
    state: NDArray[np.float64],
) -> None:
    """Move the level on: what comes in less what is drawn, over the area."""
    share = 1.0 + wander[col.WANDER_DEMAND_SLOW] + wander[col.WANDER_DEMAND_QUICK]
    gain = (inflow - asked[col.ASKED_DEMAND] * share) * step_s / 3600.0
    state[col.STATE_LEVEL] += gain / p.area_m2
    state[col.STATE_LEVEL] = min(max(state[col.STATE_LEVEL], 0.0), p.overflow_m)


@njit()
def _step(
    p: Physics,
    step_s: float,
    asked: NDArray[np.float64],
    wander: NDArray[np.float64],
    faults: NDArray[np.float64],
    state: NDArray[np.float64],
    row: NDArray[np.float64],
) -> None:
    """Move the station on by one step and fill in one row of true values."""
    wanted, now = _control(p, step_s, asked, wander, state)
    flow = _within_drive_limit(p, now, wanted, faults)
    outlet, inlet, head = _heads(p, now, flow, faults)
    speed, q_1, q_2 = _drive(p, now, flow, head, faults)
    water = asked[col.ASKED_WATER] + wander[col.WANDER_WATER]
    common = (head, speed, water, step_s)
    input_kw = p.auxiliary_kw + wander[col.WANDER_AUXILIARY]
    input_kw += run_pump(p, 0, now.run_1, q_1, common, wander, faults, state, row)
    input_kw += run_pump(p, 1, now.run_2, q_2, common, wander, faults, state, row)
    room = 10.0 + 0.6 * max(asked[col.ASKED_OUTDOOR], 4.0) + 0.15 * input_kw
    room += p.room_offset_k + wander[col.WANDER_ROOM]
    state[col.STATE_ROOM] = hy.toward(state[col.STATE_ROOM], room, step_s, _ROOM_LAG_S)
    row[ch.SUCTION_PRESSURE] = inlet * hy.BAR_PER_M
    row[ch.DISCHARGE_PRESSURE] = outlet * hy.BAR_PER_M
    row[ch.FLOW], row[ch.RESERVOIR_LEVEL], row[ch.POWER] = flow, now.level_m, input_kw
    row[ch.VALVE_POSITION], row[ch.ROOM_TEMPERATURE] = 100.0 * now.valve, state[col.STATE_ROOM]
    row[ch.WATER_TEMPERATURE] = water + hy.heating_k(head, p.pumps[0].best_efficiency)
    state[col.STATE_FLOW] = flow
    inflow = max(flow - faults[col.LEAK], 0.0)
    _fill_reservoir(p, inflow, asked, wander, step_s, state)


@njit(cache=True)
def run_station(
    p: Physics,
    step_s: float,
    asked: NDArray[np.float64],
    wander: NDArray[np.float64],
    faults: NDArray[np.float64],
    state: NDArray[np.float64],
    truth: NDArray[np.float64],
    _sources: str = SOURCES,
) -> None:
    """Fill `truth` with the true values of every channel and leave the state after it.

    asked: (n, N_ASKED). wander: (n, N_WANDERS). faults: (n, N_FAULTS).
    state: (N_STATE,), changed in place. truth: (n, N_CHANNELS), written; the level of a
        row is the one before the step's water came and went.
    _sources: only ties kept machine code to the sources it was made from.
    """
    for i in range(truth.shape[0]):
        _step(p, step_s, asked[i], wander[i], faults[i], state, truth[i])


@njit(cache=True)
def autoregress(
    normals: NDArray[np.float64],
    keep: NDArray[np.float64],
    spread: NDArray[np.float64],
    state: NDArray[np.float64],
) -> None:
    """Turn standard normals into first-order wander, in place, state carried.

    normals: (n, k). keep: (k,) what a step keeps of the value before. spread: (k,)
        the standing standard deviation. state: (k,), changed in place.
    """
    fresh = spread * np.sqrt(1.0 - keep * keep)
    for i in range(normals.shape[0]):
        for j in range(normals.shape[1]):
            state[j] = keep[j] * state[j] + fresh[j] * normals[i, j]
            normals[i, j] = state[j]
