"""Stretches over a level: records over it that follow each other closely, as one.

A scored stream, live or on file, gives its records over a level one by one; a stretch
ends when its source has stayed under for `gap_ns`. The suspect of a stretch is the
channel whose own surprise, summed over the records that named it, is largest.
"""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class OverLevel:
    """One record over a level, with what its scores say.

    kind: the level, "record" or "sustained". suspect: name of the channel, "" for none.
    weight: how suspicious the suspect was, in the method's own measure.
    reading, low, high: what it read and should have read, in its unit; NaN where there
        is no such number, an infinite end is open.
    word, word_expected: the same of a state, "" for a measurement.
    """

    source: str
    time_ns: int
    kind: str = "record"
    suspect: str = ""
    weight: float = 1.0
    reading: float = math.nan
    low: float = math.nan
    high: float = math.nan
    word: str = ""
    word_expected: str = ""


@dataclass(frozen=True, slots=True)
class Stretch:
    """A time one source spent over a level, brief returns included.

    over: its records over the level, at least one, in order of time.
    """

    source: str
    over: tuple[OverLevel, ...]

    @property
    def start_ns(self) -> int:
        """Time of the first record over."""
        return self.over[0].time_ns

    @property
    def end_ns(self) -> int:
        """Time of the last record over."""
        return self.over[-1].time_ns

    @property
    def kind(self) -> str:
        """The level: "sustained" once that was passed, else "record"."""
        return "sustained" if any(o.kind == "sustained" for o in self.over) else "record"

    @property
    def suspects(self) -> tuple[str, ...]:
        """The channels that were suspected, the most suspicious over the whole stretch first."""
        summed: dict[str, float] = {}
        for over in self.over:
            if over.suspect:
                summed[over.suspect] = summed.get(over.suspect, 0.0) + over.weight
        return tuple(sorted(summed, key=lambda name: -summed[name]))

    @property
    def suspect(self) -> str:
        """The first of the suspects, "" for none."""
        return next(iter(self.suspects), "")

    @property
    def worst(self) -> OverLevel:
        """The record in which the suspect was most suspicious."""
        suspect = self.suspect
        named = [over for over in self.over if over.suspect == suspect]
        return max(named, key=lambda over: over.weight)

    def within(self, start_ns: int, end_ns: int) -> Stretch | None:
        """Return the part from a time up to, not including, another; None for none."""
        part = tuple(o for o in self.over if start_ns <= o.time_ns < end_ns)
        return Stretch(self.source, part) if part else None


class Stretches:
    """Groups records over a level, any number of sources at a time."""

    def __init__(self, gap_ns: int) -> None:
        self.gap_ns = gap_ns
        self._open: dict[str, list[OverLevel]] = {}
        self._ended: list[Stretch] = []

    def add(self, over: OverLevel) -> None:
        """Take in a record; those of one source come in the order of time."""
        run = self._open.get(over.source)
        if run and over.time_ns - run[-1].time_ns > self.gap_ns:
            self._end(over.source)
        self._open.setdefault(over.source, []).append(over)

    def close(self, now_ns: int | None = None) -> list[Stretch]:
        """Return the stretches that have ended by a time, each once, by their start.

        now_ns: None ends all of them.
        """
        for source, run in list(self._open.items()):
            if now_ns is None or now_ns - run[-1].time_ns > self.gap_ns:
                self._end(source)
        ended, self._ended = self._ended, []
        return sorted(ended, key=lambda stretch: (stretch.start_ns, stretch.source))

    def _end(self, source: str) -> None:
        self._ended.append(Stretch(source, tuple(self._open.pop(source))))
