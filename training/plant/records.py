"""The plant's records one by one, in the form in which they are posted."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from training.plant.channels import INSTRUMENTS, PUMP_WORDS
from training.plant.simulate import Chunk


def rfc3339(times_ns: NDArray[np.int64]) -> list[str]:
    """Return times as RFC 3339 in UTC, to the second where every one is whole."""
    unit: Literal["s", "ms"] = "s" if not np.any(times_ns % 1_000_000_000) else "ms"
    moments: NDArray[np.datetime64] = times_ns.astype("datetime64[ns]")
    texts = np.datetime_as_string(moments, unit=unit)
    return [f"{text}Z" for text in texts]


def records_of(chunks: Iterable[Chunk]) -> Iterator[dict[str, Any]]:
    """Yield {"source", "time", "readings"} in order of time, ties by order of the chunks.

    chunks: what belongs together, for example one stretch of all stations; all are held.
    A missing reading is None, a state is its word.
    """
    held = list(chunks)
    times_ns = np.concatenate([chunk.times_ns for chunk in held] or [np.empty(0, np.int64)])
    texts = rfc3339(times_ns)
    rows = [(chunk.source, row) for chunk in held for row in chunk.values]
    for i in np.argsort(times_ns, kind="stable"):
        source, row = rows[i]
        yield {"source": source, "time": texts[i], "readings": _readings(row)}


def _readings(row: NDArray[np.float64]) -> dict[str, float | str | None]:
    readings: dict[str, float | str | None] = {}
    for instrument, value in zip(INSTRUMENTS, row.tolist(), strict=True):
        if math.isnan(value):
            readings[instrument.name] = None
        else:
            readings[instrument.name] = PUMP_WORDS[int(value)] if instrument.is_state else value
    return readings
