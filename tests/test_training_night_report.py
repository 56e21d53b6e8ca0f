"""A night's page and data: the verdict first, everything escaped, nothing loaded."""

from __future__ import annotations

import json
import re
from collections import Counter
from collections.abc import Iterator
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest

from tests.learned import SPITEFUL, small_fleet
from tests.nights import CUT_NS, a_case
from tests.pump import STEP_NS
from training.changes import Change
from training.judge import Judgement
from training.judge_answers import Answer
from training.judge_cover import EdgeChange, TreeChange
from training.judge_drill import Smallest
from training.judge_runaway import Residual
from training.night_report import Night, lead, night_data, night_page, number_text
from training.stored_alerts import StoredAlert
from training.trouble import Stretch

AT = datetime(2026, 12, 1, 2, 16, tzinfo=UTC)
GOOD = Answer("tree", 0.1234, 0.6, True, "Much the same.")
BAD = Answer("run-away", 2.6, 2.0, False, f"{SPITEFUL} of east ran away.")


@pytest.fixture
def night(tmp_path: Path) -> Iterator[Night]:
    """Return a refused night with something in every section."""
    result = small_fleet()[0]
    learned = dict(result.learned)
    stretch = Stretch("east", CUT_NS - 90 * STEP_NS, CUT_NS - 80 * STEP_NS, 10, 31.0)
    in_alert = np.array([[CUT_NS - 50 * STEP_NS, CUT_NS - 20 * STEP_NS]])
    learned["east"] = replace(learned["east"], left_out=[stretch], in_alert=in_alert)
    judgement = Judgement(
        (GOOD, BAD),
        TreeChange(0.1, (EdgeChange("east", SPITEFUL, "head", 0.7, True),)),
        (Smallest(SPITEFUL, "m3/h", None, 5.0, 2.4), Smallest("head", "m", 0.2, 0.3, 0.67)),
        (Residual("east", SPITEFUL, 2.6, 0.2, 0.1, 400),),
    )
    case = a_case(tmp_path)
    chosen = replace(
        case.chosen,
        in_alert={"east": in_alert},
        n_in_alert_of=Counter({"mill-lane": 2000}),
        alerts=tuple(StoredAlert("east", "scored", 0, 1, "nuisance", SPITEFUL) for _ in range(3)),
        changes=(Change("east", CUT_NS, f"new {SPITEFUL}", CUT_NS),),
    )
    chosen.learning.report.excluded["cleaning"] = 60
    with case.chosen:
        yield Night(
            "refused", AT, chosen, judgement, replace(result, learned=learned), "",
            result.model, "0123456789abcdef", 61.0,
        )  # fmt: skip


def test_the_verdict_comes_first_and_every_section_has_its_say(night: Night) -> None:
    page = night_page(night)
    assert "<h1>Night of 2026-12-01: refused</h1>" in page
    assert page.index("goes on. Against the new one speaks: run-away.") < page.index("<h2")
    assert page.count("This is advice.") == 2
    titles = re.findall(r'<h2 id="part-\d">(.*?)</h2>', page)
    assert titles == [
        "The judge&#x27;s questions", "What was learned from, and what was left out", "Levels",
        "The tree before and after", "Smallest offset that is caught",
        "Channels against their neighbours, under the oldest kept model",
        "What people said of alerts",
    ]  # fmt: skip
    told = (
        "REFUSED", "cleaning", "in alert, not labelled", "31 nats above the usual", "gained",
        "67% of mill-lane lie in alerts that nobody labelled", "look at the instrument",
        "alerts a day with", "history counts from",
    )  # fmt: skip
    for words in told:
        assert words in page, words


def test_nothing_is_loaded_or_run_and_names_stay_text(night: Night) -> None:
    page = night_page(night)
    assert SPITEFUL not in page
    assert "<script" not in page
    assert not re.search(r'(?:src|href)="(?!#)', page)


def test_both_trees_stand_side_by_side(night: Night) -> None:
    page = night_page(night)
    pair = page[page.index('<div class="pair">') :]
    pair = pair[: pair.index("</section>")]
    assert pair.count("<svg") == 2
    assert pair.index("east, in use") < pair.index("east, new")


def test_the_first_night_has_one_tree_and_says_so(night: Night) -> None:
    first = replace(
        night, verdict="published", model="abc", before=None, before_name="",
        judgement=Judgement((GOOD,)),
    )  # fmt: skip
    page = night_page(first)
    assert page[page.index('<div class="pair">') :].count("<svg") == 1
    assert lead(first) == "Model abc is in use, the first one. All 1 questions were passed."
    assert "No drill was run." in page
    again = replace(first, before=night.before, before_name="abc")
    same = "is in use as before: the records gave the same one again, so no further copy is kept."
    assert f"Model abc {same}" in lead(again)
    damaged = replace(first, before_name="abc")
    assert "Model abc is in use instead of a damaged copy of it." in lead(damaged)


def test_a_night_without_a_model_tells_what_there_was(night: Night) -> None:
    page = night_page(replace(night, learned=None, before=None, before_name=""))
    assert "No model is in use. Against" in page
    assert "<svg" not in page
    data = night_data(replace(night, learned=None))
    assert "left_out_share" not in data


def test_the_data_hold_the_same_and_survive_json(night: Night) -> None:
    data = json.loads(json.dumps(night_data(night), allow_nan=False))
    assert data["verdict"] == "refused"
    assert [one["passed"] for one in data["answers"]] == [True, False]
    assert data["history"]["left_out"] == {"cleaning": 60}
    why = [one["why"] for one in data["history"]["left_out_of_tables"]]
    assert {"31 nats above the usual", "in alert, not labelled"} <= set(why)
    assert data["tree"][0]["gained"] is True
    assert data["drill"][0]["new"] is None
    assert data["neighbours"][0]["channel"] == SPITEFUL
    assert data["feedback"][0]["nuisance"] == 3
    assert data["left_out_share"] >= 0.0
    assert data["advice"].startswith("This is advice")


@pytest.mark.parametrize(
    ("number", "text"),
    [(None, "-"), (0.12345, "0.123"), (12345.6, "12,346"), (3.0, "3"), (-0.01, "-0.01")],
)
def test_numbers_are_short(number: float | None, text: str) -> None:
    assert number_text(number) == text
