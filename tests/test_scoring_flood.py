"""A flood: ten annunciations in ten minutes start it, fewer than five end it, one message."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scoring.alert_settings import AlertSettings
from scoring.alerts import SCORED, Event, alert_id, blank_alert
from scoring.flood import MAX_LISTED, BadFlood, Flood, gather
from tests.alert_tools import START_NS, S

SETTINGS = AlertSettings()


def event(at_s: float, source: str = "a", annunciate: bool = True) -> Event:
    at_ns = START_NS + int(at_s * S)
    alert = replace(
        blank_alert(source, SCORED, "record", at_ns, at_ns, "m"),
        id=alert_id(source, SCORED, at_ns),
        sentence=f"look at {source}",
    )
    return Event("raised", source, at_ns, alert, annunciate)


def whats(events: tuple[Event, ...]) -> list[str]:
    return [one.what for one in events]


def test_nine_alerts_in_ten_minutes_are_nine_calls() -> None:
    flood, events = gather(Flood(), [event(k) for k in range(9)], SETTINGS)
    assert whats(events) == ["raised"] * 9
    assert all(one.annunciate for one in events)
    assert flood.started_ns is None


def test_the_tenth_makes_them_one_message_with_its_list() -> None:
    flood, events = gather(Flood(), [event(k, f"s{k % 3}") for k in range(12)], SETTINGS)
    assert whats(events) == ["raised"] * 10 + ["flood_started"] + ["raised"] * 2
    assert [one.annunciate for one in events] == [True] * 9 + [False, True] + [False] * 2
    message = events[10]
    assert message.time_ns == START_NS + 9 * S
    assert message.details["n"] == 10
    assert len(message.details["alerts"]) == 10
    assert message.details["alerts"][0]["sentence"] == "look at s0"
    assert message.details["sentence"] == (
        "10 alerts in 10 min, most of them at s0, s1 and s2: a flood; look for what they have "
        "in common."
    )
    assert "no alarm, trip or interlock" in message.details["advice"]
    assert (flood.n, len(flood.listed)) == (12, 12)


def test_it_ends_below_five_in_ten_minutes_and_tells_the_whole_list() -> None:
    flood, _ = gather(Flood(), [event(k) for k in range(12)], SETTINGS)
    # Of the twelve, those of second 8 to 11 are the last four to leave the window.
    flood, events = gather(flood, [], SETTINGS, START_NS + 606 * S)
    assert events == ()
    flood, events = gather(flood, [], SETTINGS, START_NS + 607 * S)
    assert whats(events) == ["flood_ended"]
    assert not events[0].annunciate
    assert events[0].details["n"] == 12
    assert events[0].details["sentence"].startswith("the flood since 2023-11-14T22:13:29Z is over")
    assert flood.started_ns is None
    # The next alert calls again.
    _, events = gather(flood, [event(700)], SETTINGS)
    assert [one.annunciate for one in events] == [True]


def test_what_calls_nobody_counts_for_no_flood() -> None:
    flood, events = gather(Flood(), [event(k, annunciate=False) for k in range(30)], SETTINGS)
    assert whats(events) == ["raised"] * 30
    assert flood.recent == ()


def test_a_slow_trickle_is_no_flood() -> None:
    _, events = gather(Flood(), [event(70 * k) for k in range(50)], SETTINGS)
    assert "flood_started" not in whats(events)


def test_a_long_flood_keeps_counting_with_a_bounded_list() -> None:
    flood, _ = gather(Flood(), [event(k) for k in range(MAX_LISTED + 50)], SETTINGS)
    assert (flood.n, len(flood.listed)) == (MAX_LISTED + 50, MAX_LISTED)


@given(st.lists(st.integers(0, 2000), max_size=60), st.integers(0, 60))
@settings(max_examples=60)
def test_in_pieces_through_bytes_equals_at_once(seconds: list[int], cut: int) -> None:
    events = [event(at_s) for at_s in sorted(seconds)]
    whole, told = gather(Flood(), events, SETTINGS)
    part, first = gather(Flood(), events[:cut], SETTINGS)
    part, rest = gather(Flood.from_bytes(part.to_bytes()), events[cut:], SETTINGS)
    assert first + rest == told
    assert part == whole
    assert sum(one.annunciate for one in told) <= len(events)
    assert [
        one.what for one in told if one.what != "flood_started" and one.what != "flood_ended"
    ] == (["raised"] * len(events))


def test_times_that_go_back_do_not_undo_what_has_passed() -> None:
    flood, _ = gather(Flood(), [event(k) for k in range(9)], SETTINGS, START_NS + 100 * S)
    flood, events = gather(flood, [event(0)], SETTINGS, START_NS + 50 * S)
    assert whats(events) == ["raised", "flood_started"]
    assert flood.last_ns == START_NS + 100 * S


@pytest.mark.parametrize("data", [b"", b"{", b"[]", b"{}", b'{"format":1,"recent":3}'])
def test_bytes_that_are_no_flood_are_refused(data: bytes) -> None:
    with pytest.raises(BadFlood, match="a flood cannot be read"):
        Flood.from_bytes(data)


def test_a_flood_of_another_format_is_refused() -> None:
    with pytest.raises(BadFlood, match="another format was met; this version reads 1"):
        Flood.from_bytes(b'{"format":2}')
