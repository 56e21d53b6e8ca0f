"""`oddbranch nightly`: from a service's own records to a model in use, or a refusal."""

from __future__ import annotations

import math
import os
import re
import signal
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import NoReturn

import numpy as np
import pytest
from click.testing import CliRunner, Result

from scoring.artefact import read_model
from scoring.errors import OddbranchError
from scoring.scorer import Scorer
from tests.conftest import ROOT
from tests.models import a_model
from tests.night_site import (
    CHANNELS,
    N_HELD,
    N_RECORDS,
    SETTINGS,
    SOURCES,
    last_night,
    some_records,
    write_site,
)
from tests.service_http import NOW_NS, START_S, Api, running
from tests.stored_alerts import put_alert
from training import nightly
from training.hands import Hands, Here
from training.history.options import BadHistory
from training.kept import KeptModels
from training.models import models_command
from training.night_files import NightFiles
from training.nightly import Failed, Refused, nightly_command

LAST_WEEK = datetime(2026, 11, 24, 2, 15, tzinfo=UTC)


@pytest.fixture
def site(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Make the site's folder the working one, with its settings."""
    monkeypatch.chdir(tmp_path)
    write_site(tmp_path)
    return tmp_path


@pytest.fixture
def api(site: Path) -> Iterator[Api]:
    """Run a service with records of two sources."""
    with running(site) as found:
        for number, source in enumerate(SOURCES):
            assert found.post(some_records(source, number)).status_code == 200
        yield found


def invoke() -> Result:
    return CliRunner().invoke(nightly_command, ["--config", "nightly.toml"], standalone_mode=False)


def run() -> str:
    """Run the command and return what it says; what it refuses is raised."""
    result = invoke()
    if isinstance(result.exception, OddbranchError):
        raise result.exception
    assert result.exception is None, result.exception
    return result.output


def metrics() -> dict[str, float]:
    """Return the numbers for Prometheus by name and labels."""
    lines = [x for x in Path("night.prom").read_text().splitlines() if not x.startswith("#")]
    return {line.rpartition(" ")[0]: float(line.rpartition(" ")[2]) for line in lines}


def changed(before: str, after: str) -> None:
    """Change the site's settings."""
    assert before in SETTINGS
    Path("nightly.toml").write_text(SETTINGS.replace(before, after), encoding="utf-8")


@pytest.mark.usefixtures("site")
def test_a_cluster_that_cannot_be_had_fails_the_night(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    words = ["--config", "nightly.toml", "--cluster", "tcp://127.0.0.1:1"]
    result = CliRunner().invoke(nightly_command, words, standalone_mode=False)
    assert isinstance(result.exception, Failed)
    assert "--cluster tcp://127.0.0.1:1: needs Dask" in str(result.exception)
    assert metrics()['oddbranch_nightly_verdict{verdict="failed"}'] == 1


@pytest.mark.usefixtures("api")
def test_those_at_a_clusters_address_are_given_the_learning(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    given: list[object] = []
    workers = Here()

    def learn(*words: object) -> NoReturn:
        given.append(words[-1])
        raise BadHistory("here", "that was all")

    @contextmanager
    def at(address: str | None) -> Iterator[Hands]:
        given.append(address)
        yield workers

    monkeypatch.setattr("training.nightly.learn_model", learn)
    monkeypatch.setattr("training.nightly.cluster_at", at)
    words = ["--config", "nightly.toml", "--cluster", "tcp://there:8786"]
    result = CliRunner().invoke(nightly_command, words, standalone_mode=False)
    assert "that was all" in str(result.exception)
    assert given[0] == "tcp://there:8786"
    assert given[1] is workers


@pytest.mark.usefixtures("api")
def test_a_night_publishes_a_model_of_the_stored_records_and_says_what_it_did(site: Path) -> None:
    says = run()
    current = KeptModels(site / "models").current()
    assert current is not None
    model = read_model(site / "models" / "current")
    assert set(model.members) == set(SOURCES)
    assert model.about["n_records"] == 2 * (N_RECORDS - N_HELD)
    assert model.about["created_timestamp_seconds"] > 1.7e9
    assert model.about["judge"]["records"] == 2 * (N_RECORDS - N_HELD)
    assert f"reading: {2 * (N_RECORDS - N_HELD)} records of 2 sources to learn from" in says
    for stage in ("reading", "learning", "judging", "reporting", "publishing"):
        assert len(re.findall(rf"^{stage}: .* s$|^{stage}: [\d.]+ s$", says, re.M)) == 1, says
    assert f"Model {current.name} is in use, the first one." in says
    # What it learned: a flow that fits its speed is usual, one that does not is not.
    scorer = Scorer(model)
    values = np.array([[1300 / 6, 30.0, 1300.0], [1400 / 6, 30.0, 1300.0]])
    for source in model.members:
        scores, _ = scorer.score(source, np.array([0, 60 * 10**9]), values, None)
        assert scores.excess[1] > scores.excess[0] + 3.0
        assert scorer.instruments[scores.suspect[1]].name == "flow"
    night = last_night()
    assert (night["verdict"], night["model"], night["before"]) == ("published", current.name, "")
    page = sorted(Path("nightly").glob("*.html"))[-1].read_text()
    assert "published</h1>" in page
    assert "advice" in page
    assert metrics()['oddbranch_nightly_verdict{verdict="published"}'] == 1
    assert metrics()["oddbranch_nightly_published_timestamp_seconds"] > 1.7e9
    assert math.isfinite(metrics()["oddbranch_nightly_held_out_nats_per_reading"])


@pytest.mark.usefixtures("api")
def test_a_night_that_gives_the_model_in_use_again_keeps_no_further_copy(site: Path) -> None:
    changed("[report]", "[models]\nkeep = 2\n[report]")
    models = KeptModels(site / "models")
    older = models.publish(a_model(), LAST_WEEK)
    run()
    first = models.current()
    assert first is not None
    kept, says = models.kept(), run()
    # The same records and settings are the same model: the way back and the witness stay.
    assert (models.current(), models.kept(), kept) == (first, kept, (older, first))
    assert not [p for p in (site / "models").glob(".*") if p.is_dir()]
    assert "publishing: the same model is in use already, no further copy is kept" in says
    assert f"Model {first.name} is in use as before: " in says
    assert "gave the same one again, so no further copy is kept. All 13 questions" in says
    night = last_night()
    assert (night["verdict"], night["model"], night["before"]) == (
        "published", first.name, first.name,
    )  # fmt: skip
    assert "no further copy is kept" in sorted(Path("nightly").glob("*.html"))[-1].read_text()
    assert metrics()['oddbranch_nightly_verdict{verdict="published"}'] == 1
    assert models.back() == older
    answers = {one["name"]: one for one in last_night()["answers"]}
    assert answers["held-out density"]["number"] == 0.0
    assert answers["tree"]["number"] == 0.0
    assert answers["left out"]["number"] == 0.0
    assert answers["spans"]["number"] == 1.0
    assert f"Under the oldest kept model, {first.name}" in answers["run-away"]["sentence"]


@pytest.mark.usefixtures("api")
def test_a_damaged_copy_of_the_same_model_is_replaced_by_a_whole_one(site: Path) -> None:
    run()
    models = KeptModels(site / "models")
    first = models.current()
    assert first is not None
    (first.path / "tables.npz").write_bytes(b"short")
    says = run()
    current = models.current()
    assert current is not None
    assert current.path != first.path
    assert read_model(current.path).name == first.name
    assert f"Model {first.name} is in use instead of a damaged copy of it." in says


@pytest.mark.usefixtures("api")
def test_a_change_within_the_judges_days_leaves_the_source_to_the_fleet_and_is_published(
    site: Path,
) -> None:
    run()
    words = ["since", "2025-12-01T03:30:00Z", "--source", "mill-lane", "--reason", "new impeller"]
    assert CliRunner().invoke(models_command, words).exit_code == 0
    says = run()
    answers = {one["name"]: one for one in last_night()["answers"]}
    assert answers["known sources"]["passed"], says
    assert last_night()["verdict"] == "published", says
    assert "mill-lane (history counts from 2025-12-01T03:30:00Z on, new impeller: 0 of 200" in says
    assert set(read_model(site / "models" / "current").members) == {"quarry-rise"}
    # It has none to lose the night after.
    assert "mill-lane (history" not in run()


def test_sources_and_channels_come_and_go_from_one_night_to_the_next(site: Path) -> None:
    clock = [NOW_NS]
    with running(site, clock_ns=lambda: clock[0]) as api:
        for number, source in enumerate(SOURCES):
            api.post(some_records(source, number))
        run()
        # A pump is new, one was silent for longer than the window, power is measured no longer,
        # and humidity is.
        # Seven hours of one phase of the pump's round say little of another.
        more = "least_hours = 3\ndays = 0.4\n[judge]\ndensity_slack_nats = 1.0"
        changed("least_hours = 3\njoin_alerts_h = 0.0\n[judge]", more)
        table = CHANNELS.replace('"power"', '"humidity"')
        Path("channels.toml").write_text(table, encoding="utf-8")
        clock[0] += 10 * 3600 * 10**9
        for source in (SOURCES[0], "new-cross"):
            later = some_records(source, 2, 600)
            for one in later:
                one["readings"]["humidity"] = 50.0 + one["readings"].pop("power") / 10
            api.post(later)
        says = run()
    answers = {one["name"]: one for one in last_night()["answers"]}
    assert answers["known sources"]["passed"], says
    told = answers["known sources"]["sentence"]
    assert "new with a member: new-cross" in told
    assert f"without a record in the window, and so let go: {SOURCES[1]}" in told
    assert answers["channels"]["sentence"].endswith(
        "New in the channel table: humidity; no longer in it: power."
    )
    model = read_model(site / "models" / "current")
    assert set(model.members) == {SOURCES[0], "new-cross"}
    assert model.table.names == ("flow", "humidity", "speed")


@pytest.mark.usefixtures("api")
def test_excluded_periods_are_kept_out_and_old_models_go(site: Path) -> None:
    Path("exclude.csv").write_text(
        "source,start,end,reason\nmill-lane,2025-12-01T00:00:00Z,2025-12-01T01:00:00Z,cleaning\n"
        "mill-lnae,2025-12-01T00:00:00Z,2025-12-01T01:00:00Z,cleaning\n",
        encoding="utf-8",
    )
    more = '[learn]\nexclude = "exclude.csv"\n[models]\nkeep = 2\n[report]'
    changed("[report]", more)
    models = KeptModels(site / "models")
    first, second = (models.publish(a_model(), LAST_WEEK) for _ in range(2))
    says = run()
    assert "60 left out of everything" in says
    stray = "exclude.csv, line 3: no record has the source 'mill-lnae', so this line leaves nothing"
    assert f"  warning: {stray}" in says
    assert says.count("warning:") == 1
    page = sorted(Path("nightly").glob("*.html"))[-1].read_text()
    assert "no record has the source" in page
    assert last_night()["history"]["left_out"] == {"cleaning": 60}
    assert f"instead of {second.name}" in says
    assert first not in models.kept()
    assert [models.kept()[0], models.current()] == [second, models.kept()[1]]


@pytest.mark.usefixtures("api")
def test_too_few_records_are_refused_with_a_report_and_publish_nothing(site: Path) -> None:
    changed("least_records = 100", "least_records = 857")
    with pytest.raises(Refused, match="records: 856 records are too few; at least 857") as refused:
        run()
    assert refused.value.exit_code == 1
    assert KeptModels(site / "models").kept() == ()
    assert last_night()["verdict"] == "refused"
    assert metrics()['oddbranch_nightly_verdict{verdict="refused"}'] == 1
    assert metrics()['oddbranch_nightly_passed{question="records"}'] == 0
    page = sorted(Path("nightly").glob("*-refused.html"))[-1].read_text()
    assert "No model is in use" in page


@pytest.mark.usefixtures("api")
def test_alerts_unlabelled_leave_the_tables_and_real_ones_everything(site: Path) -> None:
    start_ns = (START_S - 400 * 60) * 10**9
    put_alert(site / "data", "mill-lane", start_ns, start_ns + 99 * 60 * 10**9)
    put_alert(site / "data", "quarry-rise", start_ns, start_ns + 9 * 60 * 10**9, "real")
    put_alert(site / "data", "quarry-rise", start_ns + 3600 * 10**9, None, "nuisance")
    says = run()
    assert "10 left out of everything, 100 in unlabelled alert" in says
    night = last_night()
    assert night["history"]["left_out"] == {"alert labelled real": 10}
    assert [one["source"] for one in night["history"]["left_out_of_tables"]] == ["mill-lane"]
    assert 0.08 < night["left_out_share"] < 0.16
    assert night["alerts_seen_without_left_out"] <= night["alerts_seen"]
    assert [(one["nuisance"], one["real"]) for one in night["feedback"]] == [(1, 1)]
    model = read_model(site / "models" / "current")
    assert model.members["mill-lane"].about["n_records"] == N_RECORDS - N_HELD - 100
    assert model.members["quarry-rise"].about["n_records"] == N_RECORDS - N_HELD - 10


@pytest.mark.usefixtures("api")
def test_a_second_job_at_once_leaves_the_first_alone(site: Path) -> None:
    with (
        KeptModels(site / "models").lock(),
        pytest.raises(Failed, match="another job .process") as failed,
    ):
        run()
    assert failed.value.exit_code == 3
    assert not Path("night.prom").exists()


@pytest.mark.usefixtures("api")
def test_a_failure_while_learning_leaves_the_model_in_use(
    site: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    models = KeptModels(site / "models")
    before = (models.publish(a_model(), LAST_WEEK),)

    def fail(*_: object) -> None:
        raise MemoryError

    monkeypatch.setattr(nightly, "learn_model", fail)
    with pytest.raises(Failed, match="ended early: MemoryError.*the model in use goes on"):
        run()
    assert models.kept() == before
    assert models.current() == before[-1]
    assert metrics()['oddbranch_nightly_verdict{verdict="failed"}'] == 1
    assert metrics()["oddbranch_nightly_published_timestamp_seconds"] == LAST_WEEK.timestamp()


class Died(BaseException):
    """Ends a job where no handler of errors reaches."""


@pytest.mark.parametrize(
    ("owner", "name"), [(NightFiles, "prepare"), (KeptModels, "publish_prepared")]
)
@pytest.mark.usefixtures("api")
def test_a_job_that_dies_before_publishing_leaves_everything_as_it_was(
    site: Path, monkeypatch: pytest.MonkeyPatch, owner: type, name: str
) -> None:
    models = KeptModels(site / "models")
    before = models.publish(a_model(), LAST_WEEK)

    def die(*_: object) -> None:
        raise Died

    monkeypatch.setattr(owner, name, die)
    with pytest.raises(Died):
        invoke()
    assert models.kept() == (before,)
    assert models.current() == before
    assert not list(Path("nightly").glob("[0-9]*"))


@pytest.mark.usefixtures("api")
def test_a_job_killed_between_rename_and_switch_leaves_the_old_model_in_use(site: Path) -> None:
    models = KeptModels(site / "models")
    before = models.publish(a_model(), LAST_WEEK)
    program = (
        "import os, signal\n"
        "from training import nightly\n"
        "nightly.KeptModels.switch = lambda *a: os.kill(os.getpid(), signal.SIGKILL)\n"
        "nightly.nightly_command(['--config', 'nightly.toml'])\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True, check=False,
    )  # fmt: skip
    assert done.returncode == -signal.SIGKILL, done.stderr.decode()
    assert models.current() == before
    assert read_model(site / "models" / "current").name == before.name
    assert not list(Path("nightly").glob("[0-9]*"))
    # The next night goes on from there and clears up.
    run()
    assert models.current() != before
    assert not [p for p in (site / "models").glob(".*") if p.is_dir()]
    assert not list(Path("nightly").glob(".night-*"))


@pytest.mark.parametrize("there", ["", "a file"])
def test_numbers_for_a_folder_that_is_not_there_fail_the_night_before_it_begins(
    site: Path, monkeypatch: pytest.MonkeyPatch, there: str
) -> None:
    if there:
        (site / "colector").write_text(there, encoding="utf-8")
    begun: list[object] = []
    monkeypatch.setattr(nightly, "run_night", lambda *words: begun.append(words))
    changed('"night.prom"', '"colector/night.prom"')
    says = r'nightly.toml: report.metrics = "colector/night.prom": there is no folder colector; '
    with pytest.raises(Failed, match=says + "name a file .* or leave report.metrics empty") as bad:
        run()
    assert bad.value.exit_code == 3
    assert not begun
    assert not (site / "colector").is_dir()


def test_a_missing_store_table_or_setting_is_a_failure_that_names_it(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(Failed, match=r"nightly.toml: no such file"):
        run()
    Path("nightly.toml").write_text("", encoding="utf-8")
    with pytest.raises(Failed, match=r"channels.toml: no such file"):
        run()
    Path("channels.toml").write_text(CHANNELS, encoding="utf-8")
    with pytest.raises(Failed, match="no such file; is this the service's data folder"):
        run()
