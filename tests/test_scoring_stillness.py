"""Clocks of motion and absence, against a slow twin; whose motion counts; states' codes."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings

from scoring.artefact import read_model, write_model
from scoring.stillness import (
    MAX_STEP,
    UNREAD,
    Motion,
    StillnessLimits,
    code_of,
    follow_motion,
    neighbour_lists,
    passed_s,
    place_of,
    widest,
)
from tests.alert_tools import S, limits_of
from tests.models import EDGES, a_channel_table, a_model
from tests.strategies import SEEDS


def lists_of(neighbours: np.ndarray, n: int) -> list[list[int]]:
    return [neighbours[neighbours[i] : neighbours[i + 1]].tolist() for i in range(n)]


def test_a_derived_channel_stands_for_what_it_is_made_of() -> None:
    # in - out, in - head (of out and in), out - power, out - "out before" (of out), power - pump.
    found = lists_of(neighbour_lists(a_channel_table(), EDGES), 4)
    assert found == [[1], [0, 2], [1, 3], [2]]


def test_a_channel_alone_has_all_others_as_neighbours() -> None:
    found = lists_of(neighbour_lists(a_channel_table(), [(0, 1)]), 4)
    assert found == [[1], [0], [0, 1, 3], [0, 1, 2]]


def test_every_combination_of_states_has_a_code_of_its_own() -> None:
    words = [["running", "stopped"], ["open", "shut", "between"]]
    states = [{"name": f"s{k}", "kind": "state", "words": one} for k, one in enumerate(words)]
    table = a_channel_table(channel=[{"name": "x"}, *states], derived=[])
    motion = Motion.of(table)
    values = np.array([[0.0, a, b] for a in range(3) for b in range(4)])
    codes = {code_of(values, r, motion.states) for r in range(len(values))}
    assert len(codes) == 12
    values[0, 2] = np.nan
    assert code_of(values, 0, motion.states) == UNREAD
    assert place_of(np.array([UNREAD, 3]), UNREAD) == -1
    assert place_of(np.array([7, 3]), 3) == 1
    assert place_of(np.array([7, 3]), 4) == -1


def test_codes_of_very_many_states_stay_whole_numbers() -> None:
    states = [{"name": f"s{k}", "kind": "state", "words": ["a", "b", "c"]} for k in range(60)]
    motion = Motion.of(a_channel_table(channel=[{"name": "x"}, *states], derived=[]))
    values = np.full((1, 61), 3.0)
    assert 0 <= code_of(values, 0, motion.states) < 1 << 40


def test_a_gap_counts_as_little_as_was_seen_of_it() -> None:
    assert passed_s(50 * S, -1, 10.0) == 0.0
    assert passed_s(50 * S, 38 * S, 10.0) == pytest.approx(12.0)
    assert passed_s(5000 * S, 0, 10.0) == MAX_STEP * 10.0


class SlowClocks:
    """The clocks as a person would write them down."""

    def __init__(self, motion: Motion, neighbours: list[list[int]]) -> None:
        self.motion, self.neighbours = motion, neighbours
        n = len(neighbours)
        self.anchor = [float("nan")] * n
        self.still, self.moving = [0.0] * (n + 1), [0.0] * (n + 1)
        self.away = [0.0] * n

    def follow(self, record: list[float], dt_s: float) -> int:
        same, low, high, measured = self.motion.rows
        n = len(record)
        read = [low[i] <= record[i] <= high[i] for i in range(n)]
        moved = [read[i] and not abs(record[i] - self.anchor[i]) <= same[i] for i in range(n)]
        for i in range(n):
            self.away[i] = 0.0 if read[i] else self.away[i] + dt_s
            if moved[i]:
                self.anchor[i], self.still[i], self.moving[i] = record[i], 0.0, 0.0
            elif read[i]:
                self.still[i] += dt_s
                if any(moved[k] for k in self.neighbours[i]):
                    self.moving[i] += dt_s
        if any(moved[i] and measured[i] for i in range(n)):
            self.still[n] = self.moving[n] = 0.0
        elif any(read[i] and measured[i] for i in range(n)):
            self.still[n] += dt_s
            self.moving[n] += dt_s
        return n - moved.count(True)


@given(SEEDS)
@settings(max_examples=40)
def test_clocks_equal_their_slow_twin(seed: int) -> None:
    rng = np.random.default_rng(seed)
    table = a_channel_table()
    motion, neighbours = Motion.of(table), neighbour_lists(table, EDGES)
    slow = SlowClocks(motion, lists_of(neighbours, 4))
    values = rng.choice([1.0, 1.1, 2.0, 70.0, np.nan], (40, 4), p=[0.4, 0.2, 0.2, 0.1, 0.1])
    values[:, 3] = rng.integers(0, 2, 40)
    anchor, still, moving = np.full(4, np.nan), np.zeros(5), np.zeros(5)
    away, moved = np.zeros(4), np.zeros(4, np.bool_)
    for r in range(40):
        dt_s = float(rng.choice([10.0, 25.0]))
        n_rest = follow_motion(
            values, r, dt_s, motion.rows, neighbours, anchor, still, moving, away, moved
        )
        assert n_rest == slow.follow(values[r].tolist(), dt_s)
        np.testing.assert_array_equal(still, slow.still)
        np.testing.assert_array_equal(moving, slow.moving)
        np.testing.assert_array_equal(away, slow.away)


def test_less_than_half_a_resolution_is_no_motion() -> None:
    table = a_channel_table()
    motion, neighbours = Motion.of(table), neighbour_lists(table, EDGES)
    anchor, still, moving = np.full(4, np.nan), np.zeros(5), np.zeros(5)
    away, moved = np.zeros(4), np.zeros(4, np.bool_)
    # `in` has a resolution of 0.25; `out` has none, so that any change is motion.
    values = np.array([[1.0, 1.0, 1.0, 0.0], [1.1, 1.0 + 1e-9, 1.0, 0.0], [1.2, 1.0, 1.0, 0.0]])
    for r in range(3):
        follow_motion(values, r, 10.0, motion.rows, neighbours, anchor, still, moving, away, moved)
    # Slow drift adds up against the reading that is repeated, not against the last one.
    assert still.tolist() == [0.0, 0.0, 20.0, 20.0, 0.0]
    assert moving[2] == 20.0


def test_a_source_never_seen_may_be_still_as_long_as_any() -> None:
    model = a_model()
    short, long = limits_of(model, 30.0, 20.0, 100.0), limits_of(model, 90.0, 10.0, 50.0)
    other = StillnessLimits(
        np.array([4]), long.still_s, long.moving_s, long.away_s, long.present, long.neighbours
    )
    both = widest([short, long, other], short.neighbours)
    assert both is not None
    assert both.codes.tolist() == [0, 4]
    assert both.still_s[:, 0].tolist() == [90.0, 90.0]
    assert both.moving_s[:, 0].tolist() == [20.0, 10.0]
    assert both.away_s.tolist() == [100.0] * 5
    assert widest([], short.neighbours) is None


def test_limits_travel_with_the_model(tmp_path: Path) -> None:
    model = a_model()
    member = replace(model.members["a"], stillness=limits_of(model, 30.0, 20.0, 100.0))
    written = write_model(replace(model, members={"a": member}), tmp_path / "model")
    read = read_model(tmp_path / "model")
    assert read.name == written.name != write_model(model, tmp_path / "other").name
    assert read.fleet.stillness is None
    found, given_ = read.members["a"].stillness, member.stillness
    assert found is not None
    for name in StillnessLimits.__dataclass_fields__:
        np.testing.assert_array_equal(getattr(found, name), getattr(given_, name), err_msg=name)
