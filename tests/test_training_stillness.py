"""How long a channel normally stays still: per state, by neighbours' motion, in chunks."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scoring.stillness import StillnessLimits
from tests.alert_tools import S
from tests.models import EDGES, a_channel_table, a_model
from tests.spools import spool_of
from training.rows import Rows
from training.stillness import LEAST_MOVES, MAX_KEPT, learn_stillness, with_stillness

TABLE = a_channel_table()
IN, OUT, POWER, PUMP = range(4)


def machine_history(n: int = 4000, seed: int = 1) -> tuple[np.ndarray, np.ndarray]:
    """Return a pump that runs and stands in turn: while it stands, out and power rest at 0."""
    rng = np.random.default_rng(seed)
    stopped = (np.arange(n) // 400) % 2 == 1
    values = rng.normal(10.0, 1.0, (n, 4))
    # `out` often repeats itself once; `in` moves always.
    for r in range(1, n):
        if rng.random() < 0.3:
            values[r, OUT] = values[r - 1, OUT]
    values[stopped, OUT] = 0.0
    values[stopped, POWER] = 0.0
    values[:, PUMP] = stopped
    return (np.arange(n, dtype=np.int64) + 1) * 10 * S, values


def learn(times_ns: np.ndarray, values: np.ndarray, cuts: tuple[int, ...] = ()) -> StillnessLimits:
    borders = [0, *cuts, len(times_ns)]
    chunks = [(times_ns[a:b], values[a:b]) for a, b in pairwise(borders)]
    return learn_stillness(chunks, TABLE, EDGES, 10.0)


def test_a_stopped_machine_is_still_by_nature_and_a_running_one_is_not() -> None:
    limits = learn(*machine_history())
    assert limits.codes.tolist() == [0, 1]
    running, stopped = limits.still_s
    # Runs of one to a few repeats while running, which no neighbour explains.
    assert 10.0 <= running[OUT] <= 100.0
    assert limits.moving_s[0, OUT] == running[OUT]
    assert running[POWER] == 0.0
    assert np.isinf(stopped[[OUT, POWER]]).all()
    # `in` goes on moving while the pump stands.
    assert stopped[IN] <= 100.0
    assert np.isinf(limits.still_s[:, PUMP]).all()
    assert limits.still_s[:, -1].max() <= 100.0


def test_without_a_state_the_neighbours_motion_tells_standing_from_stuck() -> None:
    times_ns, values = machine_history()
    values[:, PUMP] = 0.0
    # While the pump stands all three rest.
    stopped = values[:, POWER] == 0.0
    values[stopped, IN] = 5.0
    limits = learn(times_ns, values)
    assert limits.still_s[0, OUT] > 3000.0
    assert limits.moving_s[0, OUT] <= 100.0


def test_records_left_out_are_neither_a_stillness_nor_an_absence() -> None:
    times_ns, values = machine_history(4000)
    plain = learn(times_ns, values)
    stuck = values.copy()
    stuck[900:1100, IN] = 3.0
    left_out = np.array([[times_ns[900], times_ns[1099]]])
    with spool_of({"a": stuck}, step_s=10.0) as spool:
        first_ns = next(Rows(spool, TABLE, ("a",), 10.0).chunks()).times_ns[0]
        rows = Rows(spool, TABLE, ("a",), 10.0, {"a": left_out - times_ns[0] + first_ns})
        member = with_stillness(rows, a_model().members, a_model().fleet)[0]["a"]
    assert member.stillness is not None
    assert member.stillness.away_s[-1] == plain.away_s[-1] == 10.0
    assert member.stillness.still_s[0, IN] <= plain.still_s[0, IN]


def test_absence_is_measured_in_time_that_was_seen() -> None:
    times_ns, values = machine_history(1000)
    values[100:110, IN] = np.nan
    values[:, OUT] = np.nan
    times_ns[500:] += 3600 * S
    limits = learn(times_ns, values)
    assert limits.away_s[IN] == pytest.approx(100.0)
    assert np.isinf(limits.away_s[OUT])
    assert limits.away_s[-1] == pytest.approx(3610.0)
    assert limits.present.tolist() == pytest.approx([0.99, 0.0, 1.0, 1.0], abs=2e-3)


def test_a_channel_seen_to_move_too_seldom_has_no_limit() -> None:
    times_ns, values = machine_history()
    values[:, IN] = np.arange(4000) // 200
    limits = learn(times_ns, values)
    assert LEAST_MOVES > 4000 // 200
    assert np.isinf(limits.still_s[:, IN]).all()


@given(st.sets(st.integers(1, 799), max_size=6), st.floats(0, 0.3))
@settings(max_examples=15)
def test_chunks_of_any_length_give_the_same_limits(cuts: set[int], gaps: float) -> None:
    times_ns, values = machine_history(800)
    values[np.random.default_rng(3).random(values.shape) < gaps] = np.nan
    whole, cut = learn(times_ns, values), learn(times_ns, values, tuple(sorted(cuts)))
    for name in StillnessLimits.__dataclass_fields__:
        np.testing.assert_array_equal(getattr(whole, name), getattr(cut, name), err_msg=name)


def test_only_the_combinations_with_most_time_are_kept() -> None:
    n = 600
    states = [{"name": f"s{k}", "kind": "state", "words": ["a", "b"]} for k in range(10)]
    table = a_channel_table(channel=[{"name": "x"}, *states], derived=[])
    rng = np.random.default_rng(5)
    values = np.zeros((n, 11))
    values[:, 0] = np.arange(n)
    values[::2, 1:] = rng.integers(0, 2, (n // 2, 10))
    at = (np.arange(n, dtype=np.int64) + 1) * 10 * S
    limits = learn_stillness([(at, values)], table, [], 10.0)
    assert len(limits.codes) == MAX_KEPT
    assert (np.diff(limits.codes) > 0).all()
    assert 0 in limits.codes


def test_every_member_gets_its_limits_and_the_fleet_the_widest() -> None:
    model = a_model()
    _, values = machine_history()
    shorter = values.copy()
    shorter[:, OUT] = np.where(shorter[:, PUMP] == 1.0, 0.0, np.arange(4000))
    with spool_of({"a": values, "b": shorter}, 10.0) as spool:
        rows = Rows(spool, TABLE, ("a", "b"), 10.0)
        members = {"a": model.members["a"], "b": replace(model.members["a"], source="b")}
        found, fleet = with_stillness(rows, members, model.fleet)
    a, b = found["a"].stillness, found["b"].stillness
    assert a is not None
    assert b is not None
    assert fleet.stillness is not None
    assert b.still_s[0, OUT] < a.still_s[0, OUT] == fleet.stillness.still_s[0, OUT]
