"""The judge's drill: smallest caught offsets of two models on the same quiet records."""

from __future__ import annotations

import pytest

from tests.pump import SOURCES, pump_model, pump_values
from tests.spools import spool_of
from training.drilled import Result
from training.history.spool import Spool
from training.judge_drill import MOST_SPREADS, Drilled, drill_model, smallest, worst
from training.planting import OFFSET


def drilled(**sizes: float | None) -> Drilled:
    """Return results by channel; every channel's spread is 1."""
    results = tuple(
        Result(name, OFFSET, "bar", size, None, "", 20, 20, 18, 3.0) for name, size in sizes.items()
    )
    return Drilled(results, dict.fromkeys(sizes, 1.0))


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


def test_without_another_model_the_new_ones_offsets_are_told() -> None:
    found = smallest(drilled(flow=2.0), None)
    assert (found[0].new, found[0].old, found[0].factor) == (2.0, None, 1.0)


def test_tied_channels_are_caught_small_and_the_room_is_not() -> None:
    records = {source: pump_values(source, 900, 3000) for source in SOURCES}
    with spool_of(records) as spool:
        found = drill_model(pump_model(), spool, 20, 60)
    assert isinstance(found, Drilled)
    sizes = {one.channel: one.size for one in found.results}
    assert sorted(sizes) == ["flow", "power", "pressure", "room", "speed"]
    # Noise of the flow about what its speed says is 0.9, its own spread about 13.
    assert sizes["flow"] is not None
    assert sizes["flow"] < 8.0
    assert sizes["room"] is None or sizes["room"] > 2.0 * found.spread["room"]
    assert found.spread["flow"] == pytest.approx(13.0, rel=0.6)


def test_records_that_cannot_carry_a_drill_say_why() -> None:
    with spool_of({SOURCES[0]: pump_values(SOURCES[0], 100)}) as spool:
        assert "quiet stretches" in str(drill_model(pump_model(), spool, 20, 60))
    with Spool(5) as empty:
        assert "no record" in str(drill_model(pump_model(), empty, 20, 60))
