"""Columns of the arrays that the compiled loop of a station reads and keeps.

What is asked of it, what wanders unmeasured, what is broken, what it remembers.
"""

from __future__ import annotations

from typing import Final

# Columns of `asked`: what the world asks of a station at one step.
ASKED_DEMAND: Final = 0  # m3/h
ASKED_FORECAST: Final = 1  # m3/h, what the control expects
ASKED_SUPPLY: Final = 2  # m
ASKED_OUTDOOR: Final = 3  # degC
ASKED_WATER: Final = 4  # degC
ASKED_DUTY: Final = 5  # 0 or 1: which pump
ASKED_OVERLAP: Final = 6  # 1 while both run because the duty has just changed
N_ASKED: Final = 7

# Columns of `wander`: what nobody measures. (time constant in s, standard deviation)
WANDERS: Final[tuple[tuple[float, float], ...]] = (
    (3600.0, 0.035),  # demand, share
    (240.0, 0.015),  # demand, share, quick
    (2400.0, 0.30),  # suction main, m
    (21600.0, 0.012),  # pipe friction, share
    (10800.0, 0.004),  # efficiency of pump 1, share
    (10800.0, 0.004),
    (900.0, 0.05),  # vibration of pump 1, share
    (900.0, 0.05),
    (2700.0, 0.02),  # cooling of winding 1, share
    (2700.0, 0.02),
    (3600.0, 0.4),  # bearing 1, K
    (3600.0, 0.4),
    (7200.0, 0.4),  # room, K
    (1800.0, 0.10),  # auxiliaries, kW
    (10800.0, 0.08),  # water, K
)
N_WANDERS: Final = len(WANDERS)
(
    WANDER_DEMAND_SLOW,
    WANDER_DEMAND_QUICK,
    WANDER_SUPPLY,
    WANDER_FRICTION,
    WANDER_EFFICIENCY,
    WANDER_EFFICIENCY_2,
    WANDER_VIBRATION,
    WANDER_VIBRATION_2,
    WANDER_COOLING,
    WANDER_COOLING_2,
    WANDER_BEARING,
    WANDER_BEARING_2,
    WANDER_ROOM,
    WANDER_AUXILIARY,
    WANDER_WATER,
) = range(N_WANDERS)

# Columns of `faults`: severities, all zero in health.
WEAR_1: Final = 0  # share of the shut-off head that is gone
WEAR_2: Final = 1
BACKFLOW_1: Final = 2  # m3/h per root of a metre, through the stopped pump's check valve
BACKFLOW_2: Final = 3
STRAINER: Final = 4  # how many clean strainers more
LEAK: Final = 5  # m3/h lost close behind the station
BEARING_1: Final = 6  # share by which vibration grows
BEARING_2: Final = 7
N_FAULTS: Final = 8

# The state vector.
STATE_LEVEL: Final = 0  # m
STATE_FLOW: Final = 1  # m3/h
STATE_VALVE: Final = 2  # 0 to 1
STATE_ASSIST: Final = 3  # 1 while the second pump helps
STATE_ASSIST_TIMER_S: Final = 4
STATE_ROOM: Final = 5  # degC
STATE_WINDING: Final = 6  # degC, one for each pump
STATE_BEARING: Final = 8
N_STATE: Final = 10
