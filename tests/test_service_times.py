"""Times: RFC 3339 in, nanoseconds, RFC 3339 out."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta, timezone

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.times import format_time, format_times, parse_time, parse_times

S = 1_000_000_000
moments = st.datetimes(datetime(1971, 1, 1), datetime(2261, 1, 1))  # noqa: DTZ001 - zone added below


# RFC 3339 section 5.8 gives these examples, and what they are in UTC.
@pytest.mark.parametrize(
    ("text", "utc"),
    [
        ("1985-04-12T23:20:50.52Z", "1985-04-12T23:20:50.520Z"),
        ("1996-12-19T16:39:57-08:00", "1996-12-20T00:39:57Z"),
        ("1990-12-31T23:59:60Z", "1991-01-01T00:00:00Z"),
        ("1990-12-31T15:59:60-08:00", "1991-01-01T00:00:00Z"),
    ],
)
def test_the_examples_of_the_standard_are_read(text: str, utc: str) -> None:
    assert format_time(parse_time(text)) == utc


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("2026-12-01T04:00:10", "has no offset"),
        ("2026-12-01 04:00", "has no offset"),
        ("yesterday", "is not an RFC 3339 time"),
        ("2026-02-30T00:00:00Z", "a day that is not in the calendar"),
        ("2026-12-01T24:00:00Z", "that no clock shows"),
        ("1969-12-31T23:59:59Z", "outside the years 1970 to 2261"),
        ("1970-01-01T00:00:00+01:00", "before 1970"),
        ("2026-12-01T04:00:10+25:00", "an offset from UTC that no clock shows"),
        ("٢026-12-01T04:00:10Z", "is not an RFC 3339 time"),
        ("2026-12-01T04:00:10Z\n", "is not an RFC 3339 time"),
    ],
)
def test_what_is_no_time_is_refused_with_the_reason(text: str, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        parse_time(text)


@given(moments, st.integers(-14 * 60, 14 * 60))
def test_one_time_agrees_with_the_standard_library(moment: datetime, offset_min: int) -> None:
    local = moment.replace(tzinfo=timezone(timedelta(minutes=offset_min)))
    since = local - datetime(1970, 1, 1, tzinfo=UTC)
    wanted = (since.days * 86_400 + since.seconds) * S + since.microseconds * 1000
    assert parse_time(local.isoformat()) == wanted


@given(st.lists(moments, min_size=1, max_size=30))
def test_many_times_at_once_are_the_same_as_one_by_one(many: list[datetime]) -> None:
    texts = [moment.strftime("%Y-%m-%dT%H:%M:%SZ") for moment in many]
    found = parse_times(texts)
    assert found is not None
    assert found.tolist() == [parse_time(text) for text in texts]
    assert format_times(found) == texts


@pytest.mark.parametrize(
    "odd",
    ["2026-12-01T04:00:10.5Z", "2026-02-30T00:00:00Z", "2026-12-01T04:00:1xZ", "x" * 20, "é" * 20],
)
def test_one_odd_time_sends_all_of_them_the_careful_way(odd: str) -> None:
    assert parse_times(["2026-12-01T04:00:10Z", odd]) is None


def test_lengths_that_cancel_out_are_noticed() -> None:
    assert parse_times(["2026-12-01T04:00:10", "Z2026-12-01T04:00:10Z"]) is None


@given(st.integers(0, 2**62))
def test_every_nanosecond_survives_the_round_trip(time_ns: int) -> None:
    assert parse_time(format_time(time_ns)) == time_ns
    assert format_times(np.full(9, time_ns)) == [format_time(time_ns)] * 9
