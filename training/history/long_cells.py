"""The cells of long files taken apart: whose reading, of what channel, when, how good."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from scoring.channels import ChannelTable
from training.history.batch import SourceRegister
from training.history.cells import CellBatch, CellFile
from training.history.options import ONLY_SOURCE, HistoryOptions
from training.history.readings import cell_word
from training.history.tally import NO_CHANNEL, NO_SOURCE, UNKNOWN_QUALITY, WRONG_CELLS, Tally
from training.history.times import TimeReader
from training.history.wide import Problems

Int64 = NDArray[np.int64]

# The severities of OPC UA Part 8 as words; longer names begin with one of them.
QUALITIES = ("good", "uncertain", "bad")


# More than any fleet's tables have: a source and a channel make one number.
MAX_CHANNELS = 1 << 24


def is_long(file: CellFile, options: HistoryOptions, table: ChannelTable | None) -> bool:
    """True for a file with a column of channels and one of values, unless these are channels."""
    if not {options.channel, options.value} <= set(file.names):
        return False
    known = {c.name for c in table.channel} if table is not None else set()
    return not {options.channel, options.value} <= known


def long_columns(file: CellFile, options: HistoryOptions) -> list[str]:
    """Return the columns that a long file is read for."""
    maybe = [name for name in (options.source, options.quality) if name in file.names]
    return [options.time, options.channel, options.value, *maybe]


@dataclass(frozen=True, slots=True)
class Readings:
    """Good readings of one batch of cells, (n,) each, in the order of the file.

    names: channel names by channel code. values: pyarrow array of the cells as written.
    """

    lines: Int64
    times_ns: Int64
    source_codes: NDArray[np.int32]
    channel_codes: Int64
    names: list[str]
    values: Any


class LongCells:
    """Takes the cells of one long file apart, up to the values, which stay as written.

    by_channel: the times of a source step back where another channel begins. Then the
        two passes of the hour that exists twice are told apart within a channel.
    """

    def __init__(
        self,
        file: CellFile,
        options: HistoryOptions,
        sources: SourceRegister,
        tally: Tally,
        *,
        by_channel: bool = False,
    ) -> None:
        self._by_channel = by_channel
        self._channels_met = SourceRegister()
        self._options = options
        self._sources = sources
        self._tally = tally
        self._times = TimeReader(options)
        self.columns = long_columns(file, options)

    def read(self, cells: CellBatch) -> tuple[Readings, Problems]:
        """Return the readings of a batch, those of bad quality as empty cells.

        Problems.reason is by row of the batch; rows with one are not among the readings.
        """
        options, n = self._options, len(cells.lines)
        problems = Problems(cells, self._tally, np.full(n, "", dtype=object))
        self._tally.n_rows += n
        for row, met in cells.n_cells_met.items():
            problems.add(row, WRONG_CELLS, f"{met} cells, the heading has {cells.n_cells}")
        if options.source in cells.columns:
            codes = self._sources.codes(cells.columns[options.source])
        else:
            codes = np.full(n, self._sources.code(ONLY_SOURCE), dtype=np.int32)
        for row in np.flatnonzero(codes < 0).tolist():
            problems.add(row, NO_SOURCE, f"column {options.source!r} is empty")
        channel_codes, names = self._channels(cells, problems)
        keys = codes.astype(np.int64)
        if self._by_channel:
            numbers = np.array([self._channels_met.code(name) for name in names] + [-1])
            keys = keys * MAX_CHANNELS + numbers[channel_codes]
        times_ns, bad_times = self._times.read(cells.columns[options.time], keys)
        for bad in bad_times:
            problems.add(*bad)
        values = self._blank_bad_quality(cells, problems, channel_codes, names)
        good = problems.reason == ""
        readings = Readings(
            cells.lines[good],
            times_ns[good],
            codes[good],
            channel_codes[good],
            names,
            values.filter(pa.array(good)),
        )
        return readings, problems

    def _channels(self, cells: CellBatch, problems: Problems) -> tuple[Int64, list[str]]:
        coded = pc.dictionary_encode(_decoded(cells.columns[self._options.channel]))
        names = [cell_word(cell) for cell in coded.dictionary.to_pylist()]
        codes = pc.fill_null(coded.indices, -1).to_numpy(zero_copy_only=False).astype(np.int64)
        for row in np.flatnonzero(codes < 0).tolist():
            problems.add(row, NO_CHANNEL, f"column {self._options.channel!r} is empty")
        return codes, names

    def _blank_bad_quality(
        self, cells: CellBatch, problems: Problems, channel_codes: Int64, names: list[str]
    ) -> Any:
        values = _decoded(cells.columns[self._options.value])
        if self._options.quality not in cells.columns:
            return values
        coded = pc.dictionary_encode(_decoded(cells.columns[self._options.quality]))
        words = [cell_word(cell) for cell in coded.dictionary.to_pylist()]
        kinds = [next((q for q in QUALITIES if w.casefold().startswith(q)), w) for w in words]
        codes = pc.fill_null(coded.indices, len(words)).to_numpy(zero_copy_only=False)
        known = np.array([kind in QUALITIES or kind == "" for kind in kinds] + [True])
        for row in np.flatnonzero(~known[codes]).tolist():
            listed = ", ".join(QUALITIES)
            problems.add(row, UNKNOWN_QUALITY, f"{words[codes[row]]!r} is none of {listed}")
        bad = np.array([kind == "bad" for kind in kinds] + [False])[codes]
        bad &= problems.reason == ""
        for code, count in zip(*np.unique(channel_codes[bad], return_counts=True), strict=True):
            self._tally.bad_quality[names[code]] += int(count)
        return pc.if_else(pa.array(bad), None, values) if bad.any() else values


def _decoded(column: Any) -> Any:
    return column.dictionary_decode() if isinstance(column, pa.DictionaryArray) else column
