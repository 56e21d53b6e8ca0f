"""The plant's records as the exports that sites really hand over.

Wide or long CSV in the separators, decimal marks, column names and clocks people use,
Parquet, and the list of incidents. Every writer takes a stream of chunks and holds one.
"""

from __future__ import annotations

import csv
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pa_csv
import pyarrow.parquet as pq
from numpy.typing import NDArray

from training.plant.channels import INSTRUMENTS, NAMES, PUMP_WORDS
from training.plant.incidents import Incident
from training.plant.records import rfc3339
from training.plant.simulate import Chunk
from training.plant.utility import BadPlant

# OPC UA's words for the two states a reading of the plant can be in.
_GOOD: Final = "Good"
_BAD: Final = "Bad"
# Row groups of a few megabytes; chunks of a day at one minute would be tiny ones.
_ROWS_PER_GROUP: Final = 50_000


@dataclass(frozen=True, slots=True)
class CsvForm:
    """How a CSV is written.

    zone: None writes UTC in RFC 3339; a zone's name, for example "Europe/Berlin", writes
        local times without an offset, as many exports do.
    renamed: other column names, by ours.
    """

    separator: str = ","
    decimal: str = "."
    time_name: str = "time"
    source_name: str = "source"
    zone: str | None = None
    renamed: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if self.separator == self.decimal:
            raise BadPlant(f"separator and decimal mark are both {self.separator!r}")


SEMICOLON: Final = CsvForm(separator=";", decimal=",")


def write_wide_csv(chunks: Iterable[Chunk], path: Path, form: CsvForm | None = None) -> int:
    """Write one row per record, a missing reading as an empty cell; return n_records."""
    return _write_csv(chunks, path, form or CsvForm(), _wide_table)


def write_long_csv(chunks: Iterable[Chunk], path: Path, form: CsvForm | None = None) -> int:
    """Write one row per reading: time, source, channel, value, quality; return n_records.

    A missing reading is an empty value with quality Bad.
    """
    return _write_csv(chunks, path, form or CsvForm(), _long_table)


def write_parquet(chunks: Iterable[Chunk], path: Path, *, long: bool = False) -> int:
    """Write records as Parquet with UTC timestamps, wide or long; return n_records.

    Long form keeps every value as text, because words and numbers share its column.
    """
    n_records = 0
    writer: pq.ParquetWriter | None = None
    waiting: list[pa.Table] = []
    try:
        for chunk in chunks:
            n_records += len(chunk.times_ns)
            times = pa.array(chunk.times_ns, pa.timestamp("ns", tz="UTC"))
            waiting.append((_long_table if long else _wide_table)(chunk, times, CsvForm()))
            writer = writer or pq.ParquetWriter(path, waiting[0].schema)
            if sum(len(table) for table in waiting) >= _ROWS_PER_GROUP:
                writer.write_table(pa.concat_tables(waiting))
                waiting.clear()
        if writer and waiting:
            writer.write_table(pa.concat_tables(waiting))
    finally:
        if writer:
            writer.close()
    return n_records


def write_incidents(incidents: Iterable[Incident], path: Path) -> None:
    """Write the truth as CSV: source, start, end, kind, size, channels separated by |.

    size is empty for the kinds that have none.
    """
    with path.open("w", encoding="utf-8", newline="") as file:
        rows = csv.writer(file, lineterminator="\n")
        rows.writerow(["source", "start", "end", "kind", "size", "channels"])
        for incident in incidents:
            times = np.array([incident.start_ns, incident.end_ns])
            size = "" if incident.size is None else f"{incident.size:.3f}"
            row = [incident.source, *rfc3339(times), incident.kind, size]
            rows.writerow([*row, "|".join(incident.channels)])


def _write_csv(
    chunks: Iterable[Chunk],
    path: Path,
    form: CsvForm,
    to_table: Callable[[Chunk, Any, CsvForm], Any],
) -> int:
    n_records = 0
    with path.open("wb") as file:
        for chunk in chunks:
            times = rfc3339(chunk.times_ns) if form.zone is None else _local(chunk, form.zone)
            table = _texts(to_table(chunk, pa.array(times), form), form.decimal)
            # Nothing of ours holds a separator, a quote or a line break.
            options = pa_csv.WriteOptions(
                include_header=n_records == 0 and file.tell() == 0,
                delimiter=form.separator,
                quoting_style="none",
                quoting_header="none",
            )
            pa_csv.write_csv(table, file, options)
            n_records += len(chunk.times_ns)
    return n_records


def _wide_table(chunk: Chunk, times: Any, form: CsvForm) -> Any:
    source = pa.array([chunk.source]).take(pa.array(np.zeros(len(chunk.times_ns), np.int64)))
    columns = {form.time_name: times, form.source_name: source}
    for number, name in enumerate(NAMES):
        columns[form.renamed.get(name, name)] = _column(chunk.values[:, number], number)
    return pa.table(columns)


def _long_table(chunk: Chunk, times: Any, form: CsvForm) -> Any:
    """Rows by record, and by channel inside a record."""
    n_records, n_channels = chunk.values.shape
    columns = [pc.cast(_column(chunk.values[:, j], j), pa.string()) for j in range(n_channels)]
    # Columns lie one behind the other; reading across them gives record by record.
    across = np.arange(n_records * n_channels).reshape(n_channels, n_records).T.ravel()
    values = pa.concat_arrays(columns).take(pa.array(across))
    names = pa.array([form.renamed.get(name, name) for name in NAMES])
    return pa.table(
        {
            form.time_name: times.take(pa.array(np.repeat(np.arange(n_records), n_channels))),
            form.source_name: pa.repeat(chunk.source, n_records * n_channels),
            "channel": names.take(pa.array(np.tile(np.arange(n_channels), n_records))),
            "value": values,
            "quality": pc.if_else(pc.is_null(values), _BAD, _GOOD),
        }
    )


def _column(values: NDArray[np.float64], number: int) -> Any:
    """Return one channel as an Arrow column: words for states, null where missing."""
    missing = np.isnan(values)
    if not INSTRUMENTS[number].is_state:
        return pa.array(values, mask=missing)
    index = np.where(missing, 0.0, values).astype(np.int64)
    return pa.array(PUMP_WORDS).take(pa.array(index, mask=missing))


def _texts(table: Any, decimal: str) -> Any:
    """Return the table with numbers as text in the wanted decimal mark."""
    if decimal == ".":
        return table
    for number, name in enumerate(table.column_names):
        column = table.column(name)
        if pa.types.is_floating(column.type) or name == "value":
            text = pc.replace_substring(pc.cast(column, pa.string()), ".", decimal)
            table = table.set_column(number, name, text)
    return table


def _local(chunk: Chunk, zone: str) -> list[str]:
    utc = pd.DatetimeIndex(chunk.times_ns.astype("datetime64[ns]"), tz="UTC")
    return list(utc.tz_convert(ZoneInfo(zone)).strftime("%Y-%m-%d %H:%M:%S"))
