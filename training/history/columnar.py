"""Parquet files, read row group by row group in batches of bounded size."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet

from training.history.cells import CellBatch
from training.history.delimited import refuse_twice
from training.history.options import BadHistory

N_BATCH_ROWS = 32_768


class ColumnarFile:
    """A Parquet history with its schema read; see CellFile."""

    separator = ""

    def __init__(self, path: Path) -> None:
        self.path = path
        try:
            with pyarrow.parquet.ParquetFile(path) as file:
                self.names = tuple(file.schema_arrow.names)
        except (pa.ArrowException, OSError) as error:
            raise BadHistory(str(path), f"cannot be read as Parquet: {error}") from None
        refuse_twice(path, self.names)

    def batches(self, columns: Sequence[str]) -> Iterator[CellBatch]:
        """Yield the rows of the file in batches, with the columns asked for."""
        row, n_given = 0, 0
        size = self.path.stat().st_size
        try:
            # Without pre-buffering, what is in memory is one row group's columns, not all.
            with pyarrow.parquet.ParquetFile(self.path, pre_buffer=False) as file:
                n_rows = max(file.metadata.num_rows, 1)
                for rows in file.iter_batches(N_BATCH_ROWS, columns=list(columns)):
                    n_bytes = size * (row + rows.num_rows) // n_rows - n_given
                    n_given += n_bytes
                    yield CellBatch(
                        self.path,
                        np.arange(row + 1, row + 1 + rows.num_rows),
                        {name: rows.column(name) for name in columns},
                        n_bytes,
                    )
                    row += rows.num_rows
        except (pa.ArrowException, OSError) as error:
            raise BadHistory(str(self.path), f"cannot be read to its end: {error}") from None
