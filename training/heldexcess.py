"""Held-out excess of all sources on disk, to be followed as often as levels need it.

Eight bytes for the time and eight for the excess of every record; nothing of it is held.
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

# Records that come back at once, 1 MB.
_N_ROWS: Final = 65_536
# Values kept of each source to see how they are spread, evenly over its time.
_MOST_SAMPLED: Final = 20_000


@dataclass
class HeldExcess:
    """One source's held-out excess.

    n_judged: records with an excess. highest: the largest. usual: where sustained rests,
    set by whoever knows.
    """

    source: str
    path: Path
    n_records: int
    n_judged: int
    highest: float
    sample: Floats = field(repr=False)
    usual: float = 0.0

    def chunks(self) -> Iterator[tuple[Ints, Floats]]:
        """Yield times (n,) and excess (n,), NaN = not judged, in order of time."""
        with self.path.open("rb") as file:
            while True:
                block = np.fromfile(file, dtype=np.float64, count=2 * _N_ROWS)
                if not len(block):
                    return
                rows = block.reshape(-1, 2)
                yield rows[:, 0].copy().view(np.int64), rows[:, 1].copy()


def keep_excess(
    source: str, n_records: int, chunks: Iterable[tuple[Ints, Floats]], path: Path
) -> HeldExcess:
    """Write one source's times and excess to a file.

    n_records: about how many there will be, for an even sample.
    """
    every = max(1, n_records // _MOST_SAMPLED)
    n_seen, n_judged, highest = 0, 0, -np.inf
    sample = [np.zeros(0)]
    with path.open("wb") as file:
        for times_ns, excess in chunks:
            rows = np.stack([times_ns.view(np.float64), excess], axis=1)
            file.write(rows.tobytes())
            judged = excess[~np.isnan(excess)]
            sample.append(judged[-n_judged % every :: every])
            n_seen += len(excess)
            n_judged += len(judged)
            highest = max(highest, float(judged.max(initial=-np.inf)))
    return HeldExcess(source, path, n_seen, n_judged, highest, np.concatenate(sample))
