"""Drawing incidents: when, which kind, how big, at which channels.

A day of a station is cut into equal slots with at most one incident each, so that
incidents never overlap and the machine is well again before the next one.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from training.plant.asked import duty_at
from training.plant.channels import INSTRUMENTS
from training.plant.incidents import (
    KINDS,
    PUMP_KINDS,
    Incident,
    machine_incident,
)
from training.plant.utility import SEED_INCIDENT, BadPlant, Station

_NS: Final = 1_000_000_000
_HOUR_NS: Final = 3600 * _NS
# Time to recover before the slot ends: temperatures, the level, sustained scores.
_RECOVERY_SHARE: Final = 0.2

# Pairs of like signals that end up on each other's terminals.
_SWAPS: Final = (
    ("suction_pressure", "discharge_pressure"),
    ("speed_1", "speed_2"),
    ("current_1", "current_2"),
    ("bearing_temperature_1", "bearing_temperature_2"),
    ("winding_temperature_1", "winding_temperature_2"),
    ("bearing_temperature_{k}", "winding_temperature_{k}"),
    ("vibration_1", "vibration_2"),
    ("water_temperature", "room_temperature"),
)


@dataclass(frozen=True, slots=True)
class IncidentRates:
    """How incidents are drawn.

    per_station_day: expected number; 0 draws none.
    sizes: smallest and largest size in spreads, drawn log-uniformly; half of them lie
        below the geometric mean of the two, 3 as shipped.
    hours: shortest and longest duration, drawn log-uniformly, at most four fifths of a slot.
    kinds: drawn with equal probability.
    """

    per_station_day: float = 0.0
    sizes: tuple[float, float] = (0.75, 12.0)
    hours: tuple[float, float] = (2.0, 10.0)
    kinds: tuple[str, ...] = tuple(KINDS)

    def __post_init__(self) -> None:
        if not 0 <= self.per_station_day <= 24:
            raise BadPlant(f"per_station_day = {self.per_station_day} is outside 0 to 24")
        for name, (low, high) in (("sizes", self.sizes), ("hours", self.hours)):
            if not 0 < low <= high < math.inf:
                raise BadPlant(f"{name} = {(low, high)} must be above 0 and rise")
        unknown = [kind for kind in self.kinds if kind not in KINDS]
        if unknown or not self.kinds:
            raise BadPlant(f"kinds = {self.kinds} must be some of {', '.join(KINDS)}")


def draw_incidents(
    rates: IncidentRates, seed: int, station: Station, origin_ns: int, days: range
) -> tuple[Incident, ...]:
    """Return one station's incidents on these days, in order of time.

    origin_ns: time of the run's first record; day d begins d times 24 h after it. A day's
        incidents do not depend on which other days are drawn.
    """
    if rates.per_station_day == 0:
        return ()
    n_slots = max(1, math.ceil(rates.per_station_day))
    drawn: list[Incident] = []
    for day in days:
        key = (SEED_INCIDENT, station.number, day)
        rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=key))
        for slot in range(n_slots):
            if rng.uniform() < rates.per_station_day / n_slots:
                slot_ns = 24 * _HOUR_NS // n_slots
                start_ns = origin_ns + day * 24 * _HOUR_NS + slot * slot_ns
                drawn.append(_draw_one(rates, rng, station, origin_ns, start_ns, slot_ns))
    return tuple(drawn)


def _draw_one(
    rates: IncidentRates,
    rng: np.random.Generator,
    station: Station,
    origin_ns: int,
    slot_start_ns: int,
    slot_ns: int,
) -> Incident:
    room_ns = (1.0 - _RECOVERY_SHARE) * slot_ns
    long_ns = min(_log_uniform(rng, rates.hours) * _HOUR_NS, room_ns)
    # Whole seconds, as people write them.
    start_ns = slot_start_ns + int(rng.uniform(0.0, room_ns - long_ns)) // _NS * _NS
    end_ns = start_ns + int(long_ns) // _NS * _NS
    kind = str(rng.choice(list(rates.kinds)))
    size = _log_uniform(rng, rates.sizes)
    middle_s = np.array([0.5 * (start_ns + end_ns) / _NS])
    duty = int(duty_at(station, origin_ns / _NS, middle_s)[0][0]) + 1
    if KINDS[kind].of_machine:
        # A check valve leaks while its pump stands; the other faults show while it runs.
        pump = 3 - duty if kind == "recirculating_check_valve" else duty
        pump = pump if kind in PUMP_KINDS else 0
        return machine_incident(station.name, kind, start_ns, end_ns, size, pump)
    channels = _draw_channels(rng, kind, duty)
    direction = int(rng.choice([-1, 1]))
    drawn_size = size if KINDS[kind].sized else None
    return Incident(station.name, start_ns, end_ns, kind, drawn_size, channels, direction=direction)


def _draw_channels(rng: np.random.Generator, kind: str, duty: int) -> tuple[str, ...]:
    """Draw an instrument, or a pair to swap; of the two pumps' the one on duty."""
    if kind == "swap":
        first, second = _SWAPS[int(rng.integers(len(_SWAPS)))]
        return first.format(k=duty), second.format(k=duty)
    idle = f"_{3 - duty}"
    names = [i.name for i in INSTRUMENTS if not i.is_state and not i.name.endswith(idle)]
    return (str(rng.choice(names)),)


def _log_uniform(rng: np.random.Generator, limits: tuple[float, float]) -> float:
    return math.exp(rng.uniform(math.log(limits[0]), math.log(limits[1])))
