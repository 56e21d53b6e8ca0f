"""Exports read back with general-purpose readers give the records that went in."""

from __future__ import annotations

import csv
import dataclasses
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
from numpy.typing import NDArray

from training.plant.channels import INSTRUMENTS, NAMES, PUMP_WORDS
from training.plant.draw import IncidentRates
from training.plant.incidents import Incident
from training.plant.simulate import PlantConfig, incidents_of, simulate
from training.plant.utility import BadPlant
from training.plant.writers import (
    SEMICOLON,
    CsvForm,
    write_incidents,
    write_long_csv,
    write_parquet,
    write_wide_csv,
)

START = datetime(2026, 3, 2, tzinfo=UTC)
CONFIG = PlantConfig(
    seed=51, n_stations=2, start=START, days=2, step_s=600, rates=IncidentRates(3.0)
)
CHUNKS = list(simulate(CONFIG))
VALUES = np.concatenate([c.values for c in CHUNKS])
TIMES = pd.to_datetime(np.concatenate([c.times_ns for c in CHUNKS]), utc=True)
SOURCES = [c.source for c in CHUNKS for _ in c.times_ns]


def numbers(frame: pd.DataFrame) -> NDArray[np.float64]:
    """Return a wide frame's channels as the plant's array, words as their index."""
    values = np.empty((len(frame), len(NAMES)))
    for j, name in enumerate(NAMES):
        column = frame[name]
        if INSTRUMENTS[j].is_state:
            column = column.map({word: float(i) for i, word in enumerate(PUMP_WORDS)})
        values[:, j] = column.to_numpy(dtype=np.float64)
    return values


def test_a_wide_csv_holds_every_record_once_in_order(tmp_path: Path) -> None:
    path = tmp_path / "wide.csv"
    assert write_wide_csv(CHUNKS, path) == len(VALUES)
    frame = pd.read_csv(path)
    assert list(frame.columns) == ["time", "source", *NAMES]
    assert np.array_equal(numbers(frame), VALUES, equal_nan=True)
    assert list(pd.to_datetime(frame["time"])) == list(TIMES)
    assert list(frame["source"]) == SOURCES
    assert np.isnan(VALUES).any()


def test_times_are_rfc_3339_in_utc(tmp_path: Path) -> None:
    path = tmp_path / "wide.csv"
    write_wide_csv(CHUNKS, path)
    assert path.read_text().splitlines()[1].startswith("2026-03-02T00:00:00Z,mill-lane,")


def test_semicolons_and_decimal_commas_hold_the_same_numbers(tmp_path: Path) -> None:
    path = tmp_path / "comma.csv"
    write_wide_csv(CHUNKS, path, SEMICOLON)
    frame = pd.read_csv(path, sep=";", decimal=",")
    assert np.array_equal(numbers(frame), VALUES, equal_nan=True)
    assert "," not in path.read_text().splitlines()[0]


def test_local_times_and_other_names_are_written_as_asked(tmp_path: Path) -> None:
    form = CsvForm(time_name="Zeit", zone="Europe/Berlin", renamed={"flow": "Durchfluss"})
    path = tmp_path / "local.csv"
    write_wide_csv(CHUNKS, path, form)
    frame = pd.read_csv(path)
    assert "flow" not in frame.columns
    # Central European Time, one hour before UTC in March.
    assert frame["Zeit"][0] == "2026-03-02 01:00:00"
    assert np.array_equal(
        numbers(frame.rename(columns={"Durchfluss": "flow"})), VALUES, equal_nan=True
    )


@pytest.mark.parametrize("form", [CsvForm(), SEMICOLON], ids=["plain", "semicolon"])
def test_a_long_csv_holds_one_row_per_reading(tmp_path: Path, form: CsvForm) -> None:
    path = tmp_path / "long.csv"
    assert write_long_csv(CHUNKS, path, form) == len(VALUES)
    frame = pd.read_csv(path, sep=form.separator, dtype=str, keep_default_na=False)
    assert list(frame.columns) == ["time", "source", "channel", "value", "quality"]
    assert len(frame) == VALUES.size
    missing = np.isnan(VALUES).ravel()
    assert list(frame["quality"] == "Bad") == list(missing)
    assert list(frame["value"] == "") == list(missing)
    flow = frame[(frame["channel"] == "flow") & (frame["value"] != "")]["value"]
    read = flow.str.replace(form.decimal, ".", regex=False).astype(float).to_numpy()
    column = VALUES[:, NAMES.index("flow")]
    assert np.array_equal(read, column[~np.isnan(column)])
    assert set(frame[frame["channel"] == "pump_1"]["value"]) <= {*PUMP_WORDS, ""}


def test_wide_parquet_keeps_times_numbers_and_words(tmp_path: Path) -> None:
    path = tmp_path / "wide.parquet"
    assert write_parquet(CHUNKS, path) == len(VALUES)
    frame = pq.read_table(path).to_pandas()
    assert np.array_equal(numbers(frame), VALUES, equal_nan=True)
    assert list(frame["time"]) == list(TIMES)
    assert str(pq.read_schema(path).field("time").type) == "timestamp[ns, tz=UTC]"


def test_long_parquet_equals_the_long_csv(tmp_path: Path) -> None:
    write_long_csv(CHUNKS, tmp_path / "long.csv")
    write_parquet(CHUNKS, tmp_path / "long.parquet", long=True)
    text = pd.read_csv(tmp_path / "long.csv", dtype=str, keep_default_na=False)
    stored = pq.read_table(tmp_path / "long.parquet").to_pandas()
    for name in ("source", "channel", "quality"):
        assert list(stored[name]) == list(text[name])
    assert list(stored["value"].fillna("")) == list(text["value"])


def test_an_export_of_nothing_is_an_empty_file(tmp_path: Path) -> None:
    path = tmp_path / "none.csv"
    assert write_wide_csv([], path) == 0
    assert path.read_bytes() == b""


def test_a_chunk_without_records_does_not_repeat_the_header(tmp_path: Path) -> None:
    empty = dataclasses.replace(
        CHUNKS[0], times_ns=CHUNKS[0].times_ns[:0], values=CHUNKS[0].values[:0]
    )
    path = tmp_path / "wide.csv"
    assert write_wide_csv([empty, CHUNKS[0], empty, CHUNKS[1]], path) > 0
    assert path.read_text().count("time,source") == 1


def test_incidents_are_listed_with_their_channels_and_size(tmp_path: Path) -> None:
    incidents = incidents_of(CONFIG)
    path = tmp_path / "incidents.csv"
    write_incidents(incidents, path)
    with path.open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert path.read_text().splitlines()[0] == "source,start,end,kind,size,channels"
    assert len(rows) == len(incidents) > 3
    for row, incident in zip(rows, incidents, strict=True):
        assert tuple(row["channels"].split("|")) == incident.channels
        assert pd.Timestamp(row["start"]).value == incident.start_ns
        assert pd.Timestamp(row["end"]).value == incident.end_ns
        size = float(row["size"]) if row["size"] else None
        assert size == (None if incident.size is None else pytest.approx(incident.size, abs=6e-4))


def test_a_stuck_instrument_has_no_size_in_the_list(tmp_path: Path) -> None:
    path = tmp_path / "incidents.csv"
    write_incidents([Incident("mill-lane", 0, 10**9, "stuck", None, ("flow",))], path)
    line = path.read_text().splitlines()[1]
    assert line == "mill-lane,1970-01-01T00:00:00Z,1970-01-01T00:00:01Z,stuck,,flow"


def test_a_separator_that_is_also_the_decimal_mark_is_refused() -> None:
    with pytest.raises(BadPlant, match="separator and decimal mark are both ','"):
        CsvForm(separator=",", decimal=",")
