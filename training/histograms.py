"""Histograms of channels, counted as records stream by."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.model import Member

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Cells of equal width that a measurement's picture has.
N_CELLS: Final = 48
# A picture shows this much of the readings, with some room, so that one stray reading
# does not squeeze all others into one cell.
_SHOWN: Final = 0.998
_ROOM: Final = 0.06
# Readings counted of one source.
_MOST_COUNTED: Final = 60_000


@dataclass(frozen=True)
class Histogram:
    """Counts of one node's readings.

    counts: (N_CELLS,) over cells of equal width from low to high, of a state (n_words + 1,)
    with words never seen last. below, above: readings outside of low to high.
    """

    low: float
    high: float
    counts: Ints
    below: int = 0
    above: int = 0


class Histograms:
    """Counts the readings of all nodes of one source. n_records: about how many will come."""

    def __init__(self, member: Member, n_records: int) -> None:
        self._every = max(1, n_records // _MOST_COUNTED)
        self._seen = 0
        self._n_words = [b.n_words for b in member.bins]
        marginals = member.parts[-1].tree.log_marginals
        ranges = [
            (0.0, 1.0) if b.n_words else shown_range(b.borders, np.exp(marginals[k]))
            for k, b in enumerate(member.bins)
        ]
        self._low, self._high = np.array(ranges).T
        # Two more for what lies below and above.
        self._counts = [
            np.zeros(n + 1 if n else N_CELLS + 2, dtype=np.int64) for n in self._n_words
        ]

    def add(self, values: Floats) -> None:
        """Count every so many-th record. values: (n, n_nodes), NaN = missing."""
        at = np.arange(-self._seen % self._every, len(values), self._every)
        self._seen += len(values)
        for k, counts in enumerate(self._counts):
            readings = values[at, k]
            readings = readings[~np.isnan(readings)]
            if self._n_words[k]:
                cells = np.clip(readings, 0, self._n_words[k]).astype(np.int64)
            else:
                width = (self._high[k] - self._low[k]) / N_CELLS
                place = np.floor((readings - self._low[k]) / width)
                cells = np.clip(place, -1, N_CELLS).astype(np.int64) + 1
            counts += np.bincount(cells, minlength=len(counts))

    def found(self) -> list[Histogram]:
        """Return a histogram for each node."""
        return [
            Histogram(0.0, float(n), counts)
            if n
            else Histogram(float(low), float(high), counts[1:-1], int(counts[0]), int(counts[-1]))
            for n, low, high, counts in zip(
                self._n_words, self._low, self._high, self._counts, strict=True
            )
        ]


def shown_range(borders: Floats, marginal: Floats) -> tuple[float, float]:
    """Return the range of a picture: the middle of the readings with room on both sides.

    borders: (n_borders,), marginal: (n_borders + 1,).
    """
    below = np.cumsum(marginal)[:-1]
    tail = (1.0 - _SHOWN) / 2
    first = max(int(np.searchsorted(below, tail, side="right")) - 1, 0)
    last = min(int(np.searchsorted(below, 1.0 - tail)), len(borders) - 1)
    low, high = float(borders[first]), float(borders[last])
    room = _ROOM * (high - low) if high > low else max(abs(low), 1.0) * 0.01
    return low - room, high + room
