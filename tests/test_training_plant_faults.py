"""Each kind of incident changes its channels, as it should, and leaves the others alone."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from training.plant.channels import INSTRUMENTS, NAMES
from training.plant.faults import draw_noise, growth
from training.plant.incidents import MACHINE_KINDS, PUMP_KINDS, Incident, machine_incident
from training.plant.instruments import SPREAD, TYPICAL
from training.plant.simulate import PlantConfig, simulate, start_runs

HOUR_NS = 3_600_000_000_000
# A working day in winter: one pump is enough all day, so that a fault which draws more
# water does not also decide when the second pump joins and warms up.
START_OF_RUN = datetime(2026, 1, 14, tzinfo=UTC)
BASE: dict[str, Any] = {
    "seed": 31,
    "n_stations": 1,
    "start": START_OF_RUN,
    "days": 1,
    "step_s": 60,
    "silences": False,
}
ORIGIN_NS = PlantConfig(**BASE).origin_ns
START, END = ORIGIN_NS + 6 * HOUR_NS, ORIGIN_NS + 12 * HOUR_NS
ROWS = slice(360, 720)
OUTSIDE = np.r_[0:360, 720:1440]


def run(*incidents: Incident) -> NDArray[np.float64]:
    return next(simulate(PlantConfig(**BASE, incidents=incidents))).values


HEALTH = run()


def fault(kind: str, *channels: str, size: float | None = 6.0, direction: int = 1) -> Incident:
    return Incident("mill-lane", START, END, kind, size, channels, direction=direction)


def changed(values: NDArray[np.float64]) -> set[str]:
    return {NAMES[j] for j in np.flatnonzero((values != HEALTH).any(axis=0))}


@pytest.mark.parametrize(
    "incident",
    [
        fault("offset", "flow"),
        fault("drift", "reservoir_level"),
        fault("stuck", "power", size=None),
        fault("noise", "suction_pressure"),
        fault("scaling", "discharge_pressure"),
        fault("swap", "current_1", "current_2", size=None),
    ],
    ids=lambda i: str(i.kind),
)
def test_an_instrument_fault_changes_exactly_its_channels_and_only_while_it_lasts(
    incident: Incident,
) -> None:
    values = run(incident)
    assert changed(values) == set(incident.channels)
    assert np.array_equal(values[OUTSIDE], HEALTH[OUTSIDE])
    for name in incident.channels:
        number = NAMES.index(name)
        off = np.abs(values[ROWS, number] - HEALTH[ROWS, number])
        assert off.max() > SPREAD[number]


def difference(incident: Incident) -> NDArray[np.float64]:
    number = NAMES.index(incident.channels[0])
    off: NDArray[np.float64] = (run(incident) - HEALTH)[ROWS, number] / SPREAD[number]
    return off


def test_an_offset_is_its_size_throughout_in_either_direction() -> None:
    for direction in (1, -1):
        off = difference(fault("offset", "flow", direction=direction))
        assert off == pytest.approx(np.full(360, 6.0 * direction), abs=0.03)


def test_a_drift_grows_in_a_line_to_its_size() -> None:
    off = difference(fault("drift", "flow"))
    assert off == pytest.approx(np.linspace(0.0, 6.0, 361)[:-1], abs=0.03)


def test_a_stuck_reading_repeats_its_first_value() -> None:
    values = run(fault("stuck", "flow", size=None))
    flow = NAMES.index("flow")
    assert np.all(values[ROWS, flow] == HEALTH[360, flow])


def test_noise_has_its_size_as_standard_deviation_around_the_truth() -> None:
    off = difference(fault("noise", "flow"))
    assert off.std() == pytest.approx(6.0, rel=0.15)
    assert off.mean() == pytest.approx(0.0, abs=1.5)


def test_wrong_scaling_is_its_size_at_the_typical_reading() -> None:
    values, flow = run(fault("scaling", "flow")), NAMES.index("flow")
    factor = values[ROWS, flow] / HEALTH[ROWS, flow]
    assert factor == pytest.approx(1.0 + 6.0 * SPREAD[flow] / TYPICAL[flow], rel=1e-3)


def test_swapped_signals_stand_on_each_others_place() -> None:
    values = run(fault("swap", "bearing_temperature_1", "winding_temperature_1", size=None))
    a, b = NAMES.index("bearing_temperature_1"), NAMES.index("winding_temperature_1")
    assert np.array_equal(values[ROWS, a], HEALTH[ROWS, b])
    assert np.array_equal(values[ROWS, b], HEALTH[ROWS, a])


def test_a_faulty_reading_still_stays_within_its_span() -> None:
    values = run(fault("offset", "vibration_1", size=1000.0))
    assert values[ROWS, NAMES.index("vibration_1")].max() == 25.0


def duty_at_nine() -> int:
    return 1 if HEALTH[540, NAMES.index("pump_1")] == 1 else 2


@pytest.mark.parametrize("kind", MACHINE_KINDS)
def test_a_machine_fault_visibly_moves_its_channels_and_hardly_any_other(kind: str) -> None:
    duty = duty_at_nine()
    pump = 3 - duty if kind == "recirculating_check_valve" else duty
    incident = machine_incident(
        "mill-lane", kind, START, END, 8.0, pump if kind in PUMP_KINDS else 0
    )
    values = run(incident)
    assert np.array_equal(values[:360], HEALTH[:360])
    shift = np.abs((values - HEALTH)[ROWS]).mean(axis=0) / SPREAD
    idle = f"_{3 - duty}"
    for number, name in enumerate(NAMES):
        if INSTRUMENTS[number].is_state:
            continue
        if name not in incident.channels:
            assert shift[number] < 1.5, name
        elif incident.pump or not name.endswith(idle):
            # Flow answers a leak through the level, which takes longer than six hours.
            assert shift[number] > (0.6 if name != "flow" else 0.1), name


def test_wear_acts_through_the_control_which_turns_faster_and_keeps_the_flow() -> None:
    duty = duty_at_nine()
    values = run(machine_incident("mill-lane", "impeller_wear", START, END, 8.0, duty))
    off = (values - HEALTH)[600:720].mean(axis=0) / SPREAD
    assert off[NAMES.index(f"speed_{duty}")] > 5.0
    assert off[NAMES.index("power")] > 1.0
    assert abs(off[NAMES.index("flow")]) < 0.05


def test_a_leak_lowers_the_discharge_pressure_and_drains_the_reservoir() -> None:
    values = run(machine_incident("mill-lane", "leak", START, END, 8.0))
    off = (values - HEALTH)[700:720].mean(axis=0) / SPREAD
    assert off[NAMES.index("discharge_pressure")] < -5.0
    assert off[NAMES.index("reservoir_level")] < -1.0


def test_growth_is_zero_outside_and_reaches_one_inside() -> None:
    times = START + np.arange(-2, 8, dtype=np.int64) * HOUR_NS
    drift = growth(fault("drift", "flow"), times)
    assert list(drift) == pytest.approx([0, 0, 0, 1 / 6, 2 / 6, 3 / 6, 4 / 6, 5 / 6, 0, 0])
    wear = growth(machine_incident("mill-lane", "impeller_wear", START, END, 1.0, 1), times)
    assert list(wear) == pytest.approx([0, 0, 0, 2 / 3, 1, 1, 1, 1, 0, 0])


def test_an_incident_between_two_records_changes_nothing() -> None:
    brief = Incident("mill-lane", START + 10**9, START + 2 * 10**9, "stuck", None, ("flow",))
    assert np.array_equal(run(brief), HEALTH)


def test_a_stuck_reading_outlasts_the_chunk_it_began_in() -> None:
    incident = fault("stuck", "flow", size=None)
    config = PlantConfig(**BASE, incidents=(incident,))
    parts = [chunk.values for chunk in simulate(config, chunk_hours=2.5)]
    assert np.array_equal(np.concatenate(parts), run(incident))


def test_noise_of_one_channel_and_day_is_its_own() -> None:
    one = draw_noise(1, 0, 1, 2, 1440)
    assert np.array_equal(one, draw_noise(1, 0, 1, 2, 1440))
    for other in ((2, 0, 1, 2), (1, 1, 1, 2), (1, 0, 2, 2), (1, 0, 1, 3)):
        assert not np.array_equal(one, draw_noise(*other, 1440))


def test_a_station_takes_its_own_incidents_only() -> None:
    config = PlantConfig(**{**BASE, "n_stations": 2}, incidents=(fault("offset", "flow"),))
    healthy = PlantConfig(**{**BASE, "n_stations": 2})
    second, sound = start_runs(config)[1], start_runs(healthy)[1]
    assert np.array_equal(second.advance(1440).values, sound.advance(1440).values)
