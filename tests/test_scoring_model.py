"""The model in memory: which member scores a source, and what falls together."""

from __future__ import annotations

import numpy as np

from scoring.bins import MISSING
from tests.models import a_model


def test_a_source_never_seen_is_scored_by_the_fleet() -> None:
    model = a_model()
    assert model.member("a") is model.members["a"]
    assert model.member("never seen") is model.fleet


def test_derived_groups_are_those_of_the_table() -> None:
    start, nodes = a_model().derived_groups
    # head = out - in, and what out was one record before.
    assert start.tolist() == [0, 1, 3, 3, 3]
    assert nodes.tolist() == [4, 4, 5]


def test_bins_are_laid_out_once() -> None:
    member = a_model().fleet
    assert member.bin_table is member.bin_table
    values = np.full((1, len(member.bins)), np.nan)
    assert np.all(member.bin_table.rows(values) == MISSING)
