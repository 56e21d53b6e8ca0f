"""A record's way from readings to score, alike online and offline.

readings -> derived -> bins -> surprise and removal -> excess -> sustained -> alert. One
`Scorer` serves one model, from any number of threads; the caller keeps the standings.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from threading import Lock
from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows
from scoring.channels import Channel
from scoring.density import belief_of, removal_of, rows_by_part
from scoring.derived import Carry, derive, derive_runs
from scoring.excess import ExcessScale
from scoring.expected import shortest_interval
from scoring.model import Member, Model
from scoring.runs import (
    Bench,
    Outcome,
    fill_intervals,
    fill_suspects,
    score_runs,
    usable_readings,
)
from scoring.standing import Standing
from scoring.sustained import sustain_runs

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


class Scores(NamedTuple):
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

    def part(self, rows: slice) -> Scores:
        """Return the scores of some of the records."""
        return Scores._make(array[rows] for array in self)


class Scorer:
    """Scores records under one model."""

    def __init__(self, model: Model) -> None:
        self.model = model
        self.instruments: tuple[Channel, ...] = model.table.instruments
        self._scales: dict[str, ExcessScale] = {}
        self._lock = Lock()
        self._bench = Bench(model.derived_groups[0])
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
        """Return the scores of one source's records and its new standing; see `score_runs`."""
        start = np.array([0, len(times_ns)])
        scores, standings = self.score_runs([source], start, times_ns, values, [standing])
        return scores, standings[0]

    def score_runs(
        self,
        sources: Sequence[str],
        start: NDArray[np.int64],
        times_ns: NDArray[np.int64],
        values: Floats,
        standings: Sequence[Standing | None],
    ) -> tuple[Scores, list[Standing]]:
        """Return the scores of several sources' records and each one's new standing.

        sources: (n_runs,) no source twice. start: (n_runs + 1,) where each source's rows
            begin; none is empty.
        times_ns: (n,) as they came; a record not after its source's last one is late and
            leaves the standing alone.
        values: (n, n_instruments), NaN = missing or of bad quality; a reading outside its
            span counts as missing.
        standings: (n_runs,) before; one of another model is started anew.
        """
        levels, name, n = self.model.levels, self.model.name, len(times_ns)
        members = [self.model.member(source) for source in sources]
        before = [one if one is not None and one.model == name else None for one in standings]
        usable, kept = np.empty(values.shape, np.bool_), np.empty(values.shape)
        n_usable = np.empty(n, np.int64)
        usable_readings(values, self._low, self._high, usable, kept, n_usable)
        judged = n_usable >= levels.least_readings
        nodes, carries = self._derive_runs(start, times_ns, kept, before)
        out = self._score_each(members, start, nodes, judged)
        last_ns = np.array([one.time_ns if one else -1 for one in before])
        value = np.array([one.sustained if one else 0.0 for one in before])
        usual = np.array([member.usual.sustained for member in members])
        sustained, late = np.empty(n), np.empty(n, np.bool_)
        sustain_runs(
            times_ns, out.excess, start, last_ns, value, usual, levels.tau_s, levels.step_s,
            levels.cap, sustained, late,
        )  # fmt: skip
        scores = Scores(
            surprise=out.surprise,
            excess=out.excess,
            sustained=sustained,
            suspect=out.suspect,
            suspect_surprise=out.suspect_surprise,
            expected_low=out.low,
            expected_high=out.high,
            expected_best=out.best,
            alert=_alerts(out.excess, sustained, late, levels.record, levels.sustained),
            missing=(values.shape[1] - n_usable).astype(np.int16),
            judged=judged,
            late=late,
            usable=usable,
            channel_surprise=out.own,
            rows=out.rows,
        )
        after = zip(last_ns.tolist(), value.tolist(), carries, strict=True)
        return scores, [Standing(name, *one) for one in after]

    def _score_each(
        self,
        members: Sequence[Member],
        start: NDArray[np.int64],
        nodes: Floats,
        judged: NDArray[np.bool_],
    ) -> Outcome:
        """Return what can be said of every record by itself; judged: (n,)."""
        out = Outcome.room(len(nodes), len(self.instruments), nodes.shape[1], len(members))
        at = np.array([self._bench.place(member) for member in members])
        groups = self.model.derived_groups
        if at.max() >= 0:
            score_runs(self._bench.parts, at, start, nodes, judged, self._resolution, *groups, out)
        for k in np.flatnonzero((at < 0) | (out.gaps > 0)).tolist():
            use = slice(start[k], start[k + 1])
            if at[k] < 0:
                out.rows[use], out.surprise[use] = members[k].bin_table.rows(nodes[use]), np.nan
            left = start[k] + np.flatnonzero(np.isnan(out.surprise[use]))
            if len(left):
                self._score_mixed(members[k], left, out)
            out.excess[use] = self._scale(members[k]).excess(out.rows[use], out.surprise[use])
            out.excess[use][~judged[use]] = np.nan
        return out

    def _score_mixed(self, member: Member, at: NDArray[np.int64], out: Outcome) -> None:
        """Fill in, but for bins and excess, what can be said of records at (m,) that the pass left
        out."""
        rows, suspect, own_surprise = out.rows[at], np.empty(len(at), np.int16), np.empty(len(at))
        surprise, own = removal_of(member, rows, *self.model.derived_groups)
        fill_suspects(own, member.usual.channel_median, suspect, own_surprise)
        out.surprise[at], out.own[at] = surprise, own
        out.suspect[at], out.suspect_surprise[at] = suspect, own_surprise
        out.low[at], out.high[at], out.best[at] = self._expected_rows(member, rows, suspect)

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

    def _derive_runs(
        self,
        start: NDArray[np.int64],
        times_ns: NDArray[np.int64],
        values: Floats,
        before: Sequence[Standing | None],
    ) -> tuple[Floats, list[Carry | None]]:
        """Return all nodes' values and each source's carry."""
        table, carries = self.model.table, [one.carry if one else None for one in before]
        if not table.derived:
            return values, carries
        passed = np.diff(times_ns, prepend=0)
        passed[start[:-1]] = times_ns[start[:-1]] - [one.time_ns if one else -1 for one in before]
        if (passed > 0).all():
            return derive_runs(table, start, times_ns, values, carries)
        nodes = np.empty((len(values), values.shape[1] + len(table.derived)))
        for k, standing in enumerate(before):
            use = slice(start[k], start[k + 1])
            nodes[use], carries[k] = self._derive(times_ns[use], values[use], standing)
        return nodes, carries

    def _derive(
        self, times_ns: NDArray[np.int64], values: Floats, standing: Standing | None
    ) -> tuple[Floats, Carry | None]:
        """Return all nodes' values; late records neither see nor become the last record."""
        table, carry = self.model.table, standing.carry if standing else None
        newest = np.maximum.accumulate(times_ns)
        last_ns = standing.time_ns if standing else -1
        on_time = times_ns > np.maximum(np.concatenate([[last_ns], newest[:-1]]), last_ns)
        nodes = np.empty((len(values), values.shape[1] + len(table.derived)))
        nodes[on_time], carry = derive(table, times_ns[on_time], values[on_time], carry)
        for r in np.flatnonzero(~on_time):
            nodes[r : r + 1], _ = derive(table, times_ns[r : r + 1], values[r : r + 1], None)
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
        low, high, best = found = np.full((3, len(rows)), np.nan)
        left = np.ones(len(rows), dtype=np.bool_)
        for k, at in rows_by_part(member, rows):
            arrays, some = member.parts[k].tree.arrays, np.empty((3, len(at)))
            fill_intervals(arrays, rows[at], suspect[at], borders, self._resolution, *groups, *some)
            found[:, at] = some
            left[at] = False
        for r in np.flatnonzero(left).tolist():
            i = int(suspect[r])
            if i >= 0 and not self.instruments[i].is_state:
                belief = belief_of(member, self._without(rows[r : r + 1], i)[0], i)
                own = member.bins[i].borders
                low[r], high[r], best[r] = shortest_interval(belief, own, self._resolution[i])
        return low, high, best


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
