"""One source's turn: what is due when, who is called, what is refused by nature."""

from __future__ import annotations

from dataclasses import replace

import pytest

from scoring.alert_kernel import new_floats, new_ints
from scoring.alert_settings import AlertSettings
from scoring.alert_standing import AlertStanding, Case, OutOfService, Shelf
from scoring.alert_turn import NEVER_NS, Turn, period_details
from scoring.alerts import SCORED, SILENT, STUCK, blank_alert
from tests.alert_tools import START_NS, S, told

HOUR_NS = 3600 * S


def a_turn(settings: AlertSettings | None = None, **fields: object) -> Turn:
    standing = AlertStanding(1, -1, new_ints(1), new_floats(1))
    standing = replace(standing, **fields)  # type: ignore[arg-type]
    return Turn("a", standing, settings or AlertSettings(), hold_s=60.0)


def raise_one(turn: Turn, kind: str, at_ns: int) -> None:
    turn.open(kind, at_ns, Case(blank_alert("a", kind, "", at_ns, at_ns, "m"), -1))


def test_nothing_is_due_where_nothing_is_open() -> None:
    turn = a_turn(AlertSettings(realarm_s=0.0))
    assert turn.next_wake_ns() == NEVER_NS
    assert turn.held_from_ns() == NEVER_NS
    raise_one(turn, SCORED, START_NS)
    assert turn.next_wake_ns() == NEVER_NS
    turn.wake(START_NS + 10**18)
    assert told(turn.events) == [("raised", SCORED)]


def test_the_next_thing_due_is_the_earliest_of_all() -> None:
    shelf = Shelf(STUCK, START_NS, START_NS + HOUR_NS, "known", "kit")
    period = OutOfService(START_NS, START_NS + 2 * HOUR_NS, "works", "kit")
    turn = a_turn(AlertSettings(realarm_s=5400.0), shelves=(shelf,), out_of_service=(period,))
    raise_one(turn, SCORED, START_NS)
    assert turn.next_wake_ns() == START_NS + HOUR_NS
    turn.wake(START_NS + HOUR_NS)
    assert turn.next_wake_ns() == START_NS + 5400 * S
    turn.wake(START_NS + 5400 * S)
    assert turn.next_wake_ns() == START_NS + 2 * HOUR_NS
    turn.wake(START_NS + 2 * HOUR_NS)
    assert [event.what for event in turn.events] == [
        "raised", "unshelved", "raised_again", "back_in_service",
    ]  # fmt: skip
    assert turn.events[3].details == period_details(period)
    assert (turn.shelves, turn.out_of_service) == ((), ())


def test_damping_is_of_one_kind_and_fades_with_its_window() -> None:
    turn = a_turn()
    for k in range(4):
        raise_one(turn, STUCK, START_NS + k * 60 * S)
        turn.clear(STUCK, START_NS + k * 60 * S + S)
    raise_one(turn, SILENT, START_NS + 300 * S)
    calls = [event.annunciate for event in turn.events if event.what == "raised"]
    assert calls == [True, True, True, False, True]
    raise_one(turn, STUCK, START_NS + 180 * S + HOUR_NS)
    assert turn.events[-1].annunciate
    # What is outside the window is forgotten.
    assert turn.raised == ((SILENT, START_NS + 300 * S), (STUCK, START_NS + 180 * S + HOUR_NS))


def test_a_damped_alert_that_lasts_is_announced_without_a_record_unless_it_is_scored() -> None:
    for kind, is_told in ((STUCK, True), (SCORED, False)):
        turn = a_turn(AlertSettings(repeat_n=1), raised=((kind, START_NS),))
        raise_one(turn, kind, START_NS + S)
        assert turn.cases[kind].alert.quiet == "damped"
        assert (turn.next_wake_ns() == START_NS + 61 * S) is is_told
        assert (turn.held_from_ns() == START_NS + 61 * S) is not is_told
        turn.wake(START_NS + 61 * S)
        assert (("announced", kind) in told(turn.events)) is is_told
        turn.wake(START_NS + 61 * S, over=True)
        assert turn.cases[kind].alert.announced_ns == START_NS + 61 * S


def test_two_open_alerts_of_a_kind_are_our_own_mistake() -> None:
    turn = a_turn()
    raise_one(turn, SCORED, START_NS)
    with pytest.raises(AssertionError, match="a kind has at most one open alert"):
        raise_one(turn, SCORED, START_NS + S)


def test_what_a_turn_leaves_is_what_it_started_from_where_nothing_happened() -> None:
    turn = a_turn(raised=((SCORED, START_NS),))
    turn.wake(START_NS)
    assert turn.left() == {
        "cases": (), "shelves": (), "out_of_service": (), "raised": ((SCORED, START_NS),),
    }  # fmt: skip
    assert turn.events == []
