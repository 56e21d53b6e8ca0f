"""How bad a machine fault must be for a wanted size, found on the station's own physics.

The station is run at its mean flow until everything is settled, once in health and once
with the fault; a fault's size is the largest shift among its channels, in spreads.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from training.plant import columns as col
from training.plant.channels import NAMES
from training.plant.incidents import Incident
from training.plant.instruments import SPREAD
from training.plant.station import initial_state, run_station
from training.plant.utility import Physics

_HOUR_S: Final = 3600.0
_SETTLING_STEPS: Final = 24
# A reservoir so wide that its level stands still while the fault's shift is read off.
_ENDLESS_M2: Final = 1e12
_BISECTIONS: Final = 50

# The worst severity that is tried: half the head gone, a pump's whole flow running back,
# forty clean strainers in a row, nine tenths of the flow lost, vibration thirtyfold.
_WORST: Final = {
    "impeller_wear": 0.5,
    "recirculating_check_valve": 40.0,
    "blocked_strainer": 40.0,
    "failing_bearing": 30.0,
}


def fault_column(kind: str, pump: int) -> int:
    """Return the column of `faults` that a machine fault moves."""
    first = {
        "impeller_wear": col.WEAR_1,
        "recirculating_check_valve": col.BACKFLOW_1,
        "blocked_strainer": col.STRAINER,
        "failing_bearing": col.BEARING_1,
        "leak": col.LEAK,
    }[kind]
    return first + max(pump - 1, 0)


def settled(physics: Physics, kind: str, pump: int, severity: float) -> NDArray[np.float64]:
    """Return the true values, (n_channels,), of a settled station with one fault.

    Mean demand at mean supply; the duty is the pump that shows the fault: the faulty one,
    or the other one for a check valve, which leaks while its pump stands.
    """
    duty = pump - 1 if kind != "recirculating_check_valve" else 2 - pump
    asked = np.zeros((_SETTLING_STEPS, col.N_ASKED))
    asked[:, [col.ASKED_DEMAND, col.ASKED_FORECAST]] = physics.demand_m3h
    asked[:, col.ASKED_SUPPLY] = physics.supply_m
    asked[:, [col.ASKED_OUTDOOR, col.ASKED_WATER]] = 11.0
    asked[:, col.ASKED_DUTY] = max(duty, 0)
    faults = np.zeros((_SETTLING_STEPS, col.N_FAULTS))
    faults[:, fault_column(kind, pump)] = severity
    truth = np.empty((_SETTLING_STEPS, len(NAMES)))
    still = physics._replace(area_m2=_ENDLESS_M2)
    wander = np.zeros((_SETTLING_STEPS, col.N_WANDERS))
    run_station(still, _HOUR_S, asked, wander, faults, initial_state(physics), truth)
    last: NDArray[np.float64] = truth[-1]
    return last


def severity_for(physics: Physics, incident: Incident) -> float:
    """Return the severity at which a machine fault reaches its size, or the worst there is."""
    assert incident.size is not None
    kind, pump = incident.kind, incident.pump
    own = [NAMES.index(name) for name in incident.channels]
    health = settled(physics, kind, pump, 0.0)
    low, high = 0.0, _WORST.get(kind, 0.9 * physics.demand_m3h)
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        shift = np.abs(settled(physics, kind, pump, middle) - health) / SPREAD
        if shift[own].max() < incident.size:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)
