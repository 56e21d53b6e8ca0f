"""Pump and system curves, parallel pumps, motor power and current.

Scalars in, scalars out, compiled so that the plant's loop can call them. Heads in
metres of water, flows in m3/h, power in kW; speed is a ratio to the rated speed, so
that the affinity laws (flow ~ speed, head ~ speed squared, power ~ speed cubed) hold
by construction. Formulas are textbook common practice.
"""

from __future__ import annotations

import math
from typing import Final

from numba import njit

# Water at 20 degC and standard gravity.
DENSITY_KG_M3: Final = 998.2
GRAVITY_M_S2: Final = 9.80665
HEAT_CAPACITY_J_KGK: Final = 4184.0
BAR_PER_M: Final = DENSITY_KG_M3 * GRAVITY_M_S2 / 1e5

# Below a fifth of the best efficiency a running pump only churns; the curve stops there.
LOWEST_EFFICIENCY_SHARE: Final = 0.2


@njit()
def pump_head_m(flow_m3h: float, speed: float, shutoff_m: float, fall: float) -> float:
    """Return a pump's head: H = H0 n^2 - a Q^2, with H0 `shutoff_m` and a `fall`."""
    return shutoff_m * speed * speed - fall * flow_m3h * flow_m3h


@njit()
def system_head_m(flow_m3h: float, static_m: float, resistance: float) -> float:
    """Return the head a pipe asks for: H = Hs + r Q^2."""
    return static_m + resistance * flow_m3h * flow_m3h


@njit()
def speed_for(flow_m3h: float, head_m: float, shutoff_m: float, fall: float) -> float:
    """Return the speed ratio at which one pump gives this flow at this head."""
    return math.sqrt(max(head_m + fall * flow_m3h * flow_m3h, 0.0) / shutoff_m)


@njit()
def first_share_m3h(
    flow_m3h: float, head_m: float, shutoff_1: float, fall_1: float, shutoff_2: float, fall_2: float
) -> float:
    """Return the first pump's part of a flow that two pumps at one speed share.

    Equal speed and head give c q^2 - 2 Q q + d = 0; the root is written so that it
    stays exact when the pumps are alike and c vanishes. A pump too weak for the head
    gives nothing (its check valve is shut): the result stays within 0 and the flow.
    """
    ratio = shutoff_2 / shutoff_1
    c = 1.0 - ratio * fall_1 / fall_2
    d = flow_m3h * flow_m3h - (ratio - 1.0) * head_m / fall_2
    under_root = max(flow_m3h * flow_m3h - c * d, 0.0)
    share = d / (flow_m3h + math.sqrt(under_root) + 1e-9)
    return min(max(share, 0.0), flow_m3h)


@njit()
def efficiency(flow_m3h: float, speed: float, best_flow_m3h: float, best: float) -> float:
    """Return the pump's efficiency, a parabola over flow / speed around its best point."""
    if speed <= 0.0:
        return best * LOWEST_EFFICIENCY_SHARE
    off = flow_m3h / (speed * best_flow_m3h) - 1.0
    return best * max(1.0 - 0.75 * off * off, LOWEST_EFFICIENCY_SHARE)


@njit()
def hydraulic_kw(flow_m3h: float, head_m: float) -> float:
    """Return the power in the water: q rho g H."""
    return flow_m3h * DENSITY_KG_M3 * GRAVITY_M_S2 * head_m / 3.6e6


@njit()
def current_a(input_kw: float, voltage_v: float, power_factor: float) -> float:
    """Return the current of a three-phase motor: P / (sqrt 3 U cos phi)."""
    return 1000.0 * input_kw / (math.sqrt(3.0) * voltage_v * power_factor)


@njit()
def heating_k(head_m: float, efficiency_share: float) -> float:
    """Return how much one pass warms the water: (1/eta - 1) g H / c."""
    return (1.0 / efficiency_share - 1.0) * GRAVITY_M_S2 * head_m / HEAT_CAPACITY_J_KGK


@njit()
def motor_efficiency(load: float) -> float:
    """Return a motor's efficiency over its load (shaft power / rated), 4 poles, 45 kW."""
    return 0.945 - 0.03 * (1.0 - load) * (1.0 - load)


@njit()
def power_factor(load: float) -> float:
    """Return cos phi over load: 0.88 at full load, falling as the load does."""
    return 0.88 - 0.12 * (1.0 - load) * (1.0 - load)


@njit()
def toward(value: float, target: float, step_s: float, time_constant_s: float) -> float:
    """Return a first-order lag's next value; exact for a target constant over the step."""
    return target + (value - target) * math.exp(-step_s / time_constant_s)
