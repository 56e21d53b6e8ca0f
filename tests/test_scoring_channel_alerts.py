"""Channels that are stuck, absent or out of span: one alert a kind, limits, sentences."""

from __future__ import annotations

import numpy as np

from scoring.alert_actions import Action, take_action
from scoring.alert_settings import AlertSettings
from scoring.alerts import ABSENT, SCORED, SPAN, STUCK, Alert
from tests.alert_tools import START_NS, STEP_NS, Fed, S, episodes, readings, told

IN, OUT, POWER, PUMP = range(4)
QUIET = [0.0]


def an_open(fed: Fed, kind: str) -> Alert:
    return next(alert for alert in fed.open if alert.kind == kind)


def test_a_channel_still_longer_than_ever_is_stuck_until_it_moves() -> None:
    fed = Fed(episodes(still_s=100.0))
    values = readings(40)
    values[5:, OUT] = 14.25
    fed.feed(QUIET * 40, values=values)
    # Twice the longest normal stillness, from the first repetition on.
    assert told(fed.events) == [("raised", STUCK)]
    alert = an_open(fed, STUCK)
    assert alert.since_ns == START_NS + 5 * STEP_NS
    assert alert.raised_ns == alert.since_ns + 210 * S
    assert alert.channels == ("out",)
    assert not alert.in_budget
    assert alert.sentence == (
        "out at a has repeated 14.25 bar since 2023-11-14T22:14:10Z; its longest normal stillness "
        "is 100 s: look at the out instrument or its connection first."
    )
    assert told(fed.feed(QUIET, values=readings(2)[1:])) == [("cleared", STUCK)]


def test_stillness_under_another_state_has_other_limits() -> None:
    fed = Fed(episodes(still_s=100.0))
    values = readings(100)
    values[:, OUT] = 14.0
    # The limits know only `running`; when the pump stops, nothing is called stuck.
    values[15:, PUMP] = 1.0
    fed.feed(QUIET * 100, values=values)
    assert fed.events == []
    # Started again, the stillness of the stop does not count.
    values[:, PUMP] = 0.0
    fed.feed(QUIET * 20, values=values[:20])
    assert fed.events == []
    assert told(fed.feed(QUIET * 2, values=values[:2])) == [("raised", STUCK)]


def test_stillness_while_neighbours_move_has_a_limit_of_its_own() -> None:
    fed = Fed(episodes(still_s=1e6, moving_s=100.0))
    values = readings(60)
    values[:, OUT] = 14.0
    values[:30, [IN, POWER]] = 3.0
    fed.feed(QUIET * 60, values=values)
    assert told(fed.events) == [("raised", STUCK)]
    # `in` and `power`, its neighbours, move from record 30 on.
    assert an_open(fed, STUCK).raised_ns == START_NS + (29 + 21) * STEP_NS


def test_a_source_that_repeats_everything_is_one_alert() -> None:
    fed = Fed(episodes(still_s=100.0))
    fed.feed(QUIET * 40, values=np.repeat(readings(1), 40, axis=0))
    assert told(fed.events) == [("raised", STUCK)]
    alert = an_open(fed, STUCK)
    assert set(alert.channels) == {"in", "out", "power"}
    assert alert.sentence == (
        "no channel of a has moved since 2023-11-14T22:13:20Z: look at its logger or "
        "connection first, which may repeat old readings."
    )
    # Motion of one channel leaves the two that are still stuck.
    values = readings(2)[1:]
    values[:, [IN, OUT]] = [12.0, 14.0]
    assert fed.feed(QUIET, values=values) == []
    assert an_open(fed, STUCK).sentence.startswith("in at a has repeated 12.00 bar since")
    assert told(fed.feed(QUIET, values=readings(2)[1:])) == [("cleared", STUCK)]


def test_a_joining_channel_calls_again_only_who_has_acknowledged() -> None:
    fed = Fed(episodes(still_s=100.0))
    values = readings(30)
    values[:, OUT] = 14.0
    fed.feed(QUIET * 30, values=values)
    assert fed.standing is not None
    alert = an_open(fed, STUCK)
    fed.standing, _ = take_action(
        "a", fed.standing, Action("acknowledge", "kit", alert_id=alert.id), START_NS
    )
    values[:, IN] = 12.0
    events = fed.feed(QUIET * 30, values=values)
    assert told(events) == [("grown", STUCK)]
    assert events[0].annunciate
    assert an_open(fed, STUCK).state == "raised"
    assert "(in as well)" in an_open(fed, STUCK).sentence


def test_a_channel_that_stops_coming_is_absent() -> None:
    fed = Fed(episodes(AlertSettings(absent_steps=5), away_s=0.0))
    values = readings(20)
    values[4:12, [OUT, POWER]] = np.nan
    fed.feed(QUIET * 20, values=values)
    assert told(fed.events) == [("raised", ABSENT), ("cleared", ABSENT)]
    raised, cleared = fed.events
    assert raised.time_ns == START_NS + 8 * STEP_NS
    assert cleared.alert is not None
    assert cleared.alert.channels == ("out", "power")
    assert cleared.alert.sentence == (
        "out and power at a have sent no reading since 2023-11-14T22:13:50Z while records go "
        "on: look at their connection first."
    )


def test_a_channel_that_hardly_ever_comes_is_not_missed() -> None:
    fed = Fed(episodes(away_s=np.inf))
    values = readings(500)
    values[:, OUT] = np.nan
    fed.feed(QUIET * 500, values=values)
    assert fed.events == []


def test_a_normal_absence_delays_and_a_long_one_does_not_blind() -> None:
    for away_s, expected_s in ((1000.0, 1500.0), (1e6, 3600.0), (0.0, 300.0)):
        fed = Fed(episodes(away_s=away_s))
        values = readings(500)
        values[1:, OUT] = np.nan
        fed.feed(QUIET * 500, values=values)
        assert an_open(fed, ABSENT).raised_ns == START_NS + int(expected_s) * S


def test_readings_outside_their_span_are_told_sooner_and_in_words() -> None:
    fed = Fed(episodes(away_s=0.0))
    values = readings(12)
    values[3:, IN] = 77.5
    fed.feed(QUIET * 12, values=values)
    assert told(fed.events) == [("raised", SPAN)]
    alert = an_open(fed, SPAN)
    assert alert.raised_ns == START_NS + 8 * STEP_NS
    assert alert.sentence == (
        "in at a reads 77.50 bar, outside its span of -50 to 50 bar: look at its wiring and "
        "supply first."
    )
    # The span's alert is not taken over by one for absence.
    values[:, IN] = np.nan
    assert fed.feed(QUIET * 12, values=values) == []
    assert told(fed.feed(QUIET, values=readings(1))) == [("cleared", SPAN)]


def test_a_stuck_channel_that_goes_away_is_absent_then() -> None:
    fed = Fed(episodes(AlertSettings(absent_steps=5), still_s=50.0, away_s=0.0))
    values = readings(40)
    values[:, OUT] = 14.0
    values[30:, OUT] = np.nan
    fed.feed(QUIET * 40, values=values)
    assert told(fed.events) == [("raised", STUCK), ("cleared", STUCK), ("raised", ABSENT)]


def test_a_scored_alert_on_a_stuck_channel_says_so() -> None:
    fed = Fed(episodes(still_s=100.0))
    values = readings(40)
    values[:, OUT] = 14.0
    fed.feed([0.0] * 30 + [20.0] * 10, values=values)
    assert told(fed.events) == [("raised", STUCK), ("raised", SCORED)]
    alert = an_open(fed, SCORED)
    assert alert.likely == STUCK
    assert "and it no longer moves" in alert.sentence
