"""A small model made by hand: four instruments, two derived channels, two members."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scoring.bins import Bins
from scoring.channels import ChannelTable, parse_channels
from scoring.density import removal_of, surprise_of
from scoring.derived import groups
from scoring.model import Levels, Member, Model, Part, Usual
from scoring.tree import Tree
from tests.trees import random_member, random_tree, sample_rows

STEP_S = 10.0
SIZES = [7, 7, 6, 3, 6, 7]
EDGES = [(0, 1), (0, 4), (1, 2), (1, 5), (2, 3)]


def a_channel_table(**more: Any) -> ChannelTable:
    """Return in, out, power, pump, and head = out - in, out before."""
    data = {
        "step_s": STEP_S,
        "channel": [
            {"name": "in", "unit": "bar", "span": [-50, 50], "resolution": 0.25},
            {"name": "out", "unit": "bar"},
            {"name": "power", "unit": "kW", "span": [0, 100]},
            {"name": "pump", "kind": "state", "words": ["running", "stopped"]},
        ],
        "derived": [
            {"name": "head", "operation": "difference", "of": ["out", "in"]},
            {"name": "out before", "operation": "previous", "of": ["out"]},
        ],
    }
    return parse_channels(data | more, "test")


def usual_from(tree: Tree, member: Member, table: ChannelTable, seed: int) -> Usual:
    """Return what is usual for records drawn from the tree itself."""
    rows = sample_rows(np.random.default_rng(seed), tree, 1000)
    surprise, own = removal_of(member, rows, *groups(table))
    middle = np.median(own, axis=0)
    return Usual(
        float(np.median(surprise)),
        float(np.quantile(surprise, 0.99)),
        0.1,
        middle,
        np.maximum(np.quantile(own, 0.99, axis=0) - middle, 1e-3),
        rows[:400],
    )


def a_member(source: str, seed: int, table: ChannelTable) -> Member:
    """Return a member with one tree over the table's nodes."""
    tree = random_tree(seed, SIZES, EDGES, rare=1e-6)
    bins = tuple(
        Bins(np.zeros(0), 2) if k == 3 else Bins(np.arange(1.0, n) * 4 + seed % 3)
        for k, n in enumerate(SIZES)
    )
    bare = random_member(seed, SIZES, states=(3,))
    member = replace(bare, source=source, bins=bins, parts=(Part(tree),))
    return replace(member, usual=usual_from(tree, member, table, seed))


def a_model(**more: Any) -> Model:
    """Return a model of source `a` and the fleet."""
    table = a_channel_table(**more)
    levels = Levels(
        record=12.0, sustained=3.0, cap=25.0, tau_s=150.0, step_s=STEP_S, least_readings=2
    )
    own = replace(a_member("a", 1, table), about={"n_records": 1000})
    return Model(table, {"a": own}, a_member("", 2, table), levels, "0123456789abcdef", {"n": 1})


def a_regime_model() -> Model:
    """Return the same with a tree for `pump = running` and one for the rest."""
    model = a_model()
    bare = random_member(5, SIZES, regime=(3,), keys=[(0,)], states=(3,))
    member = replace(bare, bins=model.fleet.bins)
    rows = sample_rows(np.random.default_rng(8), member.parts[0].tree, 500)
    surprise = surprise_of(member, rows)
    usual = replace(
        model.fleet.usual,
        median=float(np.median(surprise)),
        high=float(np.quantile(surprise, 0.99)),
        rows=rows,
    )
    return replace(model, members={"a": replace(member, usual=usual)})


def some_records(
    seed: int, n: int, gaps: float = 0.1
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Return times, a few out of order or after a gap, and readings with gaps and glitches."""
    rng = np.random.default_rng(seed)
    steps = rng.choice([10, 10, 10, 10, 10, 11, 60, 0, -15], n)
    times_ns = 1_700_000_000_000_000_000 + np.cumsum(steps).astype(np.int64) * 1_000_000_000
    values = rng.normal(14.0, 8.0, (n, 4))
    values[:, 3] = rng.integers(0, 3, n)
    values[rng.random(n) < 0.1, 0] = 60.0
    values[rng.random(values.shape) < gaps] = np.nan
    return times_ns, values
