"""Readings are written as their instruments give them, times as UTC to the minute."""

from __future__ import annotations

import math

import pytest

from scoring.channels import Channel
from scoring.scorer import Expected
from training.report.readings import (
    count_text,
    day_text,
    expected_text,
    percent_text,
    reading_text,
    time_text,
)

FLOW = Channel(name="flow", unit="m3/h", resolution=0.5)
PUMP = Channel(name="pump", kind="state", words=("running", "stopped"))
NS = 1_767_225_600_000_000_000  # 2026-01-01T00:00:00Z


def test_times_are_utc_with_seconds_only_where_records_come_often() -> None:
    at = NS + 61_500_000_000
    assert (time_text(at), time_text(at, 10.0)) == ("2026-01-01 00:01", "2026-01-01 00:01:01")
    assert day_text(at) == "2026-01-01"


@pytest.mark.parametrize(
    ("value", "channel", "text"),
    [
        (12.0, FLOW, "12.0 m3/h"),
        (math.nan, FLOW, "missing"),
        (12.34567, Channel(name="x"), "12.346"),
        (1.0, PUMP, "stopped"),
        (2.0, PUMP, "a word never seen"),
    ],
)
def test_a_reading_has_its_resolution_and_unit(value: float, channel: Channel, text: str) -> None:
    assert reading_text(value, channel) == text


@pytest.mark.parametrize(
    ("low", "high", "text"),
    [
        (1.0, 2.5, "1.0 to 2.5 m3/h"),
        (-math.inf, 2.5, "at most 2.5 m3/h"),
        (1.0, math.inf, "at least 1.0 m3/h"),
        (-math.inf, math.inf, "anything"),
    ],
)
def test_an_open_interval_is_said_in_words(low: float, high: float, text: str) -> None:
    assert expected_text(Expected(low, high, 1.5), FLOW) == text


def test_a_state_is_expected_in_its_likeliest_word() -> None:
    words = {"running": 0.126, "stopped": 0.874}
    assert expected_text(Expected(math.nan, math.nan, math.nan, words), PUMP) == "stopped (87 %)"
    words = {"running": 1e-120, "stopped": 1e-9}
    text = expected_text(Expected(math.nan, math.nan, math.nan, words), PUMP)
    assert text == "no known word fits"


def test_counts_and_shares() -> None:
    assert (count_text(1234567), count_text(0)) == ("1,234,567", "0")
    assert (percent_text(0.9512), percent_text(1.0, 0)) == ("95.1 %", "100 %")
