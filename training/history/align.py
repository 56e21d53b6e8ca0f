"""Readings of one source, one by one in time, to records; see long.py for the rule."""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from training.history.times import NO_TIME, NS_PER_S

Int64 = NDArray[np.int64]
Floats = NDArray[np.float64]

# Taken for the step when no channel of the first rows has two readings.
LONE_STEP_S = 1.0


def find_step_s(times_ns: Int64, source_codes: NDArray[np.int32], channels: Int64) -> float:
    """Return the median time between two readings of one channel of one source, in seconds."""
    order = np.lexsort((times_ns, channels, source_codes))
    same = (np.diff(channels[order]) == 0) & (np.diff(source_codes[order]) == 0)
    between = np.diff(times_ns[order])[same]
    between = between[between > 0]
    return float(np.median(between)) / NS_PER_S if len(between) else LONE_STEP_S


@njit(cache=True)
def align_readings(
    times_ns: Int64,
    channels: Int64,
    values: Floats,
    lines: Int64,
    last_times_ns: Int64,
    last_values: Floats,
    open_record: Int64,
    wait_ns: int,
    age_ns: int,
    out_times_ns: Int64,
    out_lines: Int64,
    out_values: Floats,
) -> int:
    """Write the records that the readings of one source complete; return how many.

    times_ns, channels, values, lines: (n,), in time order, also with the readings
        of the call before.
    last_times_ns, last_values: (k,), the last reading of each channel; kept up to date.
    open_record: (3,), times of the open record's first and last reading, and the line of
        the last; kept up to date. NO_TIME in the first: no record is open.
    out_*: room for n records.
    """
    n_records = 0
    k = len(last_values)
    for i in range(len(times_ns)):
        if open_record[0] != NO_TIME:
            if times_ns[i] - open_record[0] >= wait_ns:
                out_times_ns[n_records] = open_record[1]
                out_lines[n_records] = open_record[2]
                for c in range(k):
                    fresh = last_times_ns[c] != NO_TIME
                    fresh = fresh and last_times_ns[c] >= open_record[1] - age_ns
                    out_values[n_records, c] = last_values[c] if fresh else np.nan
                n_records += 1
                open_record[0] = times_ns[i]
        else:
            open_record[0] = times_ns[i]
        open_record[1] = times_ns[i]
        open_record[2] = lines[i]
        last_times_ns[channels[i]] = times_ns[i]
        last_values[channels[i]] = values[i]
    return n_records
