"""Records of many sources in one pass of compiled code: bins, removal, suspect, interval.

A service is sent one or two records of each of many sources at a time, and for so few a
call into compiled code costs more than what it does. So a call takes runs, each the
records of one source, one after the other in the same arrays. Only members of one part
go this way; `scorer` scores the others beside it.
"""

from __future__ import annotations

from threading import local
from typing import Any, NamedTuple

import numpy as np
from numba import njit
from numba.typed import List
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows, fill_rows
from scoring.expected import shortest_interval
from scoring.kernels import believe, fill_removal, scratch
from scoring.model import Member
from scoring.tree import TreeArrays

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


class Plain(NamedTuple):
    """What the pass reads of a member of one part.

    borders, lasts, grid, cells, n_words: see BinTable. usual: (n_instruments,) median of each
    own surprise, nats; median: of a full record's surprise, nats.
    """

    tree: TreeArrays
    borders: Floats
    lasts: Floats
    grid: Floats
    cells: BinRows
    n_words: Ints
    usual: Floats
    median: float


class Outcome(NamedTuple):
    """What the pass fills in; all arrays (n,) but where a shape is said.

    rows: (n, n_nodes) bins. surprise, excess: nats; excess is that of records without gaps,
    NaN where not judged. own: (n, n_instruments) each own surprise, nats. suspect,
    suspect_surprise, low, high, best: as in Scores. gaps: (n_runs,) records with a gap.
    """

    rows: BinRows
    surprise: Floats
    excess: Floats
    own: Floats
    suspect: NDArray[np.int16]
    suspect_surprise: Floats
    low: Floats
    high: Floats
    best: Floats
    gaps: Ints

    def part(self, rows: slice) -> Outcome:
        """Return some of the records, to be filled in; `gaps` stays whole."""
        return Outcome._make([*(array[rows] for array in self[:-1]), self.gaps])


class Bench:
    """Members of one part laid out side by side, each once it is needed; one list a thread.

    A list that grows may not be read by another thread at that moment.
    """

    def __init__(self) -> None:
        self._own = local()

    def place(self, member: Member) -> int:
        """Return a member's number in `members`, -1 if it has several parts."""
        if len(member.parts) > 1:
            return -1
        places: dict[str, int] | None = getattr(self._own, "places", None)
        if places is None:
            places = self._own.places = {}
        found = places.get(member.source)
        if found is None:
            found = places[member.source] = len(places)
            table = member.bin_table
            plain = Plain(
                member.parts[0].tree.arrays, table.borders, table.lasts, table.grid, table.cells,
                table.n_words, np.asarray(member.usual.channel_median), float(member.usual.median),
            )  # fmt: skip
            if found:
                _append(self._own.members, plain)
            else:
                self._own.members = _list_of(plain)
        return found

    @property
    def members(self) -> Any:
        """The members that this thread has asked for, a compiled code's list of Plain."""
        return self._own.members


@njit(cache=True)
def _list_of(member: Plain) -> Any:
    members = List()
    members.append(member)
    return members


@njit(cache=True)
def _append(members: Any, member: Plain) -> None:
    members.append(member)


@njit(cache=True, nogil=True)
def usable_readings(
    values: Floats, low: Floats, high: Floats, usable: Bools, kept: Floats, n_usable: Ints
) -> None:
    """Fill in which readings are inside their span, the readings without the others, and how
    many each record has. values, usable, kept: (n, n_instruments)."""
    n, n_instruments = values.shape
    for r in range(n):
        n_usable[r] = 0
        for i in range(n_instruments):
            x = values[r, i]
            # False for NaN too.
            inside = low[i] <= x <= high[i]
            usable[r, i] = inside
            kept[r, i] = x if inside else np.nan
            n_usable[r] += inside


@njit(cache=True, nogil=True)
def score_runs(
    members: Any,
    at: Ints,
    start: Ints,
    nodes: Floats,
    judged: Bools,
    resolution: Floats,
    group_start: Ints,
    group_nodes: Ints,
    out: Outcome,
) -> None:
    """Fill in what can be said of every record by itself.

    at: (n_runs,) each run's member, -1 = leave the run's rows of `out` alone. start:
        (n_runs + 1,) where each run's rows begin. nodes: (n, n_nodes) readings with the
        derived channels, NaN = missing. resolution: (n_instruments,), 0 = unknown.
    """
    for k in range(at.shape[0]):
        if at[k] < 0:
            continue
        m, use = members[at[k]], slice(start[k], start[k + 1])
        rows, own, suspect = out.rows[use], out.own[use], out.suspect[use]
        fill_rows(nodes[use], m.borders, m.lasts, m.grid, m.cells, m.n_words, rows)
        fill_removal(m.tree, rows, group_start, group_nodes, out.surprise[use], own)
        fill_suspects(own, m.usual, suspect, out.suspect_surprise[use])
        fill_intervals(
            m.tree, rows, suspect, m.borders, resolution, group_start, group_nodes,
            out.low[use], out.high[use], out.best[use],
        )  # fmt: skip
        out.gaps[k] = 0
        for r in range(start[k], start[k + 1]):
            out.surprise[r] = -out.surprise[r]
            out.excess[r] = out.surprise[r] - m.median if judged[r] else np.nan
            for i in range(nodes.shape[1]):
                if out.rows[r, i] == MISSING:
                    out.gaps[k] += 1
                    break


@njit(cache=True, nogil=True)
def fill_suspects(own: Floats, usual: Floats, suspect: NDArray[np.int16], surprise: Floats) -> None:
    """Fill in the instrument furthest over its usual surprise, -1 if all are missing, and its
    surprise. The first of equals is taken."""
    for r in range(own.shape[0]):
        most = -np.inf
        suspect[r], surprise[r] = -1, np.nan
        for i in range(own.shape[1]):
            beyond = own[r, i] - usual[i]
            # A NaN is over nothing.
            if beyond > most or (suspect[r] < 0 and beyond == beyond):
                most = beyond
                suspect[r], surprise[r] = i, own[r, i]


@njit(cache=True, nogil=True)
def fill_intervals(
    t: TreeArrays,
    rows: BinRows,
    suspect: NDArray[np.int16],
    borders: Floats,
    resolution: Floats,
    group_start: Ints,
    group_nodes: Ints,
    low: Floats,
    high: Floats,
    best: Floats,
) -> None:
    """Fill in the expected interval of each record's suspect under one tree.

    borders: (n_nodes, width), see BinTable. A state has no borders and gets NaN.
    """
    hidden = np.empty(rows.shape[1], np.uint8)
    # Made once: room for a row costs as much as the row.
    s = scratch(t)
    for r in range(rows.shape[0]):
        i = int(suspect[r])
        if i < 0 or borders[i, 0] != borders[i, 0]:
            low[r] = high[r] = best[r] = np.nan
            continue
        n_borders = t.n_bins[i] - 1
        hidden[:] = rows[r]
        hidden[i] = MISSING
        for k in range(group_start[i], group_start[i + 1]):
            hidden[group_nodes[k]] = MISSING
        s.seen[:] = False
        believe(t, i, hidden, s)
        p = s.vec[i, : n_borders + 1]
        low[r], high[r], best[r] = shortest_interval(p, borders[i, :n_borders], resolution[i])
