"""What an incident may be, and the sentence for what it may not."""

from __future__ import annotations

from typing import Any

import pytest

from training.plant.channels import NAMES
from training.plant.incidents import (
    INSTRUMENT_KINDS,
    KINDS,
    MACHINE_KINDS,
    PUMP_KINDS,
    Incident,
    machine_incident,
    moved_channels,
    of_source,
)
from training.plant.utility import BadPlant

GOOD: dict[str, Any] = {
    "source": "mill-lane",
    "start_ns": 10,
    "end_ns": 20,
    "kind": "offset",
    "size": 3.0,
    "channels": ("flow",),
}


def test_the_kinds_are_the_six_of_instruments_and_the_five_of_machines() -> None:
    assert INSTRUMENT_KINDS == ("offset", "drift", "stuck", "noise", "scaling", "swap")
    assert len(MACHINE_KINDS) == 5
    assert set(PUMP_KINDS) < set(MACHINE_KINDS)
    assert [kind for kind, of in KINDS.items() if not of.sized] == ["stuck", "swap"]


@pytest.mark.parametrize("kind", MACHINE_KINDS)
def test_a_machine_fault_moves_channels_that_exist(kind: str) -> None:
    for pump in (1, 2):
        channels = moved_channels(kind, pump)
        assert 2 <= len(channels) == len(set(channels))
        assert set(channels) <= set(NAMES)


def test_a_check_valve_shows_at_its_own_vibration_and_at_the_other_pumps_drive() -> None:
    channels = moved_channels("recirculating_check_valve", 1)
    assert {"vibration_1", "speed_2", "current_2", "power"} <= set(channels)


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        ({"kind": "gremlin"}, "kind 'gremlin' is none of offset, drift"),
        ({"end_ns": 10}, "offset ends at or before its start"),
        ({"size": None}, "offset needs a size above 0, not None"),
        ({"size": -1.0}, "offset needs a size above 0, not -1.0"),
        ({"channels": ("flow", "power")}, r"offset concerns 1 channel\(s\), not 2"),
        ({"kind": "swap"}, r"swap concerns 2 channel\(s\), not 1"),
        ({"channels": ("colour",)}, "channel 'colour' is not one of the plant's"),
        ({"channels": ("pump_1",)}, "'pump_1' is a state"),
        ({"kind": "impeller_wear"}, "impeller_wear needs pump 1 or 2, not 0"),
    ],
)
def test_nonsense_is_refused_with_a_sentence(change: dict[str, Any], sentence: str) -> None:
    with pytest.raises(BadPlant, match=f"incident at 'mill-lane': {sentence}"):
        Incident(**{**GOOD, **change})


def test_a_machine_incident_must_be_of_a_machine_kind() -> None:
    with pytest.raises(BadPlant, match="'offset' is none of impeller_wear"):
        machine_incident("mill-lane", "offset", 0, 1, 3.0)


def test_incidents_of_a_source_come_in_order_of_time() -> None:
    later, other = Incident(**{**GOOD, "start_ns": 15}), Incident(**{**GOOD, "source": "elm"})
    first = Incident(**GOOD)
    assert of_source([later, other, first], "mill-lane") == (first, later)
