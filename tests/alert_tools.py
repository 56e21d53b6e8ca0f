"""What tests of alerts share: scores made by hand, and a source fed to the machine."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scoring.alert_settings import AlertSettings
from scoring.alert_standing import AlertStanding
from scoring.alerts import Alert, Event
from scoring.delays import DELAYS, Delays
from scoring.episodes import Episodes
from scoring.model import Model
from scoring.scorer import Scorer, Scores
from scoring.stillness import StillnessLimits, neighbour_lists
from scoring.sustained import sustain
from tests.models import EDGES, STEP_S, a_model

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

S = 1_000_000_000
START_NS = 1_700_000_000 * S
STEP_NS = int(STEP_S) * S
N_CHANNELS = 4
USUAL = np.array([12.0, 14.0, 15.0, 0.0])


def limits_of(
    model: Model, still_s: float = np.inf, moving_s: float = np.inf, away_s: float = 0.0
) -> StillnessLimits:
    """Return limits that are alike for all measurements under `running` and none else."""
    still, moving = np.full((1, 5), still_s), np.full((1, 5), moving_s)
    still[0, 3] = moving[0, 3] = moving[0, 4] = np.inf
    neighbours = neighbour_lists(model.table, EDGES)
    return StillnessLimits(np.array([0]), still, moving, np.full(5, away_s), np.ones(4), neighbours)


def episodes(
    settings: AlertSettings | None = None,
    model: Model | None = None,
    delays: Delays = DELAYS,
    **limits: float,
) -> Episodes:
    """Return the machine over the small model. limits: see `limits_of`."""
    model = model or a_model()
    model = replace(model, levels=replace(model.levels, delays=delays))
    if limits:
        members = {
            name: replace(member, stillness=limits_of(model, **limits))
            for name, member in model.members.items()
        }
        model = replace(model, members=members)
    return Episodes(Scorer(model), settings)


def times(n: int, start: int = 0) -> Ints:
    """Return n times at the usual interval."""
    return np.asarray(START_NS + (start + np.arange(n, dtype=np.int64)) * STEP_NS)


def readings(n: int) -> Floats:
    """Return n usual records in which every measurement moves."""
    values = np.repeat(USUAL[None, :], n, axis=0)
    values[:, :3] += np.where(np.arange(n) % 2, 0.5, 0.0)[:, None]
    return values


def scores_of(
    excess: Sequence[float] | Floats,
    sustained: Sequence[float] | Floats | None = None,
    suspect: int | Sequence[int] = 1,
    own: Floats | None = None,
) -> Scores:
    """Return scores with the given excess (NaN = not judged) and sustained, all else plain.

    own: (n, 4) nats of each channel; None = all of the excess is the suspect's.
    """
    e = np.asarray(excess, dtype=np.float64)
    n = len(e)
    suspects = np.broadcast_to(np.asarray(suspect, dtype=np.int16), n).copy()
    if own is None:
        own = np.ones((n, N_CHANNELS))
        own[np.arange(n), suspects] += np.maximum(np.nan_to_num(e), 0.0)
    return Scores(
        surprise=np.nan_to_num(e) + 5.0,
        excess=e,
        sustained=np.zeros(n) if sustained is None else np.asarray(sustained, dtype=np.float64),
        suspect=suspects,
        suspect_surprise=own[np.arange(n), suspects],
        expected_low=np.full(n, 10.0),
        expected_high=np.full(n, 11.0),
        expected_best=np.full(n, 10.5),
        alert=np.zeros(n, np.uint8),
        missing=np.zeros(n, np.int16),
        judged=~np.isnan(e),
        late=np.zeros(n, np.bool_),
        usable=np.ones((n, N_CHANNELS), np.bool_),
        channel_surprise=own,
        rows=np.zeros((n, 6), np.uint8),
    )


def part(scores: Scores, rows: slice) -> Scores:
    """Return some rows of scores."""
    return scores.part(rows)


def sustained_of(machine: Episodes, times_ns: Ints, excess: Floats) -> Floats:
    """Return sustained as the scorer forms it from excess."""
    levels = machine.levels
    usual = machine.scorer.model.member("a").usual.sustained
    out, *_ = sustain(times_ns, excess, -1, 0.0, usual, levels.tau_s, levels.step_s, levels.cap)
    return np.asarray(out)


class Fed:
    """A source on its way: feed it, ask for what happened. Through bytes after each step."""

    def __init__(self, machine: Episodes, source: str = "a") -> None:
        self.machine, self.source = machine, source
        self.standing: AlertStanding | None = None
        self.events: list[Event] = []

    def feed(
        self,
        excess: Sequence[float] | Floats,
        sustained: Sequence[float] | Floats | None = None,
        values: Floats | None = None,
        times_ns: Ints | None = None,
        cuts: Iterable[int] = (),
        scores: Scores | None = None,
        **more: Any,
    ) -> list[Event]:
        """Feed records, in batches that end at `cuts`; return the events.

        Without times they go on at the usual interval.
        """
        scores = scores or scores_of(excess, sustained)
        n = len(scores.excess)
        values = readings(n) if values is None else values
        if times_ns is None:
            last = self.standing.last_ns if self.standing else START_NS - STEP_NS
            times_ns = last + (1 + np.arange(n, dtype=np.int64)) * STEP_NS
        ahead = more.pop("ahead", None)
        borders = [0, *sorted(set(cuts)), n]
        found: list[Event] = []
        for a, b in pairwise(borders):
            rows = slice(a, b)
            self.standing, events = self.machine.step(
                self.source, times_ns[rows], values[rows], part(scores, rows), self.standing,
                ahead=None if ahead is None else ahead[rows], **more,
            )  # fmt: skip
            self.standing = AlertStanding.from_bytes(self.standing.to_bytes())
            found += events
        self.events += found
        return found

    @property
    def open(self) -> tuple[Alert, ...]:
        """The alerts that are open now."""
        return self.standing.open if self.standing else ()

    def tick(self, now_ns: int) -> list[Event]:
        """Let time pass without records."""
        assert self.standing is not None
        self.standing, events = self.machine.tick(self.source, self.standing, now_ns)
        self.events += events
        return list(events)


def told(events: Iterable[Event]) -> list[tuple[str, str]]:
    """Return what happened, and to which kind, in order."""
    return [(event.what, event.alert.kind if event.alert else "") for event in events]
