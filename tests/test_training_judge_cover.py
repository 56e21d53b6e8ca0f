"""Sources, channels, ranges and edges that a new model still knows."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scoring.bins import MISSING, Bins
from scoring.channels import ChannelTable
from scoring.model import Member, Model, Part
from scoring.tree import Tree
from tests.pump import SOURCES, pump_model
from training.judge_cover import both_own, readings_covered, spans_covered, tree_change

A, B = SOURCES


def with_member(model: Model, source: str, member: Member) -> Model:
    return replace(model, members={**model.members, source: member})


def without_channel(model: Model, name: str) -> Model:
    """Return the model with one channel called otherwise."""
    channels = [
        c.model_copy(update={"name": f"old {c.name}"}) if c.name == name else c
        for c in model.table.channel
    ]
    table = ChannelTable(step_s=model.table.step_s, channel=tuple(channels))
    return replace(model, table=table)


def test_sources_with_members_in_both_are_compared() -> None:
    model = pump_model()
    assert both_own(replace(model, members={A: model.members[A]}), model) == [A]


def test_readings_that_stopped_coming_are_a_smaller_share_of_before() -> None:
    model = pump_model()
    member = model.members[A]
    rows = member.usual.rows.copy()
    rows[: 3 * len(rows) // 4, 1] = MISSING
    new = with_member(model, A, replace(member, usual=replace(member.usual, rows=rows)))
    found = {(c.source, c.channel): c.share for c in readings_covered(new, model, SOURCES)}
    assert found[A, "flow"] == pytest.approx(0.25, abs=0.01)
    assert {share for key, share in found.items() if key != (A, "flow")} == {1.0}
    # What came more often than before is covered, and what never came is not asked.
    back = {(c.source, c.channel): c.share for c in readings_covered(model, new, SOURCES)}
    assert back[A, "flow"] == 1.0


def test_a_range_that_the_new_model_did_not_see_is_not_covered() -> None:
    model = pump_model()
    member = model.members[A]
    bins = list(member.bins)
    low, high = np.quantile(bins[1].borders, [0.0, 1.0])
    bins[1] = Bins(bins[1].borders + 0.5 * (high - low))
    new = with_member(model, A, replace(member, bins=tuple(bins)))
    found = {(c.source, c.channel): c.share for c in spans_covered(new, model, SOURCES)}
    assert found[A, "flow"] < 0.5
    assert found[B, "flow"] == 1.0
    assert {share for key, share in found.items() if key != (A, "flow")} == {1.0}


def test_a_range_of_a_few_steps_is_no_range_to_lose() -> None:
    model = pump_model()
    coarse = tuple(c.model_copy(update={"resolution": 1000.0}) for c in model.table.channel)
    table = ChannelTable(step_s=60.0, channel=coarse)
    assert spans_covered(replace(model, table=table), model, SOURCES) == []


def relinked(model: Model, source: str, edges: list[tuple[int, int]], nats: list[float]) -> Model:
    """Return the model with other edges on one source's tree."""
    member = model.members[source]
    tree = member.parts[-1].tree
    sizes = [len(m) for m in tree.log_marginals]
    ratios = tuple(np.zeros((sizes[a], sizes[b])) for a, b in edges)
    other = Tree(np.array(edges), np.array(nats), tree.log_marginals, ratios)
    return with_member(model, source, replace(member, parts=(Part(other),)))


def test_edges_gained_and_lost_are_told_with_their_nats() -> None:
    model = pump_model()
    old = relinked(model, A, [(0, 1), (0, 2), (0, 3)], [1.0, 2.0, 1.0])
    new = relinked(model, A, [(0, 1), (1, 2), (0, 3)], [1.1, 1.9, 1.0])
    found = tree_change(new, old, [A])
    assert found.share == pytest.approx(2.0 / 4.0)
    assert [(e.left, e.right, e.nats, e.gained) for e in found.changes] == [
        ("flow", "power", 1.9, True), ("power", "speed", 2.0, False),
    ]  # fmt: skip
    same = tree_change(old, old, [A])
    assert (same.share, same.changes) == (0.0, ())


def test_edges_of_a_channel_that_left_the_table_are_told_and_do_not_count() -> None:
    model = pump_model()
    old = relinked(model, A, [(0, 1), (0, 2)], [1.0, 2.0])
    new = without_channel(relinked(model, A, [(0, 1)], [1.0]), "power")
    found = tree_change(new, old, [A])
    assert found.share == 0.0
    assert [(e.left, e.right, e.gained) for e in found.changes] == [("power", "speed", False)]


def test_without_a_source_in_common_the_fleets_trees_are_compared() -> None:
    model = pump_model()
    assert tree_change(model, model, []).share == 0.0
