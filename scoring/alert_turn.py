"""One source's turn: its open alerts, shelves and damping while some time passes.

A turn starts from a standing, is told what begins and ends, and gives the events and
what the standing holds afterwards. It knows no records; `scoring.episodes` reads them.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from scoring.alert_settings import AlertSettings
from scoring.alert_standing import AlertStanding, Case, OutOfService, Shelf
from scoring.alerts import (
    ACKNOWLEDGED,
    CLEARED,
    DAMPED,
    RAISED,
    SCORED,
    SHELVED,
    Alert,
    Event,
    alert_id,
)

NS_PER_S = 1_000_000_000

# Why an alert was cleared otherwise than by itself.
WENT_OUT_OF_SERVICE = "out of service"
NO_LONGER_WATCHED = "no longer watched"

# Later than any time.
NEVER_NS = (1 << 63) - 1


def period_details(period: OutOfService) -> dict[str, Any]:
    """Return what an event says of a period out of service; end_ns None = still open."""
    return {
        "start_ns": period.start_ns,
        "end_ns": period.end_ns,
        "reason": period.reason,
        "by": period.by,
    }


class Turn:
    """The open cases of one source by kind, with the events of this turn in order.

    hold_s: how long a damped alert must last before someone is called.
    """

    def __init__(
        self, source: str, standing: AlertStanding, settings: AlertSettings, hold_s: float
    ) -> None:
        self.source, self.settings = source, settings
        self.cases: dict[str, Case] = {case.alert.kind: case for case in standing.cases}
        self.shelves: tuple[Shelf, ...] = standing.shelves
        self.out_of_service: tuple[OutOfService, ...] = standing.out_of_service
        self.raised: tuple[tuple[str, int], ...] = standing.raised
        self.events: list[Event] = []
        self._hold_ns = int(hold_s * NS_PER_S)
        self._realarm_ns = int(settings.realarm_s * NS_PER_S)

    def left(self) -> dict[str, Any]:
        """Return the fields of the standing that this turn may have changed."""
        return {
            "cases": tuple(self.cases.values()),
            "shelves": self.shelves,
            "out_of_service": self.out_of_service,
            "raised": self.raised,
        }

    def open(self, kind: str, at_ns: int, case: Case) -> None:
        """Raise an alert. case.alert lacks its id, state and quiet, which are set here."""
        assert kind not in self.cases, "a kind has at most one open alert"
        quiet = self._quiet(kind, at_ns)
        from_ns = at_ns - int(self.settings.repeat_window_s * NS_PER_S)
        self.raised = (*(one for one in self.raised if one[1] > from_ns), (kind, at_ns))
        alert = replace(
            case.alert,
            id=alert_id(self.source, kind, at_ns),
            quiet=quiet,
            announced_ns=None if quiet else at_ns,
        )
        self.cases[kind] = replace(case, alert=alert, again_ns=self._again_ns(at_ns))
        self._tell("raised", at_ns, alert, annunciate=not quiet)

    def clear(self, kind: str, at_ns: int, why: str = "", **changes: Any) -> None:
        """Clear the open alert of a kind; changes: further fields of the alert."""
        alert = self.cases.pop(kind).alert
        alert = replace(alert, state=CLEARED, cleared_ns=at_ns, why_cleared=why, **changes)
        self._tell("cleared", at_ns, alert)

    def clear_all(self, at_ns: int, why: str) -> None:
        """Clear every open alert."""
        for kind in tuple(self.cases):
            self.clear(kind, at_ns, why)

    def change(self, kind: str, **changes: Any) -> None:
        """Change fields of the open alert of a kind, without an event."""
        case = self.cases[kind]
        self.cases[kind] = replace(case, alert=replace(case.alert, **changes))

    def worsen(self, kind: str, at_ns: int, what: str) -> None:
        """Tell that an open alert is worse than whoever acknowledged it has seen."""
        case = self.cases[kind]
        seen = case.alert.state == ACKNOWLEDGED
        alert = replace(case.alert, state=RAISED)
        self.cases[kind] = replace(case, alert=alert)
        self._tell(what, at_ns, alert, annunciate=seen and not alert.quiet)

    def next_wake_ns(self) -> int:
        """Return the time at which `wake` has something to do, NEVER_NS if at none.

        A damped scored alert wakes only at a record over its level; see `held_from_ns`.
        """
        times = [shelf.until_ns for shelf in self.shelves]
        times += [one.end_ns for one in self.out_of_service if one.end_ns is not None]
        for kind, case in self.cases.items():
            if case.alert.quiet == "" and case.again_ns >= 0:
                times.append(case.again_ns)
            elif case.alert.quiet == DAMPED and kind != SCORED:
                times.append(case.alert.raised_ns + self._hold_ns)
        return min(times, default=NEVER_NS)

    def held_from_ns(self) -> int:
        """Return from when on a record over the level ends the damping of a scored alert."""
        case = self.cases.get(SCORED)
        if case is None or case.alert.quiet != DAMPED:
            return NEVER_NS
        return case.alert.raised_ns + self._hold_ns

    def wake(self, at_ns: int, *, over: bool = False) -> None:
        """Do what is due at a time. over: a record over a level stands at that time."""
        for period in self.out_of_service:
            if period.end_ns is not None and at_ns >= period.end_ns:
                self.out_of_service = tuple(p for p in self.out_of_service if p is not period)
                self._tell("back_in_service", at_ns, None, details=period_details(period))
        for shelf in self.shelves:
            if at_ns >= shelf.until_ns:
                self.shelves = tuple(one for one in self.shelves if one is not shelf)
                self._tell("unshelved", at_ns, None, details={"kind": shelf.kind})
        for kind, case in tuple(self.cases.items()):
            alert = case.alert
            if alert.quiet == SHELVED and not self._is_shelved(kind, at_ns):
                self._speak(kind, at_ns)
            elif alert.quiet == DAMPED and at_ns >= alert.raised_ns + self._hold_ns:
                if over or kind != SCORED:
                    self._speak(kind, at_ns)
            elif alert.quiet == "" and 0 <= case.again_ns <= at_ns:
                self._raise_again(kind, at_ns)

    def is_out_of_service(self, at_ns: int) -> bool:
        """Return whether the source is out of service at a time."""
        return any(period.covers(at_ns) for period in self.out_of_service)

    def _speak(self, kind: str, at_ns: int) -> None:
        """Call someone for an alert that was quiet; one acknowledged before stays so."""
        case = self.cases[kind]
        first = case.alert.announced_ns is None
        alert = replace(
            case.alert, quiet="", announced_ns=at_ns if first else case.alert.announced_ns
        )
        self.cases[kind] = replace(case, alert=alert, again_ns=self._again_ns(at_ns))
        if alert.state == RAISED:
            what = "announced" if first else "raised_again"
            self._tell(what, at_ns, alert, annunciate=True)

    def _raise_again(self, kind: str, at_ns: int) -> None:
        case = self.cases[kind]
        alert = replace(case.alert, state=RAISED)
        self.cases[kind] = replace(case, alert=alert, again_ns=self._again_ns(at_ns))
        self._tell("raised_again", at_ns, alert, annunciate=True)

    def _again_ns(self, at_ns: int) -> int:
        return at_ns + self._realarm_ns if self._realarm_ns else -1

    def _quiet(self, kind: str, at_ns: int) -> str:
        if self._is_shelved(kind, at_ns):
            return SHELVED
        from_ns = at_ns - int(self.settings.repeat_window_s * NS_PER_S)
        n_lately = sum(1 for one, time_ns in self.raised if one == kind and time_ns > from_ns)
        return DAMPED if n_lately >= self.settings.repeat_n else ""

    def _is_shelved(self, kind: str, at_ns: int) -> bool:
        return any(one.kind == kind and at_ns < one.until_ns for one in self.shelves)

    def _tell(
        self,
        what: str,
        at_ns: int,
        alert: Alert | None,
        *,
        annunciate: bool = False,
        details: dict[str, Any] | None = None,
    ) -> None:
        self.events.append(
            Event(what, self.source, at_ns, alert, annunciate, details=details or {})
        )
