"""The model in memory: which member scores a source, and what falls together."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from scoring.bins import MISSING
from scoring.model import Model, Part
from tests.models import SIZES, a_model
from tests.trees import random_tree


def test_a_source_never_seen_is_scored_by_the_fleet() -> None:
    model = a_model()
    assert model.member("a") is model.members["a"]
    assert model.member("never seen") is model.fleet


def test_derived_groups_are_those_of_the_table() -> None:
    start, nodes = a_model().derived_groups
    # head = out - in, and what out was one record before.
    assert start.tolist() == [0, 1, 3, 3, 3]
    assert nodes.tolist() == [4, 4, 5]


def with_edges(*edges: tuple[int, int]) -> Model:
    """Return the small model with other edges for its source: 4 is head, 5 is out before."""
    model = a_model()
    member = replace(model.members["a"], parts=(Part(random_tree(3, SIZES, list(edges))),))
    return replace(model, members={"a": member})


def test_what_is_derived_from_a_channel_is_no_witness_of_it() -> None:
    model = with_edges((0, 4), (1, 4), (2, 4), (1, 3))
    # Without in and head, out and power tell; without out, in and power through head, and pump.
    assert model.beside("a", 0) == ("out", "power")
    assert model.beside("a", 1) == ("pump", "in", "power")
    # Power has head itself, which is made of two others.
    assert model.beside("a", 2) == ("head",)
    assert with_edges((1, 5)).beside("a", 1) == ()
    assert a_model().beside("never seen", 3) == ("power",)


def test_bins_are_laid_out_once() -> None:
    member = a_model().fleet
    assert member.bin_table is member.bin_table
    values = np.full((1, len(member.bins)), np.nan)
    assert np.all(member.bin_table.rows(values) == MISSING)
