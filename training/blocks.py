"""Blocks of time for held-out measurement: neighbouring records are near copies.

A source's span is cut into blocks of equal length that are dealt to folds in turn, some
in a row to one fold where days are many: weather and habits last for days, and a day
between two that were learned is milder than a day to come. Records within the guard of a
block's ends are never scored as held out, so that no scored record has a near neighbour
among those learned from.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Ints = NDArray[np.int64]

N_FOLDS = 5
# Blocks of a day where the history has enough of them: a day is a plant's natural cycle.
DAY_NS = 86_400 * 1_000_000_000
ENOUGH_DAYS = 20
# Short histories are cut into this many blocks.
SHORT_BLOCKS = 10
LONG_BLOCKS = 20
# A history below this many records counts as short.
SHORT_RECORDS = 2000
# From so many days on, blocks in a row go to one fold: a fifth of the history, at most a
# week. Measured on the plant, 30 days learned, the next 50 days brought 2.2 alerts a day
# for 1.8 promised; with single days 3.3 for 1.8.
ENOUGH_DAYS_FOR_RUNS = 10
MOST_DAYS_IN_RUN = 7
# The guard is this share of a block on either side, but not more than this many steps.
GUARD_SHARE, GUARD_STEPS = 0.1, 10.0


@dataclass(frozen=True, slots=True)
class Blocks:
    """The blocks of one source: start and length in ns, guard in ns, number of blocks.

    n_in_run: blocks in a row that go to one fold.
    """

    start_ns: int
    length_ns: int
    guard_ns: int
    n_blocks: int
    n_in_run: int = 1

    @classmethod
    def of(cls, first_ns: int, last_ns: int, n_records: int, step_s: float) -> Blocks:
        """Return the blocks of a source with records from first_ns to last_ns."""
        span = last_ns - first_ns + 1
        n_blocks = SHORT_BLOCKS if n_records < SHORT_RECORDS else LONG_BLOCKS
        if span >= ENOUGH_DAYS * DAY_NS:
            n_blocks = -(-span // DAY_NS)
        length = -(-span // n_blocks)
        guard = int(min(GUARD_SHARE * length, GUARD_STEPS * step_s * 1e9))
        n_in_run = 1
        if span >= ENOUGH_DAYS_FOR_RUNS * DAY_NS:
            n_in_run = min(-(-n_blocks // N_FOLDS), max(1, MOST_DAYS_IN_RUN * DAY_NS // length))
        return cls(first_ns, length, guard, int(n_blocks), int(n_in_run))

    def number(self, times_ns: Ints) -> Ints:
        """Return each time's block, (n,), from 0."""
        return np.clip((times_ns - self.start_ns) // self.length_ns, 0, self.n_blocks - 1)

    def fold(self, times_ns: Ints) -> Ints:
        """Return each time's fold, (n,), 0 to N_FOLDS - 1."""
        return self.number(times_ns) // self.n_in_run % N_FOLDS

    def clear(self, times_ns: Ints) -> NDArray[np.bool_]:
        """Return where a time is clear of its block's guard, (n,)."""
        within = (times_ns - self.start_ns) % self.length_ns
        return (within >= self.guard_ns) & (within < self.length_ns - self.guard_ns)
