"""`oddbranch nightly`: from a service's own records to a model in use."""

from __future__ import annotations

import math
import random
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner

from scoring.artefact import read_model
from scoring.errors import OddbranchError
from scoring.scorer import Scorer
from tests.models import a_model
from tests.service_http import Api, record, running
from training import nightly
from training.kept import BusyModels, KeptModels
from training.nightly import TooLittle, nightly_command
from training.settings_file import BadSettings
from training.stored import BadStore

CHANNELS = """\
format = 1
step_s = 60
[[channel]]
name = "flow"
[[channel]]
name = "power"
[[channel]]
name = "speed"
"""
N_RECORDS = 400
LAST_WEEK = datetime(2026, 11, 24, 2, 15, tzinfo=UTC)


def some_records(source: str, seed: int) -> list[dict[str, Any]]:
    """Return records of a pump whose flow and power follow its speed."""
    rng = random.Random(seed)
    found = []
    for minute in range(-N_RECORDS, 0):
        speed = 1300 + 120 * math.sin(minute / 40) + rng.gauss(0, 5)
        flow, power = speed / 6 + rng.gauss(0, 1), (speed / 1300) ** 3 * 30 + rng.gauss(0, 0.2)
        readings = {"flow": round(flow, 1), "power": round(power, 2), "speed": round(speed)}
        found.append(record(minute, source, **readings))
    return found


@pytest.fixture
def api(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Api]:
    """Run a service with records of two sources; the site's folder is the working one."""
    monkeypatch.chdir(tmp_path)
    Path("channels.toml").write_text(CHANNELS, encoding="utf-8")
    Path("nightly.toml").write_text("[history]\nleast_records = 100\n", encoding="utf-8")
    with running(tmp_path) as found:
        for number, source in enumerate(("mill-lane", "quarry-rise")):
            assert found.post(some_records(source, number)).status_code == 200
        yield found


def run(*words: str) -> str:
    """Run the command and return what it says; what it refuses is raised."""
    line = list(words) or ["--config", "nightly.toml"]
    result = CliRunner().invoke(nightly_command, line, standalone_mode=False)
    if isinstance(result.exception, OddbranchError):
        raise result.exception
    assert result.exception is None, result.exception
    return result.output


@pytest.mark.usefixtures("api")
def test_a_night_publishes_a_model_of_the_stored_records_and_says_what_it_did(
    tmp_path: Path,
) -> None:
    says = run()
    current = KeptModels(tmp_path / "models").current()
    assert current is not None
    model = read_model(tmp_path / "models" / "current")
    assert set(model.members) == {"mill-lane", "quarry-rise"}
    assert model.about["n_records"] == 2 * N_RECORDS
    assert model.about["created_timestamp_seconds"] > 1.7e9
    assert f"{2 * N_RECORDS} rows read" in says
    assert f"model {current.name} is in use" in says
    assert "the first one" in says
    # What it learned: a flow that fits its speed is usual, one that does not is not.
    scorer = Scorer(model)
    values = np.array([[1300 / 6, 30.0, 1300.0], [1400 / 6, 30.0, 1300.0]])
    for source in model.members:
        scores, _ = scorer.score(source, np.array([0, 60 * 10**9]), values, None)
        assert scores.excess[1] > scores.excess[0] + 3.0
        assert scorer.instruments[scores.suspect[1]].name == "flow"


def test_excluded_periods_are_kept_out_and_old_models_go(tmp_path: Path, api: Api) -> None:
    del api
    Path("exclude.csv").write_text(
        "source,start,end,reason\nmill-lane,2025-12-01T03:00:00Z,2025-12-01T04:00:00Z,cleaning\n",
        encoding="utf-8",
    )
    Path("nightly.toml").write_text(
        '[history]\nleast_records = 100\n[learn]\nexclude = "exclude.csv"\n[models]\nkeep = 2\n',
        encoding="utf-8",
    )
    models = KeptModels(tmp_path / "models")
    first, second = (models.publish(a_model(), LAST_WEEK) for _ in range(2))
    says = run()
    assert "excluded: 60 cleaning" in says
    assert f"instead of {second.name}" in says
    assert first not in models.kept()
    assert [models.kept()[0], models.current()] == [second, models.kept()[1]]


@pytest.mark.usefixtures("api")
def test_too_few_records_publish_nothing(tmp_path: Path) -> None:
    Path("nightly.toml").write_text("[history]\nleast_records = 801\n", encoding="utf-8")
    with pytest.raises(TooLittle, match="800 records of the last 28 days are fewer than.*801"):
        run()
    assert KeptModels(tmp_path / "models").kept() == ()


@pytest.mark.usefixtures("api")
def test_a_second_job_at_once_leaves_the_first_alone(tmp_path: Path) -> None:
    with KeptModels(tmp_path / "models").lock(), pytest.raises(BusyModels, match="another job"):
        run()


@pytest.mark.usefixtures("api")
def test_a_failure_while_learning_leaves_the_model_in_use(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    models = KeptModels(tmp_path / "models")
    before = (models.publish(a_model(), LAST_WEEK),)

    def fail(*_: object) -> None:
        raise MemoryError

    monkeypatch.setattr(nightly, "learn_model", fail)
    result = CliRunner().invoke(nightly_command, ["--config", "nightly.toml"])
    assert result.exit_code == 1
    assert models.kept() == before
    assert models.current() == before[-1]


def test_a_missing_store_table_or_setting_is_named(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(BadSettings, match=r"nightly.toml: no such file"):
        run()
    Path("nightly.toml").write_text("", encoding="utf-8")
    with pytest.raises(OddbranchError, match=r"channels.toml: no such file"):
        run()
    Path("channels.toml").write_text(CHANNELS, encoding="utf-8")
    with pytest.raises(BadStore, match="no such file"):
        run()
