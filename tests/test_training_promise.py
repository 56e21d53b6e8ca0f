"""The promise follows the number of sources, widens with clusters, and says its doubts."""

from __future__ import annotations

import json
from dataclasses import replace
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pytest

from scoring.alert_settings import AlertSettings
from tests.streams import NEVER, held
from training.intervals import count_to_come
from training.levels import Curve, curve_of, levels_at
from training.promise import Promise, promise_of
from training.promise_words import (
    doubt_lines,
    interval_words,
    main_lines,
    promise_lines,
    season_words,
)
from training.season import SlowChannel

SLOW = SlowChannel("water", "degC", 0.7, 4.25, 17.5)


def a_promise(alerts_per_day: float = 1.5, by_day: list[int] | None = None) -> Promise:
    curve = the_curve(alerts_per_day)
    if by_day is not None:
        days = np.zeros_like(curve.by_day)
        days[curve.chosen] = by_day
        curve = replace(curve, by_day=days)
    return promise_of(curve, levels_at(curve, NEVER, 0.0), alerts_per_day, [SLOW], 0.2)


@cache
def the_curve(alerts_per_day: float) -> Curve:
    with TemporaryDirectory() as folder:
        curve = curve_of(held(Path(folder)), NEVER, alerts_per_day, AlertSettings())
    assert curve is not None
    return curve


def test_the_promise_follows_the_number_of_sources() -> None:
    promise = a_promise()
    assert promise.n_sources == 3
    assert promise.per_day() == pytest.approx(promise.n_seen / 10.0)
    assert promise.per_day(30) == pytest.approx(10 * promise.per_day())
    assert promise.per_day() <= promise.alerts_per_day


def test_the_interval_is_the_ratio_of_two_counts_widened_by_clusters() -> None:
    even = a_promise(by_day=[1, 2, 1, 1, 2, 1, 1, 2, 1, 1])
    assert even.dispersion == 1.0
    steady = replace(even, slow=())
    assert steady.interval(7) == count_to_come(even.n_seen, 30.0, 21.0)
    uneven = a_promise(by_day=[0, 0, 0, 6, 7, 0, 0, 0, 0, 0])
    assert uneven.dispersion > 5
    assert uneven.busiest_days == 1
    assert uneven.interval(7)[1] > 1.5 * even.interval(7)[1]


def test_a_season_that_is_missing_widens_the_interval_the_further_it_looks() -> None:
    promise = a_promise(by_day=[1, 2, 1, 1, 2, 1, 1, 2, 1, 1])
    steady = replace(promise, slow=())
    for n_days, factor in ((5, 1.5), (20, 3.0)):
        assert promise.interval(n_days)[0] == steady.interval(n_days)[0]
        assert promise.interval(n_days)[1] == pytest.approx(factor * steady.interval(n_days)[1])


def test_a_promise_beyond_the_data_expects_what_the_tail_expects() -> None:
    promise = a_promise(alerts_per_day=0.05)
    assert promise.n_seen == 0
    assert 0 < promise.per_day() <= 0.05
    assert promise.reach > 1
    assert promise.record > promise.record_highest
    assert any("beyond the highest seen" in line for line in doubt_lines(promise))
    # Nothing was seen, so much can come.
    low, high = promise.interval(30)
    assert low == 0.0
    assert high > 3 * 0.05 * 30


def test_a_budget_nobody_can_promise_is_said_to_be_one() -> None:
    promise = a_promise(alerts_per_day=1e-4)
    assert promise.at_limit
    assert any("no history of this length can promise" in line for line in doubt_lines(promise))


def test_other_budgets_cost_what_the_curve_says() -> None:
    curve = the_curve(1.5)
    promise = promise_of(curve, levels_at(curve, NEVER, 0.0), 1.5)
    assert [one.alerts_per_day for one in promise.budgets] == pytest.approx(
        [0.15, 0.375, 0.75, 1.5, 3.0, 6.0]
    )
    asked = promise.budgets[3]
    assert (asked.record, asked.sustained) == (promise.record, promise.sustained)
    records = [one.record for one in promise.budgets]
    assert records == sorted(records, reverse=True)
    for one in promise.budgets:
        assert one.expected <= one.alerts_per_day


def test_the_curve_is_kept_with_the_chosen_pair_among_its_points() -> None:
    promise = a_promise()
    pairs = [(point.record, point.sustained) for point in promise.curve]
    assert (promise.record, promise.sustained) in pairs
    assert pairs == sorted(pairs, reverse=True)
    at = pairs.index((promise.record, promise.sustained))
    assert promise.curve[at].rate == promise.rate
    assert 30 <= len(pairs) <= 50


def test_a_promise_survives_the_model_directory() -> None:
    promise = a_promise()
    text = json.dumps(promise.as_data(), allow_nan=False)
    assert Promise.from_data(json.loads(text)) == promise


def test_it_is_said_in_whole_sentences_with_the_numbers() -> None:
    promise = a_promise()
    text = "\n".join(promise_lines(promise))
    for part in (
        "1.5 alerts a day over 3 sources",
        f"expected {promise.per_day():.2f} alerts a day",
        "95 % interval",
        "720 source-hours held out",
        "water (4.25 to 17.5 degC)",
        "until the model is renewed",
        "<- asked for",
    ):
        assert part in text
    assert "nan" not in text


def test_a_promise_without_doubt_has_no_line_of_doubt() -> None:
    promise = replace(
        a_promise(by_day=[1, 2, 1, 1, 2, 1, 1, 2, 1, 1]),
        slow=(),
        held_back=False,
        reach=0.0,
    )
    assert doubt_lines(promise) == []
    assert len(main_lines(promise)) == 3


def test_held_out_time_that_is_worse_than_fitted_time_is_named() -> None:
    promise = replace(a_promise(), unseen_nats=2.5)
    assert any("2.5 nats more surprising" in line for line in doubt_lines(promise))


@pytest.mark.parametrize(
    ("low", "high", "words"),
    [(0.0, 3.9, "0 to 3"), (1.2, 7.0, "2 to 7"), (0.0, np.inf, "any number")],
)
def test_an_interval_of_counts_is_whole(low: float, high: float, words: str) -> None:
    assert interval_words(low, high) == words


def test_of_many_slow_channels_the_slowest_are_named_and_the_rest_counted() -> None:
    slow = tuple(replace(SLOW, name=f"c{k}") for k in range(500))
    text = season_words(replace(a_promise(), slow=slow))
    assert "c7 (" in text
    assert "c8 (" not in text
    assert "and 492 more can go" in text
