"""`oddbranch score`: a row for every row, in order, by the contract."""

from __future__ import annotations

import csv
import math
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner, Result

from scoring.artefact import read_model
from scoring.errors import BadArtefact, OddbranchError
from scoring.scorer import Scorer
from tests.plant_files import HEAD, Plant, lines, plant, records
from tests.spools import START_NS
from training.history.options import BadHistory
from training.score import score_command

# Of the contract: what a row begins with.
CONTRACT = [
    *("time", "source", "surprise", "sustained", "suspect", "expected_low", "expected_high"),
    *("alert", "excess", "missing", "problem"),
]
S = 1_000_000_000


@pytest.fixture(scope="module")
def small() -> Plant:
    """Return the plant with its model."""
    return plant()


def score(path: Path, model: Path, out: Path, *words: str) -> Result:
    """Run the command; what it refuses is raised."""
    line = [str(path), "--model", str(model), "--out", str(out), *words]
    result = CliRunner().invoke(score_command, line, standalone_mode=False)
    if isinstance(result.exception, OddbranchError):
        raise result.exception
    assert result.exit_code == 0, result.exception
    return result


def write(folder: Path, text: list[str]) -> Path:
    """Return a file of records."""
    path = folder / "records.csv"
    path.write_text(HEAD + "".join(text), encoding="utf-8")
    return path


def table(out: Path) -> list[dict[str, str]]:
    """Return the rows of scores."""
    with out.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_the_columns_are_those_of_the_contract(small: Plant, tmp_path: Path) -> None:
    score(write(tmp_path, lines("north", records(5, 3))), small.model, tmp_path / "s.csv")
    heading = (tmp_path / "s.csv").read_text(encoding="utf-8").splitlines()[0]
    assert heading.split(",")[: len(CONTRACT)] == CONTRACT


def test_rows_are_those_of_the_scorer_record_by_record(small: Plant, tmp_path: Path) -> None:
    values = {"north": records(5, 40), "south": records(6, 40)}
    pairs = zip(lines("north", values["north"]), lines("south", values["south"]), strict=True)
    path = write(tmp_path, [line for pair in pairs for line in pair])
    score(path, small.model, tmp_path / "s.csv")
    found = table(tmp_path / "s.csv")
    assert [row["source"] for row in found] == ["north", "south"] * 40
    scorer = Scorer(read_model(small.model))
    for k, source in enumerate(("north", "south")):
        at = START_NS + np.arange(40) * 60 * S
        scores, _ = scorer.score(source, at, values[source], None)
        rows = found[k::2]
        for name in ("surprise", "sustained", "excess"):
            np.testing.assert_allclose(
                [float(row[name]) for row in rows], getattr(scores, name), atol=6e-5
            )
        names = [scorer.instruments[i].name for i in scores.suspect]
        assert [row["suspect"] for row in rows] == names
        for row, low, high in zip(rows, scores.expected_low, scores.expected_high, strict=True):
            for cell, x in ((row["expected_low"], low), (row["expected_high"], high)):
                assert cell == "" if not math.isfinite(x) else float(cell) == pytest.approx(x)
        assert [row["time"] for row in rows] == [
            line.split(",")[0] for line in lines(source, values[source])
        ]


def test_bad_rows_keep_their_place_and_say_why(small: Plant, tmp_path: Path) -> None:
    good = lines("north", records(5, 6))
    text = [
        *good[:2],
        good[2].replace("2026-01-01T", "soon "),
        good[3].replace(",north,", ",north,many,", 1).replace(",,", ",", 1),
        "2026-01-01T00:10:00Z,north,abc,1,2,running\n",
        good[4],
        "2026-01-01T00:11:00Z,north,1\n",
        "2026-01-01T00:12:00,north,1,2,3,running\n",
        *good[5:],
        *lines("north", records(7, 6), first=20),
    ]
    result = score(write(tmp_path, text), small.model, tmp_path / "s.csv")
    found = table(tmp_path / "s.csv")
    assert len(found) == len(text)
    bad = {2: "broken time", 3: "wrong number of cells", 4: "text in a measurement"}
    bad |= {6: "wrong number of cells", 7: "time without an offset"}
    for k, row in enumerate(found):
        assert row["problem"] == bad.get(k, "")
        assert (row["surprise"] == "") == (k in bad)
        assert (row["missing"] == "") == (k in bad)
    assert "5 refused" in result.output
    assert "refused: 2 wrong number of cells" in result.output


def test_a_fault_raises_an_alert_and_names_its_channel(small: Plant, tmp_path: Path) -> None:
    values = records(5, 50)
    values[30, 1] += 40.0
    score(write(tmp_path, lines("north", values)), small.model, tmp_path / "s.csv")
    row = table(tmp_path / "s.csv")[30]
    assert (row["alert"], row["suspect"]) == ("record", "power")
    assert float(row["expected_high"]) < values[30, 1]
    assert float(row["expected_low"]) < 0.1 * values[30, 0] + 1 < float(row["expected_high"])


def test_missing_readings_are_counted_and_few_are_not_judged(small: Plant, tmp_path: Path) -> None:
    values = records(5, 3)
    values[1, 0] = 900.0  # outside its span
    values[2, :3] = np.nan
    score(write(tmp_path, lines("north", values)), small.model, tmp_path / "s.csv")
    rows = table(tmp_path / "s.csv")
    assert [row["missing"] for row in rows] == ["0", "1", "3"]
    assert rows[2]["problem"] == "too few readings to judge"
    assert (rows[2]["excess"], rows[2]["alert"]) == ("", "")
    assert rows[2]["surprise"] != ""


def test_late_rows_are_scored_in_place_and_said_to_be_late(small: Plant, tmp_path: Path) -> None:
    text = lines("north", records(5, 5))
    text = [*text[:3], text[1], *text[3:]]
    score(write(tmp_path, text), small.model, tmp_path / "s.csv")
    rows = table(tmp_path / "s.csv")
    assert [row["problem"] for row in rows] == ["", "", "", "late", "", ""]
    assert rows[3]["sustained"] == rows[2]["sustained"]


def test_sources_without_a_member_are_named(small: Plant, tmp_path: Path) -> None:
    text = lines("new", records(5, 3)) + lines("tiny", records(6, 3))
    result = score(write(tmp_path, text), small.model, tmp_path / "s.csv")
    assert "scored by the fleet's member, not seen in learning: new, tiny" in result.output
    assert all(row["surprise"] for row in table(tmp_path / "s.csv"))


def test_no_progress_bar_goes_into_a_pipe(small: Plant, tmp_path: Path) -> None:
    path = write(tmp_path, lines("north", records(5, 3)))
    result = score(path, small.model, tmp_path / "s.csv")
    assert result.output.startswith("3 rows scored under model ")
    assert "\r" not in result.output


def test_a_folder_that_is_no_model_is_refused(small: Plant, tmp_path: Path) -> None:
    path = write(tmp_path, lines("north", records(5, 3)))
    with pytest.raises(BadArtefact, match="is no model directory"):
        score(path, tmp_path, tmp_path / "s.csv")


def test_records_that_are_not_there_are_refused(small: Plant, tmp_path: Path) -> None:
    with pytest.raises(BadHistory, match="gone.csv: no such file"):
        score(tmp_path / "gone.csv", small.model, tmp_path / "s.csv")


def test_a_place_that_cannot_be_written_is_refused_in_a_sentence(
    small: Plant, tmp_path: Path
) -> None:
    path = write(tmp_path, lines("north", records(5, 3)))
    with pytest.raises(OddbranchError, match="cannot be written: Is a directory"):
        score(path, small.model, tmp_path)


def test_a_refused_run_leaves_no_scores_that_look_whole(small: Plant, tmp_path: Path) -> None:
    out = tmp_path / "s.csv"
    with pytest.raises(BadHistory):
        score(tmp_path / "gone.csv", small.model, out)
    assert not out.exists()
