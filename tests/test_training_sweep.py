"""Many pairs at once are each pair alone, and each is the machine that raises alerts."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from scoring import alert_kernel as kernel
from scoring.alert_settings import AlertSettings
from scoring.sustained import sustain
from tests.streams import NEVER, STEP_NS, noise, times_of
from training.sweep import Marks, Pairs, Sweep, cap_of

SETTINGS = AlertSettings()
PAIRS = Pairs(
    record=np.array([12.0, 15.0, np.inf, 18.0]),
    sustained=np.array([6.0, np.inf, 5.0, 7.0]),
    cap=np.array([30.0, np.inf, 25.0, 60.0]),
)


def a_stream(n: int = 20_000, seed: int = 4) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Return times with gaps, and excess of which some is not judged."""
    rng = np.random.default_rng(seed)
    keep = np.sort(rng.choice(np.arange(2 * n), n, replace=False))
    keep[n // 2 :] += 700
    excess = noise(n, seed, bursts_per_day=20.0)
    excess[rng.random(n) < 0.05] = np.nan
    return times_of(1)[0] + STEP_NS * keep, excess


def one_by_one(
    pair: int, usual: float, times_ns: NDArray[np.int64], excess: NDArray[np.float64]
) -> tuple[list[tuple[int, int]], int]:
    """Return (row raised, row cleared) of one pair, by the scorer's parts, and records over."""
    sustained, _, _, _ = sustain(
        times_ns, excess, -1, usual, usual, NEVER.tau_s, NEVER.step_s, float(PAIRS.cap[pair])
    )
    kept = 1.0 - NEVER.delays.deadband
    record, level = float(PAIRS.record[pair]), float(PAIRS.sustained[pair])
    knobs = np.zeros(kernel.N_KNOBS)
    knobs[kernel.RECORD], knobs[kernel.RECORD_OFF] = record, kept * record
    knobs[kernel.SUSTAINED] = level
    knobs[kernel.SUSTAINED_OFF] = usual + kept * (level - usual)
    knobs[kernel.HALF] = usual + 0.5 * (level - usual)
    knobs[kernel.RUN_LENGTH] = NEVER.delays.record_run
    knobs[kernel.OFF_S] = NEVER.delays.off_delay_steps * NEVER.step_s
    found = np.empty((len(excess), 2), dtype=np.int64)
    n = kernel.scan(times_ns, excess, sustained, knobs, kernel.new_ints(0), found)
    n_over = 0
    for raised, cleared in found[:n]:
        rows = np.arange(raised, min(cleared + 1, len(excess)))
        rows = rows[~np.isnan(excess[rows])]
        over = (excess[rows] > kept * record) | (sustained[rows] > usual + kept * (level - usual))
        over[0] = True
        n_over += int(over.sum())
    return [(int(a), int(b)) for a, b in found[:n]], n_over


def of_pair(marks: Marks, pair: int, n: int) -> list[tuple[int, int]]:
    rows, raised = marks.row[marks.pair == pair], marks.raised[marks.pair == pair]
    starts, ends = rows[raised].tolist(), rows[~raised].tolist()
    return list(zip(starts, [*ends, *[n] * (len(starts) - len(ends))], strict=True))


@pytest.mark.parametrize("pair", range(4))
def test_every_pair_is_followed_as_the_online_path_follows_one(pair: int) -> None:
    times_ns, excess = a_stream()
    sweep = Sweep(PAIRS, NEVER, SETTINGS)
    marks = sweep.add("a", 0.3, times_ns, excess)
    expected, n_over = one_by_one(pair, 0.3, times_ns, excess)
    assert len(expected) > 20
    assert of_pair(marks, pair, len(excess)) == expected
    assert sweep.n_over[pair] == n_over


def test_pieces_of_any_length_give_what_the_whole_gives() -> None:
    times_ns, excess = a_stream()
    whole, pieces = Sweep(PAIRS, NEVER, SETTINGS), Sweep(PAIRS, NEVER, SETTINGS)
    expected = whole.add("a", 0.0, times_ns, excess)
    found, start = [], 0
    for stop in (1, 7, 5000, 5001, 12_345, len(excess)):
        # Another source in between must not disturb.
        pieces.add("b", 0.0, times_ns[:50], excess[::-1][:50])
        marks = pieces.add("a", 0.0, times_ns[start:stop], excess[start:stop])
        found.append(np.stack([marks.pair, marks.row + start, marks.raised, marks.peak], axis=1))
        start = stop
    together = np.stack([expected.pair, expected.row, expected.raised, expected.peak], axis=1)
    assert np.array_equal(np.concatenate(found), together, equal_nan=True)


def test_the_peak_is_the_highest_while_the_alert_stood() -> None:
    times_ns, excess = a_stream()
    sweep = Sweep(PAIRS, NEVER, SETTINGS)
    marks = sweep.add("a", 0.0, times_ns, excess)
    cleared = (marks.pair == 1) & ~marks.raised
    for (start, end), peak in zip(
        of_pair(marks, 1, len(excess)), marks.peak[cleared], strict=False
    ):
        assert peak == np.nanmax(excess[start:end])
    assert np.isnan(marks.peak[marks.raised]).all()


def test_an_alert_that_still_stands_gives_its_peak_at_the_end() -> None:
    excess = np.full(100, 0.0)
    excess[90:] = [20.0, 40.0, *[25.0] * 8]
    sweep = Sweep(PAIRS, NEVER, SETTINGS)
    sweep.add("a", 0.0, times_of(100), excess)
    pairs, peaks = sweep.still_open()
    assert pairs.tolist() == [0, 1, 2, 3]
    assert peaks[[0, 1, 3]].tolist() == [40.0, 40.0, 40.0]
    assert 5.0 < peaks[2] < 25.0


@pytest.mark.parametrize("usual", [-1.0, 0.0, 2.0])
def test_one_record_of_any_size_never_lifts_sustained_over_its_level(usual: float) -> None:
    levels = np.array([3.0, 8.0, 30.0])
    pairs = Pairs(np.full(3, np.inf), levels, cap_of(levels, 2.0, NEVER.tau_s, NEVER.step_s))
    sweep = Sweep(pairs, NEVER, SETTINGS)
    excess = np.full(200, usual)
    excess[100] = 1e9
    assert not len(sweep.add("a", usual, times_of(200), excess).pair)


@pytest.mark.parametrize(("n_records", "n_alerts"), [(2, 0), (3, 1)])
def test_it_takes_three_huge_records_in_a_row(n_records: int, n_alerts: int) -> None:
    levels = np.array([8.0])
    pairs = Pairs(np.array([np.inf]), levels, cap_of(levels, 0.0, NEVER.tau_s, NEVER.step_s))
    excess = np.zeros(200)
    excess[100 : 100 + n_records] = 1e9
    marks = Sweep(pairs, NEVER, SETTINGS).add("a", 0.0, times_of(200), excess)
    assert marks.raised.sum() == n_alerts


def test_nothing_followed_marks_nothing() -> None:
    sweep = Sweep(PAIRS, NEVER, SETTINGS)
    marks = sweep.add("a", 0.0, times_of(0), np.zeros(0))
    assert len(marks.pair) == len(sweep.still_open()[0]) == sweep.n_judged == 0
