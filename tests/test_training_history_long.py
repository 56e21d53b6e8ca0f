"""Long files to records: last values, their age, quality, and readings in any order."""

from __future__ import annotations

import random
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pytest

from tests.histories import DATA, a_table, read, rows, write
from training.history import delimited, long_order
from training.history.options import BadHistory, HistoryOptions
from training.history.reading import read_history
from training.history.tally import Tally

HEAD = "time,source,channel,value\n"
LONG_NAMES: dict[str, Any] = {
    "time": "when",
    "source": "station",
    "channel": "tag",
    "value": "reading",
    "quality": "status",
}


def line(second: int, channel: str, value: object, source: str = "a") -> str:
    """Return one reading as a line."""
    return f"2026-12-01T04:{second // 60:02d}:{second % 60:02d}Z,{source},{channel},{value}\n"


def short(found: list[tuple[Any, ...]]) -> list[tuple[str, list[float | None]]]:
    """Return minute, second and values of every record."""
    return [(time[14:], values) for _, time, _, values, _ in found]


def test_readings_of_one_poll_make_one_record_at_the_time_of_the_last(tmp_path: Path) -> None:
    text = HEAD + line(0, "flow", 1) + line(2, "pump", "running") + line(10, "flow", 2)
    assert short(rows(read(write(tmp_path, text)))) == [
        ("00:02", [1.0, 0.0]),
        ("00:10", [2.0, 0.0]),
    ]


def test_a_last_value_stands_for_five_steps_and_no_longer(tmp_path: Path) -> None:
    text = HEAD + line(0, "pump", "stopped") + "".join(line(s, "flow", s) for s in range(0, 80, 10))
    found = short(rows(read(write(tmp_path, text))))
    assert [values[1] for _, values in found] == [1.0] * 6 + [None] * 2
    assert [time for time, _ in found] == [f"{s // 60:02d}:{s % 60:02d}" for s in range(0, 80, 10)]


def test_the_age_and_the_step_can_be_stated(tmp_path: Path) -> None:
    text = HEAD + line(0, "pump", "stopped") + "".join(line(s, "flow", s) for s in range(0, 80, 10))
    path = write(tmp_path, text)
    found = short(rows(read(path, age_s=20)))
    assert [values[1] for _, values in found] == [1.0] * 3 + [None] * 5
    assert [time for time, _ in short(rows(read(path, step_s=40)))] == ["00:20", "00:50", "01:10"]
    table = a_table(step_s=40)
    assert [time for time, _ in short(rows(read(path, table)))] == ["00:20", "00:50", "01:10"]


def test_an_export_with_quality_and_other_names_is_read() -> None:
    tally = Tally()
    table = a_table(
        {"name": "flow"},
        {"name": "level"},
        {"name": "pump", "kind": "state", "words": ["running", "stopped"]},
    )
    found = rows(read(DATA / "long_quality.csv", table, tally, **LONG_NAMES))
    assert dict(tally.bad_quality) == {"flow": 1}
    assert not tally.rejected
    by_source = {s: [r for r in found if r[2] == s] for s in ("alder-bank", "mill-ground")}
    assert [len(r) for r in by_source.values()] == [12, 12]
    assert by_source["alder-bank"][0][1:4] == (
        "2026-11-03T08:00:04",
        "alder-bank",
        [118.2, 2.41, 0],
    )
    # The reading of bad quality is missing, not carried on from the one before it.
    assert by_source["alder-bank"][4][3] == [None, 2.38, 0.0]
    assert by_source["mill-ground"][4][3] == [120.2, 2.38, 0.0]
    assert by_source["alder-bank"][11][3] == [123.7, 2.32, 1.0]


@pytest.mark.parametrize(
    ("quality", "reason"),
    [
        ("good", ""),
        ("Good", ""),
        ("UncertainLastUsableValue", ""),
        ("", ""),
        ("so-so", "unknown q"),
    ],
)
def test_qualities_are_the_words_of_opc_ua(tmp_path: Path, quality: str, reason: str) -> None:
    # OPC UA Part 8 names a status Good, Uncertain or Bad, with a reason behind it.
    text = HEAD.replace("\n", ",quality\n") + line(0, "flow", 1).replace("\n", f",{quality}\n")
    text += line(10, "flow", 2).replace("\n", ",good\n")
    tally = Tally()
    found = rows(read(write(tmp_path, text), a_table({"name": "flow"}), tally))
    assert len(found) == (1 if reason else 2)
    assert next(iter(tally.rejected), "").startswith(reason)


def test_bad_readings_are_counted_by_reason_and_harm_no_other(tmp_path: Path) -> None:
    tally = Tally()
    text = HEAD + (
        line(0, "flow", 1)
        + line(10, "flow", "text")
        + line(20, "flow", "inf")
        + line(30, "", 1)
        + line(40, "flow", 1, source="")
        + "never,a,flow,1\n"
        + "2026-12-01T04:00:50Z,a,flow\n"
        + line(55, "pump", "jammed")
        + line(60, "flow", 2000)
        + line(70, "other", "text")
    )
    found = short(rows(read(write(tmp_path, text), tally=tally)))
    assert dict(tally.rejected) == {
        "text in a measurement": 1,
        "infinite number": 1,
        "no channel": 1,
        "no source": 1,
        "broken time": 1,
        "wrong number of cells": 1,
    }
    assert tally.first["text in a measurement"].endswith("line 3: 'flow' reads 'text'")
    assert tally.n_rows == 10
    assert dict(tally.outside_span) == {"flow": 1}
    assert dict(tally.unknown_words) == {"pump": 1}
    assert found[-1][1][1] == 2.0


def test_a_channel_that_never_reports_is_refused_with_those_that_do(tmp_path: Path) -> None:
    path = write(tmp_path, HEAD + line(0, "Flow", 1) + line(0, "pump", "running"))
    with pytest.raises(
        BadHistory, match="no reading of channel 'flow', .*; there are 'Flow', 'pump'"
    ):
        read(path)


def test_local_times_without_a_zone_are_refused(tmp_path: Path) -> None:
    path = write(tmp_path, HEAD + line(0, "flow", 1).replace("Z", ""))
    with pytest.raises(BadHistory, match="the times have no offset"):
        read(path)


def test_a_wide_file_of_channels_called_channel_and_value_is_wide(tmp_path: Path) -> None:
    path = write(tmp_path, "time,channel,value\n2026-12-01T04:00:00Z,1,2\n")
    (batch,) = read(path, a_table({"name": "channel"}, {"name": "value"}))
    assert batch.values.tolist() == [[1.0, 2.0]]


def readings_of_a_day(n: int) -> list[str]:
    """Return lines of two sources and two channels, in time order."""
    lines = []
    for i in range(n):
        for source in ("a", "b"):
            lines.append(line(i * 10, "flow", i, source))
            lines.append(line(i * 10 + 1, "pump", "running" if i % 7 else "stopped", source))
    return lines


@pytest.mark.parametrize("how", ["by channel", "shuffled", "two files"])
def test_readings_in_any_order_make_the_same_records(
    tmp_path: Path, how: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(delimited, "BLOCK_BYTES", 2000)
    monkeypatch.setattr(long_order, "STRETCH_NS", 60_000_000_000)
    monkeypatch.setattr(long_order, "MAX_WAITING_BYTES", 1000)
    lines = readings_of_a_day(120)
    table = a_table(step_s=10)
    expected = rows(read(write(tmp_path, HEAD + "".join(lines)), table))
    if how == "shuffled":
        random.Random(5).shuffle(lines)
        paths = [write(tmp_path, HEAD + "".join(lines), "s.csv")]
    else:
        parts = [[x for x in lines if f",{c}," in x] for c in ("flow", "pump")]
        texts = [HEAD + "".join(part) for part in parts]
        if how == "by channel":
            texts = [HEAD + "".join(parts[0] + parts[1])]
        paths = [write(tmp_path, text, f"{i}.csv") for i, text in enumerate(texts)]
    found = rows(read(paths, table))
    assert sorted(r[1:] for r in found) == sorted(r[1:] for r in expected)
    assert len(found) == 240


def test_channels_one_after_the_other_each_pass_the_doubled_hour_twice(tmp_path: Path) -> None:
    minutes = ["01:30", "02:00", "02:30", "02:00", "02:30", "03:00"]
    text = HEAD + "".join(
        f"2026-10-25 {minute}:00,a,{channel},{value}\n"
        for channel, value in (("flow", 1), ("pump", "running"))
        for minute in minutes
    )
    found = rows(read(write(tmp_path, text), zone=ZoneInfo("Europe/Vienna")))
    assert [r[1][11:16] for r in found] == ["23:30", "00:00", "00:30", "01:00", "01:30", "02:00"]
    assert np.all([r[3] == [1.0, 0.0] for r in found])


def test_progress_adds_up_over_both_passes(tmp_path: Path) -> None:
    class Count:
        n = 0

        def advance(self, n: int) -> None:
            self.n += n

    path, count = write(tmp_path, HEAD + "".join(readings_of_a_day(5))), Count()
    assert list(read_history([path], a_table(), HistoryOptions(), Tally(), count))
    assert count.n == path.stat().st_size
