"""The instrument table: complete, consistent, and its spreads as measured."""

from __future__ import annotations

from datetime import UTC, datetime

import numpy as np
import pytest
from numpy.typing import NDArray

from training.plant import channels as ch
from training.plant.channels import INSTRUMENTS, NAMES, channel_table
from training.plant.simulate import PlantConfig, simulate

PUMP_CHANNELS = ("speed", "current", "bearing_temperature", "winding_temperature", "vibration")


def test_every_channel_stands_at_the_number_that_is_named_after_it() -> None:
    assert len(set(NAMES)) == len(NAMES) == ch.N_CHANNELS == 20
    for number, name in enumerate(NAMES):
        assert getattr(ch, name.upper()) == number


def test_the_channel_table_describes_the_instruments_in_order() -> None:
    table = channel_table(60.0)
    assert tuple(c.name for c in table.instruments) == NAMES
    assert table.step_s == 60.0
    flow, pump = table.channel[ch.FLOW], table.channel[ch.PUMP_1]
    assert (flow.unit, flow.span, flow.resolution) == ("m3/h", (0.0, 600.0), 0.1)
    assert flow.accuracy == pytest.approx(1.25)
    assert pump.is_state
    assert pump.words == ("stopped", "running")


@pytest.mark.parametrize(
    ("name", "at_c", "limit_k"),
    [("bearing_temperature_1", 100.0, 0.8), ("water_temperature", 100.0, 0.35)],
)
def test_thermometers_keep_the_limits_of_their_class(
    name: str, at_c: float, limit_k: float
) -> None:
    # IEC 60751: class B 0.8 K and class A 0.35 K at 100 degC.
    instrument = INSTRUMENTS[NAMES.index(name)]
    limit = instrument.accuracy + instrument.accuracy_of_reading * at_c
    assert limit == pytest.approx(limit_k)


def test_no_spread_is_smaller_than_the_accuracy_class() -> None:
    for instrument in INSTRUMENTS:
        assert instrument.spread >= instrument.class_at_typical


def test_the_stated_spreads_are_those_of_readings_at_a_given_operating_point() -> None:
    start = datetime(2026, 3, 2, tzinfo=UTC)
    config = PlantConfig(seed=21, n_stations=4, start=start, days=28, step_s=300, silences=False)
    measured = np.median([_spreads(rows) for rows in _by_source(config)], axis=0)
    for number, instrument in enumerate(INSTRUMENTS):
        if not instrument.is_state:
            wanted = max(measured[number], instrument.class_at_typical)
            assert instrument.spread == pytest.approx(wanted, rel=0.35), instrument.name


def _by_source(config: PlantConfig) -> list[NDArray[np.float64]]:
    parts: dict[str, list[NDArray[np.float64]]] = {}
    for chunk in simulate(config):
        parts.setdefault(chunk.source, []).append(chunk.values)
    return [np.concatenate(rows) for rows in parts.values()]


def _spreads(rows: NDArray[np.float64]) -> NDArray[np.float64]:
    """Measure what `Instrument.spread` says, pump by pump."""
    spreads = np.zeros((2, len(NAMES)))
    for pump in (0, 1):
        alone = (rows[:, ch.PUMP_1 + pump] == 1) & (rows[:, ch.PUMP_2 - pump] == 0)
        for number in range(len(NAMES)):
            by = ch.FLOW if number != ch.FLOW else ch.SPEED_1 + pump
            x = (rows[alone, by] - rows[alone, by].mean()) / rows[alone, by].std()
            y = rows[alone, number]
            rest = y - np.polyval(np.polyfit(x, y, 2), x)
            low, high = np.quantile(rest, [0.16, 0.84])
            spreads[pump, number] = 0.5 * (high - low)
    both: NDArray[np.float64] = np.sqrt(np.square(spreads).mean(axis=0))
    for name in PUMP_CHANNELS:
        for pump in (0, 1):
            number = NAMES.index(f"{name}_{pump + 1}")
            both[number] = spreads[pump, number]
    return both
