"""The seam to scoring: what the service answers is what the scorer says."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from scoring.artefact import write_model
from scoring.errors import BadArtefact
from scoring.scorer import Scorer
from scoring.standing import Standing
from service.engine import Scored
from service.metrics import FIGURE_HELP
from service.scoring_engine import ScoringEngine, load_engine
from service.times import format_time
from tests.models import a_model, some_records
from tests.service_http import running

WORDS = ("running", "stopped", "creeping")


@pytest.fixture(scope="module")
def path(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("kept") / "model"
    write_model(a_model(), folder)
    return folder


@pytest.fixture(scope="module")
def engine(path: Path) -> ScoringEngine:
    return load_engine(path)


def score(engine: ScoringEngine, times_ns: np.ndarray, values: np.ndarray) -> tuple[Scored, Any]:
    """Return the scores of records of source a and its new standing."""
    start = np.array([0, len(times_ns)])
    scored, lives = engine.score(["a"], start, times_ns, values, [None], channels=False)
    return scored, lives[0]


def test_a_missing_model_gets_a_sentence(tmp_path: Path) -> None:
    with pytest.raises(BadArtefact, match=str(tmp_path)):
        load_engine(tmp_path / "nowhere")


def test_scores_are_the_scorers_and_open_sides_are_none(engine: ScoringEngine) -> None:
    times_ns, values = some_records(3, 200)
    order = np.argsort(times_ns, kind="stable")
    times_ns, values = times_ns[order], values[order]
    wanted, standing = Scorer(engine.model).score("a", times_ns, values, None)
    found, live = score(engine, times_ns, values)
    for ours, theirs in (
        (found.surprise, wanted.surprise),
        (found.excess, wanted.excess),
        (found.sustained, wanted.sustained),
        (found.suspect_surprise, wanted.suspect_surprise),
        (found.best, wanted.expected_best),
    ):
        np.testing.assert_array_equal(ours, theirs)
    found.close_open_sides()
    for ours, theirs in ((found.low, wanted.expected_low), (found.high, wanted.expected_high)):
        np.testing.assert_array_equal(ours, np.where(np.isinf(theirs), np.nan, theirs))
    assert engine.standing_bytes(live) == standing.to_bytes()


def test_a_standing_of_another_model_or_format_does_not_carry_over(engine: ScoringEngine) -> None:
    own = Standing(engine.name, 5, 1.5).to_bytes()
    assert engine.standing_from(own) == Standing(engine.name, 5, 1.5)
    assert engine.standing_from(Standing("another", 5, 1.5).to_bytes()) is None
    assert engine.standing_from(b"\x63nonsense") is None
    assert engine.standing_from(None) is None


def test_a_suspect_state_comes_with_its_words(engine: ScoringEngine) -> None:
    times_ns, values = some_records(6, 400, gaps=0.0)
    found, _ = score(engine, times_ns, values)
    rows = np.flatnonzero(found.suspect == 3).tolist()
    assert rows
    assert set(found.words) == set(rows)
    for row in rows:
        assert set(found.words[row]) <= {"running", "stopped"}
        assert math.isclose(sum(found.words[row].values()), 1.0, abs_tol=0.02)


def test_neighbours_and_edges_are_the_trees(engine: ScoringEngine) -> None:
    assert engine.neighbours("a", 0) == ("out",)
    assert engine.neighbours("never seen", 3) == ("power",)
    assert engine.member("a") == "own"
    assert engine.member("never seen") == "fleet"
    described = engine.describe("a")
    pairs = [(edge["left"], edge["right"]) for edge in described["edges"]]
    assert pairs[0] == ("in", "out")
    assert described["levels"] == {"record": 12.0, "sustained": 3.0}


def test_a_model_says_of_itself_what_it_has() -> None:
    model = a_model()
    assert ScoringEngine(model).figures == {"model_members": 1.0}
    member = replace(model.members["a"], about={"held_out_records": 100, "held_out_surprise": 7.5})
    about = {"n_records": 9, "alerts_per_day": 2.0, "last_ns": 5 * 10**9}
    engine = ScoringEngine(replace(model, members={"a": member}, about=about))
    assert engine.figures == {
        "model_members": 1.0,
        "model_history_records": 9.0,
        "model_history_end_timestamp_seconds": 5.0,
        "alarm_budget_alerts_per_day": 2.0,
        "model_held_out_surprise_nats": 7.5,
    }
    assert set(engine.figures) <= set(FIGURE_HELP)


def test_over_http_the_answers_are_the_scorers(path: Path, tmp_path: Path) -> None:
    times_ns, values = some_records(8, 120)
    order = np.argsort(times_ns, kind="stable")
    _, first = np.unique(times_ns[order], return_index=True)
    times_ns, values = times_ns[order][first], values[order][first]
    items = []
    for time_ns, row in zip(times_ns.tolist(), values.tolist(), strict=True):
        readings = {
            "in": row[0], "out": row[1], "power": row[2],
            "pump": None if math.isnan(row[3]) else WORDS[int(row[3])],
        }  # fmt: skip
        plain = {k: None if isinstance(v, float) and math.isnan(v) else v
                 for k, v in readings.items()}  # fmt: skip
        items.append({"source": "a", "time": format_time(time_ns), "readings": plain})
    engine = load_engine(path)
    wanted, standing = Scorer(engine.model).score("a", times_ns, values, None)
    (tmp_path / "model").symlink_to(path)
    with running(tmp_path, load=load_engine) as api:
        answers = [api.post(item).json() for item in items[:40]]
        answers += api.post(items[40:], "/records?channels=true").json()
        with api.service.database.read.connect() as connection:
            stored = connection.exec_driver_sql("SELECT standing FROM source").scalar_one()
    assert [a["surprise"] for a in answers] == np.round(wanted.surprise, 4).tolist()
    assert [a["sustained"] for a in answers] == np.round(wanted.sustained, 4).tolist()
    excess = [None if math.isnan(x) else round(x, 4) for x in wanted.excess.tolist()]
    assert [a["excess"] for a in answers] == pytest.approx(excess)
    names = ("in", "out", "power", "pump")
    suspects = [names[i] if i >= 0 else None for i in wanted.suspect.tolist()]
    assert [a["suspect"] and a["suspect"]["channel"] for a in answers] == suspects
    assert [c["channel"] for c in answers[-1]["channels"]] == list(names)
    assert bytes(stored) == standing.to_bytes()
