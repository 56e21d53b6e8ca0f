"""Reading a whole history: files in the order given, batch by batch, as records."""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Sequence
from pathlib import Path
from typing import Protocol

import numpy as np

from scoring.channels import ChannelTable
from training.history.batch import HistoryBatch, SourceRegister
from training.history.cells import CellFile
from training.history.columnar import ColumnarFile
from training.history.delimited import DelimitedFile
from training.history.files import find_files, is_parquet
from training.history.long import Aligner
from training.history.long_cells import is_long
from training.history.long_numbers import LongNumbers, NumberedReadings
from training.history.long_order import TimeOrder, TimeStretches
from training.history.options import SOURCE_COLUMN, BadHistory, HistoryOptions
from training.history.tally import NO_OFFSET, Tally
from training.history.wide import WideReader
from training.near import nearest_words

# How a name that may hold times looks, for the sentence about a missing time column.
_TIME_LIKE = re.compile(
    r"time|date|zeit|datum|stamp|uhr|clock|when|^ts$|^t$|hora|fecha|heure", re.I
)


class Advances(Protocol):
    """Something that shows progress: a bar, or nothing."""

    def advance(self, n: int) -> None:
        """Note that n more units are done."""
        ...


def read_history(
    paths: Iterable[Path | str],
    table: ChannelTable,
    options: HistoryOptions,
    tally: Tally,
    progress: Advances | None = None,
    *,
    every_channel: bool = True,
) -> Iterator[HistoryBatch]:
    """Yield every row of a history as records, in the order of files and rows.

    Long files come after wide ones and in the order of their times, all as one.

    Bad rows keep their place in the batches and are counted in the tally; whether there
    are too many is the caller's question (Tally.refuse_if_mostly_bad).
    progress: advanced by the bytes read on disk; history_n_bytes gives the total.
    every_channel: refuse a long history in which a channel of the table never reports; a
        wide file must always have a column for each.
    Raises BadHistory for files that cannot be read as a history of this channel table.
    """
    sources = SourceRegister()
    long_files = []
    for path in find_files(paths):
        file = open_cells(path, options)
        refuse_missing_columns(file, options)
        if is_long(file, options, table):
            long_files.append(file)
            continue
        refuse_missing_channels(file, [c.name for c in table.instruments])
        reader = WideReader(file, table.instruments, options, sources, tally)
        yield from _read_wide(file, reader, progress)
    if long_files:
        numbers = LongNumbers(table, options, sources, tally)
        aligner = Aligner(table, options, sources)
        yield from _read_long(long_files, numbers, aligner, options, progress)
        if every_channel:
            numbers.refuse_absent(long_files[-1].path)


def _read_wide(
    file: CellFile, reader: WideReader, progress: Advances | None
) -> Iterator[HistoryBatch]:
    first = True
    for cells in file.batches(reader.columns):
        batch = reader.read(cells)
        if first:
            refuse_local_times(batch.problem, str(file.path))
        first = False
        if batch.n_rows:
            yield batch
        if progress is not None:
            progress.advance(cells.n_bytes)


def _read_long(
    files: list[CellFile],
    numbers: LongNumbers,
    aligner: Aligner,
    options: HistoryOptions,
    progress: Advances | None,
) -> Iterator[HistoryBatch]:
    order = _look_at_order(files, options, progress)
    if order.in_order:
        batches: Iterator[HistoryBatch | None] = (
            aligner.add(readings)
            for readings in _readings(files, numbers, progress, by_channel=False)
        )
        yield from (batch for batch in batches if batch is not None)
    else:
        with TimeStretches(order) as stretches:
            for readings in _readings(files, numbers, progress, by_channel=True):
                stretches.add(readings)
            batches = (aligner.add(readings) for readings in stretches.in_order())
            yield from (batch for batch in batches if batch is not None)
    last = aligner.finish()
    if last is not None:
        yield last


def _look_at_order(
    files: list[CellFile], options: HistoryOptions, progress: Advances | None
) -> TimeOrder:
    order, last_ns = TimeOrder(), dict[str, int]()
    for file in files:
        for n_bytes in order.look_at(file, options, last_ns):
            # The look and the reading are half the work each.
            if progress is not None:
                progress.advance(n_bytes // 2)
    return order


def _readings(
    files: list[CellFile], numbers: LongNumbers, progress: Advances | None, *, by_channel: bool
) -> Iterator[NumberedReadings]:
    for file in files:
        first = True
        for readings, problems, n_bytes in numbers.read_file(file, by_channel=by_channel):
            if first:
                refuse_local_times(problems.reason, str(file.path))
            first = False
            yield readings
            if progress is not None:
                progress.advance(n_bytes - n_bytes // 2)


def open_cells(path: Path, options: HistoryOptions) -> CellFile:
    """Return the file with its heading read; raises BadHistory."""
    return ColumnarFile(path) if is_parquet(path) else DelimitedFile(path, options)


def refuse_missing_columns(file: CellFile, options: HistoryOptions) -> None:
    """Raise BadHistory when the column of times is not there, or one of sources that was named.

    A history without sources is of one alone, unless somebody said where they stand.
    """
    if options.source not in (*file.names, SOURCE_COLUMN):
        raise BadHistory(
            str(file.path),
            f"no source column {options.source!r}{near_name(options.source, file.names)}",
        )
    if options.time in file.names:
        return
    alike = [name for name in file.names if _TIME_LIKE.search(name)]
    if alike:
        listed = ", ".join(repr(name) for name in alike)
        way = f"what looks like a time is {listed}: say --time {_quoted(alike[0])}"
    else:
        way = f"the columns are {_listed(file.names)}; name the one with --time NAME"
    raise BadHistory(str(file.path), f"no time column {options.time!r}; {way}")


def refuse_missing_channels(file: CellFile, wanted: Sequence[str]) -> None:
    """Raise BadHistory when a channel of the table has no column, naming the nearest."""
    missing = [name for name in wanted if name not in file.names]
    if missing:
        raise BadHistory(
            str(file.path),
            f"no column {missing[0]!r}, which the channel table names"
            f"{near_name(missing[0], file.names)}"
            + (f" ({len(missing)} such channels in all)" if len(missing) > 1 else ""),
        )


def near_name(name: str, names: Sequence[str]) -> str:
    """Return the hint at the most alike of some names, with the way out."""
    return nearest_words(name, names) or f"; the columns are {_listed(names)}"


def refuse_local_times(problem: np.ndarray[tuple[int], np.dtype[np.object_]], place: str) -> None:
    """Raise BadHistory when most of a file's first rows have a time without an offset."""
    if 2 * np.count_nonzero(problem == NO_OFFSET) > len(problem):
        raise BadHistory(
            place,
            "the times have no offset from UTC; say in which zone they were written, for "
            "example --zone Europe/Lisbon, or --zone UTC",
        )


def _quoted(name: str) -> str:
    return name if re.fullmatch(r"[\w.-]+", name) else f'"{name}"'


def _listed(names: Sequence[str]) -> str:
    shown = ", ".join(repr(name) for name in names[:12])
    return shown + (f" and {len(names) - 12} more" if len(names) > 12 else "")
