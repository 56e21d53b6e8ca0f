"""`oddbranch models`: what it lists and what it puts into use."""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import pytest
from click.testing import CliRunner

from scoring.artefact import write_model
from scoring.errors import BadArtefact, OddbranchError
from tests.models import a_model
from training.changes import BadChange
from training.kept import BusyModels, KeptModels
from training.models import models_command

DAY_NS = 86_400 * 10**9
NIGHT = datetime(2026, 12, 1, 2, 15, tzinfo=UTC)


def models(folder: Path, *words: str | Path) -> str:
    """Run the command and return what it says; what it refuses is raised."""
    line = ["--folder", str(folder / "models"), *map(str, words)]
    result = CliRunner().invoke(models_command, line, standalone_mode=False)
    if isinstance(result.exception, OddbranchError):
        raise result.exception
    assert result.exit_code == 0, result.output
    return result.stdout


def a_directory(folder: Path, level: float) -> tuple[Path, str]:
    """Return a model directory as `learn` writes it, and its name."""
    model = a_model()
    about = {"n_records": 5000, "n_sources": 2, "first_ns": 0, "last_ns": 7 * DAY_NS}
    model = replace(model, levels=replace(model.levels, record=level), about=about)
    path = folder / f"learned-{level}"
    return path, write_model(model, path).name


def judged(path: Path, numbers: dict[str, float]) -> None:
    """Put a judge's numbers into a kept model, beside the content its name is the hash of."""
    data = json.loads((path / "model.json").read_text(encoding="utf-8"))
    data["about"]["model"]["judge"] = numbers
    (path / "model.json").write_text(json.dumps(data), encoding="utf-8")


def test_an_empty_folder_says_how_to_begin(tmp_path: Path) -> None:
    assert "no models in" in models(tmp_path, "list")
    assert "oddbranch models add MODEL" in models(tmp_path, "list")


def test_models_are_added_listed_used_and_gone_back_from(tmp_path: Path) -> None:
    (one, first), (two, second) = a_directory(tmp_path, 11.0), a_directory(tmp_path, 12.0)
    assert f"{first} is kept as" in models(tmp_path, "add", one)
    models(tmp_path, "add", two)
    judged(
        tmp_path / "models" / "current", {"held-out density": -0.0123, "alerts": 3, "run-away": 0.8}
    )
    lines = models(tmp_path, "list").splitlines()
    assert lines[0].split() == [
        "model", "published", "history", "days", "records", "sources",
        "density", "alerts", "furthest",
    ]  # fmt: skip
    assert lines[2].split()[0] == first
    assert lines[3].split()[:3] == ["in", "use", second]
    assert lines[3].split()[5:] == [
        "1970-01-01", "to", "1970-01-08", "7.0", "5000", "2", "-0.0123", "3", "0.8",
    ]  # fmt: skip
    assert lines[2].split()[-3:] == ["-", "-", "-"]
    assert f"{first} is in use." in models(tmp_path, "back")
    assert models(tmp_path, "list").splitlines()[2].startswith("in use")
    assert "the next nightly run publishes anew" in models(tmp_path, "use", second[:6])


def test_a_directory_that_is_no_model_is_not_kept(tmp_path: Path) -> None:
    with pytest.raises(BadArtefact, match="is no model directory"):
        models(tmp_path, "add", tmp_path)
    assert not (tmp_path / "models").exists()


def test_a_change_of_plant_is_declared_listed_and_taken_back(tmp_path: Path) -> None:
    assert models(tmp_path, "since") == "no change of plant was declared\n"
    at = "2025-12-01T07:00:00+01:00"
    says = models(tmp_path, "since", at, "--source", "mill-lane", "--reason", "new impeller")
    assert says.startswith("mill-lane: history counts from 2025-12-01T06:00:00Z on: new impeller")
    assert models(tmp_path, "since") == says
    with pytest.raises(BadChange, match="no change of all sources"):
        models(tmp_path, "since", at, "--take-back")
    back = models(tmp_path, "since", at, "--source", "mill-lane", "--take-back")
    assert back == f"taken back: {says}"
    assert "no change" in models(tmp_path, "since")


def test_a_change_at_a_source_that_no_kept_model_knows_is_refused(tmp_path: Path) -> None:
    kept = KeptModels(tmp_path / "models")
    model = a_model()
    member = replace(model.members["a"], source="mill-lane")
    kept.publish(replace(model, members={"mill-lane": member}), NIGHT)
    # Any kept model may know it, not only the one in use.
    kept.publish(model, NIGHT)
    at, why = "2025-12-01T06:00:00Z", ("--reason", "new impeller")
    says = "no kept model in .*models knows the source 'mill-lnae'; the nearest is 'mill-lane'"
    with pytest.raises(BadChange, match=rf"{says}\. Nothing was declared; .* add --new-source"):
        models(tmp_path, "since", at, "--source", "mill-lnae", *why)
    assert "no change" in models(tmp_path, "since")
    for source, more in (("mill-lane", ()), ("a", ()), ("", ()), ("brook-end", ("--new-source",))):
        models(tmp_path, "since", at, "--source", source, *why, *more)
    assert models(tmp_path, "since").count("\n") == 4
    # What was declared before can always be taken back.
    models(tmp_path, "since", at, "--source", "brook-end", "--take-back")


def test_where_no_model_knows_sources_a_change_is_declared_with_a_warning(tmp_path: Path) -> None:
    line = ["--folder", str(tmp_path), "since", "2025-12-01T06:00:00Z", "--source", "mill-lane"]
    result = CliRunner().invoke(models_command, [*line, "--reason", "new impeller"])
    assert result.exit_code == 0
    assert "warning: " in result.stderr
    assert "whether 'mill-lane' is one" in result.stderr
    assert result.stdout.startswith("mill-lane: history counts from")


def test_a_change_is_not_declared_while_a_night_is_at_work(tmp_path: Path) -> None:
    with KeptModels(tmp_path / "models").lock(), pytest.raises(BusyModels, match="another job"):
        models(tmp_path, "since", "2025-12-01T07:00:00Z", "--reason", "new impeller")
