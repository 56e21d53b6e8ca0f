"""Rows of a file as columns of cells, before anything is known about their meaning."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class CellBatch:
    """Some consecutive rows of one file.

    lines: (n,) int64, the 1-based line of each row; in Parquet the number of the row.
    columns: by name, pyarrow arrays of n cells; null is an empty cell. From text files
        all are strings; from Parquet they keep the type of the file.
    n_cells: how many cells the heading has.
    n_cells_met: by row, how many cells a row with the wrong number of them has; all its
        cells here are null.
    n_bytes: how much of the file on disk was read for this batch.
    """

    file: Path
    lines: NDArray[np.int64]
    columns: dict[str, Any]
    n_bytes: int
    n_cells: int = 0
    n_cells_met: dict[int, int] = field(default_factory=dict)


class CellFile(Protocol):
    """A history file whose heading has been read.

    names: the columns in order. separator: of text files, "" for Parquet.
    """

    path: Path
    names: tuple[str, ...]
    separator: str

    def batches(self, columns: Sequence[str]) -> Iterator[CellBatch]:
        """Yield the rows from the first to the last, with the columns asked for."""
        ...
