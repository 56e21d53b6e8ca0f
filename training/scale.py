"""One kind of level over how often it is passed: by counting where there is something to
count, along the tail beyond.

Counts are of episodes in held-out time. They are not monotone in the level (a lower one
may join two episodes), so the lowest level is meant that keeps a count with all above it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from training.tail import LEAST_PEAKS, Tail, fit_tail

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# A tail is fitted on this many of the highest episodes where there are so many: enough
# for its shape, few enough to be tail.
N_TAIL: Final = 60
# A count of so many episodes speaks for itself; below it the tail smooths and goes on.
ENOUGH_COUNTED: Final = 10
# Counts below this share of one episode are not spoken of: ten times the held-out span.
LEAST_COUNT: Final = 0.1


@dataclass(frozen=True)
class Scale:
    """levels (n,) rising, with the most episodes that each or a higher one had, (n,).

    tail: beyond the level that `n_tail` episodes pass, None where no episode was seen.
    highest: the largest value seen.
    """

    levels: Floats
    episodes: Ints
    tail: Tail | None
    n_tail: int
    highest: float

    def level(self, count: float) -> float:
        """Return the lowest level that is passed at most `count` times, with all above it.

        Below ENOUGH_COUNTED the tail speaks, but never for a level that was in fact passed
        more often. count is taken to be at least LEAST_COUNT.
        """
        count = max(count, LEAST_COUNT)
        counted = self.counted(count)
        if self.tail is None or count >= min(ENOUGH_COUNTED, self.n_tail):
            return counted
        return max(counted, self.tail.level(self.n_tail / count))

    def counted(self, count: float) -> float:
        """Return the lowest of the levels tried that is passed at most `count` times."""
        keeps = int(np.searchsorted(-self.episodes, -count))
        return float(self.levels[min(keeps, len(self.levels) - 1)])


def threshold_of(episodes: Ints) -> int:
    """Return the place of the level over which a tail is fitted.

    The highest that N_TAIL episodes pass; with fewer episodes in all, that most pass.
    """
    n = min(N_TAIL, int(episodes.max(initial=0)))
    enough = np.flatnonzero(episodes >= max(n, 1))
    return int(enough[-1]) if len(enough) else 0


def scale_of(levels: Floats, episodes: Ints, peaks: Floats, threshold: float) -> Scale:
    """Return the scale from counts, and peaks of the episodes over the threshold.

    levels: (n,) rising. episodes: (n,) counts. peaks: (m,), may be empty.
    """
    most = np.maximum.accumulate(episodes[::-1])[::-1]
    peaks = peaks[peaks > threshold]
    if not len(peaks):
        return Scale(levels, most, None, 0, float(levels[-1]))
    tail = fit_tail(peaks, threshold)
    return Scale(levels, most, tail, len(peaks), tail.highest)


def is_fitted(scale: Scale) -> bool:
    """Whether the tail's shape was fitted, and not held for want of episodes."""
    return scale.tail is not None and scale.n_tail >= LEAST_PEAKS
