"""A channel that drifts from its neighbours is named; one that moves with them is not."""

from __future__ import annotations

import numpy as np
import pytest

from scoring.channels import parse_channels
from scoring.derived import derive
from tests.pump import NAMES, SOURCES, pump_model, pump_times, pump_values
from tests.spools import spool_of
from training.judge_runaway import (
    LEAST_RESIDUALS,
    Residual,
    expected_middles,
    own_middles,
    residuals_of,
)
from training.learn import learn_model
from training.settings import LearnSettings

A = SOURCES[0]
N, START = 1440, 3000


def residuals(**offsets: float) -> dict[str, Residual]:
    """Return a later day's residuals, some channels offset."""
    values = pump_values(A, N, START)
    for name, offset in offsets.items():
        values[:, NAMES.index(name)] += offset
    return {r.channel: r for r in residuals_of(pump_model(), A, pump_times(N, START), values)}


def test_a_day_as_usual_lies_near_what_the_neighbours_say() -> None:
    found = residuals()
    assert sorted(found) == sorted(NAMES)
    assert all(abs(one.apart) < 1.0 for one in found.values() if one.tie <= 0.5)
    assert found["flow"].tie < 0.2
    assert found["room"].tie > 0.8


@pytest.mark.parametrize("direction", [1.0, -1.0])
def test_an_offset_is_told_in_conditional_spreads_and_only_there(direction: float) -> None:
    usual, off = residuals(), residuals(flow=4.0 * direction)
    # The conditional spread by another way: what the drawn pump's own noise leaves open.
    values = pump_values(A, N, START)
    left = values[:, 1] - np.polyval(np.polyfit(values[:, 0], values[:, 1], 1), values[:, 0])
    expected = 4.0 / left.std()
    moved = direction * (off["flow"].apart - usual["flow"].apart)
    assert moved == pytest.approx(expected, rel=0.4)
    assert all(abs(off[name].apart) < abs(off["flow"].apart) for name in NAMES if name != "flow")


def test_a_channel_that_moves_with_its_neighbours_moved_but_has_not_run_away() -> None:
    values = pump_values(A, 20_000)
    fast = np.flatnonzero(values[:, 0] > np.quantile(values[:, 0], 0.8))[:400]
    found = {r.channel: r for r in residuals_of(pump_model(), A, pump_times(400), values[fast])}
    for name in ("speed", "flow", "power", "pressure"):
        assert found[name].moved > 0.7
        assert abs(found[name].apart) < 1.0


def test_a_stopped_pump_at_the_end_of_its_bin_has_not_run_away() -> None:
    rng = np.random.default_rng(5)
    speed = 1300 + 80 * rng.normal(size=4000)
    stopped = np.arange(4000) // 50 % 2 == 0
    values = np.column_stack([speed, speed / 6]) + rng.normal(size=(4000, 2))
    values[stopped] = 0.0
    table = parse_channels({"step_s": 60, "channel": [{"name": "speed"}, {"name": "flow"}]}, "test")
    with spool_of({"a": values}) as spool:
        model = learn_model(spool, table, LearnSettings()).model
    rows = np.flatnonzero(stopped)[:1000]
    assert residuals_of(model, "a", pump_times(1000), values[rows]) == []
    # Nor does it outvote what is off when the pump runs.
    moved = values[2900:3950].copy()
    moved[moved[:, 1] > 0, 1] += 6.0
    assert (moved[:, 0] == 0.0).mean() > 0.5
    by_name = {r.channel: r for r in residuals_of(model, "a", pump_times(1050), moved)}
    assert by_name["flow"].apart > 2.0


def test_few_readings_say_nothing() -> None:
    values = pump_values(A, N, START)
    values[LEAST_RESIDUALS - 1 :, 2] = np.nan
    found = residuals_of(pump_model(), A, pump_times(N, START), values)
    assert "power" not in {r.channel for r in found}
    values = pump_values(A, N, START)
    values[N // 10 :, 2] = np.nan
    found = residuals_of(pump_model(), A, pump_times(N, START), values)
    assert "power" not in {r.channel for r in found}


def test_the_middle_is_where_readings_that_fit_lie() -> None:
    model, values = pump_model(), pump_values(A, 300, START)
    nodes, _ = derive(model.table, pump_times(300, START), values, None)
    middle, width = expected_middles(model.members[A], model.table, nodes)
    there = np.isfinite(width[:, 1])
    assert there.mean() > 0.9
    inside = np.abs(values[there, 1] - middle[there, 1]) <= width[there, 1]
    assert inside.mean() > 0.95


def test_own_middles_are_the_medians_of_what_was_learned() -> None:
    found = own_middles(pump_model().members[A])
    medians = np.median(pump_values(A, 3000), axis=0)
    spreads = pump_values(A, 3000).std(axis=0)
    assert np.abs((found - medians) / spreads).max() < 0.15


def test_spools_of_any_length_are_sampled() -> None:
    with spool_of({A: pump_values(A, 50)}) as spool:
        times, values = next(iter(spool.chunks(A)))
    assert {r.n for r in residuals_of(pump_model(), A, times, values)} <= set(range(30, 51))
