"""The judge's drill: the smallest offset of each channel that two models catch.

Both see the same quiet records, which neither learned from. Few trials, because it runs
every night: `oddbranch drill` is for the full table.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from scoring.alert_settings import AlertSettings
from scoring.model import Model
from training.drilled import Drill, Result
from training.history.spool import Spool
from training.planting import OFFSET
from training.trials import BadTrials, OnlinePath, find_trials

# Offsets beyond so many spreads of the channel are as good as not caught.
MOST_SPREADS: Final = 30.0
_SEED: Final = 1
# A channel that the site took out of its table is absent to the older model; that is no
# alert to wait for here.
_SETTINGS: Final = AlertSettings(absent_steps=100_000)


@dataclass(frozen=True, slots=True)
class Smallest:
    """One channel's smallest offset that is caught in nine of ten trials, in its unit.

    new, old: None for none up to MOST_SPREADS. factor: new over old; none counts as
    MOST_SPREADS.
    """

    channel: str
    unit: str
    new: float | None
    old: float | None
    factor: float


@dataclass(frozen=True)
class Drilled:
    """A model's results. spread: of each channel, by name, in its unit."""

    results: tuple[Result, ...]
    spread: dict[str, float]


def drill_model(model: Model, spool: Spool, n_trials: int, within: int) -> Drilled | str:
    """Return the smallest offsets a model catches, or why they could not be found.

    spool: in the order of the model's own instruments.
    """
    if not spool.sources:
        return "there is no record to plant a fault into"
    path = OnlinePath(model, _SETTINGS)
    try:
        trials = find_trials(path, spool, n_trials, within, np.random.default_rng(_SEED))
    except BadTrials as error:
        return str(error)
    drill = Drill.of(path, trials, within, _SEED)
    measured = [k for k, channel in enumerate(drill.channels) if not channel.is_state]
    return Drilled(
        tuple(drill.sized(k, OFFSET) for k in measured),
        {drill.channels[k].name: float(drill.spread[k]) for k in measured},
    )


def smallest(new: Drilled, old: Drilled | None) -> list[Smallest]:
    """Return both models' smallest offsets, channels of both only; without old factor 1."""
    if old is None:
        return [
            Smallest(one.channel, one.unit, _within(one.size, new, one.channel), None, 1.0)
            for one in new.results
        ]
    before = {one.channel: one for one in old.results}
    found = []
    for one in new.results:
        if one.channel not in before:
            continue
        name = one.channel
        sizes = [_within(one.size, new, name), _within(before[name].size, new, name)]
        most = MOST_SPREADS * new.spread[name]
        mine, theirs = (most if size is None else size for size in sizes)
        factor = mine / theirs if theirs > 0 else 1.0
        found.append(Smallest(name, one.unit, sizes[0], sizes[1], factor))
    return found


def _within(size: float | None, drilled: Drilled, channel: str) -> float | None:
    return size if size is not None and size <= MOST_SPREADS * drilled.spread[channel] else None


def worst(found: Sequence[Smallest]) -> Smallest | None:
    """Return the channel that got worst, None without any."""
    return max(found, key=lambda one: one.factor, default=None)
