"""Records of many sources in one pass of compiled code: bins, removal, suspect, interval.

A service is sent one or two records of each of many sources at a time, and for so few a
call into compiled code costs more than what it does. So a call takes runs, each the
records of one source, one after the other in the same arrays. Records of which a regime
channel is missing do not go this way: which part holds is open, and `scorer` mixes them.
"""

from __future__ import annotations

import math
from threading import local
from typing import Any, NamedTuple

import numpy as np
from numba import njit
from numba.typed import List
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows, fill_rows
from scoring.expected import shortest_interval
from scoring.kernels import Scratch, believe, evidence_row, fill_removal, scratch
from scoring.model import Member
from scoring.tree import TreeArrays

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


class Laid(NamedTuple):
    """What the pass reads of one part of a member; its other parts follow it in the list.

    borders, lasts, grid, cells, n_words: see BinTable. usual: (n_instruments,) median of each
    own surprise, nats; median: of a full record's surprise, nats. regime: (n_regime,) nodes
    that choose a part. keys: (n_parts - 1, n_regime) bins for which each part holds, the last
    one for all that are not named. log_share: see Part.
    """

    tree: TreeArrays
    borders: Floats
    lasts: Floats
    grid: Floats
    cells: BinRows
    n_words: Ints
    usual: Floats
    median: float
    regime: Ints
    keys: BinRows
    log_share: float


class Outcome(NamedTuple):
    """What the pass fills in; all arrays (n,) but where a shape is said.

    rows: (n, n_nodes) bins. surprise, excess: nats; excess is that of records without gaps,
    NaN where not judged. own: (n, n_instruments) each own surprise, nats. suspect,
    suspect_surprise, low, high, best: as in Scores. gaps: (n_runs,) records with a gap.
    Of a record that is left out, surprise is NaN and all after it in this list is open.
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

    @classmethod
    def room(cls, n: int, n_instruments: int, n_nodes: int, n_runs: int) -> Outcome:
        """Return arrays to be filled in."""
        surprise, excess, own_surprise, low, high, best = np.empty((6, n))
        return cls(
            np.empty((n, n_nodes), np.uint8), surprise, excess, np.empty((n, n_instruments)),
            np.empty(n, np.int16), own_surprise, low, high, best, np.empty(n_runs, np.int64),
        )  # fmt: skip


class Bench:
    """Members laid out side by side, each once it is needed; one list a thread.

    A list that grows may not be read by another thread at that moment.
    group_start: see scoring.derived.groups.
    """

    def __init__(self, group_start: Ints) -> None:
        self._group_start = group_start
        self._own = local()

    def place(self, member: Member) -> int:
        """Return the number of a member's first part in `parts`, -1 if it does not go there.

        It does not where something is derived from a regime channel: without that channel
        what is derived is missing as well, and the parts are to be mixed.
        """
        places: dict[str, int] | None = getattr(self._own, "places", None)
        if places is None:
            places = self._own.places = {}
        found = places.get(member.source)
        if found is None:
            found = places[member.source] = self._lay_out(member)
        return found

    def _lay_out(self, member: Member) -> int:
        start = self._group_start
        if any(start[i + 1] > start[i] for i in member.regime):
            return -1
        table, usual, regime = member.bin_table, member.usual, list(member.regime)
        named = [part.key for part in member.parts if part.key is not None]
        keys = np.array(named, dtype=np.uint8).reshape(len(named), len(regime))
        for part in member.parts:
            laid = Laid(
                part.tree.arrays, table.borders, table.lasts, table.grid, table.cells,
                table.n_words, np.asarray(usual.channel_median), float(usual.median),
                np.array(regime, dtype=np.int64), keys, float(part.log_share),
            )  # fmt: skip
            if hasattr(self._own, "parts"):
                _append(self._own.parts, laid)
            else:
                self._own.parts = _list_of(laid)
        return len(self._own.parts) - len(member.parts)

    @property
    def parts(self) -> Any:
        """What this thread has asked for, a compiled code's list of Laid."""
        return self._own.parts


@njit(cache=True)
def _list_of(part: Laid) -> Any:
    parts = List()
    parts.append(part)
    return parts


@njit(cache=True)
def _append(parts: Any, part: Laid) -> None:
    parts.append(part)


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
def _holds(keys: BinRows, regime: Ints, row: BinRows) -> int:
    """Return which part of a member holds for a row of bins, -1 if that is open."""
    for i in regime:
        if row[i] == MISSING:
            return -1
    for p in range(keys.shape[0]):
        fits = True
        for k in range(regime.shape[0]):
            fits &= row[regime[k]] == keys[p, k]
        if fits:
            return p
    return int(keys.shape[0])


@njit(cache=True, nogil=True)
def _other_regimes(m: Laid, p: int, held: Ints, row: BinRows, s: Scratch, logs: Floats) -> None:
    """Put ln p of a row with another bin of a regime channel into logs, by channel and bin,
    where part p holds then. held: the channels' first places in logs."""
    for k in range(m.regime.shape[0]):
        i = m.regime[k]
        own = row[i]
        for b in range(m.tree.n_bins[i]):
            row[i] = b
            if b != own and _holds(m.keys, m.regime, row) == p:
                logs[held[k] + b] = evidence_row(m.tree, row, s) + m.log_share
        row[i] = own


@njit(cache=True, nogil=True)
def _log_sum(logs: Floats) -> float:
    most, total = np.max(logs), 0.0
    for x in logs:
        total += math.exp(x - most)
    return float(most + math.log(total))


@njit(cache=True, nogil=True)
def _score_regimes(
    parts: Any,
    first: int,
    use: slice,
    resolution: Floats,
    group_start: Ints,
    group_nodes: Ints,
    out: Outcome,
) -> None:
    """Fill in what can be said of a run's rows under a member of several parts.

    A regime channel is removed by trying each of its bins, whichever part holds then.
    """
    m = parts[first]
    rows, n_parts, regime = out.rows[use], m.keys.shape[0] + 1, m.regime
    surprise, own, suspect = out.surprise[use], out.own[use], out.suspect[use]
    n = rows.shape[0]
    held = np.zeros(regime.shape[0] + 1, np.int64)
    for k in range(regime.shape[0]):
        held[k + 1] = held[k] + m.tree.n_bins[regime[k]]
    holds, row, logs = (
        np.empty(n, np.int64),
        np.empty(rows.shape[1], np.uint8),
        np.empty((n, held[-1])),
    )
    for r in range(n):
        holds[r] = _holds(m.keys, regime, rows[r])
        surprise[r] = np.nan
    for p in range(n_parts):
        part = parts[first + p]
        at, s = np.flatnonzero(holds == p), scratch(part.tree)
        if at.shape[0]:
            evidence, alone = np.empty(at.shape[0]), np.empty((at.shape[0], own.shape[1]))
            fill_removal(part.tree, rows[at], group_start, group_nodes, evidence, alone)
            for j in range(at.shape[0]):
                surprise[at[j]] = -evidence[j] - part.log_share
                own[at[j]] = alone[j]
        for r in range(n):
            if holds[r] >= 0:
                row[:] = rows[r]
                _other_regimes(part, p, held, row, s, logs[r])
    for r in range(n):
        if holds[r] >= 0:
            for k in range(regime.shape[0]):
                i = regime[k]
                logs[r, held[k] + rows[r, i]] = -surprise[r]
                own[r, i] = surprise[r] + _log_sum(logs[r, held[k] : held[k + 1]])
    fill_suspects(own, m.usual, suspect, out.suspect_surprise[use])
    for p in range(n_parts):
        at = np.flatnonzero(holds == p)
        if at.shape[0]:
            part, found = parts[first + p], np.empty((3, at.shape[0]))
            fill_intervals(
                part.tree, rows[at], suspect[at], m.borders, resolution, group_start,
                group_nodes, found[0], found[1], found[2],
            )  # fmt: skip
            out.low[use][at], out.high[use][at], out.best[use][at] = found[0], found[1], found[2]


@njit(cache=True, nogil=True)
def score_runs(
    parts: Any,
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

    at: (n_runs,) each run's member by Bench.place; runs with -1 are left alone. start:
        (n_runs + 1,) where each run's rows begin. nodes: (n, n_nodes) readings with the
        derived channels, NaN = missing. resolution: (n_instruments,), 0 = unknown.
    """
    for k in range(at.shape[0]):
        if at[k] < 0:
            continue
        m, use = parts[at[k]], slice(start[k], start[k + 1])
        rows, own, suspect = out.rows[use], out.own[use], out.suspect[use]
        fill_rows(nodes[use], m.borders, m.lasts, m.grid, m.cells, m.n_words, rows)
        if m.keys.shape[0]:
            _score_regimes(parts, at[k], use, resolution, group_start, group_nodes, out)
        else:
            fill_removal(m.tree, rows, group_start, group_nodes, out.surprise[use], own)
            for r in range(start[k], start[k + 1]):
                out.surprise[r] = -out.surprise[r]
            fill_suspects(own, m.usual, suspect, out.suspect_surprise[use])
            fill_intervals(
                m.tree, rows, suspect, m.borders, resolution, group_start, group_nodes,
                out.low[use], out.high[use], out.best[use],
            )  # fmt: skip
        out.gaps[k] = 0
        for r in range(start[k], start[k + 1]):
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
