"""A batch of records as arrays: what every reader of history gets to see."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from training.history.times import NO_TIME

Int64 = NDArray[np.int64]
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class HistoryBatch:
    """Some consecutive records of one file; bad rows keep their place.

    lines: (n,) int64, the 1-based line of each row in the file (in Parquet the number of
        the row, in the long form the line of the record's last reading).
    times_ns: (n,) int64, UTC nanoseconds since 1970; NO_TIME where the time is broken.
    source_codes: (n,) int32, index into source_names; -1 where the row names no source.
    source_names: all sources met so far in this reading; a code never changes its name.
    values: (n, n_instruments) float64 in the order of the table's instruments; NaN for
        missing, and everywhere in a bad row. A state holds the index of its word, and
        len(words) for a word that the table does not list.
    problem: (n,) object array of str, "" for a good row, else the reason (see tally.py).
    time_text: the times as written, n of them, if the options asked for them.
    """

    file: Path
    lines: Int64
    times_ns: Int64
    source_codes: NDArray[np.int32]
    source_names: tuple[str, ...]
    values: Floats
    problem: NDArray[np.object_]
    time_text: list[str] | None = None

    @property
    def n_rows(self) -> int:
        """How many rows the batch has, good and bad."""
        return len(self.lines)

    @property
    def good(self) -> NDArray[np.bool_]:
        """Mask of the rows that can be used, (n,)."""
        return np.asarray(self.problem == "", dtype=np.bool_)

    @property
    def sources(self) -> list[str]:
        """The source of each row, "" where it has none."""
        names = (*self.source_names, "")
        return [names[code] for code in self.source_codes]


class SourceRegister:
    """Gives each source of a reading a number, in the order of first appearance."""

    def __init__(self) -> None:
        self._codes: dict[str, int] = {}

    @property
    def names(self) -> tuple[str, ...]:
        """All names so far, by number."""
        return tuple(self._codes)

    def code(self, name: str) -> int:
        """Return the number of one source."""
        return self._codes.setdefault(name, len(self._codes))

    def codes(self, column: Any) -> NDArray[np.int32]:
        """Return the number of each cell's source, (n,) int32; -1 for an empty cell."""
        if isinstance(column, pa.DictionaryArray):
            column = column.dictionary_decode()
        coded = pc.dictionary_encode(column)
        names = ["" if cell is None else str(cell).strip() for cell in coded.dictionary.to_pylist()]
        lookup = np.array([self.code(name) if name else -1 for name in names] + [-1], np.int32)
        places = pc.fill_null(coded.indices, len(names)).to_numpy(zero_copy_only=False)
        return np.asarray(lookup[places], dtype=np.int32)


__all__ = ["NO_TIME", "HistoryBatch", "SourceRegister"]
