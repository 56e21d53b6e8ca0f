"""One pump set: motor load and current, heat in winding and bearing, vibration."""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from training.plant import channels as ch
from training.plant import columns as col
from training.plant import hydraulics as hy
from training.plant.utility import RATED_KW, RATED_RPM, VOLTAGE_V, Physics, PumpSet


@njit()
def _electric(
    pump: PumpSet, flow: float, head: float, speed: float, gain: float, friction: float
) -> tuple[float, float, float]:
    """Return a running pump's load (of rated shaft power), input in kW and current in A.

    gain: factor on the pump's efficiency. friction: share added to the shaft power.
    """
    efficiency = gain * hy.efficiency(flow, speed, pump.best_flow_m3h, pump.best_efficiency)
    load = hy.hydraulic_kw(flow, head) / efficiency * (1.0 + friction) / RATED_KW
    input_kw = load * RATED_KW / hy.motor_efficiency(load)
    return load, input_kw, hy.current_a(input_kw, VOLTAGE_V, hy.power_factor(load))


@njit()
def _heat_pump(
    pump: PumpSet,
    k: int,
    load: float,
    speed: float,
    water: float,
    step_s: float,
    wander: NDArray[np.float64],
    fault: float,
    state: NDArray[np.float64],
) -> None:
    """Move one pump's winding and bearing temperatures on; still air cools slowly."""
    room = state[col.STATE_ROOM]
    winding, bearing, lag_s = room, 0.6 * room + 0.4 * water, 4500.0
    if speed > 0.0:
        loss = 0.4 + 0.6 * load * load
        winding += pump.winding_rise_k * loss * (1.0 + wander[col.WANDER_COOLING + k])
        bearing += pump.bearing_rise_k * (0.5 + 0.5 * speed)
        bearing += 12.0 * fault + wander[col.WANDER_BEARING + k]
        lag_s = 1500.0
    # A tenth of the winding's warmth travels down the shaft.
    bearing += 0.1 * (state[col.STATE_WINDING + k] - room)
    i, j = col.STATE_WINDING + k, col.STATE_BEARING + k
    state[i] = hy.toward(state[i], winding, step_s, lag_s)
    state[j] = hy.toward(state[j], bearing, step_s, 0.8 * lag_s)


@njit()
def _vibration(pump: PumpSet, flow: float, speed: float, wander: float, fault: float) -> float:
    """Return a running pump's vibration velocity in mm/s: worse off its best point."""
    off = flow / (max(speed, 1e-3) * pump.best_flow_m3h) - 1.0
    own = pump.vibration_mm_s * speed * speed * (0.9 + 1.2 * off * off)
    return own * (1.0 + wander) * (1.0 + fault)


@njit()
def run_pump(
    p: Physics,
    k: int,
    runs: bool,
    flow: float,
    common: tuple[float, float, float, float],
    wander: NDArray[np.float64],
    faults: NDArray[np.float64],
    state: NDArray[np.float64],
    row: NDArray[np.float64],
) -> float:
    """Fill in one pump's channels and return its input in kW.

    k: 0 or 1. common: head in m, speed ratio, water in degC, step in s.
    """
    pump, other = p.pumps[k], p.pumps[1 - k]
    head, speed, water, step_s = common
    fault = faults[col.BEARING_1 + k]
    load, input_kw, current = 0.0, 0.0, 0.0
    if runs and flow > 0.0:
        gain = (1.0 + wander[col.WANDER_EFFICIENCY + k]) * (1.0 - 0.8 * faults[col.WEAR_1 + k])
        load, input_kw, current = _electric(pump, flow, head, speed, gain, 0.004 * fault)
    if runs:
        vibration = _vibration(pump, flow, speed, wander[col.WANDER_VIBRATION + k], fault)
    else:
        # What reaches a stopped pump through the frame, and what backflow does to it.
        vibration = 0.1 * other.vibration_mm_s * speed * speed
        vibration += 0.008 * faults[col.BACKFLOW_1 + k] * math.sqrt(max(head, 0.0))
    turning = speed if runs else 0.0
    _heat_pump(pump, k, load, turning, water, step_s, wander, fault, state)
    row[ch.PUMP_1 + k] = ch.RUNNING if runs else ch.STOPPED
    row[ch.SPEED_1 + k] = RATED_RPM * turning
    row[ch.CURRENT_1 + k] = current
    row[ch.BEARING_TEMPERATURE_1 + k] = state[col.STATE_BEARING + k]
    row[ch.WINDING_TEMPERATURE_1 + k] = state[col.STATE_WINDING + k]
    row[ch.VIBRATION_1 + k] = vibration
    return input_kw
