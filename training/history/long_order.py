"""Long files that are not in time order, brought into it on disk.

Exports often hold one channel after the other, or a file for each. A first look at the
times tells; if they step back anywhere, all readings go to files for stretches of time,
and each stretch is sorted when it is read back: memory holds one stretch.
"""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Self

import numpy as np
from numpy.typing import NDArray

from training.history.batch import SourceRegister
from training.history.cells import CellFile
from training.history.long_numbers import NumberedReadings
from training.history.options import HistoryOptions
from training.history.times import NO_TIME, NS_PER_S, TimeReader

Int64 = NDArray[np.int64]

# A stretch is an hour, or longer where there would be more stretches than this.
STRETCH_NS = 3600 * NS_PER_S
MAX_STRETCHES = 4000

MAX_WAITING_BYTES = 16 * 1024 * 1024

_ROW = np.dtype(
    [
        ("line", np.int64),
        ("time_ns", np.int64),
        ("source", np.int32),
        ("channel", np.int32),
        ("value", np.float64),
    ]
)


@dataclass(slots=True)
class TimeOrder:
    """What a first look at the times of some files shows.

    in_order: no source's time steps back, from file to file as well.
    """

    in_order: bool = True
    first_ns: int = np.iinfo(np.int64).max
    last_ns: int = NO_TIME

    def look_at(
        self, file: CellFile, options: HistoryOptions, last_ns: dict[str, int]
    ) -> Iterator[int]:
        """Look at the times of one file; yields the bytes read.

        last_ns: each source's latest time so far; kept up to date.
        """
        sources, times = SourceRegister(), TimeReader(options)
        has_source = options.source in file.names
        columns = [options.time, options.source] if has_source else [options.time]
        for cells in file.batches(columns):
            n = len(cells.lines)
            codes = np.zeros(n, dtype=np.int32)
            if has_source:
                codes = sources.codes(cells.columns[options.source])
            times_ns, _ = times.read(cells.columns[options.time], codes)
            self._note(times_ns, codes, (*sources.names, ""), last_ns)
            yield cells.n_bytes

    def _note(
        self,
        times_ns: Int64,
        codes: NDArray[np.int32],
        names: tuple[str, ...],
        last_ns: dict[str, int],
    ) -> None:
        rows = np.flatnonzero(times_ns != NO_TIME)
        rows = rows[np.argsort(codes[rows], kind="stable")]
        cuts = np.flatnonzero(np.diff(codes[rows])) + 1
        for part in np.split(rows, cuts):
            if len(part):
                mine, name = times_ns[part], names[codes[part[0]]]
                if mine[0] < last_ns.get(name, NO_TIME) or np.any(np.diff(mine) < 0):
                    self.in_order = False
                last_ns[name] = int(mine[-1])
                self.first_ns = min(self.first_ns, int(mine.min()))
                self.last_ns = max(self.last_ns, int(mine.max()))


class TimeStretches:
    """Readings on disk by stretch of time; a context manager. Fill with `add`, then read."""

    def __init__(self, order: TimeOrder, folder: Path | None = None) -> None:
        n_ns = max(order.last_ns - order.first_ns, 0)
        self._stretch_ns = max(STRETCH_NS, n_ns // MAX_STRETCHES + 1)
        self._folder = tempfile.TemporaryDirectory(prefix="oddbranch-order-", dir=folder)
        self._waiting: dict[int, list[NDArray[np.void]]] = {}
        self._n_waiting_bytes = 0
        self._stretches: set[int] = set()
        self._file = Path()

    def add(self, readings: NumberedReadings) -> None:
        """Keep some readings, in any order."""
        self._file = readings.file
        rows = np.empty(len(readings.lines), dtype=_ROW)
        rows["line"], rows["time_ns"] = readings.lines, readings.times_ns
        rows["source"], rows["channel"] = readings.source_codes, readings.channels
        rows["value"] = readings.values
        stretch = readings.times_ns // self._stretch_ns
        order = np.argsort(stretch, kind="stable")
        cuts = np.flatnonzero(np.diff(stretch[order])) + 1
        for part in np.split(order, cuts):
            if len(part):
                self._waiting.setdefault(int(stretch[part[0]]), []).append(rows[part])
        self._n_waiting_bytes += rows.nbytes
        if self._n_waiting_bytes > MAX_WAITING_BYTES:
            self._write_waiting()

    def _path(self, stretch: int) -> Path:
        return Path(self._folder.name) / f"{stretch}.rows"

    def _write_waiting(self) -> None:
        for stretch, blocks in self._waiting.items():
            with self._path(stretch).open("ab") as file:
                file.writelines(block.tobytes() for block in blocks)
        self._stretches |= set(self._waiting)
        self._waiting = {}
        self._n_waiting_bytes = 0

    def in_order(self) -> Iterator[NumberedReadings]:
        """Yield the readings of one stretch after the other, each in time order.

        Readings of one time keep the order in which they came.
        """
        self._write_waiting()
        for stretch in sorted(self._stretches):
            rows = np.fromfile(self._path(stretch), dtype=_ROW)
            self._path(stretch).unlink()
            rows = rows[np.argsort(rows["time_ns"], kind="stable")]
            yield NumberedReadings(
                self._file,
                rows["line"].copy(),
                rows["time_ns"].copy(),
                rows["source"].copy(),
                rows["channel"].astype(np.int64),
                rows["value"].copy(),
            )
        self._stretches = set()

    def close(self) -> None:
        """Remove the files; may be called twice."""
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
