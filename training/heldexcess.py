"""Excess of all sources on disk, to be followed as often as levels need it.

Eight bytes each for the time, the excess and the suspect of every record; nothing of it
is held in memory. The score of any other method can stand where excess stands.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_N_COLUMNS: Final = 3
# Records that come back at once, 1.5 MB.
_N_ROWS: Final = 65_536
# Values kept of each source to see how they are spread, evenly over its time.
_MOST_SAMPLED: Final = 20_000


@dataclass
class HeldExcess:
    """One source's excess, record by record.

    n_judged: records with an excess. highest: the largest. usual: where sustained rests,
    set by whoever knows.
    """

    source: str
    path: Path
    n_records: int = 0
    n_judged: int = 0
    highest: float = -np.inf
    sample: Floats = field(default_factory=lambda: np.zeros(0), repr=False)
    usual: float = 0.0

    def chunks(self) -> Iterator[tuple[Ints, Floats]]:
        """Yield times (n,) and excess (n,), NaN = not judged, in the order they came."""
        for times_ns, excess, _ in self.rows():
            yield times_ns, excess

    def rows(self) -> Iterator[tuple[Ints, Floats, Ints]]:
        """Yield times, excess and the suspect's number, -1 for none, (n,) each."""
        with self.path.open("rb") as file:
            while True:
                block = np.fromfile(file, dtype=np.float64, count=_N_COLUMNS * _N_ROWS)
                if not len(block):
                    return
                rows = block.reshape(-1, _N_COLUMNS)
                yield rows[:, 0].copy().view(np.int64), rows[:, 1].copy(), rows[:, 2].astype(int)


class ExcessFile:
    """Takes one source's records as they come; `kept` is what was taken in so far."""

    def __init__(self, source: str, path: Path, every: int = 1) -> None:
        """every: one in so many records is sampled."""
        self.kept = HeldExcess(source, path)
        self._every = every
        path.write_bytes(b"")

    def add(self, times_ns: Ints, excess: Floats, suspect: Ints | None = None) -> None:
        """Add records: times and excess (n,), the suspects' numbers or None."""
        kept = self.kept
        blame = np.full(len(excess), -1.0) if suspect is None else suspect.astype(np.float64)
        with kept.path.open("ab") as file:
            file.write(np.stack([times_ns.view(np.float64), excess, blame], axis=1).tobytes())
        judged = excess[~np.isnan(excess)]
        kept.sample = np.concatenate(
            [kept.sample, judged[-kept.n_judged % self._every :: self._every]]
        )
        if len(kept.sample) > 2 * _MOST_SAMPLED:
            kept.sample, self._every = kept.sample[::2], 2 * self._every
        kept.n_records += len(excess)
        kept.n_judged += len(judged)
        kept.highest = max(kept.highest, float(judged.max(initial=-np.inf)))


def keep_excess(
    source: str, n_records: int, chunks: Iterable[tuple[Ints, Floats]], path: Path
) -> HeldExcess:
    """Write one source's times and excess to a file.

    n_records: about how many there will be, for an even sample.
    """
    file = ExcessFile(source, path, max(1, n_records // _MOST_SAMPLED))
    for times_ns, excess in chunks:
        file.add(times_ns, excess)
    return file.kept
