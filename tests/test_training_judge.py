"""The judge as a whole: what it asks, whom it lets speak, and what it makes of trouble."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from scoring.alerts import time_text
from scoring.channels import ChannelTable
from scoring.model import Model
from tests.nights import CUT_NS, LIMITS, N_HELD, Floats, a_case, known_model
from tests.pump import N_LEARNED, NAMES, SOURCES, STEP_NS, pump_values
from tests.spools import START_NS
from training.changes import Change
from training.judge import Case, Judgement, comparable, enough, is_after, judge, respooled
from training.judge_answers import Answer
from training.nightly_settings import HistoryWanted

A, B = SOURCES
NOW_NS = CUT_NS + 10**15


def held(**offsets: float) -> dict[str, Floats]:
    """Return the judge's days with some channels of the first source offset."""
    values = {source: pump_values(source, N_HELD, N_LEARNED) for source in SOURCES}
    for name, offset in offsets.items():
        values[A][:, NAMES.index(name)] += offset
    return values


def answers(case: Case) -> tuple[Judgement, dict[str, Answer]]:
    with case.chosen:
        found = judge(case)
    return found, {one.name: one for one in found.answers}


def test_an_equal_model_passes_every_question(tmp_path: Path) -> None:
    model = known_model()
    found, by_name = answers(a_case(tmp_path, in_use=model, witnesses=[model], before=0.0))
    assert found.passed, found.refusals
    assert list(by_name) == [
        "known sources", "judge's hours", "channels", "spans", "held-out density", "alerts",
        "drill", "tree", "run-away", "left out",
    ]  # fmt: skip
    assert by_name["drill"].number == pytest.approx(1.0)
    assert all(one.sentence.endswith(".") for one in found.answers)
    assert found.numbers["tree"] == 0.0


def test_the_first_model_is_judged_by_what_needs_no_other(tmp_path: Path) -> None:
    found, by_name = answers(a_case(tmp_path))
    assert found.passed, found.refusals
    assert "held-out density" not in by_name
    assert found.tree is None
    assert "No channel could be asked" in by_name["run-away"].sentence


def test_an_instrument_that_drifted_is_named_under_the_oldest_model(tmp_path: Path) -> None:
    case = a_case(tmp_path, in_use=known_model(), witnesses=[known_model()], held=held(flow=6.0))
    found, by_name = answers(case)
    assert not by_name["run-away"].passed
    assert f"flow of {A} lies furthest" in by_name["run-away"].sentence
    assert "number 0" in by_name["run-away"].sentence
    assert found.residuals[1].channel == "flow"


def test_trouble_in_the_judges_days_shows_in_its_alerts(tmp_path: Path) -> None:
    values = held()
    for start in range(0, N_HELD, 90):
        values[A][start : start + 5, 1] += 60.0
    found, by_name = answers(a_case(tmp_path, held=values))
    assert not by_name["alerts"].passed
    assert found.n_alerts >= 8
    assert "nobody has labelled" in by_name["alerts"].sentence


def test_a_model_that_lost_a_source_is_refused(tmp_path: Path) -> None:
    model = known_model()
    new = replace(model, members={A: model.members[A]})
    found, by_name = answers(a_case(tmp_path, in_use=model, witnesses=[model], new=new))
    assert "known sources" in [one.name for one in found.refusals]
    assert by_name["known sources"].number == 0.5
    assert B in by_name["known sources"].sentence


def test_a_source_that_a_declared_change_left_without_its_member_is_told_and_refuses_nothing(
    tmp_path: Path,
) -> None:
    model = known_model()
    new = replace(model, members={A: model.members[A]})
    change_ns = CUT_NS - 149 * STEP_NS
    changes = (Change(B, change_ns, "new impeller", NOW_NS),)

    def known(n: int, *said: Change) -> Answer:
        learning = {A: pump_values(A, N_LEARNED), B: pump_values(B, n)}
        case = a_case(
            tmp_path, in_use=model, witnesses=[model], new=new, changes=said, learning=learning
        )
        return answers(case)[1]["known sources"]

    told = known(150, *changes)
    assert (told.passed, told.number) == (True, 1.0)
    assert told.sentence.startswith("1 of 1 sources with a member of their own keep one; not")
    # Two hundred minutes of its own after the change, and the judge's days after them.
    at, enough = (time_text(change_ns + k * STEP_NS) for k in (0, 200 + N_HELD))
    assert f"{B} (history counts from {at} on, new impeller: 150 of 200 records" in told.sentence
    assert f"enough from {enough} on at the earliest)" in told.sentence
    assert "for want of quiet records" not in told.sentence
    # With records enough since, or a change that the model in use knows, it is lost as ever.
    for n, said in ((200, changes), (150, ()), (150, (replace(changes[0], since_ns=START_NS),))):
        lost = known(n, *said)
        assert (lost.passed, lost.number) == (False, 0.5)
        assert f"{B} would be scored by the fleet's, for want of quiet" in lost.sentence


def test_a_model_that_knows_the_days_less_well_is_refused(tmp_path: Path) -> None:
    model = known_model()
    new = replace(model, members={A: model.members[B], B: model.members[A]})
    found, _ = answers(a_case(tmp_path, in_use=model, witnesses=[model], new=new))
    assert "held-out density" in [one.name for one in found.refusals]


def renamed(model: Model, before: str, after: str) -> Model:
    channels = tuple(
        c.model_copy(update={"name": after}) if c.name == before else c for c in model.table.channel
    )
    return replace(model, table=ChannelTable(step_s=60.0, channel=channels))


def test_channels_added_and_removed_are_told_and_the_others_compared(tmp_path: Path) -> None:
    old = renamed(known_model(), "room", "cellar")
    found, by_name = answers(a_case(tmp_path, in_use=old, witnesses=[old]))
    assert found.passed, found.refusals
    told = by_name["channels"].sentence
    assert "New in the channel table: room; no longer in it: cellar." in told
    assert found.compared is not None
    assert found.compared.n_readings == pytest.approx(2 * N_HELD * 4, rel=0.03)
    assert {one.channel for one in found.smallest} == {"speed", "flow", "power", "pressure"}


def test_after_a_change_of_plant_models_from_before_are_no_measure(tmp_path: Path) -> None:
    old = known_model()
    change = Change(A, START_NS + 1, "new impeller", NOW_NS)
    assert not is_after(old, A, [change])
    assert is_after(old, B, [change])
    assert is_after(old, A, [Change(A, START_NS, "new", NOW_NS)])
    assert comparable(old, old, [change]) == [B]
    case = a_case(
        tmp_path, in_use=old, witnesses=[old], held=held(flow=6.0), changes=(change,),
        alert_confidence=0.999999,
    )  # fmt: skip
    found, by_name = answers(case)
    assert by_name["run-away"].passed
    assert f"Without a witness from after their last change: {A}." in by_name["run-away"].sentence
    assert found.compared is not None
    assert list(found.compared.by_source) == [B]
    everything = (Change("", START_NS + 1, "new main", NOW_NS),)
    found, by_name = answers(a_case(tmp_path, in_use=old, witnesses=[old], changes=everything))
    assert found.passed, found.refusals
    assert "tree" not in by_name
    assert "no reading of the judge's days" in by_name["held-out density"].sentence


def test_the_oldest_model_that_may_speak_is_the_witness(tmp_path: Path) -> None:
    young = known_model()
    old = replace(young, members={B: young.members[B]})
    case = a_case(tmp_path, witnesses=[old, young], held=held(flow=6.0))
    _, by_name = answers(case)
    # The oldest one does not know the first source, so the next one speaks of it.
    assert "number 1" in by_name["run-away"].sentence
    assert not by_name["run-away"].passed


def test_days_that_the_model_in_use_has_learned_are_no_measure(tmp_path: Path) -> None:
    model = known_model()
    half_ns = CUT_NS + N_HELD // 2 * STEP_NS
    members = {
        s: replace(m, about={**m.about, "last_ns": half_ns}) for s, m in model.members.items()
    }
    found, _ = answers(a_case(tmp_path, in_use=replace(model, members=members)))
    assert found.compared is not None
    assert found.compared.n_readings == pytest.approx(2 * N_HELD // 2 * 5, rel=0.03)
    members = {
        s: replace(m, about={**m.about, "last_ns": NOW_NS}) for s, m in model.members.items()
    }
    found, by_name = answers(a_case(tmp_path, in_use=replace(model, members=members)))
    assert found.compared is None
    assert by_name["held-out density"].passed


def test_days_without_a_record_are_refused_and_nothing_breaks(tmp_path: Path) -> None:
    model = known_model()
    found, by_name = answers(a_case(tmp_path, in_use=model, witnesses=[model], held={}))
    refused = [one.name for one in found.refusals]
    assert refused == ["judge's hours"]
    assert "No drill with the new model" in by_name["drill"].sentence
    assert by_name["judge's hours"].number == 0.0


def test_the_drill_can_be_switched_off(tmp_path: Path) -> None:
    _, by_name = answers(a_case(tmp_path, held={}, drill_trials=0))
    assert by_name["drill"].passed


def test_the_drill_asks_some_sources_of_a_large_fleet(tmp_path: Path) -> None:
    model = known_model()
    names = [f"pump-{k:02}" for k in range(62)]
    member, values = model.members[A], pump_values(A, N_HELD, N_LEARNED)
    fleet = replace(model, members={name: replace(member, source=name) for name in names})
    case = a_case(
        tmp_path, in_use=fleet, new=fleet, held=dict.fromkeys(names, values), drill_trials=10
    )
    _, by_name = answers(case)
    # Three for each trial, so every third: one trial each.
    assert "half of 21 trials" in by_name["drill"].sentence
    assert by_name["drill"].number == pytest.approx(1.0)


def test_a_share_left_out_that_grew_is_refused(tmp_path: Path) -> None:
    case = a_case(tmp_path, before=0.5)
    found, by_name = answers(case)
    assert by_name["left out"].number == -0.5
    assert found.passed


def test_enough_is_asked_before_anything_is_learned(tmp_path: Path) -> None:
    case = a_case(tmp_path)
    with case.chosen as chosen:
        wanted = HistoryWanted(least_records=6001, least_hours=50, least_sources=3)
        passed = {one.name: one.passed for one in enough(chosen, wanted)}
    assert passed == {"records": False, "hours": True, "sources": False}


def test_records_in_another_models_order_are_the_same_readings(tmp_path: Path) -> None:
    model = known_model()
    turned = replace(
        model, table=ChannelTable(step_s=60.0, channel=tuple(reversed(model.table.channel)))
    )
    case = a_case(tmp_path)
    with case.chosen, respooled(case, turned, case.chosen.held) as spool:
        values = np.concatenate([v for _, v in spool.chunks(B)])
        np.testing.assert_array_equal(values, pump_values(B, N_HELD, N_LEARNED)[:, ::-1])
        assert Counter(spool.sources) == Counter(SOURCES)
    assert LIMITS.least_hours == 12
