"""Declared changes of plant: said once, read back, taken back, refused when they make no sense."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest

from training.changes import (
    CHANGES_FILE,
    BadChange,
    change_line,
    declare,
    load_changes,
    parse_time,
    since,
    take_back,
)
from training.history.exclusions import excluded_by

NOW = datetime(2026, 12, 1, 8, tzinfo=UTC)
DAY_NS = 86_400 * 10**9
TODAY_NS = parse_time("2026-12-01T06:00:00Z")


def test_a_change_is_kept_with_its_reason_and_taken_back(tmp_path: Path) -> None:
    folder = tmp_path / "models"
    assert load_changes(folder) == ()
    first = declare(folder, "mill-lane", TODAY_NS, "new  impeller,\nlarger", NOW)
    second = declare(folder, "", TODAY_NS - DAY_NS, "summer main", NOW)
    assert load_changes(folder) == (first, second)
    assert change_line(first) == (
        "mill-lane: history counts from 2026-12-01T06:00:00Z on: new impeller, larger "
        "(declared 2026-12-01)"
    )
    again = declare(folder, "mill-lane", TODAY_NS, "said better", NOW)
    assert load_changes(folder) == (second, again)
    assert take_back(folder, "", TODAY_NS - DAY_NS) == second
    assert load_changes(folder) == (again,)
    with pytest.raises(BadChange, match="no change of all sources at 2026-11-30T06:00:00Z"):
        take_back(folder, "", TODAY_NS - DAY_NS)


def test_the_latest_change_of_a_source_or_of_all_counts(tmp_path: Path) -> None:
    early = declare(tmp_path, "", TODAY_NS - 2 * DAY_NS, "new main", NOW)
    late = declare(tmp_path, "a", TODAY_NS, "new meter", NOW)
    changes = load_changes(tmp_path)
    assert since(changes, "a") == late
    assert since(changes, "b") == early
    assert since((late,), "b") is None


def test_history_before_a_change_is_left_out_and_from_it_on_counts(tmp_path: Path) -> None:
    change = declare(tmp_path, "a", TODAY_NS, "new meter", NOW)
    times = np.array([0, TODAY_NS - 1, TODAY_NS])
    assert excluded_by([change.exclusion], "a", times).tolist() == [0, 0, -1]
    assert excluded_by([change.exclusion], "b", times).tolist() == [-1, -1, -1]
    assert change.exclusion.reason == "before a change: new meter"


@pytest.mark.parametrize("text", ["yesterday", "2026-12-01", "2026-12-01T06:00:00", ""])
def test_a_time_without_an_offset_is_refused(text: str) -> None:
    with pytest.raises(BadChange, match="is no time with an offset; write it like"):
        parse_time(text)


def test_an_offset_counts() -> None:
    assert parse_time("2026-12-01T07:00:00+01:00") == TODAY_NS


def test_a_change_to_come_or_without_a_reason_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadChange, match="still to come"):
        declare(tmp_path, "", TODAY_NS + DAY_NS, "new pump", NOW)
    with pytest.raises(BadChange, match="needs its reason"):
        declare(tmp_path, "", TODAY_NS, "  ", NOW)
    assert not (tmp_path / CHANGES_FILE).exists()


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("source,when\n", "the first line must read source,since,reason,declared"),
        ("source,since,reason,declared\na,b\n", "line 2: 2 cells"),
        ("source,since,reason,declared\na,b,c,d\n", "line 2: 'b' is no time"),
    ],
)
def test_a_damaged_file_is_refused_by_its_line(tmp_path: Path, text: str, says: str) -> None:
    (tmp_path / CHANGES_FILE).write_text(text, encoding="utf-8")
    with pytest.raises(BadChange, match=says):
        load_changes(tmp_path)
