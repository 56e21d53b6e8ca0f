"""Faults planted into stretches of normal records, as a faulty instrument would report.

A stretch begins with normal records; the fault begins at its first planted row and lasts
to its end. Missing readings stay missing, states are never touched.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

OFFSET: Final = "offset"
DRIFT: Final = "drift"
NOISE: Final = "noise"
SCALING: Final = "scaling"
STUCK: Final = "stuck"
SWAP: Final = "swap"
# Kinds whose size can grow; a size of scaling is a share of the reading, of noise its
# standard deviation, of drift what it reaches at the end.
SIZED: Final = (OFFSET, DRIFT, NOISE, SCALING)


def plant(
    kind: str,
    normal: Floats,
    channel: int,
    size: float,
    direction: Floats,
    noise: Floats,
    resolution: float,
) -> Floats:
    """Return a copy of some stretches with one sized fault in each.

    normal: (n_trials, n_rows, n_channels). direction: (n_trials,) +1 or -1. noise:
    (n_trials, n_rows) standard normals. resolution: readings are rounded to it, 0 for none.
    """
    values = normal.copy()
    reading = values[:, :, channel]
    n_rows = reading.shape[1]
    if kind == OFFSET:
        reading += size * direction[:, None]
    elif kind == DRIFT:
        reading += size * direction[:, None] * np.arange(1, n_rows + 1) / n_rows
    elif kind == NOISE:
        reading += size * noise
    else:
        assert kind == SCALING, kind
        reading *= 1.0 + size * direction[:, None]
    if resolution > 0:
        reading[:] = np.round(reading / resolution) * resolution
    return values


def stick(normal: Floats, before: Floats, channel: int) -> Floats:
    """Return stretches in which a channel stands at the last reading before it stuck.

    before: (n_trials, n_channels) the record before each stretch; a channel that was
    missing there sticks at its first reading.
    """
    values = normal.copy()
    for trial, reading in enumerate(before[:, channel]):
        own = values[trial, :, channel]
        there = ~np.isnan(own)
        if np.isnan(reading) and there.any():
            reading = own[there][0]
        own[there] = reading
    return values


def swap(normal: Floats, channel: int, partner: int) -> Floats:
    """Return stretches in which two channels are on each other's terminals."""
    values = normal.copy()
    values[:, :, [channel, partner]] = normal[:, :, [partner, channel]]
    return values
