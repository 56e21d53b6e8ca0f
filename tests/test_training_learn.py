"""`oddbranch learn`: from files to a model directory, and what each option changes."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner, Result

from scoring.artefact import read_model
from scoring.channels import parse_channels
from scoring.delays import Delays
from scoring.errors import BadChannelTable, OddbranchError
from scoring.model import Model
from tests.plant_files import CHANNELS, HEAD, SOURCES, Plant, lines, plant, records
from tests.spools import START_NS, gaussian_tree, measurements, spool_of
from training.history.options import BadHistory
from training.learn import learn_command, learn_model, result_lines
from training.report.treesections import tree_section
from training.settings import AlarmBudget, Judging, LearnSettings, Sustained
from training.treetext import tree_lines


@pytest.fixture(scope="module")
def small() -> Plant:
    """Return the plant with its model."""
    return plant()


@pytest.fixture(scope="module")
def model(small: Plant) -> Model:
    """Return the plant's model."""
    return read_model(small.model)


def learn(out: Path, *words: str | Path) -> Result:
    """Run the command; what it refuses is raised."""
    line = [str(word) for word in words] + ["--out", str(out)]
    result = CliRunner().invoke(learn_command, line, standalone_mode=False)
    if isinstance(result.exception, OddbranchError):
        raise result.exception
    assert result.exit_code == 0, result.exception
    return result


def test_sources_with_history_enough_have_their_own_member(model: Model) -> None:
    assert sorted(model.members) == ["north", "south"]
    for source, member in model.members.items():
        assert member.source == source
        assert member.about["n_records"] == SOURCES[source]
        assert member.about["first_ns"] == START_NS
    assert model.fleet.source == ""
    assert model.about["n_records"] == sum(SOURCES.values())
    assert model.about["n_sources"] == 3


def test_the_tree_is_that_of_the_plant(model: Model) -> None:
    # flow, power, temp, pump, temp step
    for member in model.members.values():
        edges = [tuple(e) for e in member.parts[-1].tree.edges.tolist()]
        assert (0, 1) in edges
        assert {0, 1} & {e[0] for e in edges if e[1] == 3}


def test_the_command_says_what_a_person_wants_to_know(small: Plant, model: Model) -> None:
    text = small.output
    assert text.startswith("870 rows read, 870 records kept of 3 sources, 0 rejected\n")
    assert "tree of north (nats on its edges):" in text
    for source in ("north", "south"):
        assert f"{source}: 420 records, " in text
    assert "held-out surprise" in text
    assert f"model {model.name} written to {small.model} in " in text
    assert "\r" not in text


@pytest.mark.parametrize(("n_stopped", "word"), [(30, "running"), (90, "stopped")])
def test_of_a_member_with_regimes_the_commonest_ones_tree_is_shown_and_named(
    n_stopped: int, word: str
) -> None:
    rng = np.random.default_rng(2)
    stopped = np.arange(1440) % 120 < n_stopped
    flow = rng.normal(size=1440)
    power = 0.95 * np.where(stopped, -flow, flow) + 0.3 * rng.normal(size=1440)
    pump = {"name": "pump", "kind": "state", "words": ["running", "stopped"]}
    channels = {"step_s": 60.0, "channel": [{"name": "flow"}, {"name": "power"}, pump]}
    table = parse_channels(channels, "test")
    few = np.column_stack([flow, power, stopped])[:700]
    many = np.column_stack([flow, power, stopped])
    with spool_of({"a": few, "b": many}) as spool:
        result = learn_model(spool, table, LearnSettings())
    n = 12 * max(n_stopped, 120 - n_stopped)
    said = result_lines(result)
    # The source that the report shows, and the words that it names the tree by.
    assert said[0] == (
        f"tree of b while pump = {word}, {n} of its 1440 records and the most of its 2 regimes "
        "(nats on its edges; --report draws more):"
    )
    member = result.model.members["b"]
    (part,) = [p for p in member.parts if p.key == (("running", "stopped").index(word),)]
    lines_of = tree_lines(table, part.tree)
    assert [line.removeprefix("  ") for line in said[1 : 1 + len(lines_of)]] == lines_of
    drawn = "".join(tree_section(table, result.learned, result.model.fleet).pieces)
    assert f"Tree of b for pump = {word}:" in drawn


def test_the_same_history_gives_the_same_model(small: Plant, tmp_path: Path, model: Model) -> None:
    # Another order of rows and of files is the same history.
    rows = small.history.read_text(encoding="utf-8").splitlines(keepends=True)[1:]
    for name, part in (("b.csv", rows[:500][::-1]), ("a.csv", rows[500:])):
        (tmp_path / name).write_text(HEAD + "".join(part), encoding="utf-8")
    learn(tmp_path / "model", tmp_path / "a.csv", tmp_path / "b.csv", "--channels", small.channels)
    assert read_model(tmp_path / "model").name == model.name


def learned(settings: LearnSettings | None = None, **more: Any) -> Model:
    """Return a small model under some settings and channel table."""
    values = gaussian_tree(np.random.default_rng(1), 300, [(0, 1)], 0.8)
    with spool_of({"a": values}) as spool:
        return learn_model(spool, measurements(2, **more), settings or LearnSettings()).model


@pytest.fixture(scope="module")
def base() -> Model:
    """Return the small model of the defaults."""
    return learned()


CHANGES: list[tuple[LearnSettings, str]] = [
    (LearnSettings(budget=AlarmBudget(alerts_per_day=500.0)), "record"),
    (LearnSettings(sustained=Sustained(time_constant_steps=60.0)), "tau_s"),
    (LearnSettings(sustained=Sustained(time_constant_steps=60.0)), "sustained"),
    (LearnSettings(judging=Judging(least_share=1.0)), "least_readings"),
    (LearnSettings(alerts=Delays(off_delay_steps=0.0)), "delays"),
    # Two in a row are rarer than one: a lower level keeps the same budget.
    (LearnSettings(alerts=Delays(record_run=2)), "record"),
]


@pytest.mark.parametrize(("settings", "level"), CHANGES)
def test_each_setting_changes_the_levels(base: Model, settings: LearnSettings, level: str) -> None:
    assert getattr(learned(settings).levels, level) != getattr(base.levels, level)


def test_what_the_site_says_of_channels_changes_the_model(base: Model) -> None:
    assert base.members["a"].parts[0].tree.edges.tolist() == [[0, 1]]
    fixed = [{"name": "c0", "bins": [0.0]}, {"name": "c1"}]
    derived = [{"name": "step", "operation": "step", "of": ["c0"]}]
    other = learned(channel=fixed, derived=derived, edges={"forbid": [["c0", "c1"]]})
    assert [0, 1] not in other.members["a"].parts[0].tree.edges.tolist()
    bins = other.members["a"].bins
    assert 0.0 in bins[0].borders
    assert len(bins[0].borders) < len(base.members["a"].bins[0].borders)
    assert (len(base.fleet.bins), len(bins)) == (2, 3)


def test_options_of_the_command_are_followed(small: Plant, tmp_path: Path, model: Model) -> None:
    channels, exclude, config = (tmp_path / n for n in ("c.toml", "exclude.csv", "learn.toml"))
    text = CHANNELS.replace('name = "power"', 'name = "power"\nleave_out = true')
    channels.write_text(text, encoding="utf-8")
    exclude.write_text(
        "source,start,end,reason\nsouth,2026-01-01T00:00:00Z,2026-01-02T00:00:00Z,overhaul\n"
        "nroth,2026-01-01T00:00:00Z,2026-01-02T00:00:00Z,overhaul\n",
        encoding="utf-8",
    )
    config.write_text("[sustained]\ntime_constant_steps = 30.0\n", encoding="utf-8")
    options: list[str | Path] = ["--channels", channels, "--exclude", exclude, "--config", config]
    result = learn(tmp_path / "model", small.history, *options)
    found = read_model(tmp_path / "model")
    assert found.table.names == ("flow", "temp", "pump", "temp step")
    assert len(found.fleet.bins) == 4
    assert "excluded: 420 overhaul" in result.output
    # A source whose records are all left out is no stray one.
    assert result.output.count("no record has the source") == 1
    assert (
        f"warning: {exclude}, line 3: no record has the source 'nroth', so this line leaves "
        "nothing out; the nearest is 'north'" in result.output
    )
    assert sorted(found.members) == ["north"]
    assert found.levels.tau_s == 2 * model.levels.tau_s


def test_history_too_short_for_any_source_still_gives_the_fleets_member(
    small: Plant, tmp_path: Path
) -> None:
    path = tmp_path / "short.csv"
    path.write_text(HEAD + "".join(lines("a", records(1, 60))), encoding="utf-8")
    result = learn(tmp_path / "model", path, "--channels", small.channels)
    found = read_model(tmp_path / "model")
    assert not found.members
    assert np.isfinite(found.fleet.usual.median)
    assert "no alert will be raised" in result.output


REFUSED = [
    (CHANNELS.replace('"flow"', '"floww"'), HEAD, BadHistory, "floww"),
    (CHANNELS, HEAD.replace("time", "when"), BadHistory, "no time column|no column 'time'"),
    (CHANNELS, HEAD, BadHistory, "no record is left to use"),
    ("format = 9\n" + CHANNELS.replace("format = 1", ""), HEAD, BadChannelTable, "format 9"),
]


@pytest.mark.parametrize(("channels", "history", "kind", "says"), REFUSED)
def test_what_cannot_be_learned_from_is_refused_in_a_sentence(
    tmp_path: Path, channels: str, history: str, kind: type[OddbranchError], says: str
) -> None:
    (tmp_path / "channels.toml").write_text(channels, encoding="utf-8")
    (tmp_path / "history.csv").write_text(history, encoding="utf-8")
    with pytest.raises(kind, match=says):
        learn(
            tmp_path / "model",
            tmp_path / "history.csv",
            *("--channels", tmp_path / "channels.toml"),
        )
    assert not (tmp_path / "model").exists()


def test_records_that_the_tables_did_not_see_set_the_levels(model: Model) -> None:
    # In 420 minutes two alerts a day are less than one episode a source.
    assert model.levels.record > 3.0
    assert model.levels.cap > model.levels.sustained
    assert model.levels.tau_s == LearnSettings().sustained.time_constant_steps * 60.0
