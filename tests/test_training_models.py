"""`oddbranch models`: what it lists and what it puts into use."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest
from click.testing import CliRunner

from scoring.artefact import write_model
from scoring.errors import BadArtefact, OddbranchError
from tests.models import a_model
from training.models import models_command

DAY_NS = 86_400 * 10**9


def models(folder: Path, *words: str | Path) -> str:
    """Run the command and return what it says; what it refuses is raised."""
    line = ["--folder", str(folder / "models"), *map(str, words)]
    result = CliRunner().invoke(models_command, line, standalone_mode=False)
    if isinstance(result.exception, OddbranchError):
        raise result.exception
    assert result.exit_code == 0, result.output
    return result.output


def a_directory(folder: Path, level: float) -> tuple[Path, str]:
    """Return a model directory as `learn` writes it, and its name."""
    model = a_model()
    about = {"n_records": 5000, "n_sources": 2, "first_ns": 0, "last_ns": 7 * DAY_NS}
    model = replace(model, levels=replace(model.levels, record=level), about=about)
    path = folder / f"learned-{level}"
    return path, write_model(model, path).name


def test_an_empty_folder_says_how_to_begin(tmp_path: Path) -> None:
    assert "no models in" in models(tmp_path, "list")
    assert "oddbranch models add MODEL" in models(tmp_path, "list")


def test_models_are_added_listed_used_and_gone_back_from(tmp_path: Path) -> None:
    (one, first), (two, second) = a_directory(tmp_path, 11.0), a_directory(tmp_path, 12.0)
    assert f"{first} is kept as" in models(tmp_path, "add", one)
    models(tmp_path, "add", two)
    lines = models(tmp_path, "list").splitlines()
    assert lines[0].split() == ["model", "published", "records", "sources", "days"]
    assert lines[2].split()[0] == first
    assert lines[3].split()[:3] == ["in", "use", second]
    assert lines[3].split()[-3:] == ["5000", "2", "7.0"]
    assert f"{first} is in use." in models(tmp_path, "back")
    assert models(tmp_path, "list").splitlines()[2].startswith("in use")
    assert "the next nightly run publishes anew" in models(tmp_path, "use", second[:6])


def test_a_directory_that_is_no_model_is_not_kept(tmp_path: Path) -> None:
    with pytest.raises(BadArtefact, match="is no model directory"):
        models(tmp_path, "add", tmp_path)
    assert not (tmp_path / "models").exists()
