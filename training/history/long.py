"""Long rows (time, source, channel, value, maybe quality) to records.

Readings that come within three quarters of a step of the first one form a record, at
the time of its last reading; a channel without a reading in it stands at its last value,
if that is no older than a stated age. Nothing is taken from a record's future.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scoring.channels import ChannelTable
from training.history.align import LONE_STEP_S, align_readings, find_step_s
from training.history.batch import HistoryBatch, SourceRegister
from training.history.long_numbers import NumberedReadings
from training.history.options import DEFAULT_AGE_STEPS, HistoryOptions
from training.history.times import NO_TIME, NS_PER_S

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


class Aligner:
    """Makes records from readings that come in time order for each source."""

    def __init__(
        self, table: ChannelTable, options: HistoryOptions, sources: SourceRegister
    ) -> None:
        self._n_channels = len(table.instruments)
        self._age_s = options.age_s
        self._sources = sources
        self._step_s = options.step_s or table.step_s
        self._standings: dict[int, _Standing] = {}
        self._file = Path()

    def add(self, readings: NumberedReadings) -> HistoryBatch | None:
        """Return the records that these readings complete; None for none.

        The first readings tell the step, if neither options nor table do.
        """
        self._file = readings.file
        if self._step_s is None and len(readings.lines):
            self._step_s = find_step_s(readings.times_ns, readings.source_codes, readings.channels)
        rows = np.argsort(readings.source_codes, kind="stable")
        cuts = np.flatnonzero(np.diff(readings.source_codes[rows])) + 1
        parts = [self._align(readings, part) for part in np.split(rows, cuts) if len(part)]
        return self._batch(parts)

    def finish(self) -> HistoryBatch | None:
        """Return the records that were still open."""
        parts = []
        for code, standing in self._standings.items():
            if standing.open[0] != NO_TIME:
                values = _aged(standing, self._age_ns)
                parts.append((code, standing.open[1:2], standing.open[2:3], values[None, :]))
                standing.open[0] = NO_TIME
        return self._batch(parts)

    @property
    def _age_ns(self) -> int:
        step_s = self._step_s or LONE_STEP_S
        return int((self._age_s or DEFAULT_AGE_STEPS * step_s) * NS_PER_S)

    def _align(self, readings: NumberedReadings, rows: Int64) -> tuple[int, Int64, Int64, Floats]:
        code = int(readings.source_codes[rows[0]])
        k = self._n_channels
        standing = self._standings.get(code)
        if standing is None:
            standing = _Standing(
                np.full(k, np.nan), np.full(k, NO_TIME), np.full(3, NO_TIME, dtype=np.int64)
            )
            self._standings[code] = standing
        out_times = np.empty(len(rows), dtype=np.int64)
        out_lines = np.empty(len(rows), dtype=np.int64)
        out_values = np.empty((len(rows), k))
        n_records = align_readings(
            readings.times_ns[rows],
            readings.channels[rows],
            readings.values[rows],
            readings.lines[rows],
            standing.times_ns,
            standing.values,
            standing.open,
            int(WAIT_STEPS * (self._step_s or LONE_STEP_S) * NS_PER_S),
            self._age_ns,
            out_times,
            out_lines,
            out_values,
        )
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
