"""Rivals get the budget that ours gets."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from training.rivals import (
    Records,
    Rival,
    Rule,
    count_stretches,
    fit_rivals,
    lowest_level,
    set_level,
    smoothed,
)
from training.stretches import Stretches

STEP_NS = 60 * 10**9
RULE = Rule(alerts_per_day=2.0, tau_s=900.0, step_s=60.0, gap_ns=30 * STEP_NS)


class FirstColumn:
    """A method whose score is the first column, and whose suspect the second."""

    def score(
        self, values: np.ndarray[tuple[int, int], np.dtype[np.float64]]
    ) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
        return values[:, 0]

    def suspect(
        self, values: np.ndarray[tuple[int, int], np.dtype[np.float64]]
    ) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
        return np.ones(len(values), dtype=np.int64)


def records(n_days: int, seed: int) -> Records:
    """Return related channels, one record a minute."""
    rng = np.random.default_rng(seed)
    n = n_days * 1440
    load = np.sin(np.arange(n) / 200.0) + 0.1 * rng.standard_normal(n)
    values = np.column_stack([load, 2.0 * load, -load]) + 0.05 * rng.standard_normal((n, 3))
    return np.arange(n) * STEP_NS, values


def stretches_of(rival: Rival, source: str, given_records: Records) -> int:
    """Return how many stretches a rival has on some records."""
    found = Stretches(RULE.gap_ns)
    for over in rival.over_level(source, given_records, ("a", "b", "c")):
        found.add(over)
    return len(found.close())


def test_every_rival_keeps_to_the_budget_on_the_history_it_was_set_on() -> None:
    history = {"one": records(6, 1), "two": records(6, 2)}
    rivals = fit_rivals(history, RULE)
    assert [rival.name for rival in rivals] == ["limits", "T2", "SPE", "T2 mean", "SPE mean"]
    for rival in rivals:
        n = sum(stretches_of(rival, source, own) for source, own in history.items())
        # Two a day over both sources, for six days; the level is used, not just kept.
        assert 1 <= n <= 12, rival.name


def test_a_smaller_budget_never_lowers_a_level() -> None:
    history = {"one": records(6, 1)}
    wide, narrow = fit_rivals(history, RULE), fit_rivals(history, replace(RULE, alerts_per_day=0.5))
    by_record = list(zip(wide, narrow, strict=True))[:3]
    assert all(b.level >= a.level for a, b in by_record)
    assert any(b.level > a.level for a, b in by_record)


def test_the_lowest_level_leaves_no_more_stretches_than_allowed() -> None:
    times = np.arange(10_000) * STEP_NS
    score = np.zeros(10_000)
    score[[100, 2000, 4000, 6000]] = [5.0, 4.0, 3.0, 2.0]
    assert lowest_level([(times, score)], 2.0, RULE.gap_ns) == 3.0
    assert lowest_level([(times, score)], 0.0, RULE.gap_ns) == 5.0


def test_a_level_is_over_for_at_most_one_percent_of_the_time() -> None:
    times = np.arange(10_000) * STEP_NS
    score = np.zeros(10_000)
    score[5000:5500] = np.linspace(1.0, 2.0, 500)
    level = lowest_level([(times, score)], 5.0, RULE.gap_ns)
    assert 0 < (score > level).sum() <= 100


@given(st.lists(st.integers(0, 5000), unique=True, max_size=50))
def test_stretches_are_counted_as_they_are_grouped(minutes: list[int]) -> None:
    times = np.array(sorted(minutes), dtype=np.int64) * STEP_NS
    slow = sum(1 for i, t in enumerate(times) if i == 0 or t - times[i - 1] > RULE.gap_ns)
    assert count_stretches(times, RULE.gap_ns) == slow


def test_one_glitch_moves_the_mean_by_no_more_than_its_share_of_the_cap() -> None:
    score = np.array([0.0, 1e9, 0.0])
    mean = smoothed(np.arange(3) * STEP_NS, score, 3.0, RULE)
    assert mean[1] == pytest.approx(3.0 * (1.0 - np.exp(-1.0 / 15.0)))
    assert mean[2] < mean[1]


def test_a_rival_names_its_suspect_and_which_level_it_has() -> None:
    times, values = np.arange(200) * STEP_NS, np.zeros((200, 2))
    values[150, 0] = 7.0
    quiet = {"one": (times, np.zeros((200, 2)))}
    rival = set_level("x", {"one": FirstColumn()}, quiet, RULE)
    (over,) = rival.over_level("one", (times, values), ("a", "b"))
    assert (over.time_ns, over.kind, over.suspect, over.weight) == (
        150 * STEP_NS,
        "record",
        "b",
        7.0,
    )
    by_mean = replace(rival, cap=7.0, level=0.1)
    assert {o.kind for o in by_mean.over_level("one", (times, values), ("a", "b"))} == {"sustained"}
