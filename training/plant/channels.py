"""The twenty instruments every station of the invented utility has.

The order of `INSTRUMENTS` is the order of columns everywhere in the plant. Accuracy
classes follow the trade's usual figures (Pt100: IEC 60751; transmitters: from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from scoring.channels import Channel, ChannelTable

# Words of a pump's state; the index is the number in the arrays.
PUMP_WORDS: Final = ("stopped", "running")
STOPPED: Final = 0.0
RUNNING: Final = 1.0

SUCTION_PRESSURE: Final = 0
DISCHARGE_PRESSURE: Final = 1
FLOW: Final = 2
RESERVOIR_LEVEL: Final = 3
PUMP_1: Final = 4
PUMP_2: Final = 5
SPEED_1: Final = 6
SPEED_2: Final = 7
CURRENT_1: Final = 8
CURRENT_2: Final = 9
POWER: Final = 10
BEARING_TEMPERATURE_1: Final = 11
BEARING_TEMPERATURE_2: Final = 12
WINDING_TEMPERATURE_1: Final = 13
WINDING_TEMPERATURE_2: Final = 14
VIBRATION_1: Final = 15
VIBRATION_2: Final = 16
VALVE_POSITION: Final = 17
WATER_TEMPERATURE: Final = 18
ROOM_TEMPERATURE: Final = 19
N_CHANNELS: Final = 20


@dataclass(frozen=True, slots=True)
class Instrument:
    """One instrument: what it is, and how it departs from the truth.

    unit, span, decimals: as reported; the resolution is ten to the minus `decimals`.
    accuracy, accuracy_of_reading: the class: half-width in the unit, plus a share of the
        reading. A station's own bias lies inside it and stays for good.
    noise, noise_of_reading: standard deviation of one reading, same two parts.
    lag_s: time constant of the first-order lag between process and reading.
    typical: reading in normal duty, to turn shares into units.
    spread: what one "size" of an incident is, in the unit: the accuracy class at the
        typical reading, or the normal spread of the reading given the operating point,
        whichever is larger. The operating point is which pump runs and the flow (for the
        flow itself: the speed); the spread is half the distance from the 16 % to the 84 %
        point of what a parabola over it leaves, in 28 healthy days, median over stations
        and seasons. Measured; tests/test_training_plant_channels.py measures it again.
    """

    name: str
    unit: str
    span: tuple[float, float]
    decimals: int
    accuracy: float
    accuracy_of_reading: float
    noise: float
    noise_of_reading: float
    lag_s: float
    typical: float
    spread: float
    is_state: bool = False

    @property
    def class_at_typical(self) -> float:
        """Half-width of the accuracy class at the typical reading, in the unit."""
        return self.accuracy + self.accuracy_of_reading * self.typical


def _state(name: str) -> Instrument:
    return Instrument(name, "", (0.0, 1.0), 0, 0, 0, 0, 0, 0.0, 1.0, 1.0, is_state=True)


# Accuracy classes. Pt100 after IEC 60751: class A 0.15 + 0.002 |t| K, class B 0.30 + 0.005 |t| K.
_PT100_A: Final = (0.15, 0.002)
_PT100_B: Final = (0.30, 0.005)
_SPEED: Final = ("rpm", (0.0, 1800.0), 0, 1.0, 0, 0, 0.0006, 5.0, 1330.0, 8.0)
_CURRENT: Final = ("A", (0.0, 120.0), 1, 0.1, 0.005, 0, 0.003, 5.0, 46.0, 0.70)
_BEARING: Final = ("degC", (-20.0, 150.0), 1, *_PT100_B, 0.06, 0, 60.0, 48.0, 1.9)
_WINDING: Final = ("degC", (-20.0, 200.0), 1, *_PT100_B, 0.06, 0, 90.0, 68.0, 3.5)
_VIBRATION: Final = ("mm/s", (0.0, 25.0), 2, 0, 0.05, 0.01, 0.04, 10.0, 1.5, 0.10)

# Columns: name, unit, span, decimals, accuracy and its share of reading, noise and its
# share of reading, lag in s, typical, spread.
INSTRUMENTS: Final[tuple[Instrument, ...]] = (
    Instrument("suction_pressure", "bar", (-1.0, 4.0), 3, 0.005, 0, 0.004, 0, 2.0, 0.6, 0.030),
    Instrument("discharge_pressure", "bar", (0.0, 10.0), 3, 0.010, 0, 0.006, 0, 2.0, 3.3, 0.020),
    Instrument("flow", "m3/h", (0.0, 600.0), 1, 0, 0.005, 0.3, 0.004, 10.0, 250.0, 4.2),
    Instrument("reservoir_level", "m", (0.0, 5.0), 3, 0.005, 0, 0.003, 0, 20.0, 3.0, 0.18),
    _state("pump_1"),
    _state("pump_2"),
    Instrument("speed_1", *_SPEED),
    Instrument("speed_2", *_SPEED),
    Instrument("current_1", *_CURRENT),
    Instrument("current_2", *_CURRENT),
    Instrument("power", "kW", (0.0, 150.0), 2, 0, 0.005, 0.05, 0.003, 5.0, 30.0, 0.46),
    Instrument("bearing_temperature_1", *_BEARING),
    Instrument("bearing_temperature_2", *_BEARING),
    Instrument("winding_temperature_1", *_WINDING),
    Instrument("winding_temperature_2", *_WINDING),
    Instrument("vibration_1", *_VIBRATION),
    Instrument("vibration_2", *_VIBRATION),
    Instrument("valve_position", "%", (0.0, 100.0), 1, 0.5, 0, 0.1, 0, 2.0, 90.0, 1.2),
    Instrument("water_temperature", "degC", (-5.0, 60.0), 2, *_PT100_A, 0.03, 0, 60.0, 11.0, 0.5),
    Instrument("room_temperature", "degC", (-20.0, 80.0), 1, *_PT100_B, 0.05, 0, 60.0, 20.0, 1.7),
)
NAMES: Final[tuple[str, ...]] = tuple(i.name for i in INSTRUMENTS)
assert len(INSTRUMENTS) == N_CHANNELS


def channel_table(step_s: float) -> ChannelTable:
    """Return what a site would write of these instruments, in the plant's order."""
    return ChannelTable(step_s=step_s, channel=tuple(_describe(i) for i in INSTRUMENTS))


def _describe(instrument: Instrument) -> Channel:
    if instrument.is_state:
        return Channel(name=instrument.name, kind="state", words=PUMP_WORDS)
    return Channel(
        name=instrument.name,
        unit=instrument.unit,
        span=instrument.span,
        resolution=10.0**-instrument.decimals,
        accuracy=round(instrument.class_at_typical, 6),
    )
