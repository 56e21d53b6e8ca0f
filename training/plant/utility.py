"""Fennmoor Water, an invented utility: its stations, alike in design, each with offsets.

Every station lifts water from a suction main through a strainer, two pumps that take
turns, a meter and an outlet valve into a rising main that ends in a service reservoir.
Utility and places are made up; any likeness to a real one is chance.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from scoring.errors import OddbranchError
from training.plant.channels import INSTRUMENTS, N_CHANNELS

UTILITY: Final = "Fennmoor Water"
_FIRST: Final = (
    *("mill", "quarry", "orchard", "heron", "alder", "larch"),
    *("chapel", "bramble", "willow", "stone", "meadow", "harrow"),
)
_SECOND: Final = (
    *("lane", "rise", "bank", "green", "ford"),
    *("end", "hollow", "gate", "moor", "cross"),
)
# Twelve times ten names, each used once.
MAX_STATIONS: Final = len(_FIRST) * len(_SECOND)

# Branches of the seed's tree, so that no two uses ever share random numbers.
SEED_STATION: Final = 0
SEED_WEATHER: Final = 1
SEED_DAY: Final = 2
SEED_INCIDENT: Final = 3

RATED_RPM: Final = 1480.0  # 4 poles at 50 Hz, slip 1.3 %
RATED_KW: Final = 45.0
VOLTAGE_V: Final = 400.0


class BadPlant(OddbranchError):
    """The plant was asked for something it cannot simulate."""


class PumpSet(NamedTuple):
    """One pump with its motor, as the compiled loop takes it.

    shutoff_m, fall: head = shutoff * speed^2 - fall * flow^2. best_flow_m3h at rated
    speed. Rises in K over the surroundings at full speed and rated power.
    """

    shutoff_m: float
    fall: float
    best_flow_m3h: float
    best_efficiency: float
    bearing_rise_k: float
    winding_rise_k: float
    vibration_mm_s: float


class Physics(NamedTuple):
    """One station's constants, as the compiled loop takes them.

    static_m: reservoir floor above the station. resistance: rising main, m per (m3/h)^2.
    strainer, valve: the same for a clean strainer and the fully open outlet valve.
    supply_m: mean head of the suction main. sag_m: its fall when the town draws most.
    demand_m3h: yearly mean. level_set_m, area_m2, overflow_m: the reservoir.
    assist_on_m3h, assist_off_m3h: wanted flow at which the second pump joins and leaves.
    """

    pumps: tuple[PumpSet, PumpSet]
    static_m: float
    resistance: float
    strainer: float
    valve: float
    supply_m: float
    sag_m: float
    demand_m3h: float
    level_set_m: float
    area_m2: float
    overflow_m: float
    assist_on_m3h: float
    assist_off_m3h: float
    auxiliary_kw: float
    room_offset_k: float
    water_offset_k: float


@dataclass(frozen=True, slots=True)
class Station:
    """One station.

    duty_period_h: how long one pump has the duty. duty_offset_h: when it changes, after
        the first record. demand_shift_h: how much later its town wakes.
    bias, gain: (n_channels,) reading = truth * gain + bias, inside the accuracy class.
    """

    number: int
    name: str
    physics: Physics
    duty_period_h: float
    duty_offset_h: float
    demand_shift_h: float
    bias: NDArray[np.float64]
    gain: NDArray[np.float64]


def station_name(number: int) -> str:
    """Return the name of a station, counted from 0; every number has its own."""
    second = (number + number // 60) % len(_SECOND)
    return f"{_FIRST[number % len(_FIRST)]}-{_SECOND[second]}"


def build_stations(seed: int, n_stations: int) -> tuple[Station, ...]:
    """Return the first stations of a seed's utility; a longer list starts with a shorter.

    Raises BadPlant for fewer than 1 or more than MAX_STATIONS stations.
    """
    if not 1 <= n_stations <= MAX_STATIONS:
        raise BadPlant(f"n_stations = {n_stations} is outside 1 to {MAX_STATIONS}")
    return tuple(_build_station(seed, number) for number in range(n_stations))


def _build_station(seed: int, number: int) -> Station:
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(SEED_STATION, number)))
    physics = _draw_physics(rng)
    period_h = float(rng.choice([8.0, 12.0, 24.0]))
    offset_h = float(rng.uniform(0.0, period_h))
    shift_h = float(rng.uniform(-0.7, 0.7))
    # A calibrated instrument sits well inside its class: two thirds of it at most.
    where = rng.uniform(-0.67, 0.67, N_CHANNELS)
    bias = where * np.array([i.accuracy for i in INSTRUMENTS])
    gain = 1.0 + where * np.array([i.accuracy_of_reading for i in INSTRUMENTS])
    return Station(number, station_name(number), physics, period_h, offset_h, shift_h, bias, gain)


def _draw_physics(rng: np.random.Generator) -> Physics:
    """Draw one station's constants around the common design: 250 m3/h, 32 m, 45 kW."""
    demand = 250.0 * float(rng.uniform(0.88, 1.12))
    static = float(rng.uniform(21.0, 27.0))
    supply, sag = float(rng.uniform(6.0, 9.0)), float(rng.uniform(0.8, 1.8))
    level_set = float(rng.uniform(2.7, 3.3))
    # Losses in m at the mean flow, in the rising main, the strainer and the valve.
    losses = rng.uniform([4.5, 0.6, 0.8], [7.5, 1.0, 1.2]) / demand**2
    duty_head = static + level_set - supply + 0.5 * sag + float(losses.sum()) * demand**2
    trim = float(rng.uniform(0.88, 0.92))
    best = float(rng.uniform(0.77, 0.81))
    return Physics(
        pumps=(
            _draw_pump(rng, duty_head, demand, trim, best),
            _draw_pump(rng, duty_head, demand, trim, best),
        ),
        static_m=static,
        resistance=float(losses[0]),
        strainer=float(losses[1]),
        valve=float(losses[2]),
        supply_m=supply,
        sag_m=sag,
        demand_m3h=demand,
        level_set_m=level_set,
        area_m2=demand * float(rng.uniform(1.9, 2.4)),
        overflow_m=4.6,
        assist_on_m3h=demand * 1.30,
        assist_off_m3h=demand * 1.17,
        auxiliary_kw=float(rng.uniform(0.8, 1.8)),
        room_offset_k=float(rng.uniform(-2.0, 2.0)),
        water_offset_k=float(rng.uniform(-0.8, 0.8)),
    )


def _draw_pump(
    rng: np.random.Generator, duty_head_m: float, demand_m3h: float, trim: float, best: float
) -> PumpSet:
    """Draw a pump trimmed for its place: mean flow at the speed ratio `trim`, less wear."""
    fall = float(rng.uniform(9.6e-5, 10.4e-5))
    wear = float(rng.uniform(0.0, 0.03))
    return PumpSet(
        shutoff_m=(duty_head_m + fall * demand_m3h**2) / trim**2 * (1.0 - wear),
        fall=fall,
        best_flow_m3h=1.12 * demand_m3h * (1.0 - 0.5 * wear),
        best_efficiency=best - 0.5 * wear,
        bearing_rise_k=float(rng.uniform(27.0, 33.0)),
        winding_rise_k=float(rng.uniform(76.0, 88.0)),
        vibration_mm_s=float(rng.uniform(1.6, 2.5)),
    )
