"""Learning how long each channel stays still or away, in one pass over a source's records."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scoring.channels import ChannelTable
from scoring.model import Member
from scoring.stillness import (
    UNREAD,
    Motion,
    StillnessLimits,
    code_of,
    follow_motion,
    neighbour_lists,
    passed_s,
    place_of,
    widest,
)
from training.rows import Rows

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Combinations of states that are followed at a time, and those kept in the end: the ones
# with most time. A rarer combination has no limits, so nothing is called stuck in it.
MAX_MET, MAX_KEPT = 256, 64
# A channel that moved less often than this in a combination is not known to move there.
LEAST_MOVES = 30
# The time observed must hold this many of the longest stillness: else too little was seen.
LEAST_SPANS = 20.0
# A channel with a smaller share of readings is not expected to come.
LEAST_PRESENT = 0.02


class _Clocks(NamedTuple):
    """Where the pass stands between two chunks; one number each in the small arrays."""

    anchor: Floats
    still_s: Floats
    moving_s: Floats
    away_s: Floats
    last_ns: Ints
    context: Ints


class _Found(NamedTuple):
    """What the pass has met; the arrays' first axis is the combination.

    ended, cut: (MAX_MET, 2, n + 1) longest stillness that motion ended, and that a change
        of states cut short; in all and while a neighbour moved. n_moves: (MAX_MET, n + 1).
    """

    codes: Ints
    n_codes: Ints
    observed_s: Floats
    ended: Floats
    cut: Floats
    n_moves: Ints
    away_s: Floats
    n_present: Ints
    n_records: Ints


@njit(cache=True, nogil=True)
def _context(code: int, found: _Found) -> int:
    """Return the number of a code, which is added if there is room; -1 if there is none."""
    n_codes = found.n_codes[0]
    place = place_of(found.codes[:n_codes], code)
    if place >= 0 or code == UNREAD or n_codes == found.codes.shape[0]:
        return place
    found.codes[n_codes] = code
    found.n_codes[0] += 1
    return int(n_codes)


@njit(cache=True, nogil=True)
def _cut_short(clocks: _Clocks, found: _Found) -> None:
    """End every stillness because the states changed, and start the clocks again."""
    context = clocks.context[0]
    for i in range(clocks.still_s.shape[0]):
        if context >= 0:
            found.cut[context, 0, i] = max(found.cut[context, 0, i], clocks.still_s[i])
            found.cut[context, 1, i] = max(found.cut[context, 1, i], clocks.moving_s[i])
        clocks.still_s[i] = 0.0
        clocks.moving_s[i] = 0.0


@njit(cache=True, nogil=True)
def _pass_over(
    times_ns: Ints,
    values: Floats,
    step_s: float,
    rows: Floats,
    states: Ints,
    neighbours: Ints,
    clocks: _Clocks,
    found: _Found,
) -> None:
    n = values.shape[1]
    moved = np.zeros(n, np.bool_)
    for r in range(values.shape[0]):
        last_ns = clocks.last_ns[0]
        dt_s = passed_s(times_ns[r], last_ns, step_s)
        if last_ns >= 0:
            found.away_s[n] = max(found.away_s[n], (times_ns[r] - last_ns) * 1e-9)
        clocks.last_ns[0] = times_ns[r]
        found.n_records[0] += 1
        context = _context(code_of(values, r, states), found)
        if context != clocks.context[0]:
            _cut_short(clocks, found)
            clocks.context[0] = context
        still_s, moving_s = clocks.still_s.copy(), clocks.moving_s.copy()
        follow_motion(
            values, r, dt_s, rows, neighbours,
            clocks.anchor, clocks.still_s, clocks.moving_s, clocks.away_s, moved,
        )  # fmt: skip
        for i in range(n):
            found.n_present[i] += clocks.away_s[i] == 0.0
            found.away_s[i] = max(found.away_s[i], clocks.away_s[i])
        if context < 0:
            continue
        found.observed_s[context] += dt_s
        for i in range(n + 1):
            if moved[i] if i < n else clocks.still_s[n] == 0.0:
                found.n_moves[context, i] += 1
                found.ended[context, 0, i] = max(found.ended[context, 0, i], still_s[i])
                found.ended[context, 1, i] = max(found.ended[context, 1, i], moving_s[i])


def learn_stillness(
    chunks: Iterable[tuple[Ints, Floats]],
    table: ChannelTable,
    edges: Sequence[tuple[int, int]],
    step_s: float,
) -> StillnessLimits:
    """Return the limits of one source.

    chunks: times (n,) rising over all chunks, values (n, >= n_instruments), NaN = missing;
        further columns are not looked at. An empty chunk parts what is before it from what
        is after, because records between them are not to be learned from.
    edges: of the source's tree, as node numbers.
    step_s: the usual interval between records.
    """
    n = len(table.instruments)
    neighbours, motion = neighbour_lists(table, edges), Motion.of(table)
    clocks = _Clocks(
        anchor=np.full(n, np.nan),
        still_s=np.zeros(n + 1),
        moving_s=np.zeros(n + 1),
        away_s=np.zeros(n),
        last_ns=np.array([-1]),
        context=np.array([-1]),
    )
    found = _Found(
        codes=np.zeros(MAX_MET, dtype=np.int64),
        n_codes=np.zeros(1, dtype=np.int64),
        observed_s=np.zeros(MAX_MET),
        ended=np.zeros((MAX_MET, 2, n + 1)),
        cut=np.zeros((MAX_MET, 2, n + 1)),
        n_moves=np.zeros((MAX_MET, n + 1), dtype=np.int64),
        away_s=np.zeros(n + 1),
        n_present=np.zeros(n, dtype=np.int64),
        n_records=np.zeros(1, dtype=np.int64),
    )
    for times_ns, values in chunks:
        if not len(times_ns):
            clocks.anchor[:], clocks.last_ns[:] = np.nan, -1
            clocks.still_s[:], clocks.moving_s[:], clocks.away_s[:] = 0.0, 0.0, 0.0
            continue
        own = np.ascontiguousarray(values[:, :n])
        _pass_over(times_ns, own, step_s, motion.rows, motion.states, neighbours, clocks, found)
    _cut_short(clocks, found)
    return _limits(found, motion, neighbours)


def with_stillness(
    rows: Rows, members: dict[str, Member], fleet: Member
) -> tuple[dict[str, Member], Member]:
    """Return each source's member, and the fleet's, with the limits of its records.

    The fleet's limits hold for every source: what is still for hours at one of them may
    be so at a source never seen.
    """
    items = [(rows.part(source), _edges(member)) for source, member in members.items()]
    found = dict(zip(members, rows.hands.each(_still_of, items), strict=True))
    members = {s: replace(member, stillness=found[s]) for s, member in members.items()}
    limits = widest(list(found.values()), neighbour_lists(rows.table, _edges(fleet)))
    return members, replace(fleet, stillness=limits)


def _still_of(item: tuple[Rows, list[tuple[int, int]]]) -> StillnessLimits:
    rows, edges = item
    return learn_stillness(_parted(rows), rows.table, edges, rows.step_s)


def _parted(rows: Rows) -> Iterator[tuple[Ints, Floats]]:
    """Yield times and values of what tables may use, an empty chunk where records are left out."""
    for chunk in rows.chunks():
        cuts = np.flatnonzero(np.diff(chunk.kept)) + 1
        for part in np.split(np.arange(len(chunk.kept)), cuts):
            use = slice(part[0], part[-1] + 1 if chunk.kept[part[0]] else part[0])
            yield chunk.times_ns[use], chunk.values[use]


def _edges(member: Member) -> list[tuple[int, int]]:
    return [(int(a), int(b)) for part in member.parts for a, b in part.tree.edges.tolist()]


def _limits(found: _Found, motion: Motion, neighbours: Ints) -> StillnessLimits:
    """Return limits from what the pass has met; see LEAST_MOVES and LEAST_SPANS."""
    observed_s = found.observed_s[: int(found.n_codes[0])]
    kept = np.argsort(-observed_s, kind="stable")[:MAX_KEPT]
    kept = kept[np.argsort(found.codes[kept], kind="stable")]
    ended, cut = found.ended[kept], found.cut[kept]
    # A stillness that only a change of states ends is by nature: a stopped machine.
    unknown = (found.n_moves[kept] < LEAST_MOVES)[:, None, :] | (cut > ended)
    unknown |= observed_s[kept][:, None, None] < LEAST_SPANS * ended
    longest = np.where(unknown, np.inf, np.maximum(ended, cut))
    longest[:, :, motion.states[:, 0]] = np.inf
    away_s = found.away_s.copy()
    present = found.n_present / max(int(found.n_records[0]), 1)
    away_s[:-1][present < LEAST_PRESENT] = np.inf
    return StillnessLimits(
        codes=found.codes[kept],
        still_s=longest[:, 0, :],
        moving_s=longest[:, 1, :],
        away_s=away_s,
        present=present,
        neighbours=neighbours,
    )
