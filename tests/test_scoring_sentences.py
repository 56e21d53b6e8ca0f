"""Alerts in words: numbers at their resolution, plain sentences, advice nowhere promised."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scoring.alerts import INSTRUMENT, SEVERAL, STUCK, Suspect
from scoring.channels import Channel
from scoring.sentences import (
    absent_text,
    clock_text,
    lasting_text,
    list_text,
    number_text,
    reads_text,
    scored_text,
    silent_text,
    span_text,
    stuck_text,
)

S = 1_000_000_000
FLOW = Channel(name="flow", unit="m3/h", span=(0, 600), resolution=0.1)
PUMP = Channel(name="pump", kind="state", words=("running", "stopped"))
AT_NS = 1_796_097_610 * S


def suspect(channel: str = "flow", unit: str = "m3/h", **fields: object) -> Suspect:
    known: dict[str, object] = {
        "reading": 241.3, "low": 268.0, "high": 281.0, "best": 274.0, "words": None,
        "time_ns": AT_NS, "share": 0.7,
    }  # fmt: skip
    return Suspect(channel, unit, **(known | fields))  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("value", "resolution", "text"),
    [
        (241.3, 0.1, "241.3"), (268.0, 0.1, "268.0"), (1330.0, 1.0, "1330"), (1330.0, 5.0, "1330"),
        (0.5, 0.25, "0.50"), (2.0, 0.001, "2.000"), (0.1 + 0.2, 0.1, "0.3"), (-0.04, 0.01, "-0.04"),
        (14.25, None, "14.25"), (123456.789, None, "1.2346e+05"), (3.0, 1e-12, "3.000000000"),
    ],
)  # fmt: skip
def test_numbers_have_the_decimals_of_their_instrument(
    value: float, resolution: float | None, text: str
) -> None:
    assert number_text(value, resolution) == text


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (40, "40 s"), (119.6, "120 s"), (120, "2 min"), (725, "12 min"), (7199, "120 min"),
        (7200, "2 h"), (12_600, "3.5 h"), (172_799, "48 h"), (172_800, "2 days"),
        (216_000, "2.5 days"), (-0.0, "0 s"),
    ],
)  # fmt: skip
def test_durations_are_said_as_people_say_them(seconds: float, text: str) -> None:
    assert lasting_text(abs(seconds)) == text


@pytest.mark.parametrize(
    ("names", "text"),
    [
        (["power"], "power"), (["power", "speed"], "power and speed"),
        (["power", "speed", "level"], "power, speed and level"),
        (["a", "b", "c", "d", "e"], "a, b, c and 2 more"),
    ],
)  # fmt: skip
def test_long_lists_are_cut(names: list[str], text: str) -> None:
    assert list_text(names) == text


@pytest.mark.parametrize(
    ("fields", "text"),
    [
        ({}, "reads 241.3 m3/h where 268.0 to 281.0 was expected"),
        ({"high": None}, "reads 241.3 m3/h where at least 268.0 was expected"),
        ({"low": None, "high": 200.0}, "reads 241.3 m3/h where at most 200.0 was expected"),
        ({"low": None, "high": None}, "reads 241.3 m3/h, which is odd"),
        ({"reading": 270.0}, "reads 270.0 m3/h, which is odd"),
        ({"unit": ""}, "reads 241.3 where 268.0 to 281.0 was expected"),
        ({"reading": None}, "is odd"),
    ],
)
def test_a_reading_stands_beside_what_was_expected(fields: dict[str, object], text: str) -> None:
    assert reads_text(suspect(**fields), FLOW) == text  # type: ignore[arg-type]


def test_a_channel_that_the_model_no_longer_knows_still_reads() -> None:
    assert reads_text(suspect(), None) == "reads 241.3 m3/h where 268 to 281 was expected"


@pytest.mark.parametrize(
    ("reading", "words", "text"),
    [
        ("stopped", {"running": 0.9, "stopped": 0.1}, "reads stopped where running was expected"),
        ("running", {"running": 0.9, "stopped": 0.1}, "reads running, which is odd"),
        ("a word never seen", None, "reads a word never seen, which is odd"),
    ],
)
def test_a_state_reads_a_word(reading: str, words: dict[str, float] | None, text: str) -> None:
    one = suspect("pump", "", reading=reading, low=None, high=None, best=None, words=words)
    assert reads_text(one, PUMP) == text


CHANNELS = {"flow": FLOW, "pump": PUMP}
READS = "flow at mill-lane reads 241.3 m3/h where 268.0 to 281.0 was expected"


def test_one_instrument_apart_is_said_to_be_looked_at_first() -> None:
    text = scored_text("mill-lane", INSTRUMENT, [suspect()], ["power"], CHANNELS)
    assert text == (
        f"{READS} beside power; the other channels agree with each other: look at the flow "
        "instrument first."
    )


def test_several_channels_point_to_the_machine() -> None:
    suspects = [suspect(), suspect("power", "kW"), suspect("speed", "rpm")]
    text = scored_text("mill-lane", SEVERAL, suspects, ["power", "speed"], CHANNELS)
    assert text == (
        f"{READS} beside power and speed, and power and speed are odd with it: several channels "
        "moved together, so look at the machine first."
    )
    assert "and power is odd with it" in scored_text(
        "mill-lane", SEVERAL, suspects[:2], [], CHANNELS
    )
    alone = scored_text("mill-lane", SEVERAL, suspects[:1], [], CHANNELS)
    assert alone == f"{READS}: look at the flow instrument first, then at the machine."


def test_a_stuck_suspect_is_said_to_be_stuck() -> None:
    text = scored_text("mill-lane", STUCK, [suspect()], [], CHANNELS)
    assert text == f"{READS}, and it no longer moves: look at the flow instrument first."


def test_another_channel_that_stands_still_is_named() -> None:
    text = scored_text("mill-lane", INSTRUMENT, [suspect()], ["power"], CHANNELS, ["level"])
    assert text.endswith("first. level is known to be stuck: look whether it can be why.")
    more = scored_text("mill-lane", SEVERAL, [], [], {}, ["level", "speed"])
    assert more.endswith("level and speed are known to be stuck: look whether they can be why.")


def test_odd_records_without_a_suspect_have_a_sentence_too() -> None:
    assert scored_text("mill-lane", SEVERAL, [], [], {}) == (
        "records of mill-lane are odd, and no single channel stands out."
    )


def test_kinds_of_their_own_say_where_to_look() -> None:
    since = "since 2026-12-01T04:00:10Z"
    assert stuck_text("x", ["flow"], None, None, AT_NS, math.inf) == (
        f"flow at x has repeated one reading {since}: look at the flow instrument or its "
        "connection first."
    )
    assert "has repeated running since" in stuck_text("x", ["pump"], 0.0, PUMP, AT_NS, 60.0)
    assert "repeated 7 since" in stuck_text("x", ["flow"], 7.0, None, AT_NS, 60.0)
    assert "(power and speed as well)" in stuck_text(
        "x", ["flow", "power", "speed"], 241.3, FLOW, AT_NS, 60.0
    )
    assert stuck_text("x", ["flow", ""], 241.3, FLOW, AT_NS, 60.0).startswith(
        f"no channel of x has moved {since}"
    )
    assert absent_text("x", ["flow"], AT_NS) == (
        f"flow at x has sent no reading {since} while records go on: look at its connection first."
    )
    assert span_text("x", ["flow", "power"], None, None) == (
        "flow at x is outside its span (power as well): look at its wiring and supply first."
    )
    assert silent_text("x", AT_NS) == (
        "x has sent nothing since its record of 2026-12-01T04:00:10Z: look at its line, logger "
        "and supply first."
    )
    assert clock_text("x", AT_NS, AT_NS + 7200 * S).startswith("the clock of x is 2 h behind: set")
    assert clock_text("x", AT_NS, AT_NS - 600 * S).startswith("the clock of x is 10 min ahead")


@given(st.floats(-1e6, 1e6), st.sampled_from([0.001, 0.01, 0.1, 0.25, 0.5, 1.0, 5.0]))
def test_a_number_at_its_resolution_is_read_back_unchanged(value: float, resolution: float) -> None:
    reported = round(value / resolution) * resolution
    assert float(number_text(reported, resolution)) == pytest.approx(reported, abs=resolution / 100)
