"""The walk through a batch: times out of service, another model, batches of nothing."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scoring.alert_actions import Action, take_action
from scoring.alerts import SCORED, STUCK, Alert
from scoring.channels import parse_channels
from scoring.episodes import Episodes
from scoring.scorer import Scorer
from tests.alert_tools import START_NS, STEP_NS, Fed, episodes, readings, told
from tests.models import a_channel_table, a_model

IN, OUT, POWER, PUMP = range(4)
QUIET = [0.0]


def an_open(fed: Fed, kind: str) -> Alert:
    return next(alert for alert in fed.open if alert.kind == kind)


def test_out_of_service_clears_and_raises_nothing_until_it_ends() -> None:
    fed = Fed(episodes(still_s=100.0))
    values = readings(200)
    values[:, OUT] = 14.0
    fed.feed([20.0] * 30, values=values[:30])
    assert {alert.kind for alert in fed.open} == {SCORED, STUCK}
    assert fed.standing is not None
    end_ns = START_NS + 100 * STEP_NS
    fed.standing, taken = take_action(
        "a", fed.standing,
        Action("out_of_service", "kit", "pump pulled", end_ns=end_ns),
        START_NS + 30 * STEP_NS,
    )  # fmt: skip
    assert told(taken) == [("out_of_service", ""), ("cleared", SCORED), ("cleared", STUCK)]
    assert {e.alert.why_cleared for e in taken if e.alert} == {"out of service"}
    fed.events.clear()
    fed.feed([20.0] * 70, values=values[:70])
    assert fed.events == []
    assert fed.tick(START_NS + 99 * STEP_NS) == []
    # Back at its end, the clocks start anew: what is still over its level is raised at once.
    events = fed.feed([20.0] * 10, values=values[:10])
    assert told(events) == [("back_in_service", ""), ("raised", SCORED)]
    assert events[1].time_ns == end_ns
    assert events[0].details["reason"] == "pump pulled"


def test_a_period_out_of_service_that_begins_within_a_batch_clears_there() -> None:
    for cuts in ((), range(1, 40)):
        fed = Fed(episodes())
        fed.feed([0.0])
        assert fed.standing is not None
        start_ns, end_ns = START_NS + 10 * STEP_NS, START_NS + 30 * STEP_NS
        fed.standing, _ = take_action(
            "a", fed.standing, Action("out_of_service", "kit", "works", start_ns=start_ns,
            end_ns=end_ns), START_NS,
        )  # fmt: skip
        fed.feed([20.0] * 40, cuts=cuts)
        assert told(fed.events) == [
            ("raised", SCORED), ("cleared", SCORED), ("back_in_service", ""), ("raised", SCORED),
        ]  # fmt: skip
        assert [event.time_ns for event in fed.events] == [
            START_NS + STEP_NS, start_ns, end_ns, end_ns,
        ]  # fmt: skip


def renamed(old: str, new: str) -> Episodes:
    """Return the machine of a model in which one instrument has another name."""
    model = a_model(
        channel=[
            c.model_dump() | ({"name": new} if c.name == old else {})
            for c in a_channel_table().channel
        ],
        derived=[
            {"name": "head", "operation": "difference", "of": ["out", "in"]},
            {"name": "out before", "operation": "previous", "of": ["out"]},
        ] if old not in ("in", "out") else [],
    )  # fmt: skip
    return Episodes(Scorer(replace(model, name="fedcba9876543210")))


def test_open_alerts_live_on_under_another_model_with_the_same_channels() -> None:
    fed = Fed(episodes(still_s=100.0))
    values = readings(60)
    values[:, OUT] = 14.0
    fed.feed([20.0] * 30, values=values[:30])
    ids = {event.alert.id for event in fed.events if event.alert}
    fed.machine = Episodes(Scorer(replace(a_model(), name="fedcba9876543210")))
    fed.feed([20.0] * 30, values=values[:30])
    assert fed.standing is not None
    assert {alert.id for alert in fed.standing.open} == ids
    assert {alert.model for alert in fed.standing.open} == {"0123456789abcdef"}


def test_open_alerts_live_on_where_a_channel_has_gone() -> None:
    fed = Fed(episodes(still_s=100.0))
    values = readings(60)
    values[:, [OUT, POWER]] = 14.0
    fed.feed([20.0] * 30, values=values[:30])
    before = an_open(fed, SCORED)
    fed.machine = renamed("power", "load")
    events = fed.feed([20.0] * 3, values=values[:3])
    assert events == []
    # `power` is no longer watched, `out` is and still stands.
    assert an_open(fed, STUCK).sentence.startswith("out at a has repeated 14")
    assert "as well" not in an_open(fed, STUCK).sentence
    assert an_open(fed, SCORED).id == before.id
    assert an_open(fed, SCORED).n_records == before.n_records + 3
    assert told(fed.feed([20.0], values=readings(2)[1:])) == [("cleared", STUCK)]


def test_an_alert_of_channels_that_are_all_gone_is_cleared() -> None:
    fed = Fed(episodes(still_s=100.0))
    values = readings(30)
    values[:, POWER] = 14.0
    fed.feed(QUIET * 30, values=values)
    fed.machine = renamed("power", "load")
    events = fed.feed(QUIET, values=values[:1])
    assert told(events) == [("cleared", STUCK)]
    assert events[0].alert is not None
    assert events[0].alert.why_cleared == "no longer watched"


def test_a_table_of_other_channels_is_laid_out_anew() -> None:
    table = parse_channels({"channel": [{"name": "x"}]}, "test")
    assert len(table.instruments) == 1
    fed = Fed(episodes())
    fed.feed(QUIET * 3)
    assert fed.standing is not None
    last_ns = fed.standing.last_ns
    fed.machine = renamed("power", "load")
    fed.feed(QUIET)
    assert fed.standing.last_ns == last_ns + STEP_NS
    assert fed.standing.floats.shape == (5, 5)


@pytest.mark.parametrize("n", [0, 1])
def test_a_batch_of_nothing_or_of_late_records_is_no_trouble_for_what_is_open(n: int) -> None:
    fed = Fed(episodes())
    fed.feed([20.0] * 3)
    assert fed.feed([20.0] * n, times_ns=np.full(n, START_NS)) == []
    assert an_open(fed, SCORED).n_records == 3
