"""The judge's drill: the smallest offset of each channel that two models catch.

Both see the same quiet stretches, which neither learned from. Few trials, because it runs
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
from training.trials import LEAST_TRIALS, BadTrials, OnlinePath, Trials, find_trials

# Offsets beyond so many spreads of the channel are as good as not caught; below so many they
# are caught small enough. Without the latter a stopped pump's 0, from which any step is
# caught under one model and the next but one under the other, decided one night in seven.
MOST_SPREADS: Final = 30.0
LEAST_SPREADS: Final = 0.25
# Stretches are looked for at so many sources for each trial that is wanted, evenly among all:
# some are not quiet. Thousands more would say the same again, at a thousand times the cost.
SOURCES_A_TRIAL: Final = 3
_SEED: Final = 1
# A channel that the site took out of its table is absent to the older model; that is no
# alert to wait for here.
_SETTINGS: Final = AlertSettings(absent_steps=100_000)


@dataclass(frozen=True, slots=True)
class Smallest:
    """One channel's smallest offset that is caught in half of the trials, in its unit.

    Half, because nine in ten of a few trials hang on the hardest two of them, and would
    change from night to night by chance. new, old: None for none up to MOST_SPREADS.
    factor: new over old; none counts as MOST_SPREADS, less than LEAST_SPREADS as that.
    """

    channel: str
    unit: str
    new: float | None
    old: float | None
    factor: float


@dataclass(frozen=True)
class Drilled:
    """A model's results. spread: of each channel, by name, in its unit. n_trials: of each."""

    results: tuple[Result, ...]
    spread: dict[str, float]
    n_trials: int


@dataclass(frozen=True)
class Quiet:
    """The quiet stretches of one model, with its online path."""

    path: OnlinePath
    trials: list[Trials]
    within: int

    @classmethod
    def of(cls, model: Model, spool: Spool, n_trials: int, within: int) -> Quiet | str:
        """Return a model's stretches, or why there are not enough.

        spool: in the order of the model's own instruments.
        """
        if not spool.sources:
            return "there is no record to plant a fault into"
        path = OnlinePath(model, _SETTINGS)
        rng = np.random.default_rng(_SEED)
        try:
            return cls(path, find_trials(path, spool, n_trials, within, rng), within)
        except BadTrials as error:
            return str(error)

    @property
    def starts(self) -> set[tuple[str, int]]:
        """Source and first time of each stretch."""
        return {(one.source, int(t)) for one in self.trials for t in one.times_ns[:, 0]}

    def only(self, starts: set[tuple[str, int]]) -> Quiet:
        """Return the same with some of its stretches, in order of time."""
        kept = []
        for one in self.trials:
            order = np.argsort(one.times_ns[:, 0], kind="stable").tolist()
            which = [k for k in order if (one.source, int(one.times_ns[k, 0])) in starts]
            if which:
                kept.append(one.some(which))
        return Quiet(self.path, kept, self.within)

    def drilled(self) -> Drilled:
        """Return the smallest offsets that are caught in these stretches."""
        drill = Drill.of(self.path, self.trials, self.within, _SEED)
        measured = [k for k, channel in enumerate(drill.channels) if not channel.is_state]
        return Drilled(
            tuple(drill.sized(k, OFFSET) for k in measured),
            {drill.channels[k].name: float(drill.spread[k]) for k in measured},
            len(self.starts),
        )


def drilled_sources(sources: Sequence[str], n_trials: int) -> tuple[str, ...]:
    """Return the sources whose records faults are planted into, evenly among all, in order."""
    step = -(-len(sources) // (SOURCES_A_TRIAL * n_trials))
    return tuple(sources[:: max(step, 1)])


def drill_both(mine: Quiet, theirs: Quiet) -> tuple[Drilled, Drilled] | None:
    """Return both models' drills over the stretches that are quiet to both.

    The same stretches and directions, so that what differs are the models. None where
    there are too few.
    """
    common = mine.starts & theirs.starts
    if len(common) < LEAST_TRIALS:
        return None
    return mine.only(common).drilled(), theirs.only(common).drilled()


def smallest(new: Drilled, old: Drilled | None) -> list[Smallest]:
    """Return both models' smallest offsets, channels of both only; without old factor 1."""
    if old is None:
        return [
            Smallest(one.channel, one.unit, _within(one.half, new, one.channel), None, 1.0)
            for one in new.results
        ]
    before = {one.channel: one for one in old.results}
    found = []
    for one in new.results:
        if one.channel not in before:
            continue
        name = one.channel
        sizes = [_within(one.half, new, name), _within(before[name].half, new, name)]
        least, most = (share * new.spread[name] for share in (LEAST_SPREADS, MOST_SPREADS))
        mine, theirs = (most if size is None else max(size, least) for size in sizes)
        found.append(Smallest(name, one.unit, sizes[0], sizes[1], mine / theirs))
    return found


def _within(size: float | None, drilled: Drilled, channel: str) -> float | None:
    return size if size is not None and size <= MOST_SPREADS * drilled.spread[channel] else None


def worst(found: Sequence[Smallest]) -> Smallest | None:
    """Return the channel that got worst, None without any."""
    return max(found, key=lambda one: one.factor, default=None)
