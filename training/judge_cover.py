"""What a new model still covers of what the one in use covers: sources, channels, spans, tree."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scoring.bins import MISSING
from scoring.model import Member, Model
from scoring.tree import Tree
from training.judge_density import shared_instruments

Floats = NDArray[np.float64]

# The range that counts as covered lies between these shares of a channel's own distribution.
_RANGE = (0.01, 0.99)


@dataclass(frozen=True, slots=True)
class Covered:
    """How much of one channel of one source the new model knows, as shares of before."""

    source: str
    channel: str
    share: float


@dataclass(frozen=True, slots=True)
class EdgeChange:
    """An edge that one of two trees has. nats: on it. source: "" for the fleet's tree."""

    source: str
    left: str
    right: str
    nats: float
    gained: bool


@dataclass(frozen=True)
class TreeChange:
    """How the trees of all sources changed. share: of the old nats that were on lost edges."""

    share: float
    changes: tuple[EdgeChange, ...]


def both_own(new: Model, old: Model) -> list[str]:
    """Return the sources with a member of their own in both."""
    return sorted(set(new.members) & set(old.members))


def readings_covered(new: Model, old: Model, sources: Iterable[str]) -> list[Covered]:
    """Return the share of readings of each channel against the share that the old model had."""
    found = []
    for source in sources:
        mine, theirs = _present(new.members[source]), _present(old.members[source])
        for a, b in shared_instruments(new, old):
            if theirs[b] > 0:
                name = new.table.instruments[a].name
                found.append(Covered(source, name, min(float(mine[a] / theirs[b]), 1.0)))
    return found


def _present(member: Member) -> Floats:
    rows = member.usual.rows
    return np.asarray((rows != MISSING).mean(axis=0) if len(rows) else np.zeros(rows.shape[1]))


def spans_covered(new: Model, old: Model, sources: Iterable[str]) -> list[Covered]:
    """Return how much of each measurement's old range lies within its new one."""
    found = []
    for source in sources:
        for a, b in shared_instruments(new, old):
            channel = new.table.instruments[a]
            before = _range(old.members[source], b)
            if channel.is_state or before is None:
                continue
            low, high = before
            # A range of a few steps of the instrument is no range to lose.
            if high - low <= 10.0 * (channel.resolution or 0.0):
                continue
            now = _range(new.members[source], a)
            inside = 0.0 if now is None else min(now[1], high) - max(now[0], low)
            found.append(Covered(source, channel.name, max(0.0, inside) / (high - low)))
    return found


def _range(member: Member, node: int) -> tuple[float, float] | None:
    """Return the range between two shares of a node's distribution, None without one."""
    bins = member.bins[node]
    if bins.n_words or len(bins.borders) < 2:
        return None
    upto = np.cumsum(np.exp(member.parts[-1].tree.log_marginals[node]))[:-1]
    low, high = np.interp(_RANGE, upto, bins.borders)
    return (float(low), float(high)) if high > low else None


def tree_change(new: Model, old: Model, sources: Iterable[str]) -> TreeChange:
    """Return edges gained and lost, over each source's tree for all its records."""
    changes: list[EdgeChange] = []
    total = lost = 0.0
    trees = [(s, new.members[s], old.members[s]) for s in sources] or [("", new.fleet, old.fleet)]
    known = {name for name in new.table.names if name in old.table.names}
    for source, mine, theirs in trees:
        here = _edges(mine.parts[-1].tree, new.table.names)
        there = _edges(theirs.parts[-1].tree, old.table.names)
        for edge in sorted(set(here) | set(there)):
            nats = there.get(edge, here.get(edge, 0.0))
            # What a removed channel took with it is the site's decision.
            if edge in there and set(edge) <= known:
                total += nats
            if (edge in here) == (edge in there):
                continue
            changes.append(EdgeChange(source, edge[0], edge[1], nats, edge in here))
            if edge not in here and set(edge) <= known:
                lost += nats
    return TreeChange(lost / total if total > 0 else 0.0, tuple(changes))


def _edges(tree: Tree, names: tuple[str, ...]) -> dict[tuple[str, str], float]:
    found = {}
    for (a, b), nats in zip(tree.edges.tolist(), tree.nats.tolist(), strict=True):
        left, right = sorted((names[a], names[b]))
        found[left, right] = max(float(nats), 0.0)
    return found
