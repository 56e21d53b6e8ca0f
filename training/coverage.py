"""How often expected intervals hold what was read, on held-out records.

Intervals are made as scoring makes them, by the member that did not see the record, for a
sample of records small enough to cost little beside learning.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows
from scoring.channels import ChannelTable
from scoring.derived import groups
from scoring.expected import shortest_interval
from scoring.kernels import belief_row
from scoring.model import Member
from scoring.tree import Tree, TreeArrays
from training.rows import hashed

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# So many intervals are tried for a source, at 20 to 50 microseconds each; of many channels
# fewer records, but at least MIN_RECORDS.
N_INTERVALS, MIN_RECORDS, MAX_RECORDS = 10_000, 100, 500


@dataclass(frozen=True)
class Coverage:
    """How expected intervals held, arrays (n_instruments,), all 0 for a state.

    n: held-out readings tried. inside: how many lay in their interval. n_open: intervals
    open on a side. width: middle width of the closed ones over the width of the channel's
    own usual range; NaN where none was closed.
    """

    n: Ints
    inside: Ints
    n_open: Ints
    width: Floats


class CoverageSample:
    """Keeps some held-out records of one source, and then tries their intervals."""

    def __init__(self, table: ChannelTable, n_records: int) -> None:
        n_instruments = len(table.instruments)
        wanted = min(max(N_INTERVALS // n_instruments, MIN_RECORDS), MAX_RECORDS)
        self._table = table
        self._share = wanted / max(n_records, 1)
        self._fold: list[Ints] = []
        self._values: list[Floats] = []

    def add(self, times_ns: Ints, fold: Ints, values: Floats) -> None:
        """Keep a share of records, chosen by a hash of their time."""
        take = hashed(times_ns) < self._share
        self._fold.append(fold[take])
        self._values.append(values[take])

    def coverage(self, members: list[Member]) -> Coverage:
        """Return how the intervals hold. members: one a fold, which did not see it."""
        fold = np.concatenate([np.zeros(0, np.int64), *self._fold])
        n_nodes = len(self._table.nodes)
        values = np.concatenate([np.zeros((0, n_nodes)), *self._values])
        low, high, middle = (np.full((len(values), n_nodes), np.nan) for _ in range(3))
        for k, member in enumerate(members):
            of = np.flatnonzero(fold == k)
            if len(of):
                low[of], high[of] = held_out_intervals(member, self._table, values[of])
                middle[of] = usual_widths(member, self._table)
        return _coverage(values, low, high, middle, len(self._table.instruments))


def _coverage(
    values: Floats, low: Floats, high: Floats, usual: Floats, n_instruments: int
) -> Coverage:
    tried = ~np.isnan(low)
    inside = tried & (values >= low) & (values <= high)
    width = (high - low) / usual
    closed = tried & np.isfinite(width)
    middle = np.array(
        [np.median(width[closed[:, i], i]) if closed[:, i].any() else np.nan
         for i in range(n_instruments)]
    )  # fmt: skip
    n, n_inside, n_open = (x.sum(axis=0)[:n_instruments] for x in (tried, inside, tried & ~closed))
    return Coverage(n, n_inside, n_open, middle)


def held_out_intervals(
    member: Member, table: ChannelTable, values: Floats
) -> tuple[Floats, Floats]:
    """Return low and high of each measurement's expected interval, (n, n_nodes) each.

    values and what is NaN: see `intervals_of`; rounded outward to the channels' resolutions.
    """
    resolutions = [channel.resolution or 0.0 for channel in table.instruments]
    low, high, _ = intervals_of(member, table, values, resolutions)
    return low, high


def intervals_of(
    member: Member, table: ChannelTable, values: Floats, resolutions: Sequence[float]
) -> tuple[Floats, Floats, Floats]:
    """Return low, high and middle of what the rest of each record lets expect, (n, n_nodes) each.

    values: (n, n_nodes) of records. resolutions: of the instruments, 0 for no rounding. NaN
    for states, for what is derived, for missing readings, and for records whose regime is
    not read.
    """
    rows = member.bin_table.rows(values)
    start, derived = groups(table)
    low, high, middle = (np.full(values.shape, np.nan) for _ in range(3))
    for tree, where in trees_that_hold(member, rows):
        for i, channel in enumerate(table.instruments):
            of = where[rows[where, i] != MISSING]
            if channel.is_state or not len(of):
                continue
            hidden = rows[of]
            hidden[:, i] = MISSING
            hidden[:, derived[start[i] : start[i + 1]]] = MISSING
            low[of, i], high[of, i], middle[of, i] = _intervals(
                tree.arrays, hidden, i, member.bins[i].borders, resolutions[i]
            )
    return low, high, middle


def usual_widths(member: Member, table: ChannelTable) -> Floats:
    """Return (n_nodes,) widths of the interval that holds 95 % of each channel by itself.

    NaN for states and what is derived, infinite where it is open.
    """
    widths = np.full(len(table.nodes), np.nan)
    for i, channel in enumerate(table.instruments):
        if not channel.is_state:
            marginal = np.exp(member.parts[-1].tree.log_marginals[i])
            resolution = channel.resolution or 0.0
            low, high, _ = shortest_interval(marginal, member.bins[i].borders, resolution)
            # A channel that never moves has no range to compare with.
            widths[i] = high - low if high > low else np.nan
    return widths


def trees_that_hold(member: Member, rows: BinRows) -> list[tuple[Tree, Ints]]:
    """Return each part's tree with the rows that it holds for, by their regime.

    Rows whose regime is not read are in none.
    """
    if len(member.parts) == 1:
        return [(member.parts[0].tree, np.arange(len(rows)))]
    codes = rows[:, list(member.regime)]
    free = ~(codes == MISSING).any(axis=1)
    found = []
    for part in member.parts:
        holds = free.copy()
        if part.key is not None:
            holds &= (codes == np.array(part.key, dtype=np.uint8)).all(axis=1)
        free &= ~holds
        found.append((part.tree, np.flatnonzero(holds)))
    return found


@njit(cache=True, nogil=True)
def _intervals(
    t: TreeArrays, hidden: BinRows, node: int, borders: Floats, resolution: float
) -> tuple[Floats, Floats, Floats]:
    n = hidden.shape[0]
    low, high, middle = np.empty(n), np.empty(n), np.empty(n)
    for r in range(n):
        belief = belief_row(t, hidden[r], node)[: borders.shape[0] + 1]
        low[r], high[r], middle[r] = shortest_interval(belief, borders, resolution)
    return low, high, middle
