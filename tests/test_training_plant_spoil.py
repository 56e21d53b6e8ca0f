"""Planted bad rows: as many as asked, where stated, with the good rows untouched."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import pytest

from training.plant.simulate import PlantConfig, simulate
from training.plant.spoil import PROBLEMS, spoil_csv
from training.plant.utility import BadPlant
from training.plant.writers import SEMICOLON, write_wide_csv

START = datetime(2026, 3, 2, tzinfo=UTC)
CONFIG = PlantConfig(seed=61, n_stations=1, start=START, days=1, step_s=600)


@pytest.mark.parametrize("separator", [",", ";"])
def test_bad_rows_stand_at_their_lines_and_the_rest_is_as_it_was(
    tmp_path: Path, separator: str
) -> None:
    good, bad = tmp_path / "good.csv", tmp_path / "bad.csv"
    write_wide_csv(simulate(CONFIG), good, SEMICOLON if separator == ";" else None)
    planted = spoil_csv(good, bad, n_bad=12, seed=1, separator=separator)
    lines = bad.read_text().splitlines()
    assert len(planted) == 12
    assert {row.problem for row in planted} == set(PROBLEMS)
    at = {row.line - 1 for row in planted}
    assert [x for i, x in enumerate(lines) if i not in at] == good.read_text().splitlines()


def test_each_problem_is_what_its_name_says(tmp_path: Path) -> None:
    good, bad = tmp_path / "good.csv", tmp_path / "bad.csv"
    write_wide_csv(simulate(CONFIG), good)
    lines_of = {}
    planted = spoil_csv(good, bad, n_bad=5, seed=2)
    lines = bad.read_text().splitlines()
    for row in planted:
        lines_of[row.problem] = (lines[row.line - 1].split(","), lines[row.line - 2].split(","))
    assert lines_of["broken time"][0][0] == "2026-99-99 noon"
    assert lines_of["text in a measurement"][0][2] == "#REF!"
    assert len(lines_of["wrong number of cells"][0]) == 20
    assert lines_of["infinite number"][0][2] == "inf"
    twice, original = lines_of["time twice"]
    assert twice == original


def test_the_same_seed_spoils_the_same_lines(tmp_path: Path) -> None:
    good = tmp_path / "good.csv"
    write_wide_csv(simulate(CONFIG), good)
    once = spoil_csv(good, tmp_path / "a.csv", 5, seed=3)
    assert once == spoil_csv(good, tmp_path / "b.csv", 5, seed=3)
    assert once != spoil_csv(good, tmp_path / "c.csv", 5, seed=4)


def test_more_bad_rows_than_records_are_refused(tmp_path: Path) -> None:
    good = tmp_path / "good.csv"
    good.write_text("time,source,flow\n2026-03-02T00:00:00Z,a,1\n")
    with pytest.raises(BadPlant, match="1 records cannot carry 2 bad rows"):
        spoil_csv(good, tmp_path / "bad.csv", 2, seed=1)
