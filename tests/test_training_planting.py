"""Planted faults are what they say, in the planted channel alone, with gaps left as gaps."""

from __future__ import annotations

import numpy as np
import pytest

from training.planting import DRIFT, NOISE, OFFSET, SCALING, SIZED, plant, stick, swap

RNG = np.random.default_rng(3)
NORMAL = RNG.normal(50.0, 5.0, (4, 10, 3)).round(1)
NORMAL[1, 4, 1] = np.nan
DIRECTION = np.array([1.0, -1.0, 1.0, -1.0])
DRAWN = RNG.standard_normal((4, 10))


@pytest.mark.parametrize("kind", SIZED)
def test_only_the_planted_channel_changes_and_gaps_stay(kind: str) -> None:
    values = plant(kind, NORMAL, 1, 0.5, DIRECTION, DRAWN, 0.0)
    assert np.array_equal(values[:, :, [0, 2]], NORMAL[:, :, [0, 2]])
    assert np.array_equal(np.isnan(values), np.isnan(NORMAL))
    assert not np.array_equal(values[:, :, 1], NORMAL[:, :, 1], equal_nan=True)


def test_each_kind_departs_as_its_size_says() -> None:
    def departure(kind: str) -> np.ndarray[tuple[int, int], np.dtype[np.float64]]:
        return plant(kind, NORMAL, 0, 2.0, DIRECTION, DRAWN, 0.0)[:, :, 0] - NORMAL[:, :, 0]

    assert departure(OFFSET) == pytest.approx(2.0 * np.repeat(DIRECTION[:, None], 10, axis=1))
    drift = departure(DRIFT)
    assert drift[:, -1] == pytest.approx(2.0 * DIRECTION)
    assert np.diff(np.abs(drift), axis=1) == pytest.approx(np.full((4, 9), 0.2))
    assert departure(NOISE) == pytest.approx(2.0 * DRAWN)
    assert departure(SCALING) == pytest.approx(NORMAL[:, :, 0] * 2.0 * DIRECTION[:, None])


def test_a_faulty_instrument_still_reports_in_its_resolution() -> None:
    values = plant(NOISE, NORMAL, 0, 1.0, DIRECTION, DRAWN, 0.5)
    assert np.allclose(values[:, :, 0] * 2, np.round(values[:, :, 0] * 2))


def test_a_stuck_channel_stands_at_the_reading_before() -> None:
    before = np.array([[7.0, 8.0, 9.0]] * 4)
    before[2, 1] = np.nan
    values = stick(NORMAL, before, 1)
    assert np.all(values[0, :, 1] == 8.0)
    assert np.isnan(values[1, 4, 1])
    # What was missing before sticks at its first reading.
    assert np.all(values[2, :, 1] == NORMAL[2, 0, 1])


def test_two_channels_on_each_others_terminals() -> None:
    values = swap(NORMAL, 0, 2)
    assert np.array_equal(values[:, :, [2, 1, 0]], NORMAL, equal_nan=True)
