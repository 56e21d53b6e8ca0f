"""One history in every form that sites hand over is one and the same history.

The invented plant writes it through the end of summer time; five forms are read back.
"""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pytest

from scoring.channels import load_channels
from training.channel_toml import write_channels
from training.history.options import HistoryOptions
from training.history.spool import spool_history
from training.history.tally import Tally
from training.plant.channels import INSTRUMENTS, channel_table
from training.plant.simulate import Chunk, PlantConfig, simulate
from training.plant.writers import CsvForm, write_long_csv, write_parquet, write_wide_csv
from training.survey import propose, survey_history

STEP_S = 300

LOCAL = CsvForm(
    separator=";", decimal=",", time_name="Zeit", source_name="Anlage", zone="Europe/Berlin"
)

FORMS: dict[str, tuple[Callable[[list[Chunk], Path], object], dict[str, Any]]] = {
    "wide.csv": (write_wide_csv, {}),
    "long.csv": (write_long_csv, {}),
    "wide.parquet": (write_parquet, {}),
    "long.parquet": (lambda chunks, path: write_parquet(chunks, path, long=True), {}),
    "local.csv": (
        lambda chunks, path: write_wide_csv(chunks, path, LOCAL),
        {"time": "Zeit", "source": "Anlage", "zone": ZoneInfo("Europe/Berlin")},
    ),
}


@pytest.fixture(scope="module")
def chunks() -> list[Chunk]:
    """Simulate three stations over the night of 25 October 2026."""
    start = datetime(2026, 10, 24, tzinfo=UTC)
    return list(simulate(PlantConfig(days=3, step_s=STEP_S, start=start, n_stations=3)))


@pytest.mark.parametrize("name", FORMS)
def test_every_form_is_read_back_as_it_was(name: str, chunks: list[Chunk], tmp_path: Path) -> None:
    write, options = FORMS[name]
    write(chunks, tmp_path / name)
    table = channel_table(STEP_S)
    with spool_history([tmp_path / name], table, HistoryOptions(**options)) as kept:
        assert not kept.report.rejected
        assert set(kept.sources) == {chunk.source for chunk in chunks}
        for source in kept.sources:
            mine = [chunk for chunk in chunks if chunk.source == source]
            (times_ns, values), *others = kept.chunks(source)
            assert not others
            np.testing.assert_array_equal(times_ns, np.concatenate([c.times_ns for c in mine]))
            np.testing.assert_allclose(values, np.concatenate([c.values for c in mine]), atol=1e-9)


@pytest.mark.parametrize("name", ["wide.csv", "long.parquet"])
def test_a_survey_finds_every_instruments_resolution_and_the_states(
    name: str, chunks: list[Chunk], tmp_path: Path
) -> None:
    FORMS[name][0](chunks, tmp_path / name)
    survey = survey_history([tmp_path / name], HistoryOptions(), Tally())
    text = write_channels([propose(facts) for facts in survey.columns.values()], survey.step_s)
    (tmp_path / "channels.toml").write_text(text, encoding="utf-8")
    proposed = {c.name: c for c in load_channels(tmp_path / "channels.toml").instruments}
    truth = channel_table(STEP_S)
    assert survey.step_s == STEP_S
    for channel in truth.instruments:
        assert proposed[channel.name].kind == channel.kind
        assert set(proposed[channel.name].words) == set(channel.words)
        resolution = proposed[channel.name].resolution
        # Three days at five minutes may be too few readings for the finest grid to show.
        assert resolution is None or resolution == pytest.approx(channel.resolution)
    assert sum(c.resolution is not None for c in proposed.values()) >= len(INSTRUMENTS) // 2
