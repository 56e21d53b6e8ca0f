"""Long rows (time, source, channel, value, maybe quality) to records.

Readings that come within three quarters of a step of the first one form a record, at
the time of its last reading; a channel without a reading in it stands at its last value,
if that is no older than a stated age. Nothing is taken from a record's future.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from scoring.channels import Channel, ChannelTable
from training.history.align import LONE_STEP_S, align_readings, find_step_s
from training.history.batch import HistoryBatch, SourceRegister
from training.history.cells import CellFile
from training.history.long_cells import LongCells, Readings
from training.history.options import DEFAULT_AGE_STEPS, BadHistory, HistoryOptions
from training.history.readings import NumberReader, read_words
from training.history.tally import INFINITE, OUT_OF_ORDER, TEXT, Tally
from training.history.times import NO_TIME, NS_PER_S
from training.history.wide import Problems, blank_outside_span, number_reader

Int64 = NDArray[np.int64]
Floats = NDArray[np.float64]

# How much of a step a record waits for its readings: instruments polled one after the
# other fit in, the next round of polling does not, even when it comes a little early.
WAIT_STEPS = 0.75


@dataclass(slots=True)
class _Standing:
    """What one source's readings have come to: its last values and its open record."""

    values: Floats
    times_ns: Int64
    # [time of first reading, of last reading, line of last reading]; NO_TIME: none open.
    open: Int64


class LongReader:
    """Makes records from long files; one reader serves all files of a reading."""

    def __init__(
        self, table: ChannelTable, options: HistoryOptions, sources: SourceRegister, tally: Tally
    ) -> None:
        self._instruments = table.instruments
        self._place = {c.name: i for i, c in enumerate(self._instruments)}
        self._options = options
        self._sources = sources
        self._tally = tally
        self._step_s = options.step_s or table.step_s
        self._standings: dict[int, _Standing] = {}
        self._met: set[str] = set()
        self._file = Path()

    def read_file(self, file: CellFile) -> Iterator[tuple[HistoryBatch | None, Problems, int]]:
        """Yield for each batch of cells its records, what was wrong, and the bytes read."""
        self._file = file.path
        cells_reader = LongCells(file, self._options, self._sources, self._tally)
        numbers = number_reader(file, self._options)
        for cells in file.batches(cells_reader.columns):
            readings, problems = cells_reader.read(cells)
            yield self._records(readings, numbers), problems, cells.n_bytes

    def finish(self) -> HistoryBatch | None:
        """Return the records that were still open."""
        parts = []
        for code, standing in self._standings.items():
            if standing.open[0] != NO_TIME:
                values = _aged(standing, self._age_ns)
                parts.append((code, standing.open[1:2], standing.open[2:3], values[None, :]))
                standing.open[0] = NO_TIME
        return self._batch(parts)

    def refuse_absent(self) -> None:
        """Raise BadHistory when a channel of the table had no reading in any file."""
        absent = [c.name for c in self._instruments if c.name not in self._met]
        if absent:
            names = ", ".join(repr(name) for name in sorted(self._met)[:12])
            raise BadHistory(
                str(self._file),
                f"no reading of channel {absent[0]!r}, which the channel table names; "
                f"there are {names}",
            )

    @property
    def _age_ns(self) -> int:
        step_s = self._step_s or LONE_STEP_S
        return int((self._options.age_s or DEFAULT_AGE_STEPS * step_s) * NS_PER_S)

    def _records(self, readings: Readings, numbers: NumberReader) -> HistoryBatch | None:
        self._met |= set(readings.names)
        lookup = np.array([self._place.get(name, -1) for name in readings.names] + [-1])
        channels = lookup[readings.channel_codes]
        keep = channels >= 0
        values = self._values(readings, channels, numbers, keep)
        if self._step_s is None and keep.any():
            self._step_s = find_step_s(readings.times_ns, readings.source_codes, channels)
        rows = np.flatnonzero(keep)
        rows = rows[np.argsort(readings.source_codes[rows], kind="stable")]
        cuts = np.flatnonzero(np.diff(readings.source_codes[rows])) + 1
        parts = [
            self._align(readings, part, channels, values)
            for part in np.split(rows, cuts)
            if len(part)
        ]
        return self._batch(parts)

    def _values(
        self, readings: Readings, channels: Int64, numbers: NumberReader, keep: NDArray[np.bool_]
    ) -> Floats:
        """Return the readings as numbers, (n,); clears keep where one cannot be used."""
        values = np.full(len(channels), np.nan)
        states = np.array([c.is_state for c in self._instruments])
        measured = keep & ~states[channels]
        values[measured] = self._measurements(readings, measured, channels, numbers, keep)
        for i, channel in enumerate(self._instruments):
            mine = keep & (channels == i)
            if not channel.is_state:
                values[mine] = self._inside_span(channel, values[mine])
            elif mine.any():
                cells = readings.values.filter(pa.array(mine))
                values[mine], n_unknown = read_words(cells, channel.words)
                if n_unknown:
                    self._tally.unknown_words[channel.name] += n_unknown
        return values

    def _inside_span(self, channel: Channel, values: Floats) -> Floats:
        n_outside = blank_outside_span(channel, values)
        if n_outside:
            self._tally.outside_span[channel.name] += n_outside
        return values

    def _measurements(
        self,
        readings: Readings,
        measured: NDArray[np.bool_],
        channels: Int64,
        numbers: NumberReader,
        keep: NDArray[np.bool_],
    ) -> Floats:
        cells = readings.values.filter(pa.array(measured))
        try:
            read = numbers.read(cells)
        except pa.ArrowInvalid as error:
            place = f"column {self._options.value!r}"
            raise BadHistory(str(self._file), f"{place}: {error}") from None
        rows = np.flatnonzero(measured)
        for mask, reason in ((read.text, TEXT), (read.infinite, INFINITE)):
            for at in np.flatnonzero(mask).tolist() if mask is not None else ():
                row = rows[at]
                name = self._instruments[channels[row]].name
                detail = f"{name!r} reads {cells[at].as_py()!r}"
                self._tally.reject(self._file, int(readings.lines[row]), reason, detail)
                keep[row] = False
        return read.values

    def _align(
        self, readings: Readings, rows: Int64, channels: Int64, values: Floats
    ) -> tuple[int, Int64, Int64, Floats]:
        code = int(readings.source_codes[rows[0]])
        k = len(self._instruments)
        standing = self._standings.get(code)
        if standing is None:
            standing = _Standing(
                np.full(k, np.nan), np.full(k, NO_TIME), np.full(3, NO_TIME, dtype=np.int64)
            )
            self._standings[code] = standing
        out_times = np.empty(len(rows), dtype=np.int64)
        out_lines = np.empty(len(rows), dtype=np.int64)
        out_values = np.empty((len(rows), k))
        early = np.zeros(len(rows), dtype=np.bool_)
        n_records = align_readings(
            readings.times_ns[rows],
            channels[rows],
            values[rows],
            readings.lines[rows],
            standing.times_ns,
            standing.values,
            standing.open,
            int(WAIT_STEPS * (self._step_s or LONE_STEP_S) * NS_PER_S),
            self._age_ns,
            out_times,
            out_lines,
            out_values,
            early,
        )
        for row in rows[early].tolist():
            detail = "earlier than the reading before it; sort the history by time"
            self._tally.reject(self._file, int(readings.lines[row]), OUT_OF_ORDER, detail)
        return (
            code,
            out_times[:n_records].copy(),
            out_lines[:n_records].copy(),
            out_values[:n_records].copy(),
        )

    def _batch(self, parts: list[tuple[int, Int64, Int64, Floats]]) -> HistoryBatch | None:
        parts = [part for part in parts if len(part[1])]
        if not parts:
            return None
        codes, times, lines, values = zip(*parts, strict=True)
        lengths = [len(part) for part in times]
        return HistoryBatch(
            file=self._file,
            lines=np.concatenate(lines),
            times_ns=np.concatenate(times),
            source_codes=np.repeat(np.array(codes, dtype=np.int32), lengths),
            source_names=self._sources.names,
            values=np.concatenate(values),
            problem=np.full(sum(lengths), "", dtype=object),
        )


def _aged(standing: _Standing, age_ns: int) -> Floats:
    """Return the values of the open record: last values that are not too old."""
    met = standing.times_ns != NO_TIME
    fresh = met & (standing.times_ns >= standing.open[1] - age_ns)
    return np.where(fresh, standing.values, np.nan)
