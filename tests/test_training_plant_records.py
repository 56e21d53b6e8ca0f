"""Records as they are posted: in order of time, with words and gaps."""

from __future__ import annotations

import dataclasses
from datetime import UTC, datetime

import numpy as np

from training.plant import channels as ch
from training.plant.channels import NAMES
from training.plant.records import records_of, rfc3339
from training.plant.simulate import PlantConfig, simulate

START = datetime(2026, 3, 2, tzinfo=UTC)
CONFIG = PlantConfig(seed=71, n_stations=3, start=START, days=1, step_s=600)
CHUNKS = list(simulate(CONFIG))


def test_records_of_all_stations_come_in_order_of_time() -> None:
    records = list(records_of(CHUNKS))
    assert len(records) == sum(len(c.times_ns) for c in CHUNKS)
    times = [record["time"] for record in records]
    assert times == sorted(times)
    assert [r["source"] for r in records[:3]] == ["mill-lane", "quarry-rise", "orchard-bank"]


def test_a_record_has_words_for_states_none_for_gaps_and_plain_numbers() -> None:
    values = CHUNKS[0].values[:1].copy()
    values[0, ch.FLOW], values[0, ch.PUMP_1], values[0, ch.PUMP_2] = np.nan, 1.0, 0.0
    chunk = dataclasses.replace(CHUNKS[0], times_ns=CHUNKS[0].times_ns[:1], values=values)
    record = next(records_of([chunk]))
    assert record["time"] == "2026-03-02T00:00:00Z"
    assert tuple(record["readings"]) == NAMES
    assert record["readings"]["flow"] is None
    assert (record["readings"]["pump_1"], record["readings"]["pump_2"]) == ("running", "stopped")
    assert type(record["readings"]["power"]) is float


def test_no_chunks_give_no_records() -> None:
    assert list(records_of([])) == []


def test_times_keep_their_milliseconds_where_there_are_any() -> None:
    times = np.array([0, 1_500_000_000], dtype=np.int64)
    assert rfc3339(times) == ["1970-01-01T00:00:00.000Z", "1970-01-01T00:00:01.500Z"]
    assert rfc3339(times[:1]) == ["1970-01-01T00:00:00Z"]
