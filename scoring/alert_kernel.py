"""The fast half of the alert machine: what every record is put through.

One pass over a source's records moves its clocks and writes a mark wherever something
begins or ends; without a mark, and with nothing open, there is nothing more to do.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scoring.stillness import MAX_STEP, code_of, follow_motion, passed_s, place_of

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# Places in a source's whole numbers; all times in ns, -1 for none.
LAST = 0  # time of the last record on time
OPEN = 1  # the scored episode: 0 none, 1 over the record level only, 2 over sustained
RUN = 2  # judged records in a row over the record level
RUN_FROM = 3  # time of the first of them
OVER_FROM = 4  # since when sustained is over its level
RISE_FROM = 5  # since when sustained is over half the way to its level
HELD = 6  # last time that the open episode was held
CODE = 7  # combination of states
CLOCK_OPEN = 8  # 1 while the source's clock is at fault
OFF_N = 9  # records in a row that came late or ahead of the receiver's clock
OFF_FIRST = 10  # time of the first of them
OFF_LAST = 11  # time of the last
OFF_HEARD = 12  # when the first was received
N_INTS = 13  # after them: a flag for each instrument and one for the source

# Rows of a source's decimal numbers, (n_instruments + 1,) each, the source's own last.
ANCHOR = 0  # the reading that is repeated
STILL = 1  # seconds without motion
MOVING = 2  # the same, only while a neighbour moved
AWAY = 3  # seconds without a usable reading
RECENT = 4  # own surprise beyond usual of the last few judged records, summed, nats
N_FLOATS = 5

# Places of levels and delays, in nats and seconds. The two OFF levels hold an open
# episode; HALF is half the way from usual to the sustained level.
RECORD, RECORD_OFF, SUSTAINED, SUSTAINED_OFF, HALF, RUN_LENGTH, ON_S, OFF_S = range(8)
STEP_S, SPAN_S, CLOCK_S = range(8, 11)
N_KNOBS = 11

# Rows of what is known of the instruments: those of scoring.stillness.Motion, then the
# median of the own surprise and the most of it that one record counts for beyond that
# (nats), and the limit on absence (s).
MIDDLE, CAP, AWAY_LIMIT = 4, 5, 6
N_ROWS = 7

# What is kept of RECENT at each judged record: it remembers about three. Of 161 incidents
# of an invented plant the right channel came first in 65 % when the alert was raised; with
# fifteen, the memory of sustained, in 57 %; with one in 67 % then, and fewer soon after.
KEPT = 2.0 / 3.0

# Marks: where something begins or ends.
RAISED, WORSENED, CLEARED = 0, 1, 2
STUCK_ON, STUCK_OFF, ABSENT_ON, ABSENT_OFF, SPAN_ON, SPAN_OFF = 3, 4, 5, 6, 7, 8
CLOCK_ON, CLOCK_OFF = 9, 10

# Flags of a channel.
FINE, STUCK, ABSENT, SPAN = 0, 1, 2, 3


def new_ints(n_instruments: int) -> Ints:
    """Return the whole numbers of a source that has sent nothing yet."""
    ints = np.full(N_INTS + n_instruments + 1, -1, dtype=np.int64)
    ints[[OPEN, RUN, CLOCK_OPEN, OFF_N]] = 0
    ints[N_INTS:] = FINE
    return ints


def new_floats(n_instruments: int) -> Floats:
    """Return the decimal numbers of a source that has sent nothing yet."""
    floats = np.zeros((N_FLOATS, n_instruments + 1))
    floats[ANCHOR] = np.nan
    return floats


@njit(cache=True, nogil=True, inline="always")
def follow_levels(time_ns: int, excess: float, sustained: float, knobs: Floats, ints: Ints) -> int:
    """Advance the scored episode by one judged record; return its mark or -1.

    One record raises or clears at most once: what raises also holds.
    """
    if excess > knobs[RECORD]:
        if ints[RUN] == 0:
            ints[RUN_FROM] = time_ns
        ints[RUN] += 1
    else:
        ints[RUN] = 0
    if not sustained > knobs[HALF]:
        ints[RISE_FROM] = -1
    elif ints[RISE_FROM] < 0:
        ints[RISE_FROM] = time_ns
    if not sustained > knobs[SUSTAINED]:
        ints[OVER_FROM] = -1
    elif ints[OVER_FROM] < 0:
        ints[OVER_FROM] = time_ns
    over = ints[OVER_FROM] >= 0 and (time_ns - ints[OVER_FROM]) * 1e-9 >= knobs[ON_S]
    if ints[OPEN] == 0:
        if over or ints[RUN] >= knobs[RUN_LENGTH]:
            ints[OPEN] = 2 if over else 1
            ints[HELD] = time_ns
            return RAISED
        return -1
    if excess > knobs[RECORD_OFF] or sustained > knobs[SUSTAINED_OFF]:
        ints[HELD] = time_ns
        if over and ints[OPEN] == 1:
            ints[OPEN] = 2
            return WORSENED
    elif (time_ns - ints[HELD]) * 1e-9 >= knobs[OFF_S]:
        ints[OPEN] = 0
        return CLEARED
    return -1


@njit(cache=True, nogil=True)
def scan(
    times_ns: Ints, excess: Floats, sustained: Floats, knobs: Floats, ints: Ints, found: Ints
) -> int:
    """Fill `found` (m, 2) with rows raised and cleared, n where still open; return how many.

    excess: (n,), NaN = not judged. times_ns must rise.
    """
    n_found = 0
    for r in range(times_ns.shape[0]):
        if excess[r] == excess[r]:
            mark = follow_levels(times_ns[r], excess[r], sustained[r], knobs, ints)
            if mark == RAISED:
                found[n_found, 0] = r
                found[n_found, 1] = times_ns.shape[0]
                n_found += 1
            elif mark == CLEARED:
                found[n_found - 1, 1] = r
    return n_found


@njit(cache=True, nogil=True)
def _put(marks: Ints, n_marks: int, row: int, what: int, channel: int) -> int:
    # Too many marks are counted all the same, so that the caller can make more room.
    if n_marks < marks.shape[0]:
        marks[n_marks, 0] = row
        marks[n_marks, 1] = what
        marks[n_marks, 2] = channel
    return n_marks + 1


@njit(cache=True, nogil=True)
def _follow_clock(time_ns: int, heard_ns: int, clock_s: float, ints: Ints) -> int:
    """Watch a source's clock by one record that is late or ahead; return a mark or -1.

    Late records that come in a burst are a line that catches up, not a clock: their
    times must go on no more than twice as fast as the receiver's clock.
    """
    if ints[OFF_N] == 0 or time_ns <= ints[OFF_LAST]:
        ints[OFF_N] = 0
        ints[OFF_FIRST] = time_ns
        ints[OFF_HEARD] = heard_ns
    ints[OFF_N] += 1
    ints[OFF_LAST] = time_ns
    lasted_s = (time_ns - ints[OFF_FIRST]) * 1e-9
    live = heard_ns < 0 or (heard_ns - ints[OFF_HEARD]) * 1e-9 >= 0.5 * lasted_s
    if ints[CLOCK_OPEN] == 0 and lasted_s >= clock_s and live:
        ints[CLOCK_OPEN] = 1
        return CLOCK_ON
    return -1


@njit(cache=True, nogil=True)
def _follow_recent(own: Floats, r: int, rows: Floats, kept: float, recent: Floats) -> None:
    """Add row r's own surprise beyond usual to what is remembered of the last records."""
    middle, cap = rows[MIDDLE], rows[CAP]
    for i in range(own.shape[1]):
        x = own[r, i] - middle[i]
        recent[i] = recent[i] * kept + (min(x, cap[i]) if x == x else 0.0)


@njit(cache=True, nogil=True)
def _must_look(rows: Floats, limits: Floats, context: int, floats: Floats, span_s: float) -> bool:
    """Return whether some channel is over one of its limits."""
    n = rows.shape[1]
    away, still, moving = floats[AWAY], floats[STILL], floats[MOVING]
    for i in range(n):
        if away[i] > 0.0 and (away[i] >= span_s or away[i] >= rows[AWAY_LIMIT, i]):
            return True
    if context >= 0:
        for i in range(n + 1):
            if still[i] > limits[context, 0, i] or moving[i] > limits[context, 1, i]:
                return True
    return False


@njit(cache=True, nogil=True)
def _set_flag(flags: Ints, i: int, flag: int, marks: Ints, n_marks: int, r: int) -> int:
    """Change one flag and mark what ends and what begins by it."""
    if flags[i] != FINE:
        n_marks = _put(marks, n_marks, r, STUCK_OFF + 2 * (flags[i] - STUCK), i)
    if flag != FINE:
        n_marks = _put(marks, n_marks, r, STUCK_ON + 2 * (flag - STUCK), i)
    flags[i] = flag
    return n_marks


@njit(cache=True, nogil=True)
def _set_flags(
    values: Floats,
    r: int,
    rows: Floats,
    limits: Floats,
    context: int,
    floats: Floats,
    flags: Ints,
    moved: Bools,
    span_s: float,
    marks: Ints,
    n_marks: int,
) -> int:
    """Settle the flags of every channel at row r; return how many marks there are now."""
    n = values.shape[1]
    for i in range(n + 1):
        still = context >= 0 and (
            floats[STILL, i] > limits[context, 0, i] or floats[MOVING, i] > limits[context, 1, i]
        )
        flag = flags[i]
        if i == n:
            if flag == STUCK and floats[STILL, n] == 0.0:
                flag = FINE
            elif still:
                flag = STUCK
        elif values[r, i] >= rows[1, i] and values[r, i] <= rows[2, i]:
            if flag != STUCK or moved[i]:
                flag = STUCK if still else FINE
        elif flag != ABSENT and flag != SPAN:
            is_out = values[r, i] == values[r, i]
            if is_out and floats[AWAY, i] >= span_s:
                flag = SPAN
            elif not is_out and floats[AWAY, i] >= rows[AWAY_LIMIT, i]:
                flag = ABSENT
        if flag != flags[i]:
            n_marks = _set_flag(flags, i, flag, marks, n_marks, r)
    return n_marks


@njit(cache=True, nogil=True)
def watch_rows(
    times_ns: Ints,
    values: Floats,
    excess: Floats,
    sustained: Floats,
    own: Floats,
    ahead: Bools,
    heard_ns: int,
    knobs: Floats,
    rows: Floats,
    limits: Floats,
    codes: Ints,
    states: Ints,
    neighbours: Ints,
    floats: Floats,
    ints: Ints,
    marks: Ints,
) -> int:
    """Put one source's records through all watches; return how many marks there are.

    times_ns, excess, sustained: (n,); values, own: (n, n_instruments), NaN = missing.
    ahead: (n,), or (0,) for none: ahead of the receiver's clock. Such a record, and a
        late one, moves only the watch over the source's clock.
    heard_ns: when the receiver got them, -1 = take the records' own times.
    knobs: (N_KNOBS,). rows: (N_ROWS, n_instruments). limits: (n_contexts, 2,
        n_instruments + 1) seconds of stillness, in all and while a neighbour moves, of
        the combinations `codes`. states, neighbours: see scoring.stillness.
    floats: (N_FLOATS, n_instruments + 1), ints: see above; both are changed in place.
    marks: (m, 3) row, what, channel; if more are counted than fit, nothing is valid.
    """
    n = values.shape[1]
    flags = ints[N_INTS:]
    n_flags = 0
    for i in range(n + 1):
        n_flags += flags[i] != FINE
    step_s, span_s = knobs[STEP_S], knobs[SPAN_S]
    moved = np.zeros(n, np.bool_)
    context = place_of(codes, ints[CODE])
    n_marks = 0
    for r in range(times_ns.shape[0]):
        t, last_ns = times_ns[r], ints[LAST]
        if t <= last_ns or (ahead.shape[0] > 0 and ahead[r]):
            mark = _follow_clock(t, heard_ns, knobs[CLOCK_S], ints)
            if mark >= 0:
                n_marks = _put(marks, n_marks, r, mark, -1)
            continue
        ints[LAST], ints[OFF_N] = t, 0
        if ints[CLOCK_OPEN] == 1:
            ints[CLOCK_OPEN] = 0
            n_marks = _put(marks, n_marks, r, CLOCK_OFF, -1)
        dt_s = passed_s(t, last_ns, step_s)
        code = code_of(values, r, states)
        if code != ints[CODE]:
            # What was still under other states says nothing of these.
            ints[CODE] = code
            context = place_of(codes, code)
            floats[STILL, :] = 0.0
            floats[MOVING, :] = 0.0
        n_rest = follow_motion(
            values, r, dt_s, rows, neighbours,
            floats[ANCHOR], floats[STILL], floats[MOVING], floats[AWAY], moved,
        )  # fmt: skip
        if n_flags > 0 or (n_rest > 0 and _must_look(rows, limits, context, floats, span_s)):
            n_marks = _set_flags(
                values, r, rows, limits, context, floats, flags, moved, span_s, marks, n_marks
            )
            n_flags = 0
            for i in range(n + 1):
                n_flags += flags[i] != FINE
        e = excess[r]
        if e == e:
            gap_s = (t - last_ns) * 1e-9
            kept = KEPT if last_ns >= 0 and gap_s <= MAX_STEP * step_s else 0.0
            _follow_recent(own, r, rows, kept, floats[RECENT])
            mark = follow_levels(t, e, sustained[r], knobs, ints)
            if mark >= 0:
                n_marks = _put(marks, n_marks, r, mark, -1)
    return n_marks
