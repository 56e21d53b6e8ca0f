"""Blocks of time for held-out measurement: neighbouring records are near copies.

A source's span is cut into blocks of equal length that are dealt to folds in turn.
Records within the guard of a block's ends are never scored as held out, so that no
scored record has a near neighbour among those learned from.
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
# The guard is this share of a block on either side, but not more than this many steps.
GUARD_SHARE, GUARD_STEPS = 0.1, 10.0


@dataclass(frozen=True, slots=True)
class Blocks:
    """The blocks of one source: start and length in ns, guard in ns, number of blocks."""

    start_ns: int
    length_ns: int
    guard_ns: int
    n_blocks: int

    @classmethod
    def of(cls, first_ns: int, last_ns: int, n_records: int, step_s: float) -> Blocks:
        """Return the blocks of a source with records from first_ns to last_ns."""
        span = last_ns - first_ns + 1
        n_blocks = SHORT_BLOCKS if n_records < SHORT_RECORDS else LONG_BLOCKS
        if span >= ENOUGH_DAYS * DAY_NS:
            n_blocks = -(-span // DAY_NS)
        length = -(-span // n_blocks)
        guard = int(min(GUARD_SHARE * length, GUARD_STEPS * step_s * 1e9))
        return cls(first_ns, length, guard, int(n_blocks))

    def number(self, times_ns: Ints) -> Ints:
        """Return each time's block, (n,), from 0."""
        return np.clip((times_ns - self.start_ns) // self.length_ns, 0, self.n_blocks - 1)

    def fold(self, times_ns: Ints) -> Ints:
        """Return each time's fold, (n,), 0 to N_FOLDS - 1."""
        return self.number(times_ns) % N_FOLDS

    def clear(self, times_ns: Ints) -> NDArray[np.bool_]:
        """Return where a time is clear of its block's guard, (n,)."""
        within = (times_ns - self.start_ns) % self.length_ns
        return (within >= self.guard_ns) & (within < self.length_ns - self.guard_ns)
