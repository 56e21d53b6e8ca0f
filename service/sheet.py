"""All rows of one group side by side: what came, and what became of it.

A group of many small requests costs as little a row as one large batch, because arrays
are made once for the group and each request reads its own rows.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.engine import Engine, Scored
from service.parse import Batch
from service.times import format_times

STORED, KNOWN, CONFLICT, NO_ROOM = 0, 1, 2, 3
# Decimals of nats in answers; levels and alerts use the full number.
DECIMALS = 4


@dataclass
class Sheet:
    """The rows of some batches that were parsed for one engine.

    sources, times_ns (n,), values (n, n_channels) as in Batch; bad likewise or None.
    scored, status (STORED ...), flags (FLAG_* of the store): (n,), filled in by scoring.
    model_of: the model's name of known rows that another model scored.
    """

    engine: Engine
    sources: list[str]
    times_ns: NDArray[np.int64]
    values: NDArray[np.float64]
    bad: NDArray[np.bool_] | None
    unknown: dict[int, list[str]]
    extra: dict[int, dict[str, Any]]
    scored: Scored
    status: NDArray[np.uint8]
    flags: NDArray[np.int16]
    model_of: dict[int, str] = field(default_factory=dict)

    @classmethod
    def of(cls, engine: Engine, batches: Sequence[Batch]) -> Sheet:
        """Return the rows of some batches, nothing scored yet."""
        if len(batches) == 1:
            only = batches[0]
            sources, times_ns, values, bad = only.sources, only.times_ns, only.values, only.bad
            unknown, extra = only.unknown, only.extra
        else:
            sources = [name for batch in batches for name in batch.sources]
            times_ns = np.concatenate([batch.times_ns for batch in batches])
            values = np.concatenate([batch.values for batch in batches])
            bad = _joined_bad(batches)
            unknown, extra, start = {}, {}, 0
            for batch in batches:
                if batch.unknown:
                    unknown |= {start + row: names for row, names in batch.unknown.items()}
                if batch.extra:
                    extra |= {start + row: more for row, more in batch.extra.items()}
                start += len(batch.sources)
        n = len(sources)
        status, flags = np.zeros(n, dtype=np.uint8), np.zeros(n, dtype=np.int16)
        return cls(
            engine, sources, times_ns, values, bad, unknown, extra, Scored.empty(n), status, flags
        )

    @cached_property
    def absent(self) -> NDArray[np.bool_]:
        """(n, n_channels) True where a reading is absent, bad, or outside its span."""
        layout = self.engine.layout
        absent: NDArray[np.bool_] = np.isnan(self.values)
        if layout.has_spans:
            absent |= (self.values < layout.low) | (self.values > layout.high)
        if self.bad is not None:
            absent |= self.bad
        return absent

    @cached_property
    def missing(self) -> dict[int, list[str]]:
        """Names of the channels without a usable reading, by row."""
        found: dict[int, list[str]] = {}
        if self.absent.any():
            names = self.engine.layout.names
            rows, columns = (axis.tolist() for axis in np.nonzero(self.absent))
            for row, column in zip(rows, columns, strict=True):
                found.setdefault(row, []).append(names[column])
        return found

    @cached_property
    def is_plain(self) -> bool:
        """Whether every row was stored and carries no mark."""
        return not (self.flags.any() or self.status.any() or self.scored.every)

    @cached_property
    def cells(self) -> list[tuple[Any, ...]]:
        """What answers show of every row, as numbers of Python, which are quick to read.

        Time, surprise, excess, sustained, the suspect's own surprise, low, high, best, reading
        and column, alert.
        """
        scored = self.scored
        nats = np.array(
            (scored.surprise, scored.excess, scored.sustained, scored.suspect_surprise)
        ).round(DECIMALS)
        # No answer says -0.0.
        nats += 0.0
        suspects = np.maximum(scored.suspect, 0).astype(np.intp)
        readings = self.values[np.arange(len(self.sources)), suspects]
        expected = np.array((scored.low, scored.high, scored.best, readings))
        columns = (
            format_times(self.times_ns),
            *nats.tolist(),
            *expected.tolist(),
            scored.suspect.tolist(),
            scored.alert.tolist(),
        )
        return list(zip(*columns, strict=True))


def _joined_bad(batches: Sequence[Batch]) -> NDArray[np.bool_] | None:
    if all(batch.bad is None for batch in batches):
        return None
    return np.concatenate(
        [
            batch.bad if batch.bad is not None else np.zeros_like(batch.values, dtype=np.bool_)
            for batch in batches
        ]
    )
