"""The slower half of the alert machine: records at which something begins or ends.

An attendance walks through a batch from mark to mark, sums up what open alerts are
about, and tells the source's `Turn` what begins and what ends. Records one by one give
the same as records in batches.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from scoring import alert_kernel as kernel
from scoring.alert_rules import Rules
from scoring.alert_settings import AlertSettings
from scoring.alert_standing import AlertStanding, Case
from scoring.alert_turn import NEVER_NS, NS_PER_S, WENT_OUT_OF_SERVICE, Turn
from scoring.alerts import ABSENT, CLOCK, SCORED, SILENT, SPAN, STUCK, Alert, blank_alert
from scoring.channel_alerts import ChannelAlerts
from scoring.channels import Channel
from scoring.scorer import Scorer
from scoring.sentences import clock_text
from scoring.suspicion import Batch, Inquiry

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# Room for marks in one pass; with more the pass is repeated with as much as they need.
N_MARKS = 64

# Which kind begins or ends by a mark, and the clock that says since when.
_BEGINS = {
    kernel.STUCK_ON: (STUCK, kernel.STILL),
    kernel.ABSENT_ON: (ABSENT, kernel.AWAY),
    kernel.SPAN_ON: (SPAN, kernel.AWAY),
}
_ENDS = {kernel.STUCK_OFF: STUCK, kernel.ABSENT_OFF: ABSENT, kernel.SPAN_OFF: SPAN}
_FLAGS = {STUCK: kernel.STUCK, ABSENT: kernel.ABSENT, SPAN: kernel.SPAN}


def laid_out(
    standing: AlertStanding | None, key: int, instruments: tuple[Channel, ...]
) -> AlertStanding:
    """Return a standing whose arrays fit a model's instruments.

    key: of their names. A standing for other instruments keeps what is open and starts
    the clocks of channels anew.
    """
    n = len(instruments)
    if standing is not None and standing.channels == key:
        return standing
    ints, floats = kernel.new_ints(n), kernel.new_floats(n)
    if standing is None:
        return AlertStanding(key, -1, ints, floats)
    ints[: kernel.N_INTS] = standing.ints[: kernel.N_INTS]
    ints[kernel.CODE] = -1
    place = {channel.name: i for i, channel in enumerate(instruments)} | {"": n}
    for case in standing.cases:
        for name in case.active:
            if name in place:
                ints[kernel.N_INTS + place[name]] = _FLAGS[case.alert.kind]
        for one in case.alert.suspects if case.alert.kind == STUCK else ():
            if one.channel in place and isinstance(one.reading, float):
                # What it goes on repeating is no motion under the new model either.
                floats[kernel.ANCHOR, place[one.channel]] = one.reading
    return replace(standing, channels=key, ints=ints, floats=floats)


class Attendance:
    """One batch of one source's records on its way through the slower half.

    heard_ns: when it arrived, -1 = take the records' own times.
    """

    def __init__(
        self,
        scorer: Scorer,
        settings: AlertSettings,
        rules: Rules,
        batch: Batch,
        heard_ns: int,
        standing: AlertStanding,
    ) -> None:
        self.scorer, self.rules, self.batch, self.heard_ns = scorer, rules, batch, heard_ns
        self.before = standing
        self.turn = Turn(batch.source, standing, settings, rules.hold_s)
        self.ints, self.floats = standing.ints.copy(), standing.floats.copy()
        self.inquiry = Inquiry(scorer, rules, batch, standing.case(SCORED))
        self.channels = ChannelAlerts(
            self.turn, rules, batch, scorer.instruments, scorer.model.name
        )
        self._on_time = np.flatnonzero(batch.on_time)
        self._over = np.flatnonzero(self.inquiry.over)

    def attend(self) -> AlertStanding:
        """Go through the batch and return the new standing; events are the turn's."""
        if len(self.batch.times_ns):
            self._greet()
        for start, stop in self._stretches():
            if self.turn.is_out_of_service(int(self.batch.times_ns[start])):
                self._pass_over(start, stop)
            else:
                self._walk(start, stop)
        self._refresh()
        heard_ns = self.heard_ns if self.heard_ns >= 0 else int(self.ints[kernel.LAST])
        return replace(
            self.before,
            heard_ns=max(heard_ns, self.before.heard_ns),
            ints=self.ints,
            floats=self.floats,
            **self.turn.left(),
        )

    def _greet(self) -> None:
        """End what the arrival of any record ends, and what the model no longer watches."""
        at_ns = self._arrived_ns(int(self.batch.times_ns[0]))
        if SILENT in self.turn.cases:
            raised_ns = self.turn.cases[SILENT].alert.raised_ns
            self.turn.clear(SILENT, max(at_ns, raised_ns))
        self.channels.drop_unknown(at_ns)

    def _arrived_ns(self, time_ns: int) -> int:
        """Return when something happened whose record's own time cannot be relied on."""
        return self.heard_ns if self.heard_ns >= 0 else max(time_ns, int(self.ints[kernel.LAST]))

    def _stretches(self) -> list[tuple[int, int]]:
        """Return rows from, to, so that none is partly out of service."""
        n = len(self.batch.times_ns)
        if not self.turn.out_of_service or not n:
            return [(0, n)] if n else []
        out = [self.turn.is_out_of_service(t) for t in self.batch.times_ns.tolist()]
        borders = [0, *(np.flatnonzero(np.diff(out)) + 1).tolist(), n]
        return list(pairwise(borders))

    def _pass_over(self, start: int, stop: int) -> None:
        """Let rows go by that are out of service: nothing is open, no clock runs."""
        self.turn.clear_all(int(self.batch.times_ns[start]), WENT_OUT_OF_SERVICE)
        self.inquiry.drop()
        times_ns = self.batch.times_ns[start:stop][self.batch.on_time[start:stop]]
        last_ns = max([int(self.ints[kernel.LAST]), *times_ns[-1:].tolist()])
        n = len(self.scorer.instruments)
        self.ints, self.floats = kernel.new_ints(n), kernel.new_floats(n)
        self.ints[kernel.LAST] = last_ns

    def _walk(self, start: int, stop: int) -> None:
        """Go from mark to mark; the clocks stand at a mark's row while it is settled."""
        marks = self._marks(start, stop)
        for row in np.unique(marks[:, 0]).tolist():
            self._watch(start, row + 1, self.ints, self.floats)
            self._pass(start, row + 1)
            here = marks[marks[:, 0] == row]
            for what in dict.fromkeys(here[:, 1].tolist()):
                self._settle(row, what, here[here[:, 1] == what, 2].tolist())
            start = row + 1
        if start < stop:
            self._watch(start, stop, self.ints, self.floats)
            self._pass(start, stop)

    def _marks(self, start: int, stop: int) -> Ints:
        """Return the marks (m, 3) of some rows, leaving the clocks as they are."""
        marks = self._watch(start, stop, self.ints.copy(), self.floats.copy())
        marks[:, 0] += start
        return marks

    def _watch(self, start: int, stop: int, ints: Ints, floats: Floats) -> Ints:
        n_room = N_MARKS
        while True:
            trial = ints.copy(), floats.copy()
            marks = np.empty((n_room, 3), dtype=np.int64)
            n_marks = watch(self.rules, self.batch, start, stop, self.heard_ns, *trial, marks)
            if n_marks <= n_room:
                ints[:], floats[:] = trial
                return marks[:n_marks]
            n_room = n_marks

    def _pass(self, start: int, stop: int) -> None:
        """Sum up rows for what is open, and wake what is due at one of them."""
        while start < stop:
            row = self._next_wake(start, stop)
            end = min(row + 1, stop)
            self.inquiry.sum_up(start, end)
            if row < stop:
                self._refresh()
                over = bool(self.inquiry.over[row])
                self.turn.wake(int(self.batch.times_ns[row]), over=over)
            start = end

    def _next_wake(self, start: int, stop: int) -> int:
        """Return the first row at which something is due, `stop` if at none."""
        found = stop
        for rows, due_ns in (
            (self._on_time, self.turn.next_wake_ns()),
            (self._over, self.turn.held_from_ns()),
        ):
            if due_ns == NEVER_NS:
                continue
            near = rows[np.searchsorted(rows, start) : np.searchsorted(rows, found)]
            k = int(np.searchsorted(self.batch.times_ns[near], due_ns))
            if k < len(near):
                found = int(near[k])
        return found

    def _settle(self, row: int, what: int, channels: list[int]) -> None:
        """Do what the marks of one sort at a row say, of all channels at once."""
        time_ns = int(self.batch.times_ns[row])
        if what in _BEGINS:
            kind, clock = _BEGINS[what]
            lasted_s = float(self.floats[clock, channels].max())
            since_ns = time_ns - int(lasted_s * NS_PER_S)
            self.channels.join(kind, row, channels, since_ns, int(self.ints[kernel.CODE]))
        elif what in _ENDS:
            self.channels.leave(_ENDS[what], time_ns, channels, int(self.ints[kernel.CODE]))
        elif what == kernel.CLOCK_ON:
            self._clock_begins(row)
        elif what == kernel.CLOCK_OFF:
            if CLOCK in self.turn.cases:
                self.turn.clear(CLOCK, self._arrived_ns(time_ns))
        else:
            self._settle_scored(row, what)

    def _settle_scored(self, row: int, what: int) -> None:
        time_ns = int(self.batch.times_ns[row])
        if what == kernel.RAISED:
            sustained = self.ints[kernel.OPEN] == 2
            since = (
                kernel.RUN_FROM
                if not sustained
                else (kernel.RISE_FROM if self.ints[kernel.RISE_FROM] >= 0 else kernel.OVER_FROM)
            )
            self.inquiry.begin(row, self.floats[kernel.RECENT])
            level = "sustained" if sustained else "record"
            alert = self._blank(SCORED, level, int(self.ints[since]), time_ns)
            shown = self.inquiry.shown(self._stuck())
            self.turn.open(
                SCORED, time_ns, Case(replace(alert, **shown), -1, (), self.inquiry.tally())
            )
        elif what == kernel.WORSENED:
            self._refresh()
            self.turn.change(SCORED, level="sustained")
            self.turn.worsen(SCORED, time_ns, "worsened")
        elif SCORED in self.turn.cases:
            self._refresh()
            self.turn.clear(SCORED, time_ns, fleeting=self.inquiry.was_fleeting())
            self.inquiry.drop()

    def _refresh(self) -> None:
        """Bring the open scored alert up to what has been summed up."""
        if SCORED not in self.turn.cases:
            return
        self.turn.change(SCORED, **self.inquiry.shown(self._stuck()))
        case = self.turn.cases[SCORED]
        self.turn.cases[SCORED] = replace(case, tally=self.inquiry.tally())

    def _stuck(self) -> tuple[str, ...]:
        case = self.turn.cases.get(STUCK)
        return case.active if case is not None else ()

    def _clock_begins(self, row: int) -> None:
        time_ns = int(self.batch.times_ns[row])
        at_ns = self._arrived_ns(time_ns)
        lasted_ns = int(self.ints[kernel.OFF_LAST] - self.ints[kernel.OFF_FIRST])
        if CLOCK not in self.turn.cases:
            alert = self._blank(CLOCK, "", at_ns - lasted_ns, at_ns)
            sentence = clock_text(self.batch.source, time_ns, at_ns)
            self.turn.open(CLOCK, at_ns, Case(replace(alert, sentence=sentence), -1))

    def _blank(self, kind: str, level: str, since_ns: int, at_ns: int) -> Alert:
        model = self.scorer.model.name
        return blank_alert(self.batch.source, kind, level, since_ns, at_ns, model)


def watch(
    rules: Rules,
    batch: Batch,
    start: int,
    stop: int,
    heard_ns: int,
    ints: Ints,
    floats: Floats,
    marks: Ints,
) -> int:
    """Run the kernel over some rows of a batch; see alert_kernel.watch_rows."""
    scores, rows = batch.scores, slice(start, stop)
    return int(
        kernel.watch_rows(
            batch.times_ns[rows],
            batch.values[rows],
            scores.excess[rows],
            scores.sustained[rows],
            scores.channel_surprise[rows],
            batch.ahead[rows],
            heard_ns,
            rules.knobs,
            rules.rows,
            rules.limits,
            rules.codes,
            rules.states,
            rules.neighbours,
            floats,
            ints,
            marks,
        )
    )
