"""Wide rows to records: a time, maybe a source, and a column for each channel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from scoring.channels import Channel
from training.history.batch import HistoryBatch, SourceRegister
from training.history.cells import CellBatch, CellFile
from training.history.options import ONLY_SOURCE, BadHistory, HistoryOptions
from training.history.readings import NumberReader, read_words
from training.history.tally import INFINITE, NO_SOURCE, TEXT, WRONG_CELLS, Tally
from training.history.times import TimeReader

Mask = NDArray[np.bool_]


@dataclass(slots=True)
class Problems:
    """The first thing wrong with each row of a batch, counted as it is found."""

    batch: CellBatch
    tally: Tally
    reason: NDArray[np.object_]

    def add(self, row: int, reason: str, detail: str) -> None:
        """Call a row bad, unless it is already."""
        if self.reason[row] == "":
            self.reason[row] = reason
            self.tally.reject(self.batch.file, int(self.batch.lines[row]), reason, detail)


class WideReader:
    """Makes records from the cells of one wide file."""

    def __init__(
        self,
        file: CellFile,
        instruments: tuple[Channel, ...],
        options: HistoryOptions,
        sources: SourceRegister,
        tally: Tally,
    ) -> None:
        self._instruments = instruments
        self._options = options
        self._sources = sources
        self._tally = tally
        self._times = TimeReader(options)
        self._numbers = number_reader(file, options)
        self._has_source = options.source in file.names
        source = [options.source] if self._has_source else []
        names = [options.time, *source, *(c.name for c in instruments)]
        self.columns = list(dict.fromkeys(names))

    def read(self, cells: CellBatch) -> HistoryBatch:
        """Return the records of a batch of cells; what is wrong goes to the tally."""
        n = len(cells.lines)
        problems = Problems(cells, self._tally, np.full(n, "", dtype=object))
        self._tally.n_rows += n
        for row, met in cells.n_cells_met.items():
            problems.add(row, WRONG_CELLS, f"{met} cells, the heading has {cells.n_cells}")
        codes = self._read_sources(cells, problems)
        times_ns, bad_times = self._times.read(cells.columns[self._options.time], codes)
        for bad in bad_times:
            problems.add(*bad)
        values = self._read_values(cells, problems)
        values[problems.reason != ""] = np.nan
        self._note_unusual(values)
        text = cells.columns[self._options.time] if self._options.keep_time_text else None
        return HistoryBatch(
            file=cells.file,
            lines=cells.lines,
            times_ns=times_ns,
            source_codes=codes,
            source_names=self._sources.names,
            values=values,
            problem=problems.reason,
            time_text=None if text is None else [str(t or "") for t in text.to_pylist()],
        )

    def _read_sources(self, cells: CellBatch, problems: Problems) -> NDArray[np.int32]:
        if not self._has_source:
            return np.full(len(cells.lines), self._sources.code(ONLY_SOURCE), dtype=np.int32)
        codes = self._sources.codes(cells.columns[self._options.source])
        for row in np.flatnonzero(codes < 0):
            problems.add(int(row), NO_SOURCE, f"column {self._options.source!r} is empty")
        return codes

    def _read_values(self, cells: CellBatch, problems: Problems) -> NDArray[np.float64]:
        values = np.empty((len(cells.lines), len(self._instruments)))
        for i, channel in enumerate(self._instruments):
            if channel.is_state:
                values[:, i], _ = read_words(cells.columns[channel.name], channel.words)
            else:
                values[:, i] = self._read_measurement(channel, cells, problems)
        return values

    def _read_measurement(
        self, channel: Channel, cells: CellBatch, problems: Problems
    ) -> NDArray[np.float64]:
        column = cells.columns[channel.name]
        try:
            numbers = self._numbers.read(column)
        except pa.ArrowInvalid as error:
            raise BadHistory(str(cells.file), f"column {channel.name!r}: {error}") from None
        for mask, reason in ((numbers.text, TEXT), (numbers.infinite, INFINITE)):
            for row in np.flatnonzero(mask) if mask is not None else ():
                problems.add(
                    int(row), reason, f"{channel.name!r} reads {column[int(row)].as_py()!r}"
                )
        return numbers.values

    def _note_unusual(self, values: NDArray[np.float64]) -> None:
        """Blank what is outside its span, and count it and the words not listed."""
        for i, channel in enumerate(self._instruments):
            n_outside = blank_outside_span(channel, values[:, i])
            if n_outside:
                self._tally.outside_span[channel.name] += n_outside
            if channel.is_state:
                n_unknown = np.count_nonzero(values[:, i] == len(channel.words))
                if n_unknown:
                    self._tally.unknown_words[channel.name] += int(n_unknown)


def number_reader(file: CellFile, options: HistoryOptions) -> NumberReader:
    """Return a reader of numbers that looks for decimal commas only where they can be.

    Between commas as separators, `1,234` in quotes may as well be a thousand: there a
    decimal comma must be said.
    """
    return NumberReader(options.decimal or ("." if file.separator in (",", "") else None))


def blank_outside_span(channel: Channel, values: NDArray[np.float64]) -> int:
    """Make readings outside the channel's span missing, in place; return how many."""
    if channel.span is None:
        return 0
    outside = (values < channel.span[0]) | (values > channel.span[1])
    n_outside = int(np.count_nonzero(outside))
    if n_outside:
        values[outside] = np.nan
    return n_outside
