"""The kernel that puts readings together, against a slow and obvious twin."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from training.history.align import LONE_STEP_S, align_readings, find_step_s
from training.history.times import NO_TIME

N_CHANNELS = 3
WAIT_NS, AGE_NS = 7, 25


def align_slow(
    readings: list[tuple[int, int, float]],
) -> list[tuple[int, int, list[float]]]:
    """Return (time, place of the last reading, values) of every record, also the open one."""
    groups: list[list[int]] = []
    for place, (time, _, _) in enumerate(readings):
        if not groups or time - readings[groups[-1][0]][0] >= WAIT_NS:
            groups.append([])
        groups[-1].append(place)
    records = []
    for group in groups:
        time = readings[group[-1]][0]
        values = [math.nan] * N_CHANNELS
        for when, channel, value in readings[: group[-1] + 1]:
            values[channel] = value if when >= time - AGE_NS else math.nan
        records.append((time, group[-1], values))
    return records


def align_fast(
    readings: list[tuple[int, int, float]], cut: int
) -> list[tuple[int, int, list[float]]]:
    """Return what the kernel completes, given the readings in two calls."""
    last_times, last_values = np.full(N_CHANNELS, NO_TIME), np.full(N_CHANNELS, np.nan)
    open_record = np.full(3, NO_TIME)
    records = []
    for start, stop in ((0, cut), (cut, len(readings))):
        n = stop - start
        part = readings[start:stop]
        times = np.array([r[0] for r in part], dtype=np.int64)
        channels = np.array([r[1] for r in part], dtype=np.int64)
        values = np.array([r[2] for r in part], dtype=np.float64)
        out = np.empty(n, np.int64), np.empty(n, np.int64), np.empty((n, N_CHANNELS))
        n_records = align_readings(
            times,
            channels,
            values,
            np.arange(start, stop),
            last_times,
            last_values,
            open_record,
            WAIT_NS,
            AGE_NS,
            *out,
        )
        records += [(int(out[0][i]), int(out[1][i]), out[2][i].tolist()) for i in range(n_records)]
    return records


@given(
    st.lists(
        st.tuples(st.integers(0, 15), st.integers(0, N_CHANNELS - 1), st.integers(0, 9)),
        max_size=30,
    ),
    st.integers(0, 30),
)
def test_the_kernel_equals_its_slow_twin(steps: list[tuple[int, int, int]], cut: int) -> None:
    time, readings = 0, []
    for step, channel, value in steps:
        time += step
        # 0 stands for a reading that says nothing, as one of bad quality does.
        readings.append((time, channel, float(value) if value else math.nan))
    fast = align_fast(readings, min(cut, len(readings)))
    slow = align_slow(readings)[:-1]
    assert [r[:2] for r in fast] == [r[:2] for r in slow]
    np.testing.assert_array_equal([r[2] for r in fast], [r[2] for r in slow])


def test_the_step_is_the_median_interval_within_a_channel_of_a_source() -> None:
    second = 1_000_000_000
    times_ns = np.array([0, 1, 30, 31, 60, 61, 95, 96], dtype=np.int64) * second
    channels = np.array([0, 1] * 4, dtype=np.int64)
    assert find_step_s(times_ns, np.zeros(8, dtype=np.int32), channels) == 30.0


@pytest.mark.parametrize("times", [[5], [5, 5]])
def test_readings_without_an_interval_have_the_lone_step(times: list[int]) -> None:
    n = len(times)
    zeros = np.zeros(n, dtype=np.int64)
    assert find_step_s(np.array(times), zeros.astype(np.int32), zeros) == LONE_STEP_S
