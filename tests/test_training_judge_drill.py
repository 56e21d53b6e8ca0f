"""The judge's drill: smallest caught offsets of two models on the same quiet records."""

from __future__ import annotations

from dataclasses import replace

import pytest

from tests.pump import SOURCES, pump_model, pump_values
from tests.spools import spool_of
from training.drilled import Result
from training.history.spool import Spool
from training.judge_drill import (
    LEAST_SPREADS,
    MOST_SPREADS,
    Drilled,
    Quiet,
    drill_both,
    drilled_sources,
    smallest,
    worst,
)
from training.planting import OFFSET


def drilled(**sizes: float | None) -> Drilled:
    """Return results by channel; every channel's spread is 1."""
    results = tuple(
        Result(name, OFFSET, "bar", None, size, "", 20, 20, 18, 3.0) for name, size in sizes.items()
    )
    return Drilled(results, dict.fromkeys(sizes, 1.0), 20)


def test_the_factor_is_new_over_old_and_none_counts_as_the_most() -> None:
    new = drilled(flow=6.0, power=None, level=0.5, extra=1.0)
    old = drilled(flow=2.0, power=10.0, level=None, gone=1.0)
    found = {one.channel: one for one in smallest(new, old)}
    assert sorted(found) == ["flow", "level", "power"]
    assert found["flow"].factor == 3.0
    assert found["power"].factor == MOST_SPREADS / 10.0
    assert found["level"].factor == 0.5 / MOST_SPREADS
    assert found["power"].new is None
    assert worst(list(found.values())) in (found["flow"], found["power"])
    assert worst([]) is None


def test_an_offset_beyond_the_most_is_as_good_as_none() -> None:
    found = smallest(drilled(flow=100.0), drilled(flow=50.0))
    assert (found[0].new, found[0].old, found[0].factor) == (None, None, 1.0)


def test_an_offset_below_the_least_is_caught_small_enough() -> None:
    found = smallest(drilled(flow=0.2, power=1.0), drilled(flow=0.01, power=0.1))
    assert [one.factor for one in found] == [1.0, 1.0 / LEAST_SPREADS]
    assert (found[0].new, found[0].old) == (0.2, 0.01)


def test_without_another_model_the_new_ones_offsets_are_told() -> None:
    found = smallest(drilled(flow=2.0), None)
    assert (found[0].new, found[0].old, found[0].factor) == (2.0, None, 1.0)


def later() -> Spool:
    """Return records that the pump's model did not learn from."""
    return spool_of({source: pump_values(source, 900, 3000) for source in SOURCES})


def test_tied_channels_are_caught_small_and_the_room_is_not() -> None:
    with later() as spool:
        quiet = Quiet.of(pump_model(), spool, 20, 60)
    assert isinstance(quiet, Quiet)
    found = quiet.drilled()
    sizes = {one.channel: one.half for one in found.results}
    assert sorted(sizes) == ["flow", "power", "pressure", "room", "speed"]
    # Noise of the flow about what its speed says is 0.9, its own spread about 13.
    assert sizes["flow"] is not None
    assert sizes["flow"] < 6.0
    assert sizes["room"] is None or sizes["room"] > 2.0 * found.spread["room"]
    assert found.spread["flow"] == pytest.approx(13.0, rel=0.6)
    assert found.n_trials == 20


def test_two_models_are_tried_on_the_stretches_that_are_quiet_to_both() -> None:
    model = pump_model()
    deaf = replace(model, levels=replace(model.levels, record=60.0, sustained=50.0))
    with later() as spool:
        mine, theirs = (Quiet.of(one, spool, 20, 60) for one in (deaf, model))
    assert isinstance(mine, Quiet)
    assert isinstance(theirs, Quiet)
    both = drill_both(mine, theirs)
    assert both is not None
    assert both[0].n_trials == both[1].n_trials == len(mine.starts & theirs.starts)
    found = smallest(*both)
    got_worse = worst(found)
    assert got_worse is not None
    assert got_worse.factor > 1.5
    same = drill_both(theirs, theirs)
    assert same is not None
    assert {one.factor for one in smallest(*same)} == {1.0}
    few = sorted(theirs.starts)[:9]
    assert drill_both(theirs, theirs.only(set(few))) is None


def test_records_that_cannot_carry_a_drill_say_why() -> None:
    with spool_of({SOURCES[0]: pump_values(SOURCES[0], 100)}) as spool:
        assert "quiet stretches" in str(Quiet.of(pump_model(), spool, 20, 60))
    with Spool(5) as empty:
        assert "no record" in str(Quiet.of(pump_model(), empty, 20, 60))


def test_in_a_large_fleet_some_sources_evenly_among_all_are_drilled() -> None:
    fleet = [f"{k:04}" for k in range(5000)]
    some = drilled_sources(fleet, 20)
    assert some[:3] == ("0000", "0084", "0168")
    assert (len(some), some[-1]) == (60, "4956")
    assert drilled_sources(fleet[:60], 20) == tuple(fleet[:60])
    assert drilled_sources(fleet[:61], 20) == tuple(fleet[:61:2])
    assert drilled_sources([], 20) == ()
