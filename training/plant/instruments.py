"""From true values to readings: lag, bias within class, noise, span, resolution, silence."""

from __future__ import annotations

from typing import Final

import numpy as np
from numba import njit
from numpy.typing import NDArray

from training.plant.channels import INSTRUMENTS, N_CHANNELS
from training.plant.utility import Station

_SCALE: Final = np.array([10.0**i.decimals for i in INSTRUMENTS])
_LOW: Final = np.array([i.span[0] for i in INSTRUMENTS])
_HIGH: Final = np.array([i.span[1] for i in INSTRUMENTS])
_LAG_S: Final = np.array([i.lag_s for i in INSTRUMENTS])
_NOISE: Final = np.array([i.noise for i in INSTRUMENTS])
_NOISE_OF_READING: Final = np.array([i.noise_of_reading for i in INSTRUMENTS])
SPREAD: Final = np.array([i.spread for i in INSTRUMENTS])
TYPICAL: Final = np.array([i.typical for i in INSTRUMENTS])

# Silences a day: single channels (a loose plug, a busy bus) and whole records (the line).
_CHANNEL_SILENCES_PER_DAY: Final = 0.4
_CHANNEL_SILENCE_S: Final = 600.0
_RECORD_SILENCES_PER_DAY: Final = 0.3
_RECORD_SILENCE_S: Final = 900.0


@njit(cache=True)
def _read(
    truth: NDArray[np.float64],
    noise: NDArray[np.float64],
    keep: NDArray[np.float64],
    constants: NDArray[np.float64],
    state: NDArray[np.float64],
    readings: NDArray[np.float64],
) -> None:
    """Fill in lagged, biased, noisy readings; `constants` is bias, gain and noise."""
    bias, gain, absolute, relative = constants
    for i in range(truth.shape[0]):
        for j in range(truth.shape[1]):
            state[j] = truth[i, j] + keep[j] * (state[j] - truth[i, j])
            deviation = absolute[j] + relative[j] * abs(state[j])
            readings[i, j] = state[j] * gain[j] + bias[j] + deviation * noise[i, j]


@njit(cache=True)
def _report(
    readings: NDArray[np.float64],
    low: NDArray[np.float64],
    high: NDArray[np.float64],
    scale: NDArray[np.float64],
) -> None:
    """Hold readings within the span and round them to the resolution, in place."""
    for i in range(readings.shape[0]):
        for j in range(readings.shape[1]):
            held = min(max(readings[i, j], low[j]), high[j])
            # Dividing by a power of ten gives the double that prints shortest.
            readings[i, j] = np.rint(held * scale[j]) / scale[j]


class InstrumentSet:
    """The instruments of one station, with what their lags remember between two calls."""

    def __init__(self, station: Station, step_s: float, first: NDArray[np.float64]) -> None:
        """first: (n_channels,) true values that the instruments have settled on."""
        safe_lag_s = np.maximum(_LAG_S, 1e-9)
        self._keep = np.exp(-step_s / safe_lag_s)
        parts = (station.bias, station.gain, _NOISE, _NOISE_OF_READING)
        self._constants = np.ascontiguousarray(np.stack(parts))
        self._state = first.copy()

    def read(self, truth: NDArray[np.float64], noise: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return unrounded readings, (n, n_channels), from truth and standard normals."""
        readings = np.empty_like(truth)
        _read(truth, noise, self._keep, self._constants, self._state, readings)
        return readings


def report(readings: NDArray[np.float64]) -> None:
    """Hold readings (n, n_channels) within span and resolution, in place."""
    _report(readings, _LOW, _HIGH, _SCALE)


def draw_silences(
    rng: np.random.Generator, n_steps: int, step_s: float
) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Return one day's missing readings, (n_steps, n_channels), and missing records, (n_steps,)."""
    readings = np.zeros((n_steps, N_CHANNELS), dtype=np.bool_)
    records = np.zeros(n_steps, dtype=np.bool_)
    for channel, n in enumerate(rng.poisson(_CHANNEL_SILENCES_PER_DAY, N_CHANNELS)):
        for first, last in _stretches(rng, int(n), n_steps, _CHANNEL_SILENCE_S / step_s):
            readings[first:last, channel] = True
    n_gaps = int(rng.poisson(_RECORD_SILENCES_PER_DAY))
    for first, last in _stretches(rng, n_gaps, n_steps, _RECORD_SILENCE_S / step_s):
        records[first:last] = True
    return readings, records


def _stretches(
    rng: np.random.Generator, n: int, n_steps: int, mean_steps: float
) -> list[tuple[int, int]]:
    """Draw n stretches of at least one step and exponential length."""
    first = rng.integers(0, n_steps, n)
    last = first + np.ceil(rng.exponential(mean_steps, n)).astype(np.int64)
    return [(int(a), int(b)) for a, b in zip(first, last, strict=True)]
