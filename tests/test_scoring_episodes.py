"""The alert machine as a whole: delays, deadband, damping, batches, and what must never be."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scoring.alert_settings import AlertSettings
from scoring.alert_standing import AlertStanding
from scoring.alerts import KINDS, SCORED, SILENT
from scoring.delays import Delays
from scoring.episodes import Episodes, find_episodes
from scoring.scorer import Scorer
from tests.alert_tools import (
    START_NS,
    STEP_NS,
    Fed,
    S,
    episodes,
    readings,
    scores_of,
    sustained_of,
    times,
    told,
)
from tests.models import a_model, a_regime_model, some_records
from tests.strategies import SEEDS

# Of the small model: record level 12, sustained level 3, usual sustained 0.1.
OVER, QUIET = 20.0, 0.0
HOUR_NS = 3600 * S


@pytest.fixture(scope="module")
def machine() -> Episodes:
    """Return the machine over the small model with its defaults."""
    return episodes()


def test_one_glitch_is_a_short_episode_of_its_own(machine: Episodes) -> None:
    fed = Fed(machine)
    events = fed.feed([QUIET] * 5 + [OVER] + [QUIET] * 40)
    assert told(events) == [("raised", SCORED), ("cleared", SCORED)]
    raised, cleared = events
    assert raised.annunciate
    assert raised.time_ns == START_NS + 5 * STEP_NS
    assert raised.alert is not None
    assert (raised.alert.level, raised.alert.state) == ("record", "raised")
    assert cleared.time_ns == raised.time_ns + 30 * STEP_NS
    assert cleared.alert is not None
    assert cleared.alert.fleeting
    assert not cleared.alert.is_open
    assert (cleared.alert.n_over, cleared.alert.n_cycles) == (1, 1)


def test_both_levels_at_once_are_one_episode(machine: Episodes) -> None:
    fed = Fed(machine)
    fed.feed([OVER] * 3 + [QUIET] * 40, [5.0] * 3 + [0.0] * 40)
    assert told(fed.events) == [("raised", SCORED), ("cleared", SCORED)]
    assert fed.events[0].alert is not None
    assert fed.events[0].alert.level == "sustained"


def test_a_record_alert_that_becomes_sustained_is_told_once(machine: Episodes) -> None:
    fed = Fed(machine)
    fed.feed([OVER, OVER, QUIET, OVER], [0.0, 4.0, 1.0, 4.0])
    assert told(fed.events) == [("raised", SCORED), ("worsened", SCORED)]
    assert not fed.events[1].annunciate
    assert fed.standing is not None
    assert fed.standing.open[0].level == "sustained"


def test_short_returns_are_held_by_the_off_delay(machine: Episodes) -> None:
    fed = Fed(machine)
    fed.feed(([OVER] + [QUIET] * 29) * 4 + [QUIET] * 2)
    assert told(fed.events) == [("raised", SCORED), ("cleared", SCORED)]
    assert fed.events[1].alert is not None
    assert fed.events[1].alert.n_cycles == 4


def test_the_deadband_holds_until_the_return_is_clear() -> None:
    # Sustained level 3, usual 0.1: with a band of 0.1 it must return below 2.71.
    band = [0.0, 3.1, *[2.8] * 60]
    for deadband, cleared in ((0.1, False), (0.0, True)):
        fed = Fed(episodes(delays=Delays(deadband=deadband)))
        fed.feed([QUIET] * len(band), band)
        assert (("cleared", SCORED) in told(fed.events)) is cleared


def test_on_delays_keep_short_crossings_out() -> None:
    fed = Fed(episodes(delays=Delays(record_run=3, sustained_on_steps=4)))
    fed.feed([OVER, OVER, QUIET, OVER, OVER, QUIET], [0, 0, 4, 4, 4, 0])
    assert fed.events == []
    events = fed.feed([OVER, OVER, OVER])
    assert told(events) == [("raised", SCORED)]
    alert = events[0].alert
    assert alert is not None
    # Since when is the first record of the run, not the one that raised.
    assert alert.raised_ns - alert.since_ns == 2 * STEP_NS
    fed = Fed(episodes(delays=Delays(sustained_on_steps=4)))
    events = fed.feed([QUIET] * 6, [4.0] * 6)
    assert [e.time_ns for e in events] == [START_NS + 4 * STEP_NS]


def test_since_when_goes_back_to_where_sustained_began_to_rise(machine: Episodes) -> None:
    fed = Fed(machine)
    # Half the way from 0.1 to 3 is 1.55.
    (event,) = fed.feed([QUIET] * 7, [1.6, 0.2, 1.5, 1.6, 2.0, 2.9, 3.1])
    assert event.alert is not None
    assert event.alert.since_ns == START_NS + 3 * STEP_NS
    # A level below what is usual lies beyond half the way; the crossing itself is all there is.
    low = Fed(Episodes(machine.scorer, levels=replace(machine.levels, sustained=-5.0)))
    (event,) = low.feed([QUIET] * 2, [-6.0, -4.0])
    assert event.alert is not None
    assert event.alert.since_ns == event.alert.raised_ns == START_NS + STEP_NS


def test_a_record_that_is_not_judged_changes_nothing(machine: Episodes) -> None:
    fed = Fed(machine)
    fed.feed([OVER] + [np.nan] * 100, [0.0] + [9.0] * 100)
    assert told(fed.events) == [("raised", SCORED)]


def test_what_still_stands_is_raised_again_and_must_be_acknowledged_again() -> None:
    fed = Fed(episodes(AlertSettings(realarm_s=100.0)))
    fed.feed([OVER] * 25)
    assert told(fed.events) == [("raised", SCORED)] + [("raised_again", SCORED)] * 2
    assert [e.annunciate for e in fed.events] == [True] * 3
    assert [e.time_ns - START_NS for e in fed.events] == [0, 100 * S, 200 * S]
    never = Fed(episodes(AlertSettings(realarm_s=0.0)))
    never.feed([OVER] * 25)
    assert told(never.events) == [("raised", SCORED)]


def test_the_fourth_alert_in_an_hour_calls_nobody_until_it_lasts(machine: Episodes) -> None:
    fed = Fed(machine)
    fed.feed(([OVER] + [QUIET] * 31) * 4)
    raised = [e for e in fed.events if e.what == "raised"]
    assert [e.annunciate for e in raised] == [True, True, True, False]
    assert raised[3].alert is not None
    assert raised[3].alert.quiet == "damped"
    events = fed.feed([OVER] * 8)
    assert told(events) == [("raised", SCORED), ("announced", SCORED)]
    assert [e.annunciate for e in events] == [False, True]
    assert events[1].time_ns - events[0].time_ns == 6 * STEP_NS
    # Over an hour later nothing is damped any more.
    events = fed.feed(([QUIET] * 400) + [OVER])
    assert told(events) == [("cleared", SCORED), ("raised", SCORED)]
    assert events[1].annunciate


def test_three_cycles_in_a_minute_are_chattering(machine: Episodes) -> None:
    for excess, n_cycles, chatters in (
        ([OVER, QUIET, OVER, QUIET], 2, False),
        ([OVER, QUIET, OVER, QUIET, OVER], 3, True),
        (([OVER] + [QUIET] * 3) * 4, 4, False),
    ):
        fed = Fed(machine)
        fed.feed(excess)
        assert fed.standing is not None
        alert = fed.standing.open[0]
        assert (alert.n_cycles, alert.chattering) == (n_cycles, chatters)


def test_a_silent_source_is_missed_and_welcomed_back(machine: Episodes) -> None:
    fed = Fed(machine)
    fed.feed([QUIET] * 3)
    last_ns = START_NS + 2 * STEP_NS
    assert fed.tick(last_ns + 299 * S) == []
    events = fed.tick(last_ns + 300 * S)
    assert told(events) == [("raised", SILENT)]
    alert = events[0].alert
    assert alert is not None
    assert not alert.in_budget
    assert alert.since_ns == last_ns
    assert "has sent nothing since its record of 2023-11-14T22:13:40Z" in alert.sentence
    assert fed.tick(last_ns + 400 * S) == []
    events = fed.feed([QUIET], times_ns=np.array([last_ns + 500 * S]))
    assert told(events) == [("cleared", SILENT)]


def test_a_source_is_heard_by_the_receivers_clock(machine: Episodes) -> None:
    fed = Fed(machine)
    # Its own times are hours old: a line that catches up is not silent.
    fed.feed([QUIET] * 3, heard_ns=START_NS + HOUR_NS)
    assert fed.standing is not None
    assert fed.standing.heard_ns == START_NS + HOUR_NS
    assert fed.tick(START_NS + HOUR_NS + 200 * S) == []
    assert told(fed.tick(START_NS + HOUR_NS + 300 * S)) == [("raised", SILENT)]


def test_what_the_receiver_could_not_hear_is_not_the_sources_silence(machine: Episodes) -> None:
    fed = Fed(machine)
    fed.feed([QUIET] * 3)
    assert fed.standing is not None
    began_ns = START_NS + 10 * HOUR_NS
    for after_s, n in ((299, 0), (300, 1)):
        _, events = machine.tick("a", fed.standing, began_ns + after_s * S, began_ns)
        assert len(events) == n


def test_a_source_that_never_sent_is_not_missed(machine: Episodes) -> None:
    fed = Fed(machine)
    fed.feed([])
    assert fed.tick(START_NS) == []


def test_a_late_record_changes_no_clock(machine: Episodes) -> None:
    fed = Fed(machine)
    fed.feed([QUIET] * 10)
    before = fed.standing
    assert before is not None
    fed.feed([OVER, OVER], times_ns=times(2, start=3))
    assert fed.events == []
    after = fed.standing
    assert after is not None
    assert after.last_ns == before.last_ns
    np.testing.assert_array_equal(after.floats, before.floats)


@given(
    st.lists(st.sampled_from([0.0, 5.0, 13.0, 30.0, np.nan]), min_size=1, max_size=120),
    SEEDS,
    st.data(),
)
@settings(max_examples=40)
def test_one_by_one_equals_batches(excess: list[float], seed: int, data: st.DataObject) -> None:
    rng = np.random.default_rng(seed)
    n = len(excess)
    machine = episodes(
        AlertSettings(realarm_s=200.0, repeat_n=2, hold_steps=2),
        delays=Delays(off_delay_steps=5),
        still_s=30.0, moving_s=20.0, away_s=20.0,
    )  # fmt: skip
    values = readings(n)
    values[rng.random(values.shape) < 0.2] = np.nan
    values[rng.random(n) < 0.2, 0] = 77.0
    hold = rng.random((n, 4)) < 0.7
    for r in range(1, n):
        values[r] = np.where(hold[r], values[r - 1], values[r])
    at = START_NS + np.cumsum(rng.choice([10, 10, 10, 10, 11, 95, 0, -15], n)) * S
    own = rng.exponential(2.0, (n, 4)) * (1 + np.nan_to_num(np.array(excess))[:, None] / 5)
    own[rng.random((n, 4)) < 0.1] = np.nan
    scores = scores_of(excess, sustained_of(machine, at, np.array(excess)))._replace(
        channel_surprise=own,
        suspect=rng.integers(-1, 4, n).astype(np.int16),
        suspect_surprise=rng.exponential(3.0, n),
    )
    whole, cut = Fed(machine), Fed(machine)
    whole.feed([], scores=scores, values=values, times_ns=at)
    cuts = data.draw(st.sets(st.integers(1, n - 1))) if n > 1 else set()
    cut.feed([], scores=scores, values=values, times_ns=at, cuts=cuts)
    assert told(whole.events) == told(cut.events)
    assert whole.events == cut.events
    assert whole.standing is not None
    assert cut.standing is not None
    assert whole.standing.to_bytes() == cut.standing.to_bytes()


@given(st.lists(st.sampled_from([0.0, 2.9, 3.5, 11.0, 13.0, 100.0]), max_size=150), SEEDS)
@settings(max_examples=40)
def test_open_alerts_are_one_a_kind_and_cleared_only_after_raised(
    excess: list[float], seed: int
) -> None:
    rng = np.random.default_rng(seed)
    machine = episodes(delays=Delays(off_delay_steps=3), still_s=20.0, away_s=10.0)
    fed = Fed(machine)
    values = readings(len(excess))
    values[rng.random(values.shape) < 0.4] = np.nan
    for r in range(1, len(values)):
        values[r] = np.where(rng.random(4) < 0.6, values[r - 1], values[r])
    fed.feed(excess, rng.exponential(2.0, len(excess)), values)
    now_open: dict[str, str] = {}
    for event in fed.events:
        assert event.alert is not None
        alert = event.alert
        assert alert.kind in KINDS
        if event.what == "raised":
            assert alert.kind not in now_open
            now_open[alert.kind] = alert.id
        else:
            assert now_open[alert.kind] == alert.id
        if event.what == "cleared":
            assert alert.cleared_ns is not None
            assert alert.since_ns <= alert.raised_ns <= alert.cleared_ns
            del now_open[alert.kind]
        assert event.annunciate <= alert.is_open
    if fed.standing is not None:
        assert {alert.kind: alert.id for alert in fed.standing.open} == now_open


LEVELS = a_model().levels


def time_in_alert(excess: list[float], sustained: list[float], levels: tuple[float, float]) -> int:
    at = replace(LEVELS, record=levels[0], sustained=levels[1])
    found = find_episodes(times(len(excess)), np.array(excess), np.array(sustained), at)
    return int((found[:, 1] - found[:, 0]).sum())


@given(
    st.lists(st.tuples(st.floats(-3, 40), st.floats(0, 8)), min_size=1, max_size=200),
    st.floats(1, 30), st.floats(0, 10), st.floats(0.5, 6), st.floats(0, 3),
)  # fmt: skip
@settings(max_examples=150)
def test_a_higher_level_never_gives_more_time_in_alert(
    rows: list[tuple[float, float]], record: float, more: float, level: float, higher: float
) -> None:
    excess, sustained = [e for e, _ in rows], [s for _, s in rows]
    low = time_in_alert(excess, sustained, (record, level))
    assert time_in_alert(excess, sustained, (record + more, level)) <= low
    assert time_in_alert(excess, sustained, (record, level + higher)) <= low
    assert time_in_alert(excess, sustained, (record + more, level + higher)) <= low


@given(st.floats(13.0, 1e9), st.integers(0, 30), st.floats(-2.0, 0.1))
@settings(max_examples=40)
def test_one_glitch_of_any_size_raises_one_record_alert_and_never_a_sustained_one(
    size: float, before: int, rest: float
) -> None:
    machine = episodes()
    # The cap as learning sets it: from usual, one record lifts sustained to just under its
    # level (training.sweep.cap_of).
    levels, usual = machine.levels, 0.1
    weight = 1.0 - np.exp(-levels.step_s / levels.tau_s)
    machine.levels = replace(levels, cap=usual + 0.95 * (levels.sustained - usual) / weight)
    excess = np.full(before + 60, rest)
    excess[before] = size
    fed = Fed(machine)
    fed.feed(excess, sustained_of(machine, times(len(excess)), excess))
    assert told(fed.events) == [("raised", SCORED), ("cleared", SCORED)]
    assert {event.alert.level for event in fed.events if event.alert} == {"record"}


@given(st.lists(st.tuples(st.floats(-3, 40), st.floats(0, 8)), min_size=1, max_size=120))
@settings(max_examples=40)
def test_finding_episodes_alone_gives_what_the_machine_raises(
    rows: list[tuple[float, float]],
) -> None:
    machine = episodes(delays=Delays(off_delay_steps=4, record_run=2, sustained_on_steps=1))
    excess, sustained = np.array([e for e, _ in rows]), np.array([s for _, s in rows])
    at = times(len(rows))
    usual = machine.scorer.model.member("a").usual.sustained
    found = find_episodes(at, excess, sustained, machine.levels, machine.settings, usual)
    fed = Fed(machine)
    fed.feed(excess, sustained)
    assert [e.time_ns for e in fed.events if e.what == "raised"] == at[found[:, 0]].tolist()
    ends = found[found[:, 1] < len(rows), 1]
    assert [e.time_ns for e in fed.events if e.what == "cleared"] == at[ends].tolist()


@pytest.mark.parametrize("model", [a_model(), a_regime_model()], ids=["plain", "regime"])
def test_scores_of_a_real_scorer_go_through(model: object) -> None:
    assert isinstance(model, type(a_model()))
    scorer = Scorer(model)
    machine = Episodes(scorer, levels=replace(model.levels, record=2.0, sustained=0.5))
    at, values = some_records(4, 300)
    scores, _ = scorer.score("a", at, values, None)
    standing, events = machine.step("a", at, values, scores, None)
    scored = [e.alert for e in events if e.alert and e.alert.kind == SCORED]
    assert scored
    for alert in scored:
        assert alert.suspects
        assert alert.suspects[0].channel in alert.sentence
        assert 0 < sum(one.share for one in alert.suspects) <= 1 + 1e-9
        assert alert.worst_excess is not None
    assert AlertStanding.from_bytes(standing.to_bytes()) == standing


def test_a_machine_can_be_warmed_before_its_first_record() -> None:
    machine = episodes()
    machine.warm()
    fed = Fed(machine)
    assert told(fed.feed([OVER])) == [("raised", SCORED)]
