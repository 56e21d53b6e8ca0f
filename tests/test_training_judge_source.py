"""What the judge finds is the same whoever looks, and needs one source's members alone."""

from __future__ import annotations

import pickle
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from tests.each_alone import ByPost, EachAlone
from tests.nights import N_HELD, Floats, a_case, known_model
from tests.pump import N_LEARNED, NAMES, SOURCES, pump_values
from training.hands import HERE, Hands
from training.judge import Case, judge
from training.judge_source import Asked, only, tell
from training.online import Online

A, B = SOURCES
HOUR_NS = 3600 * 10**9


def troubled() -> dict[str, Floats]:
    """Return the judge's days: one source drifts, the other has spikes."""
    values = {source: pump_values(source, N_HELD, N_LEARNED) for source in SOURCES}
    values[A][:, NAMES.index("flow")] += 3.0
    for start in range(0, N_HELD, 90):
        values[B][start : start + 5, 1] += 60.0
    return values


def troubled_case(folder: Path, hands: Hands = HERE) -> Case:
    """Return a case over those days, without a drill."""
    model = known_model()
    case = a_case(
        folder, in_use=model, witnesses=[model], held=troubled(), before=0.0, drill_trials=0
    )
    return replace(case, hands=hands)


@pytest.mark.parametrize("hands", [EachAlone(), ByPost([])])
def test_whoever_looks_at_the_sources_the_judgement_is_the_same(
    tmp_path: Path, hands: Hands
) -> None:
    found = []
    for one in (HERE, hands):
        case = troubled_case(tmp_path, one)
        with case.chosen:
            found.append(judge(case))
    mine, theirs = found
    assert not mine.passed
    assert len(mine.residuals) > 5
    assert (mine.answers, mine.residuals, mine.compared) == (
        theirs.answers, theirs.residuals, theirs.compared,
    )  # fmt: skip
    assert (mine.n_alerts, mine.own_nats) == (theirs.n_alerts, theirs.own_nats)


def test_alerts_of_each_source_are_those_of_a_replay_of_all(tmp_path: Path) -> None:
    case = troubled_case(tmp_path)
    with case.chosen:
        found = judge(case)
        online = Online(case.new, tmp_path)
        for source in SOURCES:
            for times_ns, values in case.chosen.held.chunks(source):
                online.add(source, times_ns, values)
        online.finish()
    assert found.n_alerts == len(online.calls()) > 5


def test_a_source_is_asked_with_its_own_member_alone(tmp_path: Path) -> None:
    model = known_model()
    assert list(only(model, A).members) == [A]
    assert only(model, "never seen") == replace(model, members={}, about={})
    # The fleet's member, which has no say, does not travel beside its own.
    with_fleet = replace(model, members={A: model.members[A]}, about={})
    assert len(pickle.dumps(only(model, A))) < 0.6 * len(pickle.dumps(with_fleet))
    case = troubled_case(tmp_path)
    with case.chosen as chosen:
        until_ns = chosen.held.first_last_ns(B)[1]
        asked = Asked(B, chosen.held.only((B,)), only(model, B), only(model, B), -1, None)
        whole = replace(asked, new=model, old=model)
        told, of_all = (tell(one, HOUR_NS, until_ns, tmp_path) for one in (asked, whole))
        learned = tell(replace(asked, after_ns=until_ns), HOUR_NS, until_ns, tmp_path)
    assert told.n_alerts == of_all.n_alerts > 5
    assert (told.n_judged, len(told.hours)) == (of_all.n_judged, N_HELD // 60)
    assert np.array_equal(told.own.sums, of_all.own.sums)
    assert told.residuals == []
    # The same model twice differs nowhere, and what it has learned is no measure.
    assert told.compared is not None
    assert not told.compared.sums[:, 0].any()
    assert told.compared.sums[:, 2].sum() > 4 * N_HELD
    assert learned.compared is None
    assert not list(tmp_path.glob("judged-*"))
