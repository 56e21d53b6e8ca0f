"""Whether history covers what may come: channels that move more slowly than it is long.

A level promises for time like that of the history. A channel most of whose movement is
slower than a tenth of the history has shown only a few of its swings, and will go where
nothing of the history was.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.density import surprise_of
from scoring.model import Member
from training.blocks import N_FOLDS
from training.crossfit import HeldOut
from training.rows import Rows

Floats = NDArray[np.float64]

_N_PARTS: Final = 10
# A channel is slow if this share of its variance lies between tenths of the history; what
# repeats daily stays below a few hundredths, however it wanders within the day.
SLOW_SHARE: Final = 0.10
# Records of a tenth that must be there to speak of its mean.
_LEAST_ROWS: Final = 30


@dataclass(frozen=True, slots=True)
class SlowChannel:
    """A channel that does not repeat within the history.

    slow_share: of its variance that lies between tenths of the history, middle source.
    low, high: what was seen, in its unit, over all sources.
    """

    name: str
    unit: str
    slow_share: float
    low: float
    high: float


def slow_channels(rows: Rows) -> tuple[SlowChannel, ...]:
    """Return the channels that are slow at the middle one of the sources, slowest first."""
    channels = rows.table.instruments
    shares = np.zeros((len(rows.sources), len(channels)))
    low, high = np.full(len(channels), np.inf), np.full(len(channels), -np.inf)
    for s, source in enumerate(rows.sources):
        sample = rows.of(source).sample(tuple(range(N_FOLDS)))
        for k, channel in enumerate(channels):
            readings = sample[:, k]
            if channel.is_state or not (~np.isnan(readings)).any():
                continue
            shares[s, k] = slow_share(np.array_split(readings, _N_PARTS))
            low[k] = min(low[k], float(np.nanmin(readings)))
            high[k] = max(high[k], float(np.nanmax(readings)))
    middle = np.median(shares, axis=0) if len(shares) else np.zeros(len(channels))
    slow = [
        SlowChannel(channel.name, channel.unit, float(middle[k]), float(low[k]), float(high[k]))
        for k, channel in enumerate(channels)
        if middle[k] > SLOW_SHARE
    ]
    return tuple(sorted(slow, key=lambda one: -one.slow_share))


def slow_share(parts: Sequence[Floats]) -> float:
    """Return the share of variance that lies between consecutive parts of a channel's readings.

    parts: (n,) each, NaN = missing. 0 where too little is there to tell.
    """
    kept = [part[~np.isnan(part)] for part in parts]
    kept = [part for part in kept if len(part) >= _LEAST_ROWS]
    total = float(np.concatenate(kept).var()) if len(kept) > 2 else 0.0
    if total <= 0.0:
        return 0.0
    return float(np.var([part.mean() for part in kept])) / total


def unseen_nats(members: Mapping[str, Member], held_out: Mapping[str, HeldOut]) -> float:
    """Return how much more surprising a record is to tables that never saw it, mean nats.

    The records that a member carries are scored by its own tables, which did see them.
    """
    total = n = 0.0
    for source, member in members.items():
        if len(member.usual.rows) and held_out[source].n_scored:
            seen = float(surprise_of(member, member.usual.rows).mean())
            total += (held_out[source].density - seen) * held_out[source].n_scored
            n += held_out[source].n_scored
    return total / n if n else 0.0
