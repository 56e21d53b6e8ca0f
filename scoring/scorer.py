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
from scoring.density import belief_of, removal_of
from scoring.derived import Carry, derive
from scoring.excess import ExcessScale
from scoring.expected import shortest_interval
from scoring.kernels import belief_row
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
        usable = ~((values < self._low) | (values > self._high) | np.isnan(values))
        values = np.where(usable, values, np.nan)
        nodes, carry = self._derive(times_ns, values, standing)
        rows = member.bin_table.rows(nodes)
        surprise, own = removal_of(member, rows, *self.model.derived_groups)
        n_usable = usable.sum(axis=1)
        judged = n_usable >= levels.least_readings
        excess = np.where(judged, self._scale(member).excess(rows, surprise), np.nan)
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
        suspect, low, high, best = self._suspects(member, rows, own)
        alert = np.where(judged & ~late & (sustained > levels.sustained), SUSTAINED_ALERT, NO_ALERT)
        alert = np.where(judged & (excess > levels.record), RECORD_ALERT, alert)
        column = np.maximum(suspect, 0)[:, None]
        scores = Scores(
            surprise=surprise,
            excess=excess,
            sustained=sustained,
            suspect=suspect,
            suspect_surprise=np.take_along_axis(own, column, axis=1)[:, 0],
            expected_low=low,
            expected_high=high,
            expected_best=best,
            alert=alert.astype(np.uint8),
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
        newest = np.maximum.accumulate(times_ns)
        last_ns = standing.time_ns if standing else -1
        on_time = times_ns > np.maximum(np.concatenate([[last_ns], newest[:-1]]), last_ns)
        if on_time.all() or not self.model.table.derived:
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

    def _suspects(
        self, member: Member, rows: BinRows, own: Floats
    ) -> tuple[NDArray[np.int16], Floats, Floats, Floats]:
        """Return each record's suspect and what it should have read."""
        beyond = own - member.usual.channel_median
        none = np.isnan(own).all(axis=1)
        beyond[none] = 0.0
        suspect = np.where(none, -1, np.nanargmax(beyond, axis=1)).astype(np.int16)
        low, high, best = (np.full(len(rows), np.nan) for _ in range(3))
        for i in np.unique(suspect[suspect >= 0]).tolist():
            where = np.flatnonzero(suspect == i)
            if self.instruments[i].is_state:
                continue
            hidden = self._without(rows[where], i)
            borders = member.bins[i].borders
            if len(member.parts) == 1:
                found = _intervals(
                    member.parts[0].tree.arrays, hidden, i, borders, self._resolution[i]
                )
                low[where], high[where], best[where] = found
                continue
            for r, row in zip(where, hidden, strict=True):
                belief = belief_of(member, row, i)
                low[r], high[r], best[r] = shortest_interval(belief, borders, self._resolution[i])
        return suspect, low, high, best


@njit(cache=True, nogil=True)
def _intervals(
    t: TreeArrays, hidden: BinRows, node: int, borders: Floats, resolution: float
) -> tuple[Floats, Floats, Floats]:
    n = hidden.shape[0]
    low, high, best = np.empty(n), np.empty(n), np.empty(n)
    for r in range(n):
        p = belief_row(t, hidden[r], node)[: borders.shape[0] + 1]
        low[r], high[r], best[r] = shortest_interval(p, borders, resolution)
    return low, high, best
