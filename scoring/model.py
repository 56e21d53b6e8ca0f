"""The learned artefact in memory: a model, its member for each source, their parts.

A member scores with a finite mixture of parts, each a tree of its own. Where state
channels choose a regime every part but the last is for one combination of their bins
(`key`), and the last (`key` None) covers all other combinations. A plain member has one
part.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scoring.bins import Bins, BinTable
from scoring.channels import ChannelTable
from scoring.delays import DELAYS, Delays
from scoring.derived import groups
from scoring.stillness import StillnessLimits
from scoring.tree import Tree

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Part:
    """One tree and when it holds.

    key: bins of the member's regime channels, or None for all combinations not named.
    log_share: ln of the part's share of records; for the part with key None it is less
        the part's own log probability of the combinations it covers, so that the whole
        stays a density.
    """

    tree: Tree
    key: tuple[int, ...] | None = None
    log_share: float = 0.0


@dataclass(frozen=True)
class Usual:
    """What is usual for a source, measured on records that the tables had not seen.

    median, high: nats, the 50 % and 99 % points of a full record's surprise.
    sustained: where the exponentially weighted mean of excess rests.
    channel_median: (n_instruments,) median of each channel's own surprise.
    channel_spread: (n_instruments,) its 99 % point less its median.
    rows: (m, n_nodes) uint8, some of those records as bins, gaps as they came.
    """

    median: float
    high: float
    sustained: float
    channel_median: Floats
    channel_spread: Floats
    rows: NDArray[np.uint8]


@dataclass(frozen=True)
class Member:
    """A model's part for one source, or for the fleet.

    bins: one a node, in the table's order.
    regime: nodes of the state channels that choose a part.
    tables: "own" or "shared", where the tables' shape comes from.
    about: figures for people (records, first and last time, held-out density ...).
    stillness: how long channels normally stay still or away; None = not learned.
    """

    source: str
    bins: tuple[Bins, ...]
    parts: tuple[Part, ...]
    usual: Usual
    regime: tuple[int, ...] = ()
    tables: str = "own"
    about: dict[str, Any] = field(default_factory=dict)
    stillness: StillnessLimits | None = None

    @cached_property
    def bin_table(self) -> BinTable:
        """The bins laid out for the kernel."""
        return BinTable.of(self.bins)


@dataclass(frozen=True)
class Levels:
    """From where an alert is raised, and how sustained is formed.

    record, sustained: levels on excess and on sustained, nats.
    cap: the most that one record adds to sustained before weighting, nats.
    tau_s: time constant of sustained, seconds; step_s: the usual interval.
    least_readings: with fewer readings a record is not judged.
    delays: with which they were set, and with which alerts are raised.
    """

    record: float
    sustained: float
    cap: float
    tau_s: float
    step_s: float
    least_readings: int
    delays: Delays = DELAYS


@dataclass(frozen=True)
class Model:
    """A channel table with a member per source, the fleet's member and the levels.

    name: the hash of the content, set by the artefact.
    about: figures for people; not part of the name.
    """

    table: ChannelTable
    members: dict[str, Member]
    fleet: Member
    levels: Levels
    name: str = ""
    about: dict[str, Any] = field(default_factory=dict)

    def member(self, source: str) -> Member:
        """Return the source's own member, or the fleet's for a source never seen."""
        return self.members.get(source, self.fleet)

    @cached_property
    def derived_groups(self) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Which nodes fall with each instrument (see scoring.derived.groups)."""
        return groups(self.table)

    def beside(self, source: str, instrument: int) -> tuple[str, ...]:
        """Return the names of the channels that tell what an instrument should read.

        Those that share an edge with it in any part; what is derived from it tells nothing
        without it, so in such a one's place stand its other neighbours.
        """
        start, nodes = self.derived_groups
        own = {instrument, *nodes[start[instrument] : start[instrument + 1]].tolist()}
        names, near = self.table.names, dict[str, None]()
        for part in self.member(source).parts:
            reached, seen = [instrument], {instrument}
            for node in reached:
                for other in part.tree.neighbours(node):
                    if other in own and other not in seen:
                        seen.add(other)
                        reached.append(other)
                    elif other not in own:
                        near[names[other]] = None
        return tuple(near)
