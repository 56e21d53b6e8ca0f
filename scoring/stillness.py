"""How long the channels of a source stay still, or away, in normal running.

A stopped machine is still by nature, so limits are kept for each combination of the
words of all state channels, and stillness is timed twice: in all, and only while a
neighbour moves. The clocks here are alike in learning and online.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scoring.channels import ChannelTable

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# Between two records further apart than this many usual intervals nothing was seen: a
# clock goes on by this much and no more.
MAX_STEP = 2.5
# The combination of a record with an unread state.
UNREAD = -1
# Codes stay below this, so that a product of words can wrap round but never overflow.
CODE_LIMIT = 1 << 40


@dataclass(frozen=True)
class StillnessLimits:
    """The longest normal stillness and absence of one source's instruments.

    codes: (n_contexts,) combinations of states that the history knew.
    still_s, moving_s: (n_contexts, n_instruments + 1) seconds without motion, in all and
        while a neighbour moved; infinite where the channel is still by nature or was seen
        too little. The last column is of the source: nothing at all moved.
    away_s: (n_instruments + 1,) seconds without a usable reading; infinite for a channel
        that hardly ever comes. The last is of the source: seconds between two records.
    present: (n_instruments,) share of records that have the reading.
    neighbours: see `neighbour_lists`.
    """

    codes: Ints
    still_s: Floats
    moving_s: Floats
    away_s: Floats
    present: Floats
    neighbours: Ints


@dataclass(frozen=True)
class Motion:
    """What the clocks need to know of a channel table.

    rows: (4, n_instruments) the change that still counts as the same reading, the lowest
        and the highest reading, 1 for a measurement and 0 for a state.
    states: (n_states, 2) the instruments that are states, and their words' weights in a
        combination's code.
    """

    rows: Floats
    states: Ints

    @classmethod
    def of(cls, table: ChannelTable) -> Motion:
        """Return it for a table.

        Half a resolution is the same reading: less than any change that the instrument
        can report, more than what a conversion of units leaves.
        """
        low = [c.span[0] if c.span else -np.inf for c in table.instruments]
        high = [c.span[1] if c.span else np.inf for c in table.instruments]
        same = [0.5 * (c.resolution or 0.0) for c in table.instruments]
        measured = [0.0 if c.is_state else 1.0 for c in table.instruments]
        weight, states = 1, []
        for i, channel in enumerate(table.instruments):
            if channel.is_state:
                states.append((i, weight))
                weight = weight * (len(channel.words) + 1) % CODE_LIMIT or 1
        return cls(
            np.array([same, low, high, measured]),
            np.array(states, dtype=np.int64).reshape(-1, 2),
        )


def neighbour_lists(table: ChannelTable, edges: Sequence[tuple[int, int]]) -> Ints:
    """Return each instrument's neighbours, one after the other behind n + 1 places.

    Those of instrument i stand at places [i] to before [i + 1] of the array itself.
    edges: pairs of node numbers. A derived channel stands for the instruments it is made
    of. An instrument without a neighbour is given all others.
    """
    n = len(table.instruments)
    place = {c.name: i for i, c in enumerate(table.instruments)}
    made_of = [[i] for i in range(n)] + [[place[name] for name in d.of] for d in table.derived]
    near: list[set[int]] = [set() for _ in range(n)]
    for left, right in edges:
        for a in made_of[left]:
            for b in made_of[right]:
                if a != b:
                    near[a].add(b)
                    near[b].add(a)
    everyone = set(range(n))
    lists = [sorted(near[i] or everyone - {i}) for i in range(n)]
    places = np.cumsum([n + 1] + [len(one) for one in lists])
    return np.concatenate([places, [i for one in lists for i in one]]).astype(np.int64)


@njit(cache=True, nogil=True)
def code_of(values: Floats, r: int, states: Ints) -> int:
    """Return the code of row r's states, UNREAD if one of them is missing."""
    code = 0
    for k in range(states.shape[0]):
        v = values[r, states[k, 0]]
        if v != v:
            return UNREAD
        code = (code + states[k, 1] * int(v)) % CODE_LIMIT
    return code


@njit(cache=True, nogil=True)
def place_of(codes: Ints, code: int) -> int:
    """Return where a code stands, -1 if it is not known or UNREAD."""
    if code == UNREAD:
        return -1
    for k in range(codes.shape[0]):
        if codes[k] == code:
            return k
    return -1


@njit(cache=True, nogil=True)
def passed_s(time_ns: int, last_ns: int, step_s: float) -> float:
    """Return the seconds that clocks go on by at a record, 0 for a source's first."""
    if last_ns < 0:
        return 0.0
    return min((time_ns - last_ns) * 1e-9, MAX_STEP * step_s)


@njit(cache=True, nogil=True)
def follow_motion(
    values: Floats,
    r: int,
    dt_s: float,
    rows: Floats,
    neighbours: Ints,
    anchor: Floats,
    still_s: Floats,
    moving_s: Floats,
    away_s: Floats,
    moved: Bools,
) -> int:
    """Advance one source's clocks by row r, in place; return how many did not move.

    values: (m, n_instruments). rows: at least Motion.rows. anchor: the reading that each
    channel has repeated, NaN for none yet. still_s, moving_s: (n + 1,), the last of the
    source. away_s: at least (n,). moved: (n,) is filled in: the channel changed.
    A missing reading neither moves nor counts as still.
    """
    n = values.shape[1]
    n_rest = 0
    any_read, any_moved = False, False
    for i in range(n):
        v = values[r, i]
        moved[i] = False
        # A comparison with NaN is false, so a missing reading is away as well.
        if v >= rows[1, i] and v <= rows[2, i]:
            away_s[i] = 0.0
            any_read |= rows[3, i] > 0.0
            if abs(v - anchor[i]) <= rows[0, i]:
                n_rest += 1
            else:
                moved[i] = True
                any_moved |= rows[3, i] > 0.0
                anchor[i] = v
                still_s[i] = 0.0
                moving_s[i] = 0.0
        else:
            away_s[i] += dt_s
            n_rest += 1
    if any_moved:
        still_s[n] = 0.0
        moving_s[n] = 0.0
    elif any_read:
        still_s[n] += dt_s
        moving_s[n] += dt_s
    if n_rest > 0:
        for i in range(n):
            if not moved[i] and values[r, i] >= rows[1, i] and values[r, i] <= rows[2, i]:
                still_s[i] += dt_s
                for k in range(neighbours[i], neighbours[i + 1]):
                    if moved[neighbours[k]]:
                        moving_s[i] += dt_s
                        break
    return n_rest


def widest(limits: Sequence[StillnessLimits], neighbours: Ints) -> StillnessLimits | None:
    """Return limits that hold for all of several sources, for a source never seen.

    neighbours: under the fleet's member. A combination that some source does not know has
    the limits of those that do.
    """
    if not limits:
        return None
    codes = np.unique(np.concatenate([one.codes for one in limits]))
    shape = (len(codes), len(limits[0].away_s))
    still, moving = np.zeros(shape), np.zeros(shape)
    for one in limits:
        rows = np.searchsorted(codes, one.codes)
        still[rows] = np.maximum(still[rows], one.still_s)
        moving[rows] = np.maximum(moving[rows], one.moving_s)
    away = np.max([one.away_s for one in limits], axis=0)
    present = np.min([one.present for one in limits], axis=0)
    return StillnessLimits(codes, still, moving, away, present, neighbours)
