"""Long files to numbered readings: which source, which channel of the table, what number."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from scoring.channels import Channel, ChannelTable
from training.history.batch import SourceRegister
from training.history.cells import CellFile
from training.history.long_cells import LongCells, Readings
from training.history.options import BadHistory, HistoryOptions
from training.history.readings import NumberReader, read_words
from training.history.tally import INFINITE, TEXT, Tally
from training.history.wide import Problems, blank_outside_span, number_reader

Int64 = NDArray[np.int64]
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class NumberedReadings:
    """Good readings of one file, (n,) each; a value of NaN says that nothing was read.

    channels: index into the table's instruments.
    """

    file: Path
    lines: Int64
    times_ns: Int64
    source_codes: NDArray[np.int32]
    channels: Int64
    values: Floats


class LongNumbers:
    """Reads long files for one channel table; counts what is wrong."""

    def __init__(
        self, table: ChannelTable, options: HistoryOptions, sources: SourceRegister, tally: Tally
    ) -> None:
        self._instruments = table.instruments
        self._place = {c.name: i for i, c in enumerate(self._instruments)}
        self._options = options
        self._sources = sources
        self._tally = tally
        self._met: set[str] = set()

    def read_file(
        self, file: CellFile, *, by_channel: bool
    ) -> Iterator[tuple[NumberedReadings, Problems, int]]:
        """Yield for each batch of cells its readings, what was wrong, and the bytes read.

        by_channel: see LongCells.
        """
        reader = LongCells(file, self._options, self._sources, self._tally, by_channel=by_channel)
        numbers = number_reader(file, self._options)
        for cells in file.batches(reader.columns):
            readings, problems = reader.read(cells)
            yield self._number(file.path, readings, numbers), problems, cells.n_bytes

    def refuse_absent(self, place: Path) -> None:
        """Raise BadHistory when a channel of the table had no reading in any file."""
        absent = [c.name for c in self._instruments if c.name not in self._met]
        if absent:
            names = ", ".join(repr(name) for name in sorted(self._met)[:12])
            raise BadHistory(
                str(place),
                f"no reading of channel {absent[0]!r}, which the channel table names; "
                f"there are {names}",
            )

    def _number(self, file: Path, readings: Readings, numbers: NumberReader) -> NumberedReadings:
        self._met |= set(readings.names)
        lookup = np.array([self._place.get(name, -1) for name in readings.names] + [-1])
        channels = lookup[readings.channel_codes]
        keep = channels >= 0
        values = self._values(file, readings, channels, numbers, keep)
        return NumberedReadings(
            file,
            readings.lines[keep],
            readings.times_ns[keep],
            readings.source_codes[keep],
            channels[keep],
            values[keep],
        )

    def _values(
        self,
        file: Path,
        readings: Readings,
        channels: Int64,
        numbers: NumberReader,
        keep: NDArray[np.bool_],
    ) -> Floats:
        """Return the readings as numbers, (n,); clears keep where one cannot be used."""
        values = np.full(len(channels), np.nan)
        states = np.array([c.is_state for c in self._instruments])
        measured = keep & ~states[channels]
        values[measured] = self._measurements(file, readings, measured, channels, numbers, keep)
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
        file: Path,
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
            raise BadHistory(str(file), f"{place}: {error}") from None
        rows = np.flatnonzero(measured)
        for mask, reason in ((read.text, TEXT), (read.infinite, INFINITE)):
            for at in np.flatnonzero(mask).tolist() if mask is not None else ():
                row = rows[at]
                name = self._instruments[channels[row]].name
                detail = f"{name!r} reads {cells[at].as_py()!r}"
                self._tally.reject(file, int(readings.lines[row]), reason, detail)
                keep[row] = False
        return read.values
