"""Times: RFC 3339, local ones, and the two hours a year that are not like others."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.histories import stamps
from training.history.options import HistoryOptions
from training.history.times import NO_TIME, TimeReader, parse_time

VIENNA = ZoneInfo("Europe/Vienna")


def times(
    cells: Sequence[str | None], sources: list[int] | None = None, **options: object
) -> list[str]:
    """Return each time in UTC, or the reason that there is none."""
    reader = TimeReader(HistoryOptions(**options))  # type: ignore[arg-type]
    codes = np.array(sources or [0] * len(cells), dtype=np.int32)
    found, bad = reader.read(pa.array(cells, pa.string()), codes)
    texts = stamps(found)
    for row, reason, _ in bad:
        assert found[row] == NO_TIME
        texts[row] = reason
    return texts


@pytest.mark.parametrize("also", [[], ["nonsense"]], ids=["clean column", "column with nonsense"])
@pytest.mark.parametrize(
    ("cell", "expected"),
    [
        # RFC 3339, 2002, sections 5.6 and 5.8.
        ("1985-04-12T23:20:50.52Z", "1985-04-12T23:20:50"),
        ("1996-12-19T16:39:57-08:00", "1996-12-20T00:39:57"),
        ("1990-12-31T23:59:60Z", "1991-01-01T00:00:00"),
        ("1990-12-31T15:59:60-08:00", "1991-01-01T00:00:00"),
        ("1937-01-01T12:00:27.87+00:20", "1937-01-01T11:40:27"),
        ("2026-12-01t04:00:10z", "2026-12-01T04:00:10"),
        ("2026-12-01 04:00:10Z", "2026-12-01T04:00:10"),
        ("2026-12-01 04:00:10 +01:00", "2026-12-01T03:00:10"),
        (" 2026-12-01T04:00:10Z ", "2026-12-01T04:00:10"),
        ("2026-12-01T04:00Z", "2026-12-01T04:00:00"),
        ("2026-12-01T04:00:10-00:00", "2026-12-01T04:00:10"),
        ("2026-02-29T00:00:00Z", "broken time"),
        ("2024-02-29T00:00:00Z", "2024-02-29T00:00:00"),
        ("2026-12-01T24:00:00Z", "broken time"),
        ("2026-12-01T04:00:61Z", "broken time"),
        ("2026-12-01T04:00:10+25:00", "broken time"),
        ("3026-12-01T04:00:10Z", "broken time"),
        ("1796097610", "broken time"),
        ("2026-12-01", "broken time"),
        ("12/01/2026 04:00", "broken time"),
        ("", "broken time"),
        (None, "broken time"),
        ("2026-12-01T04:00:10", "time without an offset"),
        ("01.12.2026 04:00:10", "time without an offset"),
    ],
)
def test_a_time_reads_alike_in_clean_and_troubled_columns(
    cell: str | None, expected: str, also: list[str]
) -> None:
    assert times([cell, *also])[0] == expected


@given(
    st.integers(-8_520_336_000_000_000, 9_183_110_400_000_000),
    st.integers(-1439, 1439),
)
def test_every_stamp_is_read_as_the_standard_library_writes_it(
    local_us: int, offset_min: int
) -> None:
    epoch = datetime(1970, 1, 1, tzinfo=UTC)
    local = (epoch + timedelta(microseconds=local_us)).replace(tzinfo=None)
    there = f"{offset_min // 60 if offset_min >= 0 else -(-offset_min // 60):+03d}"
    text = f"{local.isoformat(timespec='microseconds')}{there}:{abs(offset_min) % 60:02d}"
    if offset_min < 0:
        text = text.replace("+00:", "-00:")
    stamp = datetime.fromisoformat(text)
    expected = (stamp - epoch) // timedelta(microseconds=1) * 1000
    codes = np.zeros(1, dtype=np.int32)
    found, bad = TimeReader(HistoryOptions()).read(pa.array([text]), codes)
    assert (found.tolist(), bad) == ([expected], [])
    assert parse_time(text) == expected


def test_local_times_are_read_in_their_zone() -> None:
    assert times(["2026-07-01 12:00:00", "01.12.2026 12:00:00,5"], zone=VIENNA) == [
        "2026-07-01T10:00:00",
        "2026-12-01T11:00:00",
    ]


def test_an_offset_in_the_cell_goes_before_the_zone() -> None:
    assert times(["2026-07-01T12:00:00Z", "2026-07-01T12:00:00"], zone=VIENNA) == [
        "2026-07-01T12:00:00",
        "2026-07-01T10:00:00",
    ]


def test_the_hour_that_exists_twice_is_passed_twice_by_each_source() -> None:
    cells = ["02:00", "02:00", "02:30", "02:30", "02:00", "02:30", "02:00", "02:30", "03:00"]
    sources = [0, 1, 0, 1, 0, 0, 1, 1, 0]
    local = [f"2026-10-25 {cell}:00" for cell in cells]
    assert [t[11:16] for t in times(local, sources, zone=VIENNA)] == [
        *("00:00", "00:00", "00:30", "00:30"),
        *("01:00", "01:30", "01:00", "01:30", "02:00"),
    ]


def test_a_time_twice_within_the_first_pass_does_not_begin_the_second() -> None:
    cells = ["02:10", "02:10", "02:20"]
    local = [f"2026-10-25 {cell}:00" for cell in cells]
    assert [t[11:16] for t in times(local, zone=VIENNA)] == ["00:10", "00:10", "00:20"]


def test_the_second_pass_is_remembered_from_batch_to_batch() -> None:
    reader = TimeReader(HistoryOptions(zone=VIENNA))
    codes = np.zeros(1, dtype=np.int32)
    local = ["2026-10-25 02:50:00", "2026-10-25 02:00:00", "2026-10-25 02:10:00"]
    found = [reader.read(pa.array([cell]), codes)[0][0] for cell in local]
    assert np.diff(found).tolist() == [600_000_000_000] * 2


def test_another_years_doubled_hour_begins_with_its_first_pass() -> None:
    local = ["2025-10-26 02:50:00", "2025-10-26 02:00:00", "2026-10-25 02:10:00"]
    assert times(local, zone=VIENNA)[2] == "2026-10-25T00:10:00"


def test_a_time_that_never_was_is_broken() -> None:
    reader = TimeReader(HistoryOptions(zone=VIENNA))
    found, bad = reader.read(pa.array(["2026-03-29 02:30:00"]), np.zeros(1, dtype=np.int32))
    assert found[0] == NO_TIME
    assert bad[0].reason == "broken time"
    assert bad[0].detail == "time '2026-03-29 02:30:00' never was in Europe/Vienna"


def test_a_stated_format_is_taken() -> None:
    cells = ["12/01/2026 04:30 PM", "13/01/2026 04:30 PM"]
    found = times(cells, time_format="%m/%d/%Y %I:%M %p", zone=VIENNA)
    assert found == ["2026-12-01T15:30:00", "broken time"]
    zoned = times(["2026-336 04:30:00 +0100"], time_format="%Y-%j %H:%M:%S %z")
    assert zoned == ["2026-12-02T03:30:00"]


def test_stamps_out_of_reach_are_broken_and_spoil_no_other() -> None:
    cells = [datetime(3026, 1, 1, tzinfo=UTC), datetime(2026, 1, 1, tzinfo=UTC), None]
    column = pa.array(cells, pa.timestamp("us", "UTC"))
    found, bad = TimeReader(HistoryOptions()).read(column, np.zeros(3, dtype=np.int32))
    assert stamps(found) == ["", "2026-01-01T00:00:00", ""]
    assert [b.row for b in bad] == [0, 2]


def test_nine_decimals_of_a_second_are_kept() -> None:
    assert parse_time("1970-01-01T00:00:00.123456789Z") == 123_456_789
