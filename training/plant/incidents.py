"""Incidents: what can go wrong, how it is drawn, which channels it moves.

Instrument faults change the reading of their channel and nothing else. Machine faults
act through the physics, so the control answers them; their channels are the ones that
move. Sizes are in multiples of the channel's `spread` (see training.plant.channels):
its accuracy class or its normal spread given the operating point, whichever is larger.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Final

from training.plant.channels import INSTRUMENTS, NAMES
from training.plant.utility import BadPlant


@dataclass(frozen=True, slots=True)
class Kind:
    """How one kind of incident behaves.

    rise: share of its time in which it grows in a straight line to its full size.
    sized: False where a size has no meaning: a stuck reading is off by whatever the
        process moved, a swap by what lies between two signals.
    of_machine: True for faults that act through the physics.
    """

    rise: float = 0.0
    sized: bool = True
    of_machine: bool = False


KINDS: Final[dict[str, Kind]] = {
    "offset": Kind(),
    "drift": Kind(rise=1.0),
    "stuck": Kind(sized=False),
    "noise": Kind(),
    "scaling": Kind(),
    "swap": Kind(sized=False),
    "impeller_wear": Kind(rise=0.25, of_machine=True),
    "recirculating_check_valve": Kind(of_machine=True),
    "blocked_strainer": Kind(rise=0.5, of_machine=True),
    "failing_bearing": Kind(rise=0.5, of_machine=True),
    "leak": Kind(of_machine=True),
}
INSTRUMENT_KINDS: Final = tuple(k for k, v in KINDS.items() if not v.of_machine)
MACHINE_KINDS: Final = tuple(k for k, v in KINDS.items() if v.of_machine)

# Machine faults of one pump; the others are the station's.
PUMP_KINDS: Final = ("impeller_wear", "recirculating_check_valve", "failing_bearing")

# The channels a machine fault moves; {k} is its pump, {o} the other one: those that move
# by about a quarter of the largest shift or more, in spreads. Where either pump may run
# meanwhile, both pumps' channels count. A leak draws the level down and flow answers.
_MOVED: Final[dict[str, tuple[str, ...]]] = {
    "impeller_wear": ("speed_{k}", "current_{k}", "power"),
    "recirculating_check_valve": ("speed_{o}", "current_{o}", "power", "vibration_{k}"),
    "blocked_strainer": (
        *("suction_pressure", "speed_1", "speed_2"),
        *("current_1", "current_2", "power"),
    ),
    "failing_bearing": ("vibration_{k}", "bearing_temperature_{k}"),
    "leak": (
        *("discharge_pressure", "flow", "reservoir_level", "speed_1", "speed_2"),
        *("current_1", "current_2", "power"),
    ),
}


@dataclass(frozen=True, slots=True)
class Incident:
    """A known period of trouble at one source.

    start_ns, end_ns: UTC nanoseconds since 1970; the end is the first moment without it.
    size: largest departure in spreads, None for kinds that have none. Of a machine
        fault: the largest shift among its channels at the station's mean flow.
    channels: the true channels: one; both of a swap; of a machine fault all it moves.
    pump: 1 or 2 for a fault of one pump, else 0.
    direction: +1 or -1 for offset, drift and scaling.
    """

    source: str
    start_ns: int
    end_ns: int
    kind: str
    size: float | None
    channels: tuple[str, ...]
    pump: int = 0
    direction: int = 1

    def __post_init__(self) -> None:
        _check(self)


def moved_channels(kind: str, pump: int = 0) -> tuple[str, ...]:
    """Return the names of the channels that a machine fault moves."""
    return tuple(name.format(k=pump, o=3 - pump) for name in _MOVED[kind])


def _check(incident: Incident) -> None:
    """Raise BadPlant with one sentence for an incident that makes no sense."""
    place = f"incident at {incident.source!r}"
    kind = KINDS.get(incident.kind)
    if kind is None:
        raise BadPlant(f"{place}: kind {incident.kind!r} is none of {', '.join(KINDS)}")
    if incident.start_ns >= incident.end_ns:
        raise BadPlant(f"{place}: {incident.kind} ends at or before its start")
    if kind.sized and not (incident.size is not None and 0 < incident.size < math.inf):
        raise BadPlant(f"{place}: {incident.kind} needs a size above 0, not {incident.size!r}")
    if incident.kind in PUMP_KINDS and incident.pump not in (1, 2):
        raise BadPlant(f"{place}: {incident.kind} needs pump 1 or 2, not {incident.pump!r}")
    wanted = 2 if incident.kind == "swap" else 1
    if not kind.of_machine and len(incident.channels) != wanted:
        raise BadPlant(
            f"{place}: {incident.kind} concerns {wanted} channel(s), not {len(incident.channels)}"
        )
    for name in incident.channels:
        if name not in NAMES:
            raise BadPlant(f"{place}: channel {name!r} is not one of the plant's")
        if not kind.of_machine and INSTRUMENTS[NAMES.index(name)].is_state:
            raise BadPlant(f"{place}: {name!r} is a state; instrument faults are of measurements")


def machine_incident(
    source: str, kind: str, start_ns: int, end_ns: int, size: float, pump: int = 0
) -> Incident:
    """Return a machine fault with the channels it moves filled in."""
    if kind not in _MOVED:
        raise BadPlant(f"incident at {source!r}: {kind!r} is none of {', '.join(_MOVED)}")
    channels = moved_channels(kind, pump)
    return Incident(source, start_ns, end_ns, kind, size, channels, pump)


def of_source(incidents: Iterable[Incident], source: str) -> tuple[Incident, ...]:
    """Return one source's incidents in order of their start."""
    own = (i for i in incidents if i.source == source)
    return tuple(sorted(own, key=lambda i: (i.start_ns, i.end_ns, i.kind)))
