"""The demo's sentences and tables."""

from __future__ import annotations

import math
import re
from typing import Any

import pytest

from training.demo import call_of, known_of
from training.demo_text import (
    BANDS,
    METHOD_ROWS,
    OURS,
    Judged,
    band_of,
    duration,
    incident_table,
    method_table,
    stretch_lines,
    suspect_words,
    where_others_win,
)
from training.judging import Judge
from training.plant.incidents import Incident, machine_incident
from training.stretches import OverLevel, Stretch

HOUR_NS = 3600 * 10**9
OFFSET = Incident("mill-lane", 0, 2 * HOUR_NS, "offset", 4.0, ("flow",))
WEAR = machine_incident("mill-lane", "impeller_wear", 20 * HOUR_NS, 22 * HOUR_NS, 7.5, 1)


def over(hour: float, **more: Any) -> OverLevel:
    """Return a record over the level that blames the flow meter."""
    given: dict[str, Any] = {
        "suspect": "flow",
        "reading": 241.3,
        "low": 268.0,
        "high": 281.0,
    } | more
    return OverLevel("mill-lane", int(hour * HOUR_NS), **given)


@pytest.mark.parametrize(
    ("seconds", "words"),
    [(0, "0 min"), (3540, "59 min"), (3600, "1 h 00 min"), (95_000, "26 h 23 min")],
)
def test_a_duration_is_in_minutes_or_hours(seconds: float, words: str) -> None:
    assert duration(seconds) == words


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ({}, "flow: read 241.3 m3/h, expected 268 to 281 m3/h"),
        ({"low": -math.inf}, "flow: read 241.3 m3/h, expected up to 281 m3/h"),
        ({"high": math.inf}, "flow: read 241.3 m3/h, expected from 268 m3/h"),
        (
            {"low": -math.inf, "high": math.inf},
            "flow: read 241.3 m3/h, expected anything (nothing like it was learned)",
        ),
        ({"low": math.nan}, "flow: read 241.3 m3/h"),
        ({"suspect": ""}, "none"),
        (
            {"suspect": "pump_1", "word": "stopped", "word_expected": "running"},
            "pump_1: said 'stopped', expected 'running'",
        ),
    ],
)
def test_a_suspect_is_told_with_what_it_should_have_read(more: dict[str, Any], words: str) -> None:
    assert suspect_words(over(1.0, **more)) == words


def test_a_stretch_is_three_lines_with_the_truth_beside_it() -> None:
    assert stretch_lines(Stretch("mill-lane", (over(1.0), over(1.5))), OFFSET) == [
        "1970-01-01 01:00  mill-lane, over the record level: 2 records in 30 min",
        "                  suspect  flow: read 241.3 m3/h, expected 268 to 281 m3/h",
        "                  truth    offset of flow, 4.0 spreads, begun 1 h 00 min before; "
        "suspect right",
    ]


@pytest.mark.parametrize(
    ("stretch", "truth", "words"),
    [
        (Stretch("mill-lane", (over(5.0),)), None, "nothing was the matter"),
        (
            Stretch("mill-lane", (over(2.5),)),
            OFFSET,
            "offset of flow, 4.0 spreads, over since 1970-01-01 02:00",
        ),
        (
            Stretch("mill-lane", (over(19.5), over(20.5))),
            WEAR,
            "impeller wear of pump 1, 7.5 spreads, begun at 1970-01-01 20:00, later than this",
        ),
        (
            Stretch("mill-lane", (over(20.5),)),
            WEAR,
            "impeller wear of pump 1, 7.5 spreads, begun 30 min before; suspect wrong",
        ),
    ],
)
def test_the_truth_of_a_stretch_is_said_plainly(
    stretch: Stretch, truth: Incident | None, words: str
) -> None:
    assert stretch_lines(stretch, truth)[2].strip() == f"truth    {words}"


def judged(share: float, *stretches: Stretch) -> Judged:
    """Return the verdict on some stretches over two days."""
    judge = Judge(known_of([OFFSET, WEAR]), HOUR_NS, {"mill-lane": (0, 48 * HOUR_NS)}, 0)
    return Judged(judge.verdict(call_of(stretch) for stretch in stretches), share)


def test_the_tables_count_each_method_on_the_same_incidents() -> None:
    found = {
        OURS: judged(0.0, Stretch("mill-lane", (over(1.0),))),
        "limits": judged(
            0.0004,
            Stretch("mill-lane", (over(21.0, suspect="power"),)),
            Stretch("mill-lane", (over(30.0),)),
        ),
    }
    assert incident_table(found).splitlines()[2:] == [
        "offset         3 to 6      1       1    1 h 00 min              1       0",
        "impeller wear  6 and more  1       0                            0       1",
    ]
    lines = method_table(found).splitlines()[2:]
    assert [re.split(r" {2,}", line) for line in lines] == [
        ["caught, below 3 spreads (0)", "0", "0"],
        ["caught, 3 to 6 spreads (1)", "1", "0"],
        ["caught, 6 and more spreads (1)", "0", "1"],
        ["caught, no size (0)", "0", "0"],
        ["caught, all (2)", "1", "1"],
        ["caught with the right suspect", "1", "1"],
        ["median delay", "1 h 00 min", "1 h 00 min"],
        ["false in 1.8 quiet station-days", "0", "1"],
        ["false a day", "0.0", "0.6"],
        ["quiet time over the level", "0.00 %", "0.04 %"],
    ]
    assert all(any(line.startswith(name) for line in lines) for name in METHOD_ROWS)
    assert where_others_win(found) == [
        "limits caught 1 that oddbranch missed (impeller wear 6 and more), and missed 1 that "
        "oddbranch",
        "  caught.",
    ]


@pytest.mark.parametrize(
    ("size", "band"),
    [(0.5, 0), (2.99, 0), (3.0, 1), (5.99, 1), (6.0, 2), (12.0, 2), (None, 3)],
)
def test_an_incident_is_in_the_band_of_its_size(size: float | None, band: int) -> None:
    assert band_of(size) == BANDS[band]
