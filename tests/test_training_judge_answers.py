"""Every question: what passes, what does not, and what is said."""

from __future__ import annotations

from dataclasses import replace

import pytest

from scoring.channels import Channel
from training.judge_answers import (
    Anew,
    alerts,
    at_least,
    covered,
    density,
    drill,
    known_sources,
    left_out,
    listed,
    run_away,
    tree,
    without_readings,
)
from training.judge_cover import Covered, EdgeChange, TreeChange
from training.judge_density import Compared
from training.judge_drill import Smallest
from training.judge_runaway import Residual

COMPARED = Compared(0.05, 0.03, 0.07, 1.2, 12, 9000, 1000, {"a": 0.05})
FLOW = Smallest("flow", "m3/h", 12.0, 5.0, 2.4)


def residual(apart: float, channel: str = "flow", tie: float = 0.1) -> Residual:
    return Residual("mill", channel, apart, tie, 0.3, 200)


def test_enough_is_at_least_the_limit() -> None:
    assert at_least("records", 5000, 5000, "records").passed
    few = at_least("records", 4999, 5000, "records")
    assert not few.passed
    assert few.sentence == "4,999 records are too few; at least 5,000 are needed."


def test_sources_that_sent_nothing_do_not_count_as_lost() -> None:
    answer = known_sources(["a", "b"], [], ["c"], 0.9, ["d"])
    assert (answer.passed, answer.number) == (True, 1.0)
    assert "let go: c" in answer.sentence
    assert "new with a member: d" in answer.sentence
    lost = known_sources(["a"], ["b"], [], 0.9, [])
    assert (lost.passed, lost.number) == (False, 0.5)
    assert "b would be scored by the fleet's" in lost.sentence
    assert known_sources([], [], [], 0.9, ["a"]).passed


def test_sources_after_a_declared_change_are_told_and_others_still_count() -> None:
    anew = [Anew(name, 0, "new meter", 12, 200, 3600 * 10**9) for name in "vwxyz"]
    answer = known_sources(["a"], ["b"], [], 0.9, [], anew)
    assert (answer.passed, answer.number) == (False, 0.5)
    assert (
        "v (history counts from 1970-01-01T00:00:00Z on, new meter: 12 of 200 records needed to "
        "learn from, enough from 1970-01-01T01:00:00Z on at the earliest), w (" in answer.sentence
    )
    assert answer.sentence.endswith(" and 2 more. At least 90% must keep theirs.")


def test_the_least_covered_channel_is_named() -> None:
    found = [Covered("a", "flow", 0.9), Covered("b", "power", 0.4), Covered("b", "flow", 0.3)]
    answer = covered("spans", found, 0.5, "range")
    assert (answer.passed, answer.number) == (False, 0.3)
    assert "flow of b: 30%" in answer.sentence
    assert "Below that are 2: power of b, flow of b." in answer.sentence
    assert covered("spans", found, 0.3, "range").passed
    assert covered("spans", [], 0.5, "range").passed


def test_channels_that_come_and_go_are_named() -> None:
    assert without_readings([], []) == ""
    said = without_readings([Channel(name="torque")], ["level"])
    assert said == "New in the channel table: torque; no longer in it: level."


def test_density_is_worse_only_beyond_its_doubt() -> None:
    worse = density(COMPARED, 0.02)
    assert not worse.passed
    assert "0.050 nats a reading more" in worse.sentence
    assert "10.0% hidden" in worse.sentence
    assert density(COMPARED, 0.03).passed
    assert density(replace(COMPARED, nats=0.05, low=-0.01), 0.0).passed
    assert "less than the one in use" in density(replace(COMPARED, nats=-0.1), 0.5).sentence
    assert density(None, 0.02).passed


@pytest.mark.parametrize(("n", "passed"), [(0, False), (1, True), (9, True), (10, False)])
def test_alerts_lie_in_the_interval(n: int, passed: bool) -> None:
    answer = alerts(n, 1.0, 9.0, 4.0, 0.99)
    assert (answer.passed, answer.number, answer.limit) == (passed, float(n), 9.0)
    assert ("trouble that nobody has labelled" in answer.sentence) == (n > 9)


def test_the_drill_names_the_channel_that_got_worst() -> None:
    answer = drill([FLOW], FLOW, 2.0, 20)
    assert not answer.passed
    assert "grew most for flow: 12 m3/h for 5 m3/h, 2.40 times" in answer.sentence
    never = replace(FLOW, new=None)
    assert "more than 30 spreads for 5 m3/h" in drill([never], never, 2.0, 20).sentence
    assert drill([FLOW], FLOW, 2.4, 20).passed
    first = replace(FLOW, old=None, factor=1.0)
    assert "An offset is caught on 1 of 1 channels." in drill([first], first, 2.0, 20).sentence
    assert drill([], None, 2.0, 20).passed


def test_the_tree_counts_what_was_lost_in_nats() -> None:
    changes = (EdgeChange("a", "x", "y", 0.5, False), EdgeChange("a", "x", "z", 0.4, True))
    answer = tree(TreeChange(0.7, changes), 0.6)
    assert not answer.passed
    assert "1 lost (0.50 nats), 1 gained (0.40 nats)" in answer.sentence
    assert tree(TreeChange(0.6, changes), 0.6).passed


def test_a_channel_that_ran_away_is_named_and_weak_ones_are_not_asked() -> None:
    found = [residual(0.4), residual(-2.6, "level"), residual(9.0, "water", tie=0.8)]
    answer = run_away(found, 2.0, 0.5, "model x", [])
    assert (answer.passed, answer.number) == (False, 2.6)
    assert "Under model x, level of mill lies furthest" in answer.sentence
    assert "-2.60 conditional spreads" in answer.sentence
    assert "Not asked, because neighbours tell too little: water." in answer.sentence
    assert run_away(found, 2.6, 0.5, "model x", []).passed
    both = run_away([residual(3.0), residual(4.0, "level")], 2.0, 0.5, "x", ["new"])
    assert "Beyond that are 2: level of mill (+4.0), flow of mill (+3.0)." in both.sentence
    assert "Without a witness from after their last change: new." in both.sentence
    assert run_away([], 2.0, 0.5, "no kept model", []).passed


def test_what_is_left_out_may_grow_by_no_more_than_the_limit() -> None:
    assert not left_out(0.10, 0.05, 0.03).passed
    assert left_out(0.07, 0.05, 0.03).passed
    assert left_out(0.02, 0.30, 0.03).passed
    assert left_out(0.5, None, 0.03).passed


def test_long_lists_are_cut() -> None:
    assert listed(["a", "b", "c", "d", "e"]) == "a, b, c and 2 more"
