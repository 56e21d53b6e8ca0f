"""Periods kept out of learning."""

from __future__ import annotations

from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pytest

from tests.histories import write
from training.history.exclusions import Exclusion, excluded_by, load_exclusions, stray_lines
from training.history.options import BadHistory, HistoryOptions

HEAD = "source,start,end,reason\n"


def test_periods_are_read_with_their_reasons(tmp_path: Path) -> None:
    path = write(tmp_path, HEAD + 'a,1970-01-01T00:00:01Z,1970-01-01T00:00:02Z,"pump, new"\n\n')
    assert load_exclusions(path, HistoryOptions()) == (
        Exclusion("a", 1_000_000_000, 2_000_000_000, "pump, new"),
    )


def test_times_are_read_in_the_zone_of_the_history(tmp_path: Path) -> None:
    path = write(tmp_path, HEAD + ",1970-01-01 01:00:01,1970-01-01 02:00:00,x\n")
    options = HistoryOptions(zone=ZoneInfo("Europe/Vienna"))
    assert load_exclusions(path, options)[0].start_ns == 1_000_000_000


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("", "the first line must read source,start,end,reason"),
        ("a,b\n", "the first line must read source,start,end,reason"),
        (HEAD + "a,b\n", "line 2: 2 cells; an exclusion has 4"),
        (HEAD + "a,soon,later,x\n", "line 2: broken time: 'soon'"),
        (
            HEAD + "a,2026-12-01 04:00:00,later,x\n",
            "line 2: time without an .*; add one, or say --z",
        ),
        (HEAD + "a,2026-12-02T00:00:00Z,2026-12-01T00:00:00Z,x\n", "start .* is not before end"),
        (b"\xff\xfe\x00", "is not a CSV file in UTF-8"),
    ],
)
def test_nonsense_gets_one_sentence(tmp_path: Path, text: str | bytes, sentence: str) -> None:
    with pytest.raises(BadHistory, match=sentence):
        load_exclusions(write(tmp_path, text), HistoryOptions())


def test_a_line_whose_source_has_no_record_is_told_with_the_nearest(tmp_path: Path) -> None:
    when = "1970-01-01T00:00:01Z,1970-01-01T00:00:02Z,x"
    path = write(tmp_path, f"{HEAD}mill-lane,{when}\n,{when}\nmill-lnae,{when}\n")
    found = load_exclusions(path, HistoryOptions())
    assert stray_lines(found, {"mill-lane", "quarry-rise"}) == [
        f"{path}, line 4: no record has the source 'mill-lnae', so this line leaves nothing out; "
        "the nearest is 'mill-lane'"
    ]
    # What is from no file nobody misspelt.
    assert stray_lines([Exclusion("gone", 0, 1, "out of service")], {"mill-lane"}) == []


def test_the_start_is_excluded_and_the_end_is_not() -> None:
    times_ns = np.array([9, 10, 19, 20], dtype=np.int64)
    periods = (Exclusion("a", 10, 20, "x"), Exclusion("", 19, 30, "y"))
    assert excluded_by(periods, "a", times_ns).tolist() == [-1, 0, 0, 1]
    assert excluded_by(periods, "b", times_ns).tolist() == [-1, -1, 1, 1]
