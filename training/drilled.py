"""The drill itself: which faults would this model catch, how small, and whom would it blame.

Sizes are searched by the fast path, which only raises; every size that is reported was
then run through the online path itself.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.alerts import ABSENT, SCORED, SPAN, STUCK
from scoring.channels import Channel
from scoring.model import Model
from training.intervals import clopper_pearson
from training.planting import SCALING, SIZED, plant, stick, swap
from training.planting import STUCK as STUCK_KIND
from training.planting import SWAP as SWAP_KIND
from training.trials import OnlinePath, Trials, Watched

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# A size counts as caught from this share of the trials on.
CAUGHT_SHARE: Final = 0.9
# Sizes that are tried first, in spreads of the channel, each twice the one before.
_FIRST, _N_DOUBLED = 0.125, 11
# Then the step between caught and not is halved so often: sizes are good to 4 %.
_N_HALVED: Final = 4
# Trials of the kinds that need no search, or long stretches.
N_SHORT: Final = 20
# Alerts that say something of a channel, beside those in the budget.
_WATCHED: Final = (SCORED, STUCK, ABSENT, SPAN)


@dataclass(frozen=True, slots=True)
class Result:
    """What the drill found for one kind of fault of one channel.

    size: the smallest caught in 90 % of trials, in `unit`; None where no size was. half:
    the same for half of the trials. partner: of a swap. caught, n_trials: at that size, or
    at the largest. right: of those caught, in how many the suspect was the channel (of a
    swap, one of the two) when the alert was raised. delay_records: median records from the
    fault's start to the alert.
    """

    channel: str
    kind: str
    unit: str
    size: float | None
    half: float | None
    partner: str
    caught: int
    n_trials: int
    right: int
    delay_records: float | None

    @property
    def is_caught(self) -> bool:
        """Whether at least 90 % of the trials were caught."""
        return self.caught >= CAUGHT_SHARE * self.n_trials

    @property
    def caught_limits(self) -> tuple[float, float]:
        """Exact 95 % limits of the share caught (Clopper & Pearson)."""
        return clopper_pearson(self.caught, self.n_trials)


@dataclass(frozen=True)
class Drill:
    """Runs drills of one model over one set of trials.

    within: records from a fault's start in which it must be caught. seed: of directions
    and noise. spread: (n_channels,) of each channel in the trials, the unit of the search.
    """

    path: OnlinePath
    trials: Sequence[Trials]
    within: int
    seed: int
    spread: Floats

    @classmethod
    def of(cls, path: OnlinePath, trials: Sequence[Trials], within: int, seed: int) -> Drill:
        """Return a drill; the spreads are measured on the trials' own normal records."""
        return cls(path, trials, within, seed, _spreads(_rows(trials)))

    @property
    def normal(self) -> Floats:
        """The trials' normal records, (n, n_channels)."""
        return _rows(self.trials)

    @property
    def channels(self) -> tuple[Channel, ...]:
        """The instruments of the model."""
        return self.path.scorer.instruments

    def sized(self, channel: int, kind: str) -> Result:
        """Return the smallest size of an offset, a drift, noise or scaling that is caught."""
        rng = np.random.default_rng([self.seed, channel, SIZED.index(kind)])
        draws = [
            (
                rng.permutation(np.resize([1.0, -1.0], len(one))),
                rng.standard_normal((len(one), self.within)),
            )
            for one in self.trials
        ]
        resolution = self.channels[channel].resolution or 0.0

        def planted(size: float) -> list[Floats]:
            return [
                plant(kind, one.values[:, : self.within], channel, size, *draw, resolution)
                for one, draw in zip(self.trials, draws, strict=True)
            ]

        sizes = self._sizes(channel, kind)
        size, half = (self._search(planted, sizes, share) for share in (CAUGHT_SHARE, 0.5))
        seen = self._watch(self.trials, planted(size or float(sizes[-1])), (channel,))
        if kind == SCALING:
            size, half = (None if x is None else 100.0 * x for x in (size, half))
            return self._result(channel, kind, "% of reading", (size, half), seen)
        return self._result(channel, kind, self.channels[channel].unit, (size, half), seen)

    def stuck(self, channel: int) -> Result:
        """Return for how many records a channel must be stuck to be caught."""
        trials = self._short()
        values = [stick(one.values, one.before, channel) for one in trials]
        seen = self._watch(trials, values, (channel,))
        rows = sorted(one.row for one in seen if one.row >= 0)
        needed = [math.ceil(share * len(seen)) for share in (CAUGHT_SHARE, 0.5)]
        size, half = (float(rows[n - 1] + 1) if len(rows) >= n else None for n in needed)
        return self._result(channel, STUCK_KIND, "records", (size, half), seen)

    def swapped(self, channel: int, partner: int) -> Result:
        """Return whether two channels on each other's terminals are caught."""
        trials = self._short()
        values = [swap(one.values[:, : self.within], channel, partner) for one in trials]
        seen = self._watch(trials, values, (channel, partner))
        return self._result(channel, SWAP_KIND, "", (None, None), seen, partner)

    def partners(self, channel: int) -> list[int]:
        """Return the later channels that could be swapped with one: measurements both."""
        return [k for k in range(channel + 1, len(self.channels)) if not self.channels[k].is_state]

    def _sizes(self, channel: int, kind: str) -> Floats:
        """Return sizes to try, each twice the one before, up to the channel's whole span."""
        spread = float(self.spread[channel])
        if kind == SCALING:
            # A share of the reading: in spreads of the middle reading, up to tenfold.
            spread = min(spread / max(self._middle(channel), 1e-12), 0.1)
        sizes = _FIRST * spread * 2.0 ** np.arange(_N_DOUBLED)
        span = self.channels[channel].span
        if span and kind != SCALING:
            sizes = np.minimum(sizes, span[1] - span[0])
        return np.asarray(np.unique(sizes))

    def _middle(self, channel: int) -> float:
        rows = np.concatenate([one.values[:, :, channel].ravel() for one in self.trials])
        rows = np.abs(rows[~np.isnan(rows)])
        return float(np.median(rows[rows > 0])) if (rows > 0).any() else 0.0

    def _search(
        self, planted: Callable[[float], list[Floats]], sizes: Floats, share: float
    ) -> float | None:
        """Return the smallest size that is caught in a share of the trials; None for none."""
        low = 0.0
        for high in sizes.tolist():
            if self._is_caught(planted(high), share):
                break
            low = high
        else:
            return None
        for _ in range(_N_HALVED):
            middle = math.sqrt(low * high) if low > 0 else high / 2
            if self._is_caught(planted(middle), share):
                high = middle
            else:
                low = middle
        return float(high)

    def _is_caught(self, values: Sequence[Floats], share: float) -> bool:
        found = [
            self.path.first_alerts(one, planted)
            for one, planted in zip(self.trials, values, strict=True)
        ]
        rows = np.concatenate(found)
        return bool((rows >= 0).sum() >= share * len(rows))

    def _watch(
        self, trials: Sequence[Trials], values: Sequence[Floats], concerned: tuple[int, ...]
    ) -> list[Seen]:
        """Return what the online path itself makes of every trial, up to its first alert."""
        names = {self.channels[k].name for k in concerned}
        found = []
        for one, planted in zip(trials, values, strict=True):
            for k, row in enumerate(self.path.first_alerts(one, planted).tolist()):
                until = row + 1 if row >= 0 else planted.shape[1]
                found.append(_seen(self.path.watch(one, k, planted[k, :until], _WATCHED), names))
        return found

    def _short(self) -> list[Trials]:
        """Return fewer of the trials, spread over the sources alike."""
        each = max(1, -(-N_SHORT // len(self.trials)))
        return [one.some(range(min(each, len(one)))) for one in self.trials]

    def _result(
        self,
        channel: int,
        kind: str,
        unit: str,
        sizes: tuple[float | None, float | None],
        seen: Sequence[Seen],
        partner: int | None = None,
    ) -> Result:
        caught = [one for one in seen if one.row >= 0]
        return Result(
            channel=self.channels[channel].name,
            kind=kind,
            unit=unit,
            size=sizes[0],
            half=sizes[1],
            partner="" if partner is None else self.channels[partner].name,
            caught=len(caught),
            n_trials=len(seen),
            right=sum(one.right for one in caught),
            delay_records=float(np.median([one.row + 1 for one in caught])) if caught else None,
        )


@dataclass(frozen=True, slots=True)
class Seen:
    """One trial: the row of its alert, -1 for none, and whether it named the right channel."""

    row: int
    right: bool = False


def _seen(watched: Watched, names: set[str]) -> Seen:
    row, alert = watched
    if alert is None:
        return Seen(row)
    named = {one.channel for one in alert.suspects[:1]} or set(alert.channels)
    return Seen(row, bool(names & named))


def _rows(trials: Sequence[Trials]) -> Floats:
    return np.concatenate([one.values.reshape(-1, one.values.shape[2]) for one in trials])


def _spreads(rows: Floats) -> Floats:
    """Return half the distance from the 16 % to the 84 % point of each channel, (n_channels,).

    The standard deviation where that is nothing, as for a pump that mostly stands.
    """
    spread = np.ones(rows.shape[1])
    for k, column in enumerate(rows.T):
        there = column[~np.isnan(column)]
        if len(there):
            low, high = np.quantile(there, [0.16, 0.84])
            spread[k] = 0.5 * (high - low) or float(there.std()) or 1.0
    return spread


def unwatched(results: Sequence[Result], model: Model) -> dict[str, str]:
    """Return the channels that nothing watches, with the reason in words.

    Those without an edge, so that no other channel speaks for or against them, and those of
    which no planted fault was caught at any size.
    """
    joined = {
        model.table.nodes[node].name
        for member in (*model.members.values(), model.fleet)
        for part in member.parts
        for edge in part.tree.edges.tolist()
        for node in edge
    }
    found = {}
    for channel in model.table.instruments:
        own = [one for one in results if one.channel == channel.name and one.kind != SWAP_KIND]
        if own and not any(one.size is not None for one in own):
            found[channel.name] = "no fault of any size was caught in 90 % of the trials"
        if channel.name not in joined:
            found[channel.name] = "it goes with no other channel, so only its own range is watched"
    return found
