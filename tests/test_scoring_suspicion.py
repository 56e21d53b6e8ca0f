"""Whom an alert suspects: sums over the episode, capped, with the reading that says most."""

from __future__ import annotations

import numpy as np
import pytest

from scoring.alert_rules import CAP_SPREADS, LEAST_CAP
from scoring.alert_standing import Tally
from scoring.alerts import INSTRUMENT, SCORED, SEVERAL
from scoring.suspicion import Batch, likely_kind, ranked, sum_rows
from tests.alert_tools import START_NS, STEP_NS, Fed, episodes, readings, scores_of, times

IN, OUT, POWER, PUMP = range(4)


def tally(**nats: float) -> Tally:
    return Tally(nats, {}, (), False, START_NS)


@pytest.mark.parametrize(
    ("nats", "kind"),
    [
        ({"in": 10.0, "out": 5.9}, INSTRUMENT), ({"in": 10.0, "out": 6.0}, SEVERAL),
        ({"in": 10.0}, INSTRUMENT), ({"in": 10.0, "out": -4.0}, INSTRUMENT),
    ],
)  # fmt: skip
def test_one_channel_far_ahead_is_one_instrument(nats: dict[str, float], kind: str) -> None:
    assert likely_kind(nats) == kind


def test_three_suspects_at_most_and_none_below_its_usual() -> None:
    suspects = ranked(tally(**{"in": 4.0, "out": 3.0, "power": 2.0, "pump": 1.0}))
    assert [one.channel for one in suspects] == ["in", "out", "power"]
    assert [one.share for one in suspects] == [0.4, 0.3, 0.2]
    assert [one.channel for one in ranked(tally(**{"in": -1.0, "out": 2.0}))] == ["out"]
    assert ranked(tally(**{"in": -1.0})) == ()


def test_equal_sums_are_cut_by_name() -> None:
    assert [one.channel for one in ranked(tally(b=1.0, a=1.0))] == ["a", "b"]


def test_sums_leave_out_what_is_missing_and_cap_what_is_wild() -> None:
    own = np.array([[1.0, 100.0], [np.nan, 2.0], [5.0, 5.0]])
    sums = np.zeros(2)
    sum_rows(own, np.array([0, 1]), np.array([0.5, 1.0]), np.array([10.0, 10.0]), sums)
    assert sums.tolist() == [0.5, 11.0]


def test_one_glitch_does_not_outvote_a_fault_that_lasts() -> None:
    machine = episodes()
    own = np.ones((60, 4))
    own[:, POWER] += 6.0
    own[5, OUT] += 700.0
    suspects = np.full(60, POWER)
    suspects[5] = OUT
    fed = Fed(machine)
    scores = scores_of([20.0] * 60, [5.0] * 60, suspect=suspects.tolist(), own=own)
    fed.feed([], scores=scores, values=readings(60))
    (alert,) = fed.open
    assert alert.suspects[0].channel == "power"
    assert alert.worst_ns == START_NS
    spread = machine.scorer.model.member("a").usual.channel_spread
    tally_ = fed.standing.cases[0].tally if fed.standing else None
    assert tally_ is not None
    assert tally_.nats["out"] < max(CAP_SPREADS * spread[OUT], LEAST_CAP) + 60.0


def test_the_reading_shown_is_the_one_that_speaks_most_against_the_suspect() -> None:
    fed = Fed(episodes())
    excess = [20.0, 25.0, 60.0, 30.0]
    values = readings(4)
    values[:, OUT] = [1.0, 2.0, 3.0, 4.0]
    fed.feed(excess, values=values)
    (alert,) = fed.open
    first = alert.suspects[0]
    assert (first.channel, first.reading, first.time_ns) == ("out", 3.0, START_NS + 2 * STEP_NS)
    assert (first.low, first.high, first.best) == (10.0, 11.0, 10.5)
    assert (alert.worst_ns, alert.worst_excess) == (START_NS + 2 * STEP_NS, 60.0)


@pytest.mark.parametrize("cuts", [(), (1, 2)])
def test_of_equal_readings_the_first_is_shown(cuts: tuple[int, ...]) -> None:
    fed = Fed(episodes())
    fed.feed([20.0, 60.0, 60.0], cuts=cuts)
    (alert,) = fed.open
    assert alert.suspects[0].time_ns == alert.worst_ns == START_NS + STEP_NS


def test_open_sides_are_told_as_none() -> None:
    fed = Fed(episodes())
    scores = scores_of([20.0])._replace(expected_high=np.array([np.inf]))
    fed.feed([], scores=scores, values=readings(1))
    assert fed.open[0].suspects[0].high is None
    assert "where at least 10 was expected" in fed.open[0].sentence


def test_a_state_is_suspected_by_its_words() -> None:
    fed = Fed(episodes())
    values = readings(1)
    values[0, PUMP] = 2.0
    fed.feed([], scores=scores_of([20.0], suspect=PUMP), values=values)
    first = fed.open[0].suspects[0]
    assert (first.channel, first.reading, first.low) == ("pump", "a word never seen", None)
    assert first.words is not None
    assert set(first.words) == {"running", "stopped"}
    values[0, PUMP] = 1.0
    fed = Fed(episodes())
    fed.feed([], scores=scores_of([20.0], suspect=PUMP), values=values)
    assert fed.open[0].suspects[0].reading == "stopped"


def test_the_records_just_before_an_alert_count_for_its_suspects() -> None:
    # Sustained crosses its level at a record that itself looks like another channel's.
    own = np.ones((6, 4))
    own[:5, POWER] += 5.0
    own[5, OUT] += 6.0
    scores = scores_of([5.0] * 6, [1.0] * 5 + [4.0], suspect=[POWER] * 5 + [OUT], own=own)
    fed = Fed(episodes())
    fed.feed([], scores=scores, values=readings(6))
    suspects = fed.open[0].suspects
    assert [one.channel for one in suspects[:2]] == ["power", "out"]
    # Its evidence comes from the record that raised, in words of the model.
    assert suspects[0].time_ns == START_NS + 5 * STEP_NS
    assert suspects[0].reading == readings(6)[5, POWER]


def test_an_alert_without_any_suspect_still_has_a_sentence() -> None:
    scores = scores_of([20.0], own=np.full((1, 4), np.nan))
    scores = scores._replace(suspect=np.array([-1], dtype=np.int16))
    fed = Fed(episodes())
    fed.feed([], scores=scores, values=np.full((1, 4), np.nan))
    (alert,) = fed.open
    assert alert.suspects == ()
    assert alert.kind == SCORED
    assert "no single channel stands out" in alert.sentence


def test_late_and_ahead_records_are_not_on_time() -> None:
    at = times(4)[[1, 0, 2, 3]]
    scores = scores_of([0.0] * 4)
    none = np.zeros(0, np.bool_)
    assert Batch.of("a", at, readings(4), scores, none, -1).on_time.tolist() == [
        True, False, True, True,
    ]  # fmt: skip
    ahead = np.array([False, False, True, False])
    assert Batch.of("a", at, readings(4), scores, ahead, START_NS).on_time.tolist() == [
        True, False, False, True,
    ]  # fmt: skip
    empty = Batch.of("a", at[:0], readings(0), scores_of([]), none, START_NS)
    assert empty.on_time.tolist() == []
