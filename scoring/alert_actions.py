"""What people do about alerts: acknowledge, note, label, shelve, take out of service.

Each action gives a new standing and what happened, or is refused with a sentence. An
alert that is cleared lives only in the store; `act_on_cleared` is for it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

from scoring.alert_settings import AlertSettings
from scoring.alert_standing import AlertStanding, OutOfService, Shelf
from scoring.alert_turn import WENT_OUT_OF_SERVICE, Turn, period_details
from scoring.alerts import (
    ACKNOWLEDGED,
    KINDS,
    LABELS,
    RAISED,
    SHELVED,
    Alert,
    Event,
    Note,
    time_text,
)
from scoring.errors import OddbranchError
from scoring.sentences import lasting_text

ON_ALERTS = ("acknowledge", "note", "label")
ON_SOURCES = ("shelve", "unshelve", "out_of_service", "back_in_service")

# Longer comments belong elsewhere; a standing carries an open alert's notes.
MAX_COMMENT = 2000


class BadAction(OddbranchError):
    """An action that cannot be done; the sentence says why and what can."""


@dataclass(frozen=True, slots=True)
class Action:
    """Something a person does.

    what: one of ON_ALERTS, with alert_id, or of ON_SOURCES. by: who.
    comment: a note's text, a reason; needed for note, shelve and out_of_service.
    kind: of alerts, for shelve and unshelve. label: see alerts.LABELS.
    until_ns: of a shelf. start_ns: of a period out of service, None = now; end_ns: None
    = until it is put back.
    """

    what: str
    by: str
    comment: str = ""
    alert_id: str = ""
    kind: str = ""
    label: str = ""
    until_ns: int | None = None
    start_ns: int | None = None
    end_ns: int | None = None


def take_action(
    source: str,
    standing: AlertStanding,
    action: Action,
    at_ns: int,
    settings: AlertSettings | None = None,
) -> tuple[AlertStanding, tuple[Event, ...]]:
    """Return the source's standing after an action, and what happened.

    at_ns: when it was done, by the receiver's clock. Raises BadAction.
    """
    _check(action)
    if action.what in ON_ALERTS:
        return _on_alert(source, standing, action, at_ns)
    turn = Turn(source, standing, settings or AlertSettings(), 0.0)
    if action.what == "shelve":
        _shelve(turn, action, at_ns)
    elif action.what == "unshelve":
        _unshelve(turn, action, at_ns)
    elif action.what == "out_of_service":
        _take_out(turn, action, at_ns)
    else:
        _put_back(turn, action, at_ns)
    if action.what == "back_in_service":
        # It gets the usual time before it is missed.
        standing = replace(standing, heard_ns=max(standing.heard_ns, at_ns))
    elif turn.is_out_of_service(at_ns):
        standing = standing.started_anew()
    return replace(standing, **turn.left()), tuple(turn.events)


def act_on_cleared(alert: Alert, action: Action, at_ns: int) -> tuple[Alert, Event]:
    """Return an alert after acknowledge, note or label, and the event. Raises BadAction."""
    _check(action)
    if action.what not in ON_ALERTS:
        raise BadAction(
            f"{action.what!r} is done to a source, not to an alert; to an alert you can do "
            f"{', '.join(ON_ALERTS)}"
        )
    return _change(alert, action, at_ns)


def _check(action: Action) -> None:
    known = ON_ALERTS + ON_SOURCES
    if action.what not in known:
        raise BadAction(f"{action.what!r} is no action; known are {', '.join(known)}")
    if not action.by.strip():
        raise BadAction(f"{action.what} needs the name of whoever does it in `by`")
    if len(action.comment) > MAX_COMMENT:
        raise BadAction(
            f"a comment of {len(action.comment)} characters is too long; at most {MAX_COMMENT}"
        )
    if action.what in ("note", "shelve", "out_of_service") and not action.comment.strip():
        raise BadAction(f"{action.what} needs its {_comment_name(action.what)} in `comment`")
    if action.what in ("shelve", "unshelve") and action.kind not in KINDS:
        raise BadAction(f"kind {action.kind!r} is none of {', '.join(KINDS)}")
    if action.what == "label" and action.label not in LABELS:
        raise BadAction(f"label {action.label!r} is neither {' nor '.join(LABELS)}")


def _comment_name(what: str) -> str:
    return "text" if what == "note" else "reason"


def _on_alert(
    source: str, standing: AlertStanding, action: Action, at_ns: int
) -> tuple[AlertStanding, tuple[Event, ...]]:
    for k, case in enumerate(standing.cases):
        if case.alert.id == action.alert_id:
            alert, event = _change(case.alert, action, at_ns)
            cases = (*standing.cases[:k], replace(case, alert=alert), *standing.cases[k + 1 :])
            return replace(standing, cases=cases), (event,)
    raise BadAction(f"{source} has no open alert {action.alert_id!r}")


def _change(alert: Alert, action: Action, at_ns: int) -> tuple[Alert, Event]:
    notes = alert.notes
    if action.comment.strip():
        notes = (*notes, Note(at_ns, action.by, action.comment))
    if action.what == "acknowledge":
        if alert.acknowledged_ns is not None and alert.state != RAISED:
            raise BadAction(
                f"alert {alert.id} was acknowledged by {alert.acknowledged_by} at "
                f"{time_text(alert.acknowledged_ns)}"
            )
        changed = replace(
            alert,
            state=ACKNOWLEDGED if alert.is_open else alert.state,
            acknowledged_ns=at_ns,
            acknowledged_by=action.by,
            notes=notes,
        )
        what = "acknowledged"
    elif action.what == "label":
        changed, what = replace(alert, label=action.label, notes=notes), "labelled"
    else:
        changed, what = replace(alert, notes=notes), "noted"
    details = {"label": action.label} if action.what == "label" else {}
    return changed, Event(
        what, alert.source, at_ns, changed, by=action.by, comment=action.comment, details=details
    )


def _shelve(turn: Turn, action: Action, at_ns: int) -> None:
    most_s = turn.settings.shelve_most_s
    if action.until_ns is None or action.until_ns <= at_ns:
        raise BadAction("a shelf needs its end in `until`, later than now")
    if (action.until_ns - at_ns) * 1e-9 > most_s:
        raise BadAction(
            f"a shelf of {lasting_text((action.until_ns - at_ns) * 1e-9)} is too long; at most "
            f"{lasting_text(most_s)}, and what is to be quiet for longer is out of service"
        )
    shelf = Shelf(action.kind, at_ns, action.until_ns, action.comment, action.by)
    turn.shelves = (*(one for one in turn.shelves if one.kind != action.kind), shelf)
    if action.kind in turn.cases:
        turn.change(action.kind, quiet=SHELVED)
    _tell(turn, "shelved", at_ns, action, {"kind": action.kind, "until_ns": action.until_ns})


def _unshelve(turn: Turn, action: Action, at_ns: int) -> None:
    if not any(one.kind == action.kind for one in turn.shelves):
        raise BadAction(f"no {action.kind} alerts of {turn.source} are shelved")
    turn.shelves = tuple(one for one in turn.shelves if one.kind != action.kind)
    _tell(turn, "unshelved", at_ns, action, {"kind": action.kind})
    turn.wake(at_ns)


def _take_out(turn: Turn, action: Action, at_ns: int) -> None:
    start_ns = at_ns if action.start_ns is None else action.start_ns
    if action.end_ns is not None and action.end_ns <= max(start_ns, at_ns):
        raise BadAction("a time out of service must end after its start, and later than now")
    for period in turn.out_of_service:
        # Two periods that meet would leave it open which one ends the silence.
        if (action.end_ns is None or period.start_ns < action.end_ns) and (
            period.end_ns is None or start_ns < period.end_ns
        ):
            until = "it is put back" if period.end_ns is None else time_text(period.end_ns)
            raise BadAction(
                f"{turn.source} is out of service from {time_text(period.start_ns)} until "
                f"{until} already ({period.reason}, {period.by}); put it back first"
            )
    period = OutOfService(start_ns, action.end_ns, action.comment, action.by)
    turn.out_of_service = (*turn.out_of_service, period)
    _tell(turn, "out_of_service", at_ns, action, period_details(period))
    if period.covers(at_ns):
        turn.clear_all(at_ns, WENT_OUT_OF_SERVICE)


def _put_back(turn: Turn, action: Action, at_ns: int) -> None:
    """End the period that holds now, or call off those that are still to come."""
    now = [period for period in turn.out_of_service if period.covers(at_ns)]
    ended = now or list(turn.out_of_service)
    if not ended:
        raise BadAction(f"{turn.source} is not out of service")
    turn.out_of_service = tuple(p for p in turn.out_of_service if p not in ended)
    for period in ended:
        end_ns = max(at_ns, period.start_ns)
        _tell(
            turn, "back_in_service", at_ns, action, period_details(replace(period, end_ns=end_ns))
        )


def _tell(turn: Turn, what: str, at_ns: int, action: Action, details: dict[str, Any]) -> None:
    turn.events.append(
        Event(what, turn.source, at_ns, by=action.by, comment=action.comment, details=details)
    )
