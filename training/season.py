"""Whether history covers what may come: channels that move more slowly than it is long.

A level promises for time like that of the history. A channel most of whose movement is
slower than a tenth of the history has shown only a few of its swings, and will go where
nothing of the history was.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.density import surprise_of
from scoring.model import Member
from training.crossfit import HeldOut
from training.hands import HERE, Hands
from training.rows import Rows

Floats = NDArray[np.float64]

_N_PARTS: Final = 10
# A channel is slow if this share of its variance lies between tenths of the history; what
# repeats daily stays below a few hundredths, however it wanders within the day.
SLOW_SHARE: Final = 0.10
# Records of a tenth that must be there to speak of its mean.
_LEAST_ROWS: Final = 30
# So many tenths must hold readings.
_LEAST_PARTS: Final = 4


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
    found = list(rows.hands.each(_parts_of, [rows.part(source) for source in rows.sources]))
    if not found:
        return ()
    middle = np.median([parts.slow_share() for parts in found], axis=0)
    low = np.min([parts.low for parts in found], axis=0)
    high = np.max([parts.high for parts in found], axis=0)
    slow = [
        SlowChannel(channel.name, channel.unit, float(middle[k]), float(low[k]), float(high[k]))
        for k, channel in enumerate(channels)
        if middle[k] > SLOW_SHARE and not channel.is_state
    ]
    return tuple(sorted(slow, key=lambda one: -one.slow_share))


@dataclass(frozen=True)
class _Parts:
    """Sums over consecutive parts of one source's time: n, total, square (n_parts, n_channels).

    They are taken about the mean of the first records, so that squares keep their digits.
    low, high: (n_channels,) of all readings, infinite without any.
    """

    n: Floats
    total: Floats
    square: Floats
    low: Floats
    high: Floats

    @classmethod
    def of(cls, rows: Rows, source: str) -> _Parts:
        n_channels = len(rows.table.instruments)
        first_ns, last_ns = rows.spool.first_last_ns(source)
        length = (last_ns - first_ns) // _N_PARTS + 1
        n, total, square = (np.zeros((_N_PARTS, n_channels)) for _ in range(3))
        low, high = np.full(n_channels, np.inf), np.full(n_channels, -np.inf)
        middle: Floats | None = None
        for chunk in rows.of(source).chunks():
            values = chunk.values[:, :n_channels]
            there = ~np.isnan(values)
            if middle is None:
                middle = np.where(there, values, 0.0).sum(axis=0) / np.maximum(there.sum(axis=0), 1)
            low = np.fmin(low, np.where(there, values, np.inf).min(axis=0))
            high = np.fmax(high, np.where(there, values, -np.inf).max(axis=0))
            moved = np.where(there, values - middle, 0.0)
            part = (chunk.times_ns - first_ns) // length
            for k in np.unique(part).tolist():
                n[k] += there[part == k].sum(axis=0)
                total[k] += moved[part == k].sum(axis=0)
                square[k] += np.square(moved[part == k]).sum(axis=0)
        return cls(n, total, square, low, high)

    def slow_share(self) -> Floats:
        """Return the share of each channel's variance that lies between parts, (n_channels,).

        0 where too few parts hold readings, or nothing moves.
        """
        enough = self.n >= _LEAST_ROWS
        n = np.where(enough, self.n, 0.0)
        all_n = np.maximum(n.sum(axis=0), 1.0)
        mean = np.where(enough, self.total, 0.0).sum(axis=0) / all_n
        whole = np.where(enough, self.square, 0.0).sum(axis=0) / all_n - mean**2
        apart = np.where(enough, self.total / np.maximum(self.n, 1.0) - mean, 0.0)
        between = (n * apart**2).sum(axis=0) / all_n
        told = (enough.sum(axis=0) >= _LEAST_PARTS) & (whole > 0)
        return np.asarray(np.where(told, between / np.where(told, whole, 1.0), 0.0))


def _parts_of(rows: Rows) -> _Parts:
    return _Parts.of(rows, rows.sources[0])


def unseen_nats(
    members: Mapping[str, Member], held_out: Mapping[str, HeldOut], hands: Hands = HERE
) -> float:
    """Return how much more surprising a record is to tables that never saw it, mean nats.

    The records that a member carries are scored by its own tables, which did see them.
    hands: who scores them; the tables' layout for that, 7 MB of a member of 24 channels, stays
    with whoever does.
    """
    asked = [s for s, m in members.items() if len(m.usual.rows) and held_out[s].n_scored]
    total = n = 0.0
    for source, seen in zip(
        asked, hands.each(_seen_nats, [members[source] for source in asked]), strict=True
    ):
        total += (held_out[source].density - seen) * held_out[source].n_scored
        n += held_out[source].n_scored
    return total / n if n else 0.0


def _seen_nats(member: Member) -> float:
    return float(surprise_of(member, member.usual.rows).mean())
