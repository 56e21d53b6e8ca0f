"""The kernel of the alert machine: runs of records, delays, and a slow twin of its levels."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scoring import alert_kernel as kernel
from scoring.alert_kernel import scan
from scoring.alert_rules import level_knobs
from scoring.alert_settings import AlertSettings
from scoring.delays import Delays
from scoring.model import Levels
from tests.alert_tools import STEP_NS, Fed, S, episodes, readings, times, told

LEVELS = Levels(record=1.0, sustained=2.0, cap=9.0, tau_s=150.0, step_s=10.0, least_readings=1)


def mean_records_to_first(p: float, n: int) -> float:
    """Return the mean number of records to the first run of n, each over with chance p.

    (1 - p^n) / ((1 - p) p^n): the run-of-n rule for independent records, computed.
    """
    return (1 - p**n) / ((1 - p) * p**n)


@pytest.mark.parametrize(
    ("p", "n", "published"),
    # The rule's values for p = 0.05, 0.01 and 0.001, computed to their last digit.
    [
        (0.05, 1, 20), (0.05, 2, 420), (0.05, 3, 8420), (0.05, 5, 3_368_420),
        (0.01, 1, 100), (0.01, 2, 10_100), (0.01, 3, 1_010_100), (0.001, 2, 1_001_000),
    ],
)  # fmt: skip
def test_the_run_rule_has_its_known_values(p: float, n: int, published: float) -> None:
    assert mean_records_to_first(p, n) == pytest.approx(published, rel=1e-9)


@pytest.mark.parametrize(("p", "n"), [(0.05, 1), (0.05, 2), (0.2, 3), (0.4, 4)])
def test_an_on_delay_of_n_records_waits_as_long_as_the_run_rule_says(p: float, n: int) -> None:
    # Off-delay 0 clears at the first record below, so each raise is the end of a run, and
    # what lies between two is a fresh wait behind at least one record below.
    rng = np.random.default_rng(20 + n)
    n_records = 400_000
    excess = np.where(rng.random(n_records) < p, 2.0, 0.0)
    levels = replace(LEVELS, delays=Delays(record_run=n, off_delay_steps=0))
    knobs = level_knobs(levels, AlertSettings(), 0.0)
    found = np.empty((n_records, 2), dtype=np.int64)
    n_found = scan(times(n_records), excess, np.zeros(n_records), knobs, kernel.new_ints(0), found)
    starts, ends = found[:n_found, 0], found[:n_found, 1]
    waits = starts[1:] - ends[:-1]
    expected = mean_records_to_first(p, n)
    # The mean of exponential-like waits is known to its size over the root of their number.
    assert waits.mean() == pytest.approx(expected, abs=4 * expected / np.sqrt(len(waits)))


def slow_episodes(
    excess: list[float], sustained: list[float], run: int, on: int, off: int, band: float
) -> list[tuple[int, int]]:
    """Return rows raised and cleared by the rules as a person would write them down."""
    found: list[tuple[int, int]] = []
    is_open, held = False, 0
    for r in range(len(excess)):
        over = [e > LEVELS.record for e in excess[: r + 1]]
        high = [s > LEVELS.sustained for s in sustained[: r + 1]]
        raise_now = (r + 1 >= run and all(over[r + 1 - run :])) or (r >= on and all(high[r - on :]))
        if not is_open and raise_now:
            is_open, held = True, r
            found.append((r, len(excess)))
        elif is_open:
            keep = 1.0 - band
            if excess[r] > keep * LEVELS.record or sustained[r] > keep * LEVELS.sustained:
                held = r
            elif r - held >= off:
                is_open = False
                found[-1] = (found[-1][0], r)
    return found


@given(
    st.lists(st.tuples(st.sampled_from([0.0, 0.95, 1.5]), st.sampled_from([0.0, 1.9, 2.5])),
             min_size=1, max_size=60),
    st.integers(1, 4), st.integers(0, 4), st.integers(0, 5), st.sampled_from([0.0, 0.1, 0.5]),
)  # fmt: skip
@settings(max_examples=200)
def test_levels_and_delays_do_what_their_slow_twin_does(
    rows: list[tuple[float, float]], run: int, on: int, off: int, band: float
) -> None:
    excess, sustained = [e for e, _ in rows], [s for _, s in rows]
    delays = Delays(record_run=run, sustained_on_steps=on, off_delay_steps=off, deadband=band)
    found = np.empty((len(rows), 2), dtype=np.int64)
    n_found = scan(
        times(len(rows)), np.array(excess), np.array(sustained),
        level_knobs(replace(LEVELS, delays=delays), AlertSettings(), 0.0), kernel.new_ints(0),
        found,
    )  # fmt: skip
    expected = slow_episodes(excess, sustained, run, on, off, band)
    assert [tuple(one) for one in found[:n_found].tolist()] == expected


def test_many_marks_in_one_batch_are_all_kept() -> None:
    # A channel comes and goes at every other record: far more marks than one pass has room
    # for. The first record has no time behind it in which the reading was away.
    fed = Fed(episodes(AlertSettings(span_steps=0)))
    values = readings(600)
    values[::2, 0] = 99.0
    fed.feed([0.0] * 600, values=values)
    assert told(fed.events).count(("raised", "span")) == 299
    assert told(fed.events).count(("cleared", "span")) == 299


def test_what_is_remembered_of_suspicion_fades_in_a_few_records_and_over_a_gap() -> None:
    fed = Fed(episodes())
    fed.feed([4.0])
    assert fed.standing is not None
    first = fed.standing.floats[kernel.RECENT, 1]
    assert first > 0
    fed.feed([4.0] * 30)
    # A sum whose weights fall by a third: three records' worth.
    assert fed.standing.floats[kernel.RECENT, 1] == pytest.approx(3 * first, rel=1e-3)
    fed.feed([4.0], times_ns=np.array([fed.standing.last_ns + 100 * STEP_NS]))
    assert fed.standing.floats[kernel.RECENT, 1] == pytest.approx(first)


def test_late_records_that_go_on_are_a_clock_and_a_burst_is_a_line_that_catches_up() -> None:
    for heard_step_s, is_clock in ((10, True), (0, False)):
        fed = Fed(episodes())
        now_ns = int(times(1, start=1000)[0])
        fed.feed([0.0], times_ns=times(1, start=1000), heard_ns=now_ns)
        for k in range(40):
            heard_ns = now_ns + k * heard_step_s * S
            fed.feed([0.0], times_ns=times(1, start=600 + k), heard_ns=heard_ns)
        assert (("raised", "clock") in told(fed.events)) is is_clock
        if is_clock:
            alert = next(e.alert for e in fed.events if e.what == "raised")
            assert alert is not None
            assert "the clock of a is" in alert.sentence
            assert "behind" in alert.sentence
        events = fed.feed([0.0], times_ns=times(1, start=1001), heard_ns=now_ns + 500 * S)
        assert (("cleared", "clock") in told(events)) is is_clock


def test_late_records_between_others_are_no_clock() -> None:
    fed = Fed(episodes())
    at = np.stack([times(100, start=1000), times(100)], axis=1).reshape(-1)
    fed.feed([0.0] * 200, times_ns=at)
    assert fed.events == []


def test_a_clock_ahead_of_the_receivers_is_told_and_changes_nothing_else() -> None:
    fed = Fed(episodes())
    fed.feed([0.0] * 3)
    for k in range(40):
        fed.feed(
            [50.0], times_ns=times(1, start=5000 + k), ahead=np.array([True]),
            heard_ns=int(times(1, start=3 + k)[0]),
        )  # fmt: skip
    assert told(fed.events) == [("raised", "clock")]
    alert = fed.events[0].alert
    assert alert is not None
    assert "ahead" in alert.sentence
    assert fed.standing is not None
    assert fed.standing.last_ns == times(3)[-1]
