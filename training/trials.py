"""Stretches of normal records in which faults are tried, and the online path over them.

Each trial starts from the standing that the source had at that moment: the records before
it went through the online path first. `first_alerts` is that path for many trials at once,
as far as raising is concerned; `watch` is the path itself.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.alert_kernel import ABSENT_ON, RAISED, SPAN_ON, STUCK_ON, watch_rows
from scoring.alert_rules import rules_of
from scoring.alert_settings import AlertSettings
from scoring.alert_standing import AlertStanding
from scoring.alerts import Alert
from scoring.density import surprise_of
from scoring.derived import derive
from scoring.episodes import Episodes
from scoring.errors import OddbranchError
from scoring.excess import ExcessScale
from scoring.model import Member, Model
from scoring.scorer import Scorer
from scoring.standing import Standing
from scoring.sustained import sustain
from training.history.spool import Spool

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
# The row of a trial's first alert and the alert, -1 and None for none.
Watched = tuple[int, Alert | None]

# Sustained has forgotten where it started after so many time constants.
_WARM_UP_CONSTANTS: Final = 6.0
# Fewer trials than this say nothing about nine in ten.
LEAST_TRIALS: Final = 10
# Starts that are looked at for each trial that is wanted: some raise an alert by themselves.
_TRIED_FOR_ONE: Final = 3
# Records that go through the online path at once; it stops after the alert that counts.
_N_WATCHED: Final = 16
# Marks of the alert machine at which something begins, and room for a trial's marks: the
# first of them decides, so that there is no need for all.
_RAISING: Final = (RAISED, STUCK_ON, ABSENT_ON, SPAN_ON)
_N_MARKS: Final = 4096
_NONE_AHEAD: Final = np.zeros(0, dtype=np.bool_)
# Records further apart than this many usual intervals are no one stretch.
_MAX_GAP_STEPS: Final = 2.5


class BadTrials(OddbranchError):
    """The records cannot carry the trials."""


@dataclass(frozen=True)
class Trials:
    """Trials of one source.

    times_ns (n_trials, n_rows) and values (n_trials, n_rows, n_channels): normal records.
    before: (n_trials, n_channels) the record before each. standings, alerts: the source's
    at that moment.
    """

    source: str
    times_ns: Ints
    values: Floats
    before: Floats
    standings: tuple[Standing, ...]
    alerts: tuple[AlertStanding, ...]

    def __len__(self) -> int:
        return len(self.times_ns)

    def some(self, which: Sequence[int]) -> Trials:
        """Return some of the trials, by number."""
        at = list(which)
        return Trials(
            self.source,
            self.times_ns[at],
            self.values[at],
            self.before[at],
            tuple(self.standings[k] for k in at),
            tuple(self.alerts[k] for k in at),
        )


class OnlinePath:
    """The online path of one model, from given standings on."""

    def __init__(self, model: Model, settings: AlertSettings | None = None) -> None:
        self.model, self.scorer = model, Scorer(model)
        self.settings = settings or AlertSettings()
        self.episodes = Episodes(self.scorer, self.settings)
        self._scales: dict[str, ExcessScale] = {}
        spans = [channel.span or (-np.inf, np.inf) for channel in self.scorer.instruments]
        self._low, self._high = np.array(spans).T

    def watch(self, trials: Trials, k: int, values: Floats, kinds: Sequence[str]) -> Watched:
        """Run one trial with other values, (n_rows, n_channels), until its first alert.

        kinds: of alerts that count. Returns the row at which it was raised and the alert as
        it stood then, -1 and None if there was none.
        """
        source, n_rows = trials.source, len(values)
        standing, alerts = trials.standings[k], trials.alerts[k]
        for start in range(0, n_rows, _N_WATCHED):
            rows = slice(start, min(start + _N_WATCHED, n_rows))
            times_ns = trials.times_ns[k, rows]
            scores, standing = self.scorer.score(source, times_ns, values[rows], standing)
            alerts, events = self.episodes.step(source, times_ns, values[rows], scores, alerts)
            for event in events:
                if event.what == "raised" and event.alert and event.alert.kind in kinds:
                    row = start + int(np.searchsorted(times_ns, event.time_ns))
                    return row, event.alert
        return -1, None

    def first_alerts(self, trials: Trials, values: Floats) -> Ints:
        """Return the row of each trial's first alert of any kind, (n_trials,), -1 for none.

        values: (n_trials, n_rows, n_channels) what came instead of the normal records. All
        trials are scored at once; each then goes through the kernel of the alert machine.
        """
        n_trials, n_rows = values.shape[:2]
        times_ns = trials.times_ns[:, :n_rows]
        member, levels = self.model.member(trials.source), self.model.levels
        usable = ~((values < self._low) | (values > self._high) | np.isnan(values))
        nodes = self._nodes(trials, times_ns, np.where(usable, values, np.nan))
        rows = member.bin_table.rows(nodes.reshape(n_trials * n_rows, -1))
        excess = self._scale(member).excess(rows, surprise_of(member, rows))
        excess = excess.reshape(n_trials, n_rows)
        excess[usable.sum(axis=2) < levels.least_readings] = np.nan
        rules = rules_of(self.model, member, levels, self.settings)
        found = np.full(n_trials, -1)
        for k in range(n_trials):
            standing, alerts = trials.standings[k], trials.alerts[k]
            sustained, _, _, _ = sustain(
                times_ns[k], excess[k], standing.time_ns, standing.sustained,
                member.usual.sustained, levels.tau_s, levels.step_s, levels.cap,
            )  # fmt: skip
            # Own surprise only says whom to suspect, which is not asked here.
            own, marks = np.zeros(values.shape[1:]), np.empty((_N_MARKS, 3), dtype=np.int64)
            n_marks = watch_rows(
                times_ns[k], values[k], excess[k], sustained, own, _NONE_AHEAD, -1,
                rules.knobs, rules.rows, rules.limits, rules.codes, rules.states,
                rules.neighbours, alerts.floats.copy(), alerts.ints.copy(), marks,
            )  # fmt: skip
            raised = np.isin(marks[: min(n_marks, _N_MARKS), 1], _RAISING)
            if raised.any():
                found[k] = marks[raised.argmax(), 0]
        return found

    def _nodes(self, trials: Trials, times_ns: Ints, kept: Floats) -> Floats:
        """Return readings with derived channels, (n_trials, n_rows, n_nodes)."""
        if not self.model.table.derived:
            return kept
        pairs = zip(times_ns, kept, trials.standings, strict=True)
        return np.stack([derive(self.model.table, t, v, s.carry)[0] for t, v, s in pairs])

    def _scale(self, member: Member) -> ExcessScale:
        if member.source not in self._scales:
            self._scales[member.source] = ExcessScale(member)
        return self._scales[member.source]

    def warm_up(
        self, source: str, times_ns: Ints, values: Floats
    ) -> tuple[Standing, AlertStanding]:
        """Return the standings of a source after some records."""
        scores, standing = self.scorer.score(source, times_ns, values, None)
        alerts, _ = self.episodes.step(source, times_ns, values, scores, None)
        return standing, alerts


def find_trials(
    path: OnlinePath, spool: Spool, n_trials: int, n_rows: int, rng: np.random.Generator
) -> list[Trials]:
    """Return trials spread over a spool's sources, each a stretch that raises nothing itself.

    Raises BadTrials where fewer than LEAST_TRIALS can be found.
    """
    levels = path.model.levels
    n_warm = int(np.ceil(_WARM_UP_CONSTANTS * levels.tau_s / levels.step_s)) + 1
    each = -(-n_trials // len(spool.sources))
    found = []
    for source in spool.sources:
        trials = _of_source(path, spool, source, each, n_warm, n_rows, rng)
        if trials is not None:
            found.append(trials)
    n_found = sum(len(trials) for trials in found)
    if n_found < LEAST_TRIALS:
        raise BadTrials(
            f"only {n_found} quiet stretches of {n_warm + n_rows} records were found, "
            f"{LEAST_TRIALS} are needed; give more normal records, or fewer with --within"
        )
    return found


def _of_source(
    path: OnlinePath,
    spool: Spool,
    source: str,
    n_trials: int,
    n_warm: int,
    n_rows: int,
    rng: np.random.Generator,
) -> Trials | None:
    length = n_warm + n_rows
    n_starts = spool.n_records(source) - length + 1
    if n_starts < 1:
        return None
    wanted = min(n_starts, _TRIED_FOR_ONE * n_trials)
    starts = rng.choice(n_starts, wanted, replace=False)
    longest_ns = _MAX_GAP_STEPS * path.model.levels.step_s * 1e9
    tried = []
    for times_ns, values in _stretches(spool, source, starts, length):
        if np.diff(times_ns).max(initial=0) > longest_ns:
            continue
        standing, alerts = path.warm_up(source, times_ns[:n_warm], values[:n_warm])
        if not alerts.open:
            tried.append((times_ns[n_warm:], values[n_warm:], values[n_warm - 1], standing, alerts))
    if not tried:
        return None
    times, values_of, before, standings, alert_standings = zip(*tried, strict=True)
    trials = Trials(
        source, np.stack(times), np.stack(values_of), np.stack(before), standings, alert_standings
    )
    quiet = np.flatnonzero(path.first_alerts(trials, trials.values) < 0)[:n_trials]
    return trials.some(quiet.tolist()) if len(quiet) else None


def _stretches(
    spool: Spool, source: str, starts: Ints, length: int
) -> Iterator[tuple[Ints, Floats]]:
    """Yield some stretches of one source's records, in the order of `starts`."""
    order = np.argsort(starts, kind="stable")
    found: dict[int, tuple[list[Ints], list[Floats]]] = {int(k): ([], []) for k in order}
    first = 0
    for times_ns, values in spool.chunks(source):
        last = first + len(times_ns)
        for k in order.tolist():
            low, high = max(int(starts[k]), first), min(int(starts[k]) + length, last)
            if low < high:
                found[k][0].append(times_ns[low - first : high - first])
                found[k][1].append(values[low - first : high - first])
        first = last
    for k in range(len(starts)):
        times, parts = found[k]
        yield np.concatenate(times), np.concatenate(parts)
