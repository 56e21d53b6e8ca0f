"""From scored records to stored alerts, inside the transaction that stores the records.

The machine itself is `scoring.episodes`; here is what it remembers of a source, kept in
the source's row, and its events, kept as rows of alerts and actions.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from typing import Any

import orjson
import sqlalchemy as sa

from scoring.alert_actions import ON_ALERTS, Action, BadAction, act_on_cleared, take_action
from scoring.alert_settings import AlertSettings
from scoring.alert_standing import AlertStanding, BadAlertStanding
from scoring.alerts import CLEARED, RAISED, SCORED, SILENT, Alert, Event, second_text, time_text
from scoring.flood import BadFlood, Flood, gather
from service.engine import Engine
from service.logs import log_event
from service.pipeline import Run
from service.problems import Problem
from service.store import alerts as stored
from service.store.database import Database
from service.store.group import Group
from service.store.states import SourceState

# Events that are kept as actions also where nobody did them: time that is not to be learned.
_KEPT = ("out_of_service", "back_in_service")
# Sources whose passed time is stored in one transaction.
N_TICKED = 500
# Events of an alert that get a line in the log; what people do is kept as actions.
_LOGGED = ("raised", "announced", "raised_again", "cleared")
_FLOOD = ("flood_started", "flood_ended")
_DAY_NS = 86_400 * 1_000_000_000
# Kinds that rules ask of each source apart, from numbers of records and not of alerts.
ASKED_KINDS = (SCORED, SILENT)


@dataclass(frozen=True, slots=True)
class Quiet:
    """What calls nobody now.

    sources: (source, kind of ASKED_KINDS) out of service, or with that kind shelved.
    alerts: raised alerts that are shelved or damped, by kind.
    """

    sources: set[tuple[str, str]] = field(default_factory=set)
    alerts: Counter[str] = field(default_factory=Counter)


class Keeper:
    """The alert sink of the service, and all else that changes an alert.

    listening_ns: since when this process could hear a source; silence before is its own.
    """

    def __init__(self, settings: AlertSettings, listening_ns: int) -> None:
        self.settings, self.listening_ns = settings, listening_ns

    def take(self, group: Group, runs: Sequence[Run]) -> None:
        """Advance the alerts by scored records; the caller saves the sources' states."""
        changes = _Changes()
        touched: dict[str, SourceState] = {}
        for run in runs:
            episodes, state = run.engine.episodes, run.source
            standing = standing_of(state)
            if episodes is None or (standing is None and run.still):
                continue
            state.alert_live, events = episodes.step(
                state.name, run.times_ns, run.values, run.scored.scores, standing,
                heard_ns=run.heard_ns, ahead=run.ahead, rows=run.rows,
            )  # fmt: skip
            touched[state.name] = state
            changes.add(events)
        for state in touched.values():
            state.alert_standing = state.alert_live.to_bytes()
            changes.stands(state.alert_live)
        if runs:
            self._store(group, changes, runs[0].heard_ns)

    def due(self, database: Database, engine: Engine, now_ns: int) -> list[str]:
        """Return the sources to which something happens by the passing of time alone."""
        episodes = engine.episodes
        if episodes is None:
            return []
        found = []
        for state in database.alert_standings():
            standing = standing_of(state)
            if standing is None:
                continue
            after, _ = episodes.tick(state.name, standing, now_ns, self.listening_ns)
            if after is not standing:
                found.append(state.name)
        return found

    @staticmethod
    def quiet(database: Database, now_ns: int) -> Quiet:
        """Return what calls nobody now, over all sources."""
        found = Quiet()
        for state in database.alert_standings():
            standing = standing_of(state)
            if standing is None:
                continue
            found.alerts.update(
                one.kind for one in standing.open if one.state == RAISED and one.quiet
            )
            if any(period.covers(now_ns) for period in standing.out_of_service):
                found.sources.update((state.name, kind) for kind in ASKED_KINDS)
            shelved = {one.kind for one in standing.shelves if now_ns < one.until_ns}
            found.sources.update((state.name, kind) for kind in ASKED_KINDS if kind in shelved)
        return found

    def tick(self, group: Group, engine: Engine, names: Sequence[str], now_ns: int) -> int:
        """Let time pass for some sources; return how many alerts were raised."""
        episodes = engine.episodes
        assert episodes is not None
        changes, states = _Changes(), group.known(names)
        for state in states.values():
            standing = standing_of(state)
            if standing is None:
                continue
            after, events = episodes.tick(state.name, standing, now_ns, self.listening_ns)
            state.alert_live, state.alert_standing = after, after.to_bytes()
            changes.add(events)
            changes.stands(after)
        group.save(states.values())
        self._store(group, changes, now_ns)
        return sum(event.what == "raised" for event in changes.events)

    def on_alert(self, group: Group, action: Action, now_ns: int) -> Alert:
        """Do something about an alert by its id; return it as it is then. Raises Problem.

        A shelf is of the alert's kind at its source.
        """
        source = self._alert(group, action.alert_id).source
        state = _known(group, source)
        # Read again, now that nobody else can change it.
        alert = self._alert(group, action.alert_id)
        standing = standing_of(state)
        changes = _Changes()
        is_open = standing is not None and any(one.id == alert.id for one in standing.open)
        try:
            if action.what in ON_ALERTS and not is_open:
                alert, event = act_on_cleared(alert, action, now_ns)
                changes.add([event])
            else:
                self._act(group, state, action, now_ns, changes)
        except BadAction as error:
            raise Problem("impossible-action", str(error)) from None
        self._store(group, changes, now_ns)
        return changes.alerts.get(alert.id, alert)

    def of_kind(self, group: Group, action: Action) -> Action:
        """Return a shelf's action with the kind of the alert that it names."""
        return replace(action, kind=self._alert(group, action.alert_id).kind)

    def on_source(self, group: Group, source: str, action: Action, now_ns: int) -> AlertStanding:
        """Do something to a source; return its standing then. Raises Problem."""
        state = _known(group, source)
        changes = _Changes()
        try:
            standing = self._act(group, state, action, now_ns, changes)
        except BadAction as error:
            raise Problem("impossible-action", str(error)) from None
        self._store(group, changes, now_ns)
        return standing

    def end_flood(self, group: Group, now_ns: int) -> None:
        """End a flood that is over by the passing of time."""
        changes = _Changes()
        self._gather(group, changes, now_ns)
        changes.write(group)

    def _store(self, group: Group, changes: _Changes, now_ns: int) -> None:
        if any(event.annunciate for event in changes.events):
            self._gather(group, changes, now_ns)
        changes.write(group)

    def _gather(self, group: Group, changes: _Changes, now_ns: int) -> None:
        """Make one message of a flood, and one of its end."""
        before = read_flood(stored.flood_data(group.connection, to_change=True))
        events = sorted(changes.events, key=lambda event: event.time_ns)
        flood, told = gather(before, events, self.settings, now_ns)
        stored.put_flood(group.connection, flood.to_bytes())
        for event in told:
            if event.what in _FLOOD:
                changes.actions.append(_action_row(event, ""))
                sentence = event.details["sentence"]
                group.afterwards.append(partial(log_event, event.what, sentence=sentence))

    def _act(
        self, group: Group, state: SourceState, action: Action, now_ns: int, changes: _Changes
    ) -> AlertStanding:
        standing = standing_of(state)
        if standing is None:
            raise BadAction(
                f"{state.name} has sent no record in order yet, so there is nothing to act on"
            )
        after, events = take_action(state.name, standing, action, now_ns, self.settings)
        state.alert_live, state.alert_standing = after, after.to_bytes()
        group.save([state])
        changes.add(events, action.alert_id)
        changes.stands(after)
        return after

    @staticmethod
    def _alert(group: Group, alert_id: str) -> Alert:
        data = stored.alert_data(group.connection, alert_id)
        if data is None:
            raise Problem("not-found", f"there is no alert {alert_id!r}; GET /alerts lists them")
        return read_alert(data)


class _Changes:
    """Rows to write: the newest form of each alert, and what was done."""

    def __init__(self) -> None:
        self.events: list[Event] = []
        self.alerts: dict[str, Alert] = {}
        self.actions: list[dict[str, Any]] = []

    def add(self, events: Sequence[Event], alert_id: str = "") -> None:
        """Take what happened, in order. alert_id: that an action was asked for."""
        for event in events:
            self.events.append(event)
            if event.alert is not None:
                self.alerts[event.alert.id] = event.alert
            if event.by or event.what in _KEPT:
                self.actions.append(_action_row(event, alert_id))

    def stands(self, standing: AlertStanding) -> None:
        """Take the open alerts, which change with every record."""
        for alert in standing.open:
            self.alerts[alert.id] = alert

    def write(self, group: Group) -> None:
        """Write all of it through the group's connection."""
        stored.put_alerts(group.connection, [_alert_row(one) for one in self.alerts.values()])
        stored.put_actions(group.connection, self.actions)
        for event in self.events:
            if event.what in _LOGGED and event.alert is not None:
                alert = event.alert
                group.afterwards.append(
                    partial(
                        log_event, f"alert_{event.what}", source=alert.source, kind=alert.kind,
                        alert=alert.id, quiet=alert.quiet,
                    )
                )  # fmt: skip


def standing_of(state: SourceState) -> AlertStanding | None:
    """Return a source's alert standing as an object; it is read from its bytes once."""
    if state.alert_live is None and state.alert_standing:
        try:
            state.alert_live = AlertStanding.from_bytes(state.alert_standing)
        except BadAlertStanding as error:
            log_event("alert_standing_dropped", source=state.name, detail=str(error))
            state.alert_standing = None
    live: AlertStanding | None = state.alert_live
    return live


def read_alert(data: str) -> Alert:
    """Return a stored alert."""
    return Alert.from_dict(orjson.loads(data))


def read_flood(data: bytes | None) -> Flood:
    """Return what is remembered of a flood; nothing where it cannot be read."""
    try:
        return Flood() if data is None else Flood.from_bytes(data)
    except BadFlood as error:
        log_event("flood_dropped", detail=str(error))
        return Flood()


def flood_answer(connection: sa.Connection) -> dict[str, Any] | None:
    """Return the flood that lasts as clients see it, or None."""
    flood = read_flood(stored.flood_data(connection))
    if flood.started_ns is None:
        return None
    sentence = (
        f"{flood.n} alerts in a flood since {second_text(flood.started_ns)}; look for what they "
        "have in common."
    )
    return {"since": time_text(flood.started_ns), "alerts": flood.n, "sentence": sentence}


def budget_used(count: Callable[[str, int], int], now_ns: int) -> int:
    """Return how many alerts that count against the budget were raised in the last day."""
    return count(SCORED, now_ns - _DAY_NS)


def _known(group: Group, source: str) -> SourceState:
    state = group.known([source]).get(source)
    if state is None:
        raise Problem("not-found", f"there is no source {source!r}; GET /sources lists them")
    return state


def _alert_row(alert: Alert) -> dict[str, Any]:
    return {
        "id": alert.id,
        "source": alert.source,
        "kind": alert.kind,
        "state": alert.state,
        "since_ns": alert.since_ns,
        "raised_ns": alert.raised_ns,
        "until_ns": alert.cleared_ns if alert.state == CLEARED else None,
        "data": orjson.dumps(alert.to_dict()).decode(),
    }


def _action_row(event: Event, alert_id: str) -> dict[str, Any]:
    return {
        "at_ns": event.time_ns,
        "who": event.by,
        "what": event.what,
        "source": event.source,
        "alert": event.alert.id if event.alert is not None else alert_id,
        "comment": event.comment,
        "details": orjson.dumps(event.as_json()["details"]).decode(),
    }
