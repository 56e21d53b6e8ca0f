"""The stream: same seed same bytes, any chunk length, no memory, and what a record holds."""

from __future__ import annotations

import dataclasses
import hashlib
import tracemalloc
from collections.abc import Iterable
from datetime import UTC, datetime, timedelta, timezone
from typing import Any

import numpy as np
import pytest

from training.plant import channels as ch
from training.plant.channels import INSTRUMENTS, N_CHANNELS
from training.plant.draw import IncidentRates
from training.plant.incidents import Incident
from training.plant.simulate import Chunk, PlantConfig, incidents_of, simulate
from training.plant.utility import BadPlant

CONFIG = PlantConfig(
    seed=41,
    n_stations=2,
    start=datetime(2026, 3, 2, tzinfo=UTC),
    days=3,
    step_s=60,
    rates=IncidentRates(2.0),
)


def digest(chunks: Iterable[Chunk]) -> dict[str, str]:
    """Return a hash of every source's bytes, whatever chunks they came in."""
    hashes: dict[str, Any] = {}
    for chunk in chunks:
        own = hashes.setdefault(chunk.source, (hashlib.sha256(), hashlib.sha256()))
        own[0].update(chunk.times_ns.tobytes())
        own[1].update(chunk.values.tobytes())
    return {source: a.hexdigest() + b.hexdigest() for source, (a, b) in hashes.items()}


def test_the_same_seed_gives_the_same_bytes_and_another_seed_does_not() -> None:
    assert digest(simulate(CONFIG)) == digest(simulate(CONFIG))
    assert digest(simulate(CONFIG)) != digest(simulate(dataclasses.replace(CONFIG, seed=42)))


@pytest.mark.parametrize("chunk_hours", [0.5, 7.0, 36.0, 1000.0])
def test_the_bytes_do_not_depend_on_the_length_of_chunks(chunk_hours: float) -> None:
    assert digest(simulate(CONFIG, chunk_hours=chunk_hours)) == digest(simulate(CONFIG))


def test_a_station_does_not_depend_on_how_many_others_there_are() -> None:
    alone = digest(simulate(dataclasses.replace(CONFIG, n_stations=1)))
    assert alone["mill-lane"] == digest(simulate(CONFIG))["mill-lane"]


def test_a_longer_run_begins_with_the_shorter() -> None:
    longer = simulate(dataclasses.replace(CONFIG, days=4))
    first = [chunk for _, chunk in zip(range(6), longer, strict=False)]
    assert digest(first) == digest(simulate(CONFIG))


def test_incidents_change_records_only_where_they_act() -> None:
    quiet = dataclasses.replace(CONFIG, rates=IncidentRates(0.0), silences=False)
    own = Incident(
        "mill-lane",
        CONFIG.origin_ns + 26 * 3_600_000_000_000,
        CONFIG.origin_ns + 30 * 3_600_000_000_000,
        "offset",
        5.0,
        ("flow",),
    )
    disturbed = dataclasses.replace(quiet, incidents=(own,))
    for a, b in zip(simulate(quiet), simulate(disturbed), strict=True):
        rows = np.flatnonzero((a.values != b.values).any(axis=1))
        inside = (a.times_ns >= own.start_ns) & (a.times_ns < own.end_ns)
        expected = np.flatnonzero(inside & (a.source == "mill-lane"))
        assert np.array_equal(rows, expected)


def test_memory_does_not_grow_with_the_days() -> None:
    def peak_bytes(days: int) -> int:
        config = PlantConfig(seed=43, n_stations=2, days=days, step_s=10)
        tracemalloc.start()
        for _ in simulate(config):
            pass
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        return peak

    peak_bytes(1)
    assert peak_bytes(10) < 1.1 * peak_bytes(2)


def test_chunks_come_by_day_and_station_on_the_time_grid() -> None:
    config = dataclasses.replace(CONFIG, silences=False)
    chunks = list(simulate(config))
    assert [c.source for c in chunks] == ["mill-lane", "quarry-rise"] * 3
    for number, chunk in enumerate(chunks):
        grid = config.origin_ns + (number // 2 * 1440 + np.arange(1440)) * 60_000_000_000
        assert np.array_equal(chunk.times_ns, grid)
        assert chunk.values.shape == (1440, N_CHANNELS)
        assert not np.isnan(chunk.values).any()


def test_silences_leave_out_records_and_readings_and_touch_no_other() -> None:
    days = dataclasses.replace(CONFIG, days=20, n_stations=1)
    full = dataclasses.replace(days, silences=False)
    heard = np.concatenate([c.times_ns for c in simulate(days)])
    readings = np.concatenate([c.values for c in simulate(days)])
    all_times = np.concatenate([c.times_ns for c in simulate(full)])
    all_readings = np.concatenate([c.values for c in simulate(full)])
    assert 0.9 < len(heard) / len(all_times) < 1.0
    missing = np.isnan(readings)
    assert 0.0 < missing.mean() < 0.02
    kept = np.isin(all_times, heard)
    assert np.array_equal(readings[~missing], all_readings[kept][~missing])


def test_the_first_record_is_as_warm_as_the_day_after() -> None:
    config = dataclasses.replace(CONFIG, rates=IncidentRates(0.0), silences=False)
    for first, second in zip(*(list(simulate(config))[i : i + 2] for i in (0, 2)), strict=True):
        room = ch.ROOM_TEMPERATURE
        assert abs(first.values[0, room] - second.values[0, room]) < 4.0


def test_readings_are_reported_as_the_instruments_can() -> None:
    for chunk in simulate(CONFIG):
        for number, instrument in enumerate(INSTRUMENTS):
            column = chunk.values[:, number]
            column = column[~np.isnan(column)]
            assert column.min() >= instrument.span[0]
            assert column.max() <= instrument.span[1]
            if instrument.is_state:
                assert set(column) <= {0.0, 1.0}


def test_one_pump_at_least_always_runs_and_flow_goes_with_it() -> None:
    config = dataclasses.replace(CONFIG, rates=IncidentRates(0.0), silences=False)
    for chunk in simulate(config):
        assert chunk.values[:, [ch.PUMP_1, ch.PUMP_2]].sum(axis=1).min() == 1.0
        assert chunk.values[:, ch.FLOW].min() > 60.0


def test_drawn_incidents_keep_the_quiet_days_quiet() -> None:
    config = dataclasses.replace(CONFIG, days=20, quiet_days=15)
    incidents = incidents_of(config)
    quiet_end = config.origin_ns + 15 * 86_400_000_000_000
    assert len(incidents) > 5
    assert min(i.start_ns for i in incidents) >= quiet_end
    from_the_start = incidents_of(dataclasses.replace(config, quiet_days=0))
    assert [i for i in from_the_start if i.start_ns >= quiet_end] == list(incidents)


def test_a_start_with_an_offset_is_the_same_moment_in_utc() -> None:
    berlin = datetime(2026, 3, 2, 1, tzinfo=timezone(timedelta(hours=1)))
    shifted = dataclasses.replace(CONFIG, start=berlin)
    assert shifted.origin_ns == CONFIG.origin_ns == 1_772_409_600_000_000_000


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        ({"step_s": 7}, "step_s = 7 must divide a day and lie in 1 to 3600"),
        ({"step_s": 7200}, "step_s = 7200 must divide"),
        ({"days": 0}, "days = 0 and quiet_days = 0 are too few"),
        ({"seed": -1}, "seed = -1 must not be negative"),
        ({"start": datetime(2026, 3, 2)}, "start = 2026-03-02T00:00:00 needs an offset"),  # noqa: DTZ001 - the point of the case
        ({"start": datetime(1969, 1, 1, tzinfo=UTC)}, "outside the years 1970 to 2199"),
        (
            {"incidents": (Incident("elm", 0, 1, "stuck", None, ("flow",)),)},
            "an incident names 'elm', which is not simulated",
        ),
    ],
)
def test_a_configuration_that_makes_no_sense_is_refused(
    change: dict[str, Any], sentence: str
) -> None:
    with pytest.raises(BadPlant, match=sentence):
        dataclasses.replace(CONFIG, **change)
