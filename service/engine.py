"""What the service needs of a model: the seam between HTTP and scoring.

Everything else in this room speaks to an `Engine`; `scoring_engine` fills it from a
model directory, tests fill it with a small stand-in.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from scoring.episodes import Episodes
from service.layout import Layout

Floats = NDArray[np.float64]

NO_ALERT, RECORD_ALERT, SUSTAINED_ALERT = 0, 1, 2
ALERT_WORDS = (None, "record", "sustained")


@dataclass(slots=True)
class Scored:
    """Scores of n records; every array is (n,), nats or channel units, NaN = none.

    low, high: infinite on an open side, which is stored and answered as NaN.

    suspect: column of the channel, -1 where there is none. alert: 0 none, 1 record,
    2 sustained. words: row -> probabilities of a suspect state's words. every: per row a
    list of all channels' surprise and expected interval, where it was asked for.
    scores: as the engine made them, for its alert episodes.
    """

    surprise: Floats
    excess: Floats
    sustained: Floats
    suspect: NDArray[np.int16]
    suspect_surprise: Floats
    low: Floats
    high: Floats
    best: Floats
    alert: NDArray[np.uint8]
    judged: NDArray[np.bool_]
    words: dict[int, Mapping[str, float]] = field(default_factory=dict)
    every: dict[int, list[dict[str, Any]]] = field(default_factory=dict)
    scores: Any = None

    @classmethod
    def empty(cls, n: int) -> Scored:
        """Return room for n records, nothing in it."""
        surprise, excess, sustained, own, low, high, best = np.full((7, n), np.nan)
        return cls(
            surprise=surprise,
            excess=excess,
            sustained=sustained,
            suspect=np.full(n, -1, dtype=np.int16),
            suspect_surprise=own,
            low=low,
            high=high,
            best=best,
            alert=np.zeros(n, dtype=np.uint8),
            judged=np.ones(n, dtype=np.bool_),
        )

    def close_open_sides(self) -> None:
        """Put NaN where an expected interval is open, which JSON answers as null."""
        for bounds in (self.low, self.high):
            bounds[np.isinf(bounds)] = np.nan

    def put(self, rows: NDArray[np.int64] | slice, other: Scored, places: Sequence[int]) -> None:
        """Copy another's rows to these; places: the same rows as a list."""
        self.surprise[rows] = other.surprise
        self.excess[rows] = other.excess
        self.sustained[rows] = other.sustained
        self.suspect[rows] = other.suspect
        self.suspect_surprise[rows] = other.suspect_surprise
        self.low[rows] = other.low
        self.high[rows] = other.high
        self.best[rows] = other.best
        self.alert[rows] = other.alert
        self.judged[rows] = other.judged
        for row, words in other.words.items():
            self.words[places[row]] = words
        for row, every in other.every.items():
            self.every[places[row]] = every


class Engine(Protocol):
    """A loaded model, ready to score. Used by the writer's thread and, to read, by others."""

    @property
    def name(self) -> str: ...
    @property
    def layout(self) -> Layout: ...
    @property
    def levels(self) -> Mapping[str, float]:
        """Level by kind of alert, nats: `record` and `sustained`."""

    @property
    def figures(self) -> Mapping[str, float]:
        """What the model says of itself, by the names in metrics.FIGURE_HELP."""

    @property
    def episodes(self) -> Episodes | None:
        """What makes alerts of its scores; None where it makes none."""

    def score(
        self,
        sources: Sequence[str],
        start: NDArray[np.int64],
        times_ns: NDArray[np.int64],
        values: Floats,
        lives: Sequence[Any],
        channels: bool,
    ) -> tuple[Scored, list[Any]]:
        """Score records of some sources; return the scores and each source's new standing.

        start: (n_sources + 1,) where each one's rows begin, in the order of arrival. lives:
        the standings before, None for none. channels: whether `every` is asked for.
        """

    def standing_from(self, stored: bytes | None) -> Any:
        """Return a stored standing as an object; None where it does not carry over."""

    def standing_bytes(self, live: Any) -> bytes:
        """Return a standing as the store keeps it."""

    def neighbours(self, source: str, column: int) -> Sequence[str]:
        """Return the names of the channels that share an edge with one."""

    def member(self, source: str) -> str:
        """Return `own` where the model has a member for the source, else `fleet`."""

    def describe(self, source: str | None) -> dict[str, Any]:
        """Return the model as its page shows it: channels, edges, levels, figures."""
