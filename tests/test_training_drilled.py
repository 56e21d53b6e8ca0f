"""The drill: sizes it reports are caught, smaller ones are not, and blind spots are named."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from scoring.model import Model
from tests.pump import N_LEARNED, NAMES, SOURCES, pump_model, pump_values
from tests.spools import spool_of
from training.drill_words import as_data, channel_cells, drill_lines, size_text
from training.drilled import CAUGHT_SHARE, Drill, Result, unwatched
from training.planting import DRIFT, NOISE, OFFSET, SCALING, STUCK, SWAP, plant
from training.trials import OnlinePath, find_trials

FLOW, POWER, ROOM = NAMES.index("flow"), NAMES.index("power"), NAMES.index("room")


@cache
def a_drill(seed: int = 1) -> Drill:
    values = {s: pump_values(s, 2500, N_LEARNED) for s in SOURCES}
    path = OnlinePath(pump_model())
    with spool_of(values) as spool:
        trials = find_trials(path, spool, 20, 200, np.random.default_rng(seed))
    return Drill.of(path, trials, 40, seed)


@cache
def offset(channel: int) -> Result:
    return a_drill().sized(channel, OFFSET)


def caught_at(channel: int, size: float) -> float:
    """Return the share of trials with an offset that the fast path catches."""
    drill, n_caught, n = a_drill(), 0, 0
    for one in drill.trials:
        direction = np.resize([1.0, -1.0], len(one))
        drawn = np.zeros((len(one), drill.within))
        normal = one.values[:, : drill.within]
        values = plant(OFFSET, normal, channel, size, direction, drawn, 0.0)
        n_caught += int((drill.path.first_alerts(one, values) >= 0).sum())
        n += len(one)
    return n_caught / n


def test_the_size_is_caught_and_three_quarters_of_it_is_not() -> None:
    found = offset(FLOW)
    assert found.size is not None
    assert found.half is not None
    assert found.is_caught
    assert found.caught >= CAUGHT_SHARE * found.n_trials == CAUGHT_SHARE * 20
    assert found.half <= found.size
    assert caught_at(FLOW, 1.3 * found.size) >= CAUGHT_SHARE
    assert caught_at(FLOW, 0.5 * found.half) < CAUGHT_SHARE


def test_a_channel_that_others_follow_is_watched_more_closely_than_one_they_do_not() -> None:
    flow, room = offset(FLOW), offset(ROOM)
    spread = a_drill().spread
    assert flow.size is not None
    assert room.size is None or room.size / spread[ROOM] > 3 * flow.size / spread[FLOW]


def test_the_suspect_is_the_planted_channel_most_of_the_time() -> None:
    found = offset(FLOW)
    assert found.right >= 0.8 * found.caught
    assert found.delay_records is not None
    assert 1 <= found.delay_records <= 40


@pytest.mark.parametrize("kind", [DRIFT, NOISE, SCALING])
def test_other_kinds_have_sizes_in_their_units(kind: str) -> None:
    found = a_drill().sized(POWER, kind)
    assert found.kind == kind
    assert found.unit == ("% of reading" if kind == SCALING else "kW")
    assert found.size is not None
    assert 0 < found.size < 100


def test_stuck_says_after_how_many_records() -> None:
    found = a_drill().stuck(FLOW)
    assert found.unit == "records"
    assert found.size is not None
    assert found.half is not None
    assert found.half <= found.size <= 200
    assert found.is_caught


def test_a_swap_is_caught_or_not_and_names_both() -> None:
    found = a_drill().swapped(FLOW, POWER)
    assert (found.channel, found.partner, found.size) == ("flow", "power", None)
    assert found.is_caught
    assert a_drill().partners(FLOW) == [POWER, 3, ROOM]
    assert a_drill().partners(ROOM) == []


def test_a_seed_gives_the_same_drill_again() -> None:
    again = Drill(a_drill().path, a_drill().trials, 40, 1, a_drill().spread)
    assert again.sized(FLOW, NOISE) == a_drill().sized(FLOW, NOISE)


def result(channel: str, size: float | None, kind: str = OFFSET, partner: str = "") -> Result:
    caught = 4 if size is None and kind != SWAP else 19
    return Result(channel, kind, "bar", size, size, partner, caught, 20, caught, 7.0)


def lone(model: Model, channel: int) -> Model:
    """Return the model with one channel's edges taken away."""
    members = {}
    for source, member in model.members.items():
        tree = member.parts[0].tree
        keep = ~(tree.edges == channel).any(axis=1)
        tables = tuple(t for t, k in zip(tree.log_ratios, keep, strict=True) if k)
        bare = replace(tree, edges=tree.edges[keep], nats=tree.nats[keep], log_ratios=tables)
        members[source] = replace(member, parts=(replace(member.parts[0], tree=bare),))
    fleet = next(iter(members.values()))
    return replace(model, members=members, fleet=fleet)


def test_channels_that_nothing_watches_are_named_with_the_reason() -> None:
    results = [result("flow", 2.0), result("power", None), result("speed", 1.0)]
    found = unwatched(results, pump_model())
    assert "no fault of any size" in found["power"]
    assert "flow" not in found
    found = unwatched(results, lone(pump_model(), NAMES.index("speed")))
    assert "goes with no other channel" in found["speed"]


def test_the_table_says_sizes_in_units_and_shares_where_there_is_no_size() -> None:
    assert size_text(result("flow", 2.0), 60.0) == "2 bar"
    assert size_text(result("flow", None), 60.0) == "not caught (20 %)"
    assert size_text(result("flow", 30.0, STUCK), 60.0) == "30 min"
    assert size_text(result("flow", 12.5, SCALING), 60.0) == "12.5 %"
    assert size_text(None, 60.0) == "-"
    results = [result("flow", 2.0), result("flow", None, SWAP, "power"), result("power", 1.0)]
    assert channel_cells("flow", results, 60.0) == (
        "flow", "2 bar", "-", "-", "-", "-", "1 of 1", "100 %"
    )  # fmt: skip
    # A swap is of both: the partner's line counts it too.
    assert channel_cells("power", results, 60.0)[6] == "1 of 1"


def test_lines_and_data_hold_everything() -> None:
    results = [result("flow", 2.0), result("room", None)]
    lines = drill_lines(results, 60.0, 40, {"room": "why"})
    assert "90 % of 20 trials within 40 records (40 min)" in lines[0]
    assert lines[-1] == "  nothing watches room: why"
    data = as_data(results, 40, 60.0, 1, "name", {"room": "why"})
    assert data["results"][0]["size"] == 2.0
    assert data["results"][0]["is_caught"] is True
    assert data["results"][1]["caught_limits"] == pytest.approx([0.0573, 0.4366], abs=1e-3)
