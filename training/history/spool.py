"""History kept on disk, per source and in time order, for learning to read as often as it likes.

Rows go to one plain binary file per source as they are read, and come back in chunks
through plain reads: resident memory does not grow with the history. Only a source whose
rows were out of order is held as times (16 bytes a row) while its order is found.
"""

from __future__ import annotations

import copy
import tempfile
from collections import Counter
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from io import BufferedReader
from pathlib import Path
from types import TracebackType
from typing import Self

import numpy as np
from numpy.typing import NDArray

from scoring.channels import ChannelTable
from training.history.batch import HistoryBatch
from training.history.exclusions import Exclusion, excluded_by, load_exclusions, stray_lines
from training.history.files import find_files
from training.history.options import BadHistory, HistoryOptions
from training.history.reading import Advances, read_history
from training.history.tally import TIME_TWICE, Tally

Int64 = NDArray[np.int64]
Floats = NDArray[np.float64]

# A row of a source's file: its time, its place in the history, its values.
N_LEAD = 2

# Lines of a file below this many fit beside the file's number in one place.
MAX_LINES = 1 << 40

# Rows wait in memory until this many bytes are together, so that a fleet of thousands
# of sources neither keeps thousands of files open nor writes a row at a time.
MAX_WAITING_BYTES = 16 * 1024 * 1024

N_CHUNK_ROWS = 65_536


@dataclass(slots=True)
class HistoryReport:
    """What came of a history: for a person to read, and for the model to carry.

    n_rows: rows met. rejected: rows not used by reason, with the first of each in words.
    outside_span, unknown_words, bad_quality: readings that count as missing, by channel
        (a word that the table does not list is scored as such, not as missing).
    excluded: rows left out on request, by the reason given; excluded_of: by source.
    stray: a sentence for each excluded period whose source has no record.
    n_records: rows kept, by source. first_ns, last_ns: of the rows kept, None if none.
    """

    n_rows: int = 0
    rejected: Counter[str] = field(default_factory=Counter)
    first: dict[str, str] = field(default_factory=dict)
    outside_span: Counter[str] = field(default_factory=Counter)
    unknown_words: Counter[str] = field(default_factory=Counter)
    bad_quality: Counter[str] = field(default_factory=Counter)
    excluded: Counter[str] = field(default_factory=Counter)
    excluded_of: Counter[str] = field(default_factory=Counter)
    stray: list[str] = field(default_factory=list)
    n_records: dict[str, int] = field(default_factory=dict)
    first_ns: int | None = None
    last_ns: int | None = None


@dataclass(slots=True)
class _SourceRows:
    """What the spool knows of one source; `order` is None while its file is in order."""

    path: Path
    n: int = 0
    last_ns: int = np.iinfo(np.int64).min
    first_ns: int = np.iinfo(np.int64).max
    in_order: bool = True
    order: Int64 | None = None
    waiting: list[Floats] = field(default_factory=list)


class Spool:
    """Good rows of a history per source, in time order, no time twice; a context manager.

    n_values: how many values a record has. folder: where to make the temporary folder,
    None for the system's place. Fill with `add` or `adopt`, then `finish` once, then read.
    """

    def __init__(self, n_values: int, folder: Path | None = None) -> None:
        self.n_values = n_values
        self.report = HistoryReport()
        self._folder: tempfile.TemporaryDirectory[str] | None = tempfile.TemporaryDirectory(
            prefix="oddbranch-history-", dir=folder
        )
        self.place = Path(self._folder.name)
        self._rows: dict[str, _SourceRows] = {}
        self._files: list[Path] = []
        self._n_waiting_bytes = 0

    @property
    def sources(self) -> tuple[str, ...]:
        """The sources with at least one record, sorted by name."""
        return tuple(sorted(name for name, rows in self._rows.items() if rows.n))

    def n_records(self, source: str) -> int:
        """Return how many records a source has."""
        return self._rows[source].n

    def first_last_ns(self, source: str) -> tuple[int, int]:
        """Return the times of a source's first and last record."""
        return self._rows[source].first_ns, self._rows[source].last_ns

    def only(self, sources: tuple[str, ...]) -> Spool:
        """Return a view of some sources, to be read only; files stay this one's to remove.

        A view is small, and another process that sees the folder can read by it.
        """
        view = copy.copy(self)
        view._folder, view._files, view.report = None, [], HistoryReport()
        view._rows = {source: self._rows[source] for source in sources}
        return view

    def chunks(self, source: str, n_rows: int = N_CHUNK_ROWS) -> Iterator[tuple[Int64, Floats]]:
        """Yield a source's records in time order, n_rows at a time, the last chunk shorter.

        Each is times (n,) int64 in UTC nanoseconds since 1970, strictly rising, and
        values (n, n_values) float64, NaN for missing.
        """
        rows = self._rows[source]
        with rows.path.open("rb") as file:
            for start in range(0, rows.n, n_rows):
                stop = min(start + n_rows, rows.n)
                if rows.order is None:
                    block = self._read(file, start, stop)
                else:
                    block = self._gather(file, rows.order[start:stop])
                yield block[:, 0].view(np.int64).copy(), block[:, N_LEAD:].copy()

    def add(self, batch: HistoryBatch, exclusions: tuple[Exclusion, ...], tally: Tally) -> None:
        """Keep the good rows of a batch; drop and count times twice and excluded periods."""
        if not self._files or self._files[-1] != batch.file:
            self._files.append(batch.file)
        rows = np.flatnonzero(batch.good)
        # A stable sort keeps each source's rows as they came.
        rows = rows[np.argsort(batch.source_codes[rows], kind="stable")]
        codes = batch.source_codes[rows]
        for part in np.split(rows, np.flatnonzero(np.diff(codes)) + 1):
            if len(part):
                source = batch.source_names[batch.source_codes[part[0]]]
                self._add_rows(source, batch, part, exclusions, tally)
        if self._n_waiting_bytes > MAX_WAITING_BYTES:
            self._write_waiting()

    def _add_rows(
        self,
        source: str,
        batch: HistoryBatch,
        part: Int64,
        exclusions: tuple[Exclusion, ...],
        tally: Tally,
    ) -> None:
        if exclusions:
            number = excluded_by(exclusions, source, batch.times_ns[part])
            for i, n in zip(*np.unique(number[number >= 0], return_counts=True), strict=True):
                self.report.excluded[exclusions[i].reason] += int(n)
            if (number >= 0).any():
                self.report.excluded_of[source] += int((number >= 0).sum())
            part = part[number < 0]
            if not len(part):
                return
        rows = self._rows.get(source)
        if rows is None:
            path = self.place / f"{len(self._rows)}.rows"
            rows = self._rows[source] = _SourceRows(path)
        times = batch.times_ns[part]
        before = np.concatenate([[rows.last_ns], times[:-1]])
        if rows.in_order and np.all(times >= before):
            self._reject_twice(batch.file, batch.lines[part[times == before]], source, tally)
            part = part[times > before]
        else:
            rows.in_order = False
        self._wait(rows, batch, part)

    def _wait(self, rows: _SourceRows, batch: HistoryBatch, part: Int64) -> None:
        times = batch.times_ns[part]
        block = np.empty((len(part), N_LEAD + self.n_values))
        block[:, 0] = times.view(np.float64)
        place = (len(self._files) - 1) * MAX_LINES + batch.lines[part]
        block[:, 1] = place.view(np.float64)
        block[:, N_LEAD:] = batch.values[part]
        rows.waiting.append(block)
        rows.n += len(part)
        if len(part):
            rows.last_ns = max(rows.last_ns, int(times.max()))
            rows.first_ns = min(rows.first_ns, int(times.min()))
        self._n_waiting_bytes += block.nbytes

    def _write_waiting(self) -> None:
        for rows in self._rows.values():
            if rows.waiting:
                with rows.path.open("ab") as file:
                    file.writelines(block.data for block in rows.waiting)
                rows.waiting = []
        self._n_waiting_bytes = 0

    def adopt(self, source: str, path: Path, n: int, first_ns: int, last_ns: int) -> None:
        """Take a source's file of rows as it is, which must be in order and below `place`."""
        self._rows[source] = _SourceRows(path, n, last_ns, first_ns)

    def file_of(self, source: str) -> tuple[Path, bool]:
        """Return the file that holds a source's rows, and whether they are in order there."""
        return self._rows[source].path, self._rows[source].order is None

    def finish(self, tally: Tally) -> None:
        """Write what waits, bring sources out of order into order, and close the report."""
        self._write_waiting()
        for source, rows in self._rows.items():
            rows.path.touch()
            if not rows.in_order:
                self._find_order(source, rows, tally)
        report, kept = self.report, [rows for rows in self._rows.values() if rows.n]
        report.n_rows, report.rejected, report.first = tally.n_rows, tally.rejected, tally.first
        report.outside_span, report.unknown_words = tally.outside_span, tally.unknown_words
        report.bad_quality = tally.bad_quality
        report.n_records = {source: self._rows[source].n for source in self.sources}
        report.first_ns = min((rows.first_ns for rows in kept), default=None)
        report.last_ns = max((rows.last_ns for rows in kept), default=None)

    def _find_order(self, source: str, rows: _SourceRows, tally: Tally) -> None:
        lead = np.empty((rows.n, N_LEAD), dtype=np.int64)
        with rows.path.open("rb") as file:
            for start in range(0, rows.n, N_CHUNK_ROWS):
                block = self._read(file, start, min(start + N_CHUNK_ROWS, rows.n))
                lead[start : start + len(block)] = block[:, :N_LEAD].view(np.int64)
        order = np.argsort(lead[:, 0], kind="stable")
        twice = np.diff(lead[order, 0], prepend=lead[order[0], 0] - 1) == 0
        # Of two rows with one time the one read first is kept, as in a source in order.
        for place in lead[order[twice], 1]:
            file_number, line = divmod(int(place), MAX_LINES)
            self._reject_twice(self._files[file_number], np.array([line]), source, tally)
        rows.order = order[~twice]
        rows.n = len(rows.order)

    @staticmethod
    def _reject_twice(file: Path, lines: Int64, source: str, tally: Tally) -> None:
        for line in lines:
            tally.reject(file, int(line), TIME_TWICE, f"source {source!r} has this time already")

    def _read(self, file: BufferedReader, start: int, stop: int) -> Floats:
        width = N_LEAD + self.n_values
        file.seek(start * width * 8)
        block = np.empty((stop - start, width))
        n_bytes = file.readinto(block.data)
        assert n_bytes == block.nbytes, "a source's file is shorter than its count of rows"
        return block

    def _gather(self, file: BufferedReader, wanted: Int64) -> Floats:
        """Return rows by number: runs of neighbours are one read each."""
        block = np.empty((len(wanted), N_LEAD + self.n_values))
        ends = [*(np.flatnonzero(np.diff(wanted) != 1) + 1), len(wanted)]
        start = 0
        for end in ends:
            block[start:end] = self._read(file, int(wanted[start]), int(wanted[end - 1]) + 1)
            start = end
        return block

    def close(self) -> None:
        """Remove the files, unless they are another's; may be called twice."""
        if self._folder is not None:
            self._folder.cleanup()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        at: TracebackType | None,
    ) -> None:
        self.close()


# Fills a spool from files by itself, or returns False and leaves it empty.
Fill = Callable[[list[Path], Spool, tuple[Exclusion, ...], Tally], bool]


def spool_history(
    paths: Iterable[Path | str],
    table: ChannelTable,
    options: HistoryOptions,
    progress: Advances | None = None,
    *,
    exclude: Path | None = None,
    rejected: Path | None = None,
    folder: Path | None = None,
    fill: Fill | None = None,
) -> Spool:
    """Read a whole history and return it as a spool, which the caller closes.

    exclude: a file of periods to leave out. rejected: where to list bad rows.
    folder: where the temporary folder goes; it needs (n_instruments + 2) * 8 bytes a row.
    progress: advanced by bytes read; history_n_bytes(paths) gives the total.
    fill: who reads the files if they can; this process does if not.
    Raises BadHistory, also when most rows are bad and when none is left.
    """
    files = find_files(paths)
    place = str(files[0]) if len(files) == 1 else f"{files[0]} and {len(files) - 1} more"
    spool = Spool(len(table.instruments), folder)
    try:
        exclusions = load_exclusions(exclude, options) if exclude is not None else ()
        with Tally(rejected) as tally:
            if fill is None or not fill(files, spool, exclusions, tally):
                for batch in read_history(files, table, options, tally, progress):
                    spool.add(batch, exclusions, tally)
            spool.finish(tally)
            tally.refuse_if_mostly_bad(place)
        if not spool.sources:
            why = "every row is in an excluded period" if tally.n_rows else "a heading and no rows"
            raise BadHistory(place, f"no record is left to use: {why}")
        report = spool.report
        report.stray = stray_lines(exclusions, {*report.n_records, *report.excluded_of})
    except BaseException:
        spool.close()
        raise
    return spool
