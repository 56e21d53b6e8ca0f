"""The demo's sentences and tables."""

from __future__ import annotations

import re

import pytest

from tests.learned import small_fleet
from training.demo_alerts import Told
from training.demo_text import (
    BANDS,
    METHOD_ROWS,
    OURS,
    alert_lines,
    band_of,
    budget_words,
    duration,
    incident_table,
    method_table,
    truth_words,
    where_others_win,
)
from training.judging import Call, Judge, Verdict
from training.known import Known

HOUR_NS = 3600 * 10**9
OFFSET = Known("mill-lane", 0, 2 * HOUR_NS, "offset", 4.0, ("flow",))
WEAR = Known(
    "mill-lane", 20 * HOUR_NS, 22 * HOUR_NS, "impeller_wear", 7.5, ("speed_1", "current_1")
)
SWAP = Known("mill-lane", 30 * HOUR_NS, 31 * HOUR_NS, "swap", None, ("speed_1", "speed_2"))
SENTENCE = (
    "flow at mill-lane reads 241.3 m3/h where 268.0 to 281.0 was expected beside power; the "
    "other channels agree with each other: look at the flow instrument first."
)


def told(hour: float, suspect: str = "flow", **more: object) -> Told:
    """Return an alert of an hour that blames one channel."""
    given = {
        "id": "0",
        "source": "mill-lane",
        "in_budget": True,
        "level": "record",
        "raised_ns": int(hour * HOUR_NS),
        "cleared_ns": int((hour + 1) * HOUR_NS),
        "n_over": 12,
        "sentence": SENTENCE,
        "suspects": (suspect,),
    }
    return Told(**{**given, **more})  # type: ignore[arg-type]  # any of its fields


@pytest.mark.parametrize(
    ("seconds", "words"),
    [(0, "0 min"), (3540, "59 min"), (3600, "1 h 00 min"), (95_000, "26 h 23 min")],
)
def test_a_duration_is_in_minutes_or_hours(seconds: float, words: str) -> None:
    assert duration(seconds) == words


def test_an_alert_is_told_with_what_it_says_and_the_truth_beside_it() -> None:
    assert alert_lines(told(1.0), [OFFSET]) == [
        "1970-01-01 01:00  mill-lane, over the record level for 1 h 00 min, 12 records",
        "                  says   flow at mill-lane reads 241.3 m3/h where 268.0 to 281.0 was "
        "expected beside",
        "                         power; the other channels agree with each other: look at the "
        "flow",
        "                         instrument first.",
        "                  truth  offset of flow, 4.0 spreads, seen after 1 h 00 min; suspect "
        "right",
    ]


def test_an_alert_apart_from_the_budget_and_one_that_stands_say_so() -> None:
    stuck = told(1.0, in_budget=False, level="", cleared_ns=None)
    assert alert_lines(stuck, [])[0].endswith("mill-lane, apart from the budget still standing")


@pytest.mark.parametrize(
    ("alert", "words"),
    [
        (told(5.0), "nothing was the matter"),
        (told(2.0), "offset of flow, 4.0 spreads, over since 1970-01-01 02:00"),
        (told(0.5, "power"), "offset of flow, 4.0 spreads, seen after 30 min; suspect wrong"),
        (told(0.5, suspects=()), "offset of flow, 4.0 spreads, seen after 30 min; suspect wrong"),
        (told(0.5, source="b"), "nothing was the matter"),
        (told(20.0, "speed_1"), "impeller wear, 7.5 spreads, seen after 0 min; suspect right"),
        (told(30.0, "speed_2"), "swap of speed_1 and speed_2, seen after 0 min; suspect right"),
    ],
)
def test_the_truth_of_an_alert_is_said_plainly(alert: Told, words: str) -> None:
    assert truth_words(alert, [OFFSET, WEAR, SWAP]) == words


def judged(*alerts: Told) -> Verdict:
    """Return the verdict on some alerts over two days."""
    judge = Judge([OFFSET, WEAR], HOUR_NS, {"mill-lane": (0, 48 * HOUR_NS)}, 0)
    calls: list[Call] = [alert.call(48 * HOUR_NS) for alert in alerts]
    return judge.verdict(calls)


def test_the_tables_count_each_method_on_the_same_incidents() -> None:
    found = {OURS: judged(told(1.0)), "limits": judged(told(21.0, "speed_1"), told(30.0))}
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
        ["quiet time in alert", "0.00 %", "2.38 %"],
    ]
    assert all(any(line.startswith(name) for line in lines) for name in METHOD_ROWS)
    assert where_others_win(found) == [
        "limits: caught 1 that oddbranch missed (impeller wear 6 and more); missed 1 that "
        "oddbranch caught."
    ]


def test_what_others_caught_is_wrapped_and_counted() -> None:
    none = judged()
    (line,) = where_others_win({OURS: judged(told(1.0)), "PCA, T2": none})
    assert line == "PCA, T2: caught 0 that oddbranch missed; missed 1 that oddbranch caught."


@pytest.mark.parametrize(
    ("size", "band"),
    [(0.5, 0), (2.99, 0), (3.0, 1), (5.99, 1), (6.0, 2), (12.0, 2), (None, 3)],
)
def test_an_incident_is_in_the_band_of_its_size(size: float | None, band: int) -> None:
    assert band_of(size) == BANDS[band]


def test_the_budget_is_told_with_what_was_used_of_it() -> None:
    promise = small_fleet()[0].promise
    assert promise is not None
    words = budget_words(promise, 3, 2, judged(told(1.0), told(2.5), told(40.0)))
    text = " ".join(words.split())
    assert f"Budget: {promise.alerts_per_day:g} alerts a day asked for" in text
    assert f"{promise.per_day():.2f} expected" in text
    assert "3 in 8 days, 2 of them in incidents or their recovery, 1 false" in text
    assert "raised 2 more, which are apart" in text
    assert max(map(len, words.splitlines())) <= 100
