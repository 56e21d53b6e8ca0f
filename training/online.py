"""Records put through exactly the online path: scorer, standings, alert episodes.

What a service does record by record is done here batch by batch, with the same calls in
the same order; the clock of a service is replaced by the records' own times.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.alert_rules import rules_of
from scoring.alert_settings import AlertSettings
from scoring.alert_standing import AlertStanding
from scoring.alerts import Alert, Event
from scoring.episodes import Episodes
from scoring.model import Model
from scoring.scorer import Scorer
from scoring.standing import Standing
from training.heldexcess import ExcessFile, HeldExcess
from training.judging import Call

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Records that go through at once: a service sees time pass at least as often.
_N_ROWS: Final = 2048


@dataclass
class Source:
    """What is remembered of one source between batches.

    silent_ns: without a record for so long it counts as silent.
    """

    silent_ns: int
    standing: Standing | None = None
    alerts: AlertStanding | None = None
    first_ns: int = 0
    last_ns: int = -1
    n_late: int = 0
    n_not_judged: int = 0
    n_records: int = 0


class Online:
    """Replays records of any number of sources; keeps the alerts and the excess.

    folder: for the excess. alerts: all that were cleared, as they were then. at_first: by
    an alert's id, its suspect when it was raised. n_again: alerts raised again.
    """

    def __init__(self, model: Model, folder: Path, settings: AlertSettings | None = None) -> None:
        self.model, self.scorer = model, Scorer(model)
        self.settings = settings or AlertSettings()
        self.episodes = Episodes(self.scorer, self.settings)
        self.sources: dict[str, Source] = {}
        self.alerts: list[Alert] = []
        self.at_first: dict[str, str] = {}
        self.n_damped = 0
        self.n_again = 0
        self._folder = folder
        self._files: dict[str, ExcessFile] = {}

    @property
    def excess(self) -> list[HeldExcess]:
        """The excess of all records on time, a source each."""
        return [file.kept for file in self._files.values()]

    def add(self, source: str, times_ns: Ints, values: Floats) -> None:
        """Take one source's next records, in the order in which they came."""
        if not len(times_ns):
            return
        if source not in self.sources:
            self.sources[source] = Source(self._silent_ns(source))
        known = self.sources[source]
        for part in self._parts(source, known, times_ns):
            self._step(source, known, times_ns[part], values[part])

    def finish(self, until_ns: int = 0) -> None:
        """Let time pass up to the newest record of all, and take what is still open.

        until_ns: a newer one of sources that others replay.
        """
        newest_ns = max((known.last_ns for known in self.sources.values()), default=0)
        newest_ns = max(newest_ns, until_ns)
        for source, known in self.sources.items():
            self._tick(source, known, newest_ns)
            assert known.alerts is not None
            self.alerts += known.alerts.open
        self.alerts.sort(key=lambda alert: (alert.raised_ns, alert.source, alert.kind))

    def calls(self, *, in_budget: bool = True) -> list[Call]:
        """Return the alerts that count against the budget, or the others, for judging."""
        ends = {source: known.last_ns for source, known in self.sources.items()}
        return [
            Call(
                alert.source,
                alert.raised_ns,
                ends[alert.source] if alert.cleared_ns is None else alert.cleared_ns,
                self.at_first.get(alert.id, ""),
                tuple(s.channel for s in alert.suspects) or alert.channels,
                alert.kind,
            )
            for alert in self.alerts
            if alert.in_budget == in_budget
        ]

    def _parts(self, source: str, known: Source, times_ns: Ints) -> Iterator[slice]:
        """Yield stretches of records, with time made to pass where none came for long."""
        before = np.concatenate([[known.last_ns if known.last_ns >= 0 else times_ns[0]], times_ns])
        gaps = set(np.flatnonzero(np.diff(before) > known.silent_ns).tolist())
        cuts = sorted({0, len(times_ns), *gaps, *range(0, len(times_ns), _N_ROWS)})
        for start, stop in itertools.pairwise(cuts):
            if start in gaps:
                self._tick(source, known, int(before[start]) + known.silent_ns)
            yield slice(start, stop)

    def _silent_ns(self, source: str) -> int:
        rules = rules_of(self.model, self.model.member(source), self.model.levels, self.settings)
        return int(rules.silent_s * 1e9) if np.isfinite(rules.silent_s) else 1 << 62

    def _step(self, source: str, known: Source, times_ns: Ints, values: Floats) -> None:
        scores, known.standing = self.scorer.score(source, times_ns, values, known.standing)
        known.alerts, events = self.episodes.step(source, times_ns, values, scores, known.alerts)
        self._take(events)
        on_time = ~scores.late
        if source not in self._files:
            path = self._folder / f"{len(self._files)}.excess"
            self._files[source] = ExcessFile(source, path)
            self._files[source].kept.usual = self.model.member(source).usual.sustained
        self._files[source].add(
            times_ns[on_time], scores.excess[on_time], scores.suspect[on_time].astype(np.int64)
        )
        known.first_ns = known.first_ns if known.n_records else int(times_ns.min())
        known.last_ns = max(known.last_ns, int(times_ns.max()))
        known.n_records += len(times_ns)
        known.n_late += int(scores.late.sum())
        known.n_not_judged += int((~scores.judged).sum())
        self._tick(source, known, known.last_ns)

    def _tick(self, source: str, known: Source, now_ns: int) -> None:
        if known.alerts is not None:
            known.alerts, events = self.episodes.tick(source, known.alerts, now_ns)
            self._take(events)

    def _take(self, events: tuple[Event, ...]) -> None:
        for event in events:
            alert = event.alert
            if alert is None:
                continue
            if event.what == "raised":
                self.at_first[alert.id] = alert.suspects[0].channel if alert.suspects else ""
                self.n_damped += not event.annunciate
            elif event.what == "raised_again":
                self.n_again += 1
            elif event.what == "cleared":
                self.alerts.append(alert)
