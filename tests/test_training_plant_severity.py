"""Severities that give the wanted size, and the channels that really move."""

from __future__ import annotations

import numpy as np
import pytest

from training.plant.channels import NAMES
from training.plant.incidents import MACHINE_KINDS, PUMP_KINDS, machine_incident
from training.plant.instruments import SPREAD
from training.plant.severity import settled, severity_for
from training.plant.utility import build_stations

STATIONS = build_stations(8, 4)


@pytest.mark.parametrize("kind", MACHINE_KINDS)
@pytest.mark.parametrize("size", [0.75, 3.0, 12.0])
def test_the_largest_shift_is_the_wanted_size(kind: str, size: float) -> None:
    for station in STATIONS:
        pump = 2 if kind in PUMP_KINDS else 0
        incident = machine_incident(station.name, kind, 0, 1, size, pump)
        severity = severity_for(station.physics, incident)
        health = settled(station.physics, kind, pump, 0.0)
        shift = np.abs(settled(station.physics, kind, pump, severity) - health) / SPREAD
        own = [NAMES.index(name) for name in incident.channels]
        assert shift[own].max() == pytest.approx(size, rel=1e-6)
        assert shift.max() == shift[own].max()


PUMPS = [
    (kind, pump) for kind in MACHINE_KINDS for pump in ((1, 2) if kind in PUMP_KINDS else (0,))
]


@pytest.mark.parametrize(("kind", "pump"), PUMPS)
def test_the_named_channels_are_those_that_move_by_a_quarter_of_the_largest(
    kind: str, pump: int
) -> None:
    for station in STATIONS:
        incident = machine_incident(station.name, kind, 0, 1, 5.0, pump)
        severity = severity_for(station.physics, incident)
        fault = settled(station.physics, kind, pump, severity)
        shift = np.abs(fault - settled(station.physics, kind, pump, 0.0)) / SPREAD / 5.0
        for number, name in enumerate(NAMES):
            if name not in incident.channels:
                assert shift[number] < 0.25, name
            elif not (pump == 0 and name.endswith("_2")):
                # A leak draws level and flow along with time, which is endless here.
                slow = kind == "leak" and name in ("flow", "reservoir_level")
                assert shift[number] > 0.2 or slow, name


def test_a_worn_impeller_turns_faster_for_the_same_flow() -> None:
    physics = STATIONS[0].physics
    health, worn = (settled(physics, "impeller_wear", 1, s) for s in (0.0, 0.06))
    speed, flow = NAMES.index("speed_1"), NAMES.index("flow")
    assert worn[flow] == pytest.approx(health[flow], rel=1e-9)
    # Affinity law: head ~ speed squared, so 6 % less head asks for 1 / sqrt(0.94) the speed.
    assert worn[speed] / health[speed] == pytest.approx(0.94**-0.5, rel=1e-9)


def test_a_fault_too_big_for_the_plant_stops_at_the_worst() -> None:
    incident = machine_incident("any", "impeller_wear", 0, 1, 1e6, 1)
    assert severity_for(STATIONS[0].physics, incident) == pytest.approx(0.5)
