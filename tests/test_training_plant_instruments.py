"""Readings against truth: lag, bias, noise, resolution, span, silences."""

from __future__ import annotations

import math

import numpy as np
import pytest

from training.plant import channels as ch
from training.plant.channels import INSTRUMENTS, N_CHANNELS
from training.plant.instruments import InstrumentSet, draw_silences, report
from training.plant.severity import settled
from training.plant.utility import build_stations

STATION = build_stations(6, 1)[0]
TRUTH = settled(STATION.physics, "impeller_wear", 1, 0.0)


def test_noise_has_the_stated_spread_and_bias_stays_in_class() -> None:
    n = 20_000
    noise = np.random.default_rng(2).standard_normal((n, N_CHANNELS))
    readings = InstrumentSet(STATION, 10.0, TRUTH).read(np.tile(TRUTH, (n, 1)), noise)
    for number, instrument in enumerate(INSTRUMENTS):
        deviation = instrument.noise + instrument.noise_of_reading * TRUTH[number]
        assert readings[:, number].std() == pytest.approx(deviation, rel=0.05, abs=1e-9)
        limit = instrument.accuracy + instrument.accuracy_of_reading * TRUTH[number]
        off = abs(readings[:, number].mean() - TRUTH[number])
        assert off <= limit + 5.0 * deviation / math.sqrt(n) + 1e-9


def test_a_reading_follows_a_step_with_the_lag_of_its_instrument() -> None:
    n, step_s = 60, 10.0
    truth = np.tile(TRUTH, (n, 1))
    truth[:, ch.BEARING_TEMPERATURE_1] += 10.0
    instruments = InstrumentSet(STATION, step_s, TRUTH)
    readings = instruments.read(truth, np.zeros((n, N_CHANNELS)))
    gain, bias = STATION.gain, STATION.bias
    number = ch.BEARING_TEMPERATURE_1
    slow_twin, expected = TRUTH[number], []
    for _ in range(n):
        slow_twin += (truth[0, number] - slow_twin) * (1.0 - math.exp(-step_s / 60.0))
        expected.append(slow_twin * gain[number] + bias[number])
    assert readings[:, number] == pytest.approx(np.array(expected), rel=1e-12)


def test_states_are_reported_without_lag_or_noise() -> None:
    truth = np.tile(TRUTH, (2, 1))
    truth[1, ch.PUMP_1] = 0.0
    noise = np.random.default_rng(2).standard_normal((2, N_CHANNELS))
    readings = InstrumentSet(STATION, 10.0, TRUTH).read(truth, noise)
    assert list(readings[:, ch.PUMP_1]) == [1.0, 0.0]


def test_reports_stay_within_span_and_are_multiples_of_the_resolution() -> None:
    readings = np.random.default_rng(3).normal(0.0, 500.0, (500, N_CHANNELS))
    readings[:, ch.FLOW] = np.linspace(210.0, 220.0, 500)
    report(readings)
    for number, instrument in enumerate(INSTRUMENTS):
        low, high = instrument.span
        assert readings[:, number].min() >= low
        assert readings[:, number].max() <= high
        again = np.array([float(f"{x:.{instrument.decimals}f}") for x in readings[:, number]])
        assert np.array_equal(readings[:, number], again)


def test_silences_are_short_and_take_about_the_stated_share() -> None:
    rng = np.random.default_rng(4)
    days = [draw_silences(rng, 1440, 60.0) for _ in range(200)]
    readings = np.mean([d[0].mean() for d in days])
    records = np.mean([d[1].mean() for d in days])
    # 0.4 a day of ten minutes, 0.3 a day of a quarter of an hour, rounded up to whole steps.
    assert readings == pytest.approx(0.4 * 10.5 / 1440, rel=0.15)
    assert records == pytest.approx(0.3 * 15.5 / 1440, rel=0.4)
