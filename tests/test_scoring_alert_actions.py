"""What people do about alerts, and what is refused with which sentence."""

from __future__ import annotations

from typing import Any

import pytest

from scoring.alert_actions import Action, BadAction, act_on_cleared, take_action
from scoring.alert_settings import AlertSettings
from scoring.alerts import SCORED, STUCK, Alert
from tests.alert_tools import START_NS, STEP_NS, Fed, S, episodes, told

HOUR_NS = 3600 * S
DAY_NS = 24 * HOUR_NS


def raised(n: int = 1) -> Fed:
    """Return a source whose scored alert has stood for n records."""
    fed = Fed(episodes())
    fed.feed([20.0] * n)
    return fed


def act(fed: Fed, what: str, at_ns: int | None = None, **fields: Any) -> list[Any]:
    """Do something to a source, by kit and now unless said otherwise."""
    assert fed.standing is not None
    at_ns = fed.standing.last_ns if at_ns is None else at_ns
    action = Action(what, **({"by": "kit"} | fields))
    fed.standing, events = take_action(fed.source, fed.standing, action, at_ns)
    return list(events)


def test_an_acknowledged_alert_says_by_whom_and_keeps_the_comment() -> None:
    fed = raised()
    (event,) = act(fed, "acknowledge", alert_id=fed.open[0].id, comment="on my way")
    assert (event.what, event.by, event.comment) == ("acknowledged", "kit", "on my way")
    alert = fed.open[0]
    assert (alert.state, alert.acknowledged_by) == ("acknowledged", "kit")
    assert alert.acknowledged_ns == START_NS
    assert [(note.by, note.text) for note in alert.notes] == [("kit", "on my way")]
    with pytest.raises(BadAction, match="was acknowledged by kit at 2023-11-14T22:13:20Z"):
        act(fed, "acknowledge", alert_id=alert.id)


def test_what_got_worse_must_be_acknowledged_again() -> None:
    fed = raised()
    act(fed, "acknowledge", alert_id=fed.open[0].id)
    events = fed.feed([20.0], [5.0])
    assert told(events) == [("worsened", SCORED)]
    assert events[0].annunciate
    assert fed.open[0].state == "raised"
    act(fed, "acknowledge", alert_id=fed.open[0].id)
    assert fed.open[0].state == "acknowledged"


def test_notes_and_labels_are_kept_with_who_and_when() -> None:
    fed = raised()
    name = fed.open[0].id
    act(fed, "note", alert_id=name, comment="valve was shut")
    (event,) = act(fed, "label", alert_id=name, label="real", comment="found it", by="ann")
    assert event.details == {"label": "real"}
    alert = fed.open[0]
    assert alert.label == "real"
    assert [(n.by, n.text) for n in alert.notes] == [("kit", "valve was shut"), ("ann", "found it")]
    act(fed, "label", alert_id=name, label="nuisance")
    assert fed.open[0].label == "nuisance"


def cleared() -> Alert:
    fed = raised()
    (event,) = fed.feed([0.0] * 40)
    assert event.alert is not None
    return event.alert


def test_a_cleared_alert_can_be_acknowledged_noted_and_labelled() -> None:
    alert, event = act_on_cleared(cleared(), Action("acknowledge", "kit"), START_NS + DAY_NS)
    assert (alert.state, alert.acknowledged_by, event.what) == ("cleared", "kit", "acknowledged")
    with pytest.raises(BadAction, match="was acknowledged by kit"):
        act_on_cleared(alert, Action("acknowledge", "ann"), START_NS + DAY_NS)
    alert, event = act_on_cleared(alert, Action("label", "kit", label="real"), START_NS + DAY_NS)
    assert (alert.label, event.what) == ("real", "labelled")
    with pytest.raises(BadAction, match="'shelve' is done to a source, not to an alert"):
        act_on_cleared(alert, Action("shelve", "kit", "x", kind=SCORED, until_ns=9), 1)


def test_a_shelf_keeps_an_alert_quiet_and_calls_when_it_ends() -> None:
    fed = raised()
    until_ns = START_NS + 5 * STEP_NS
    (event,) = act(fed, "shelve", kind=SCORED, comment="known", until_ns=until_ns)
    assert event.details == {"kind": SCORED, "until_ns": until_ns}
    assert fed.open[0].quiet == "shelved"
    events = fed.feed([20.0] * 8)
    assert told(events) == [("unshelved", ""), ("raised_again", SCORED)]
    assert [e.annunciate for e in events] == [False, True]
    assert {e.time_ns for e in events} == {until_ns}
    assert fed.open[0].quiet == ""


def test_an_alert_raised_on_a_shelf_is_announced_when_the_shelf_ends() -> None:
    for by_hand in (False, True):
        fed = Fed(episodes())
        fed.feed([0.0])
        act(fed, "shelve", kind=SCORED, comment="known", until_ns=START_NS + HOUR_NS)
        events = fed.feed([20.0] * 3)
        assert told(events) == [("raised", SCORED)]
        assert not events[0].annunciate
        assert fed.open[0].announced_ns is None
        events = act(fed, "unshelve", kind=SCORED) if by_hand else fed.tick(START_NS + HOUR_NS)
        assert told(events)[:2] == [("unshelved", ""), ("announced", SCORED)]
        assert events[1].annunciate
        assert fed.open[0].announced_ns == events[1].time_ns


def test_a_shelf_is_of_one_kind_and_a_new_one_takes_its_place() -> None:
    fed = raised()
    act(fed, "shelve", kind=STUCK, comment="known", until_ns=START_NS + HOUR_NS)
    assert fed.open[0].quiet == ""
    act(fed, "shelve", kind=STUCK, comment="still", until_ns=START_NS + 2 * HOUR_NS)
    assert fed.standing is not None
    assert [(s.kind, s.reason) for s in fed.standing.shelves] == [(STUCK, "still")]


def test_an_acknowledged_alert_comes_off_its_shelf_in_silence() -> None:
    fed = raised()
    act(fed, "acknowledge", alert_id=fed.open[0].id)
    act(fed, "shelve", kind=SCORED, comment="known", until_ns=START_NS + HOUR_NS)
    assert told(act(fed, "unshelve", kind=SCORED)) == [("unshelved", "")]
    assert (fed.open[0].state, fed.open[0].quiet) == ("acknowledged", "")


def test_a_source_put_back_is_given_its_time_before_it_is_missed() -> None:
    fed = raised()
    act(fed, "out_of_service", comment="works")
    assert fed.open == ()
    before = fed.standing
    assert fed.tick(START_NS + DAY_NS) == []
    assert fed.standing is before
    (event,) = act(fed, "back_in_service", at_ns=START_NS + DAY_NS)
    assert event.details["reason"] == "works"
    assert event.details["end_ns"] == START_NS + DAY_NS
    assert fed.tick(START_NS + DAY_NS + 299 * S) == []
    assert told(fed.tick(START_NS + DAY_NS + 300 * S)) == [("raised", "silent")]


@pytest.mark.parametrize("by_tick", [False, True])
def test_trouble_that_outlasts_a_short_time_out_of_service_is_raised_anew(by_tick: bool) -> None:
    # Not one record came meanwhile, so only the action, or the tick, can have ended it.
    fed = raised(3)
    at_ns = START_NS + 2 * STEP_NS
    if by_tick:
        act(fed, "out_of_service", comment="works", start_ns=at_ns + S, end_ns=at_ns + 5 * S)
        assert told(fed.tick(at_ns + 2 * S)) == [("cleared", SCORED)]
        fed.tick(at_ns + 5 * S)
    else:
        act(fed, "out_of_service", comment="works")
        act(fed, "back_in_service")
    assert told(fed.feed([20.0])) == [("raised", SCORED)]


def test_a_period_that_ends_by_itself_gives_the_same_time() -> None:
    fed = raised()
    act(fed, "out_of_service", comment="works", end_ns=START_NS + DAY_NS)
    assert told(fed.tick(START_NS + DAY_NS + 5 * S)) == [("back_in_service", "")]
    assert fed.tick(START_NS + DAY_NS + 300 * S) == []
    assert told(fed.tick(START_NS + DAY_NS + 305 * S)) == [("raised", "silent")]


def test_a_period_to_come_starts_by_itself_and_can_be_called_off() -> None:
    fed = raised()
    act(fed, "out_of_service", comment="works", start_ns=START_NS + 60 * S)
    assert told(fed.tick(START_NS + 60 * S)) == [("cleared", SCORED)]
    fed = raised()
    act(fed, "out_of_service", comment="works", start_ns=START_NS + 60 * S)
    (event,) = act(fed, "back_in_service")
    assert event.details["end_ns"] == event.details["start_ns"] == START_NS + 60 * S
    assert fed.tick(START_NS + 60 * S) == []


@pytest.mark.parametrize(
    ("what", "fields", "message"),
    [
        ("delete", {}, "'delete' is no action; known are acknowledge, note, label, shelve"),
        ("acknowledge", {"by": " "}, "acknowledge needs the name of whoever does it in `by`"),
        ("acknowledge", {"alert_id": "ff"}, "a has no open alert 'ff'"),
        ("note", {"alert_id": "ff"}, "note needs its text in `comment`"),
        ("note", {"comment": "x" * 2001}, "a comment of 2001 characters is too long; at most 2000"),
        ("label", {"label": "good"}, "label 'good' is neither real nor nuisance"),
        ("shelve", {"kind": SCORED}, "shelve needs its reason in `comment`"),
        ("shelve", {"kind": "all", "comment": "x"}, "kind 'all' is none of scored, stuck"),
        ("shelve", {"kind": SCORED, "comment": "x"}, "a shelf needs its end in `until`"),
        ("shelve", {"kind": SCORED, "comment": "x", "until_ns": START_NS}, "later than now"),
        (
            "shelve", {"kind": SCORED, "comment": "x", "until_ns": START_NS + 9 * DAY_NS},
            "a shelf of 9 days is too long; at most 7 days, and what is to be quiet for longer",
        ),
        ("unshelve", {"kind": SCORED}, "no scored alerts of a are shelved"),
        ("out_of_service", {}, "out_of_service needs its reason in `comment`"),
        ("out_of_service", {"comment": "x", "end_ns": START_NS}, "must end after its start"),
        ("back_in_service", {}, "a is not out of service"),
    ],
)  # fmt: skip
def test_what_cannot_be_done_is_refused_with_a_sentence(
    what: str, fields: dict[str, Any], message: str
) -> None:
    fed = raised()
    before = fed.standing
    with pytest.raises(BadAction, match=message):
        act(fed, what, **fields)
    assert fed.standing is before


@pytest.mark.parametrize(
    ("start", "end", "fits"),
    [(0, 150, False), (150, 180, False), (150, None, False), (50, 101, False), (200, 300, True),
     (20, 100, True), (200, None, True)],
)  # fmt: skip
def test_two_periods_out_of_service_may_not_meet(start: int, end: int | None, fits: bool) -> None:
    fed = raised()
    act(
        fed, "out_of_service", comment="works", start_ns=START_NS + 100 * S,
        end_ns=START_NS + 200 * S,
    )  # fmt: skip
    fields = {"start_ns": START_NS + start * S, "end_ns": end and START_NS + end * S}
    if fits:
        act(fed, "out_of_service", comment="more", **fields)
        assert fed.standing is not None
        assert len(fed.standing.out_of_service) == 2
    else:
        with pytest.raises(BadAction, match=r"already \(works, kit\); put it back first"):
            act(fed, "out_of_service", comment="more", **fields)


def test_a_period_without_an_end_is_named_as_such() -> None:
    fed = raised()
    act(fed, "out_of_service", comment="works")
    with pytest.raises(BadAction, match="until it is put back already"):
        act(fed, "out_of_service", comment="more")


def test_the_longest_shelf_is_the_sites_to_say() -> None:
    fed = raised()
    assert fed.standing is not None
    action = Action("shelve", "kit", "known", kind=SCORED, until_ns=START_NS + 2 * HOUR_NS)
    with pytest.raises(BadAction, match="at most 60 min"):
        take_action("a", fed.standing, action, START_NS, AlertSettings(shelve_most_s=3600.0))
