"""A record's way from readings to score, alike online and offline.

readings -> derived -> bins -> surprise and removal -> excess -> sustained -> alert. One
`Scorer` serves one model, from any number of threads; the caller keeps the standings.
"""

from __future__ import annotations

from dataclasses import dataclass
from threading import Lock

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows
from scoring.channels import Channel
from scoring.density import belief_of, removal_of, rows_by_part
from scoring.derived import Carry, derive
from scoring.excess import ExcessScale
from scoring.expected import shortest_interval
from scoring.kernels import believe, scratch
from scoring.model import Member, Model
from scoring.standing import Standing
from scoring.sustained import sustain
from scoring.tree import TreeArrays

Floats = NDArray[np.float64]

# Codes of Scores.alert.
NO_ALERT, RECORD_ALERT, SUSTAINED_ALERT = 0, 1, 2
ALERT_WORDS = ("", "record", "sustained")


@dataclass(frozen=True, slots=True)
class Expected:
    """What one channel should have read given the rest of its record.

    low, high: the shortest interval that holds 95 % of the belief, in the channel's unit,
    infinite on an open side; best: the middle of the belief. For a state `words` holds the
    probability of each of its words and the three are NaN.
    """

    low: float
    high: float
    best: float
    words: dict[str, float] | None = None


@dataclass(frozen=True, slots=True)
class Scores:
    """Scores of n records, arrays of shape (n,).

    surprise, excess, sustained: nats; excess is NaN where the record is not judged.
    suspect: number of the instrument whose removal helps most, -1 = none.
    suspect_surprise: nats. expected_low, expected_high, expected_best: of the suspect, in
        its unit; infinite on an open side, NaN for a state or no suspect.
    alert: see ALERT_WORDS. missing: instruments without a usable reading.
    judged, late: see Levels.least_readings and scoring.sustained.
    usable: (n, n_instruments) readings that took part.
    channel_surprise: (n, n_instruments) nats, NaN = missing.
    rows: (n, n_nodes) uint8 bins.
    """

    surprise: Floats
    excess: Floats
    sustained: Floats
    suspect: NDArray[np.int16]
    suspect_surprise: Floats
    expected_low: Floats
    expected_high: Floats
    expected_best: Floats
    alert: NDArray[np.uint8]
    missing: NDArray[np.int16]
    judged: NDArray[np.bool_]
    late: NDArray[np.bool_]
    usable: NDArray[np.bool_]
    channel_surprise: Floats
    rows: BinRows


class Scorer:
    """Scores records under one model."""

    def __init__(self, model: Model) -> None:
        self.model = model
        self.instruments: tuple[Channel, ...] = model.table.instruments
        self._scales: dict[str, ExcessScale] = {}
        self._lock = Lock()
        self._low = np.array([c.span[0] if c.span else -np.inf for c in self.instruments])
        self._high = np.array([c.span[1] if c.span else np.inf for c in self.instruments])
        self._resolution = np.array([c.resolution or 0.0 for c in self.instruments])

    def warm(self) -> None:
        """Compile or load every kernel, so that the first record is as fast as the next."""
        values = np.full((2, len(self.instruments)), np.nan)
        for column in range(len(self.instruments)):
            borders = self.model.fleet.bins[column].borders
            values[0, column] = borders[len(borders) // 2] if len(borders) else 0.0
            values[1, column] = values[0, column] if column else np.nan
        self.score("", np.array([0, 1]), values, None)

    def score(
        self, source: str, times_ns: NDArray[np.int64], values: Floats, standing: Standing | None
    ) -> tuple[Scores, Standing]:
        """Return the scores of one source's records and its new standing.

        times_ns: (n,) n >= 1, as they came; a record not after the last one is late and
            leaves the standing alone.
        values: (n, n_instruments), NaN = missing or of bad quality; a reading outside its
            span counts as missing.
        A standing of another model is started anew.
        """
        member, levels = self.model.member(source), self.model.levels
        if standing is not None and standing.model != self.model.name:
            standing = None
        usable, values, n_usable = _usable(values, self._low, self._high)
        nodes, carry = self._derive(times_ns, values, standing)
        rows = member.bin_table.rows(nodes)
        surprise, own = removal_of(member, rows, *self.model.derived_groups)
        judged = n_usable >= levels.least_readings
        excess = self._scale(member).excess(rows, surprise)
        excess[~judged] = np.nan
        sustained, late, last_ns, value = sustain(
            times_ns,
            excess,
            standing.time_ns if standing else -1,
            standing.sustained if standing else 0.0,
            member.usual.sustained,
            levels.tau_s,
            levels.step_s,
            levels.cap,
        )
        alert = _alerts(excess, sustained, late, levels.record, levels.sustained)
        suspect, own_surprise = _suspects(own, member.usual.channel_median)
        low, high, best = self._expected_rows(member, rows, suspect)
        scores = Scores(
            surprise=surprise,
            excess=excess,
            sustained=sustained,
            suspect=suspect,
            suspect_surprise=own_surprise,
            expected_low=low,
            expected_high=high,
            expected_best=best,
            alert=alert,
            missing=(len(self.instruments) - n_usable).astype(np.int16),
            judged=judged,
            late=late,
            usable=usable,
            channel_surprise=own,
            rows=rows,
        )
        return scores, Standing(self.model.name, int(last_ns), float(value), carry)

    def expected(self, source: str, row: BinRows, instrument: int) -> Expected:
        """Return what one instrument should have read beside the rest of `row`.

        row: (n_nodes,) bins of a scored record (Scores.rows); the instrument and all that
        is derived from it are left out first.
        """
        member = self.model.member(source)
        belief = belief_of(member, self._without(row[None, :], instrument)[0], instrument)
        channel = self.instruments[instrument]
        if channel.is_state:
            words = dict(zip(channel.words, belief.tolist(), strict=False))
            return Expected(np.nan, np.nan, np.nan, words)
        borders = member.bins[instrument].borders
        return Expected(*shortest_interval(belief, borders, self._resolution[instrument]))

    def _derive(
        self, times_ns: NDArray[np.int64], values: Floats, standing: Standing | None
    ) -> tuple[Floats, Carry | None]:
        """Return all nodes' values; late records neither see nor become the last record."""
        carry = standing.carry if standing else None
        if not self.model.table.derived:
            return values, carry
        newest = np.maximum.accumulate(times_ns)
        last_ns = standing.time_ns if standing else -1
        on_time = times_ns > np.maximum(np.concatenate([[last_ns], newest[:-1]]), last_ns)
        if on_time.all():
            return derive(self.model.table, times_ns, values, carry)
        nodes = np.empty((len(values), len(self.model.table.nodes)))
        nodes[on_time], carry = derive(self.model.table, times_ns[on_time], values[on_time], carry)
        for r in np.flatnonzero(~on_time):
            nodes[r : r + 1], _ = derive(
                self.model.table, times_ns[r : r + 1], values[r : r + 1], None
            )
        return nodes, carry

    def _scale(self, member: Member) -> ExcessScale:
        with self._lock:
            if member.source not in self._scales:
                self._scales[member.source] = ExcessScale(member)
            return self._scales[member.source]

    def _without(self, rows: BinRows, instrument: int) -> BinRows:
        start, nodes = self.model.derived_groups
        hidden = rows.copy()
        hidden[:, instrument] = MISSING
        hidden[:, nodes[start[instrument] : start[instrument + 1]]] = MISSING
        return hidden

    def _expected_rows(
        self, member: Member, rows: BinRows, suspect: NDArray[np.int16]
    ) -> tuple[Floats, Floats, Floats]:
        """Return what each record's suspect should have read; NaN for a state or none."""
        borders, groups = member.bin_table.borders, self.model.derived_groups
        low, high, best = (np.full(len(rows), np.nan) for _ in range(3))
        left = np.ones(len(rows), dtype=np.bool_)
        for k, at in rows_by_part(member, rows):
            arrays = member.parts[k].tree.arrays
            found = _intervals(arrays, rows[at], suspect[at], borders, self._resolution, *groups)
            low[at], high[at], best[at] = found
            left[at] = False
        for r in np.flatnonzero(left).tolist():
            i = int(suspect[r])
            if i >= 0 and not self.instruments[i].is_state:
                belief = belief_of(member, self._without(rows[r : r + 1], i)[0], i)
                own = member.bins[i].borders
                low[r], high[r], best[r] = shortest_interval(belief, own, self._resolution[i])
        return low, high, best


@njit(cache=True, nogil=True)
def _usable(
    values: Floats, low: Floats, high: Floats
) -> tuple[NDArray[np.bool_], Floats, NDArray[np.int64]]:
    """Return which readings are inside their span, the readings without the others, and how
    many each record has. Loops, because a record alone pays for every array operation."""
    n, n_instruments = values.shape
    usable = np.empty((n, n_instruments), np.bool_)
    kept = np.empty((n, n_instruments))
    n_usable = np.zeros(n, np.int64)
    for r in range(n):
        for i in range(n_instruments):
            x = values[r, i]
            # False for NaN too.
            inside = low[i] <= x <= high[i]
            usable[r, i] = inside
            kept[r, i] = x if inside else np.nan
            n_usable[r] += inside
    return usable, kept, n_usable


@njit(cache=True, nogil=True)
def _alerts(
    excess: Floats, sustained: Floats, late: NDArray[np.bool_], record: float, level: float
) -> NDArray[np.uint8]:
    """Return the alert of each record; one that is not judged (excess NaN) raises none."""
    alert = np.zeros(excess.shape[0], np.uint8)
    for r in range(excess.shape[0]):
        if excess[r] > record:
            alert[r] = RECORD_ALERT
        elif excess[r] == excess[r] and not late[r] and sustained[r] > level:
            alert[r] = SUSTAINED_ALERT
    return alert


@njit(cache=True, nogil=True)
def _suspects(own: Floats, usual: Floats) -> tuple[NDArray[np.int16], Floats]:
    """Return the instrument furthest over its usual surprise, -1 if all are missing, and its
    surprise. The first of equals is taken."""
    n = own.shape[0]
    suspect, surprise = np.full(n, -1, np.int16), np.full(n, np.nan)
    for r in range(n):
        most = -np.inf
        for i in range(own.shape[1]):
            beyond = own[r, i] - usual[i]
            # A NaN is over nothing.
            if beyond > most or (suspect[r] < 0 and beyond == beyond):
                most = beyond
                suspect[r], surprise[r] = i, own[r, i]
    return suspect, surprise


@njit(cache=True, nogil=True)
def _intervals(
    t: TreeArrays,
    rows: BinRows,
    suspect: NDArray[np.int16],
    borders: Floats,
    resolution: Floats,
    group_start: NDArray[np.int64],
    group_nodes: NDArray[np.int64],
) -> tuple[Floats, Floats, Floats]:
    """Return the expected interval of each record's suspect under one tree.

    borders: (n_nodes, width), see BinTable. A state has no borders and gets NaN.
    """
    n = rows.shape[0]
    low, high, best = np.full(n, np.nan), np.full(n, np.nan), np.full(n, np.nan)
    hidden = np.empty(rows.shape[1], np.uint8)
    # Made once: room for a row costs as much as the row.
    s = scratch(t)
    for r in range(n):
        i = int(suspect[r])
        if i < 0 or borders[i, 0] != borders[i, 0]:
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
    return low, high, best
