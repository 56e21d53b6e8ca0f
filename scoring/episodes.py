"""Alert episodes: from scores to alerts that a crew can live with, pure and without a clock.

`step` takes the records of one source, `tick` the time that passed without any. Most
calls end after one kernel; only records at which something begins or ends, and sources
with something open, go through the slower half in `scoring.attend`.
"""

from __future__ import annotations

from dataclasses import replace
from threading import Lock

import numpy as np
from numpy.typing import NDArray

from scoring import alert_kernel as kernel
from scoring.alert_rules import Rules, channels_key, level_knobs, rules_of
from scoring.alert_settings import AlertSettings
from scoring.alert_standing import AlertStanding, Case
from scoring.alert_turn import NS_PER_S, WENT_OUT_OF_SERVICE, Turn
from scoring.alerts import SILENT, Alert, Event, blank_alert
from scoring.attend import Attendance, laid_out
from scoring.model import Levels
from scoring.scorer import Scorer, Scores
from scoring.sentences import silent_text
from scoring.suspicion import Batch

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_NONE_AHEAD = np.zeros(0, dtype=np.bool_)


class Episodes:
    """Raises and clears the alerts of all sources under one model; safe between threads."""

    def __init__(
        self, scorer: Scorer, settings: AlertSettings | None = None, levels: Levels | None = None
    ) -> None:
        """levels: used instead of the model's, for a sweep over levels."""
        self.scorer = scorer
        self.settings = settings or AlertSettings()
        self.levels = levels or scorer.model.levels
        self._key = channels_key([channel.name for channel in scorer.instruments])
        self._rules: dict[str, Rules] = {}
        self._lock = Lock()

    def warm(self) -> None:
        """Compile or load the kernels, so that the first record is as fast as the next."""
        n = len(self.scorer.instruments)
        times_ns, values = np.array([0, 1]), np.full((2, n), np.nan)
        scores, _ = self.scorer.score("", times_ns, values, None)
        self.step("", times_ns, values, scores, None)

    def step(
        self,
        source: str,
        times_ns: Ints,
        values: Floats,
        scores: Scores,
        standing: AlertStanding | None,
        *,
        heard_ns: int | None = None,
        ahead: Bools | None = None,
        rows: slice = slice(None),
    ) -> tuple[AlertStanding, tuple[Event, ...]]:
        """Return the source's new standing and what happened, in order.

        times_ns (n,), values (n, n_instruments): what was scored, all records of the
        source in order of arrival. scores: what came of it, in `rows` of them.
        heard_ns: when they arrived, by the caller's clock; None = take their own times.
        ahead: (n,) records too far ahead of the caller's clock; they change nothing.
        A standing of a model with other channels keeps its alerts and starts its clocks.
        """
        rules = self._rules_for(source)
        standing = laid_out(standing, self._key, self.scorer.instruments)
        ahead = _NONE_AHEAD if ahead is None else ahead
        arrived_ns = -1 if heard_ns is None else heard_ns
        if not (standing.cases or standing.shelves or standing.out_of_service):
            ints, floats = standing.ints.copy(), standing.floats.copy()
            n_marks = kernel.watch_rows(
                times_ns, values, scores.excess[rows], scores.sustained[rows],
                scores.channel_surprise[rows], ahead, arrived_ns, rules.knobs, rules.rows,
                rules.limits, rules.codes, rules.states, rules.neighbours, floats, ints,
                np.empty((1, 3), np.int64),
            )  # fmt: skip
            if not n_marks:
                heard = max(
                    int(ints[kernel.LAST]) if heard_ns is None else heard_ns, standing.heard_ns
                )
                return AlertStanding(self._key, heard, ints, floats, raised=standing.raised), ()
        batch = Batch.of(source, times_ns, values, scores.part(rows), ahead, standing.last_ns)
        attendance = Attendance(self.scorer, self.settings, rules, batch, arrived_ns, standing)
        after = attendance.attend()
        return after, tuple(attendance.turn.events)

    def tick(
        self, source: str, standing: AlertStanding, now_ns: int, listening_ns: int = -1
    ) -> tuple[AlertStanding, tuple[Event, ...]]:
        """Return the standing and what happened by the time `now_ns` of the caller's clock.

        A source falls silent, a shelf or a time out of service ends, an alert that still
        stands is raised again.
        listening_ns: since when the caller could have heard it: silence before that is the
        caller's own.
        """
        rules = self._rules_for(source)
        unheard_ns = now_ns - max(standing.heard_ns, listening_ns)
        is_silent = standing.heard_ns >= 0 and unheard_ns >= rules.silent_s * NS_PER_S
        if not (is_silent or standing.cases or standing.shelves or standing.out_of_service):
            return standing, ()
        turn = Turn(source, standing, self.settings, rules.hold_s)
        turn.wake(now_ns)
        if len(turn.out_of_service) < len(standing.out_of_service):
            # Put back just now: it gets the usual time before it is missed.
            standing = replace(standing, heard_ns=max(standing.heard_ns, now_ns))
        elif turn.is_out_of_service(now_ns):
            if turn.cases:
                standing = standing.started_anew()
                turn.clear_all(now_ns, WENT_OUT_OF_SERVICE)
        elif is_silent and SILENT not in turn.cases:
            turn.open(SILENT, now_ns, Case(self._silent(source, standing, now_ns), -1))
        if not turn.events and turn.left() == {
            name: getattr(standing, name) for name in turn.left()
        }:
            return standing, ()
        return replace(standing, **turn.left()), tuple(turn.events)

    def _silent(self, source: str, standing: AlertStanding, now_ns: int) -> Alert:
        last_ns = standing.last_ns if standing.last_ns >= 0 else standing.heard_ns
        alert = blank_alert(source, SILENT, "", standing.heard_ns, now_ns, self.scorer.model.name)
        return replace(alert, sentence=silent_text(source, last_ns))

    def _rules_for(self, source: str) -> Rules:
        member = self.scorer.model.member(source)
        with self._lock:
            rules = self._rules.get(member.source)
            if rules is None:
                rules = rules_of(self.scorer.model, member, self.levels, self.settings)
                self._rules[member.source] = rules
            return rules


def find_episodes(
    times_ns: Ints,
    excess: Floats,
    sustained: Floats,
    levels: Levels,
    settings: AlertSettings | None = None,
    usual_sustained: float = 0.0,
) -> Ints:
    """Return rows raised and cleared (k, 2) of one source's records, n where still open.

    Raising and clearing alone, by the same kernel. times_ns: (n,) rising; excess,
    sustained: (n,) nats, excess NaN = not judged. usual_sustained: where it rests.
    """
    knobs = level_knobs(levels, settings or AlertSettings(), usual_sustained)
    found = np.empty((len(times_ns), 2), dtype=np.int64)
    n_found = kernel.scan(times_ns, excess, sustained, knobs, kernel.new_ints(0), found)
    return found[:n_found]
