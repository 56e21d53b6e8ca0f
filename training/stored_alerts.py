"""What people and the service said of stored time: alerts with their labels, out of service.

Read from the service's store by table and column names that `training.stored` checks.
"""

from __future__ import annotations

import json
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

import sqlalchemy as sa

from scoring.alerts import CLOCK, SCORED, STUCK
from training.stored import BadStore, Store, Window

REAL: Final = "real"
NUISANCE: Final = "nuisance"
# Kinds whose readings may teach tables something wrong. What is absent, silent or outside
# its span gives no readings at all.
TEACHING: Final = (SCORED, STUCK, CLOCK)
OUT, BACK = "out_of_service", "back_in_service"

_ALERTS = sa.text(
    "SELECT source, kind, since_ns, until_ns, data FROM alert "
    "WHERE since_ns <= :until AND (until_ns IS NULL OR until_ns >= :since) "
    "ORDER BY since_ns, source, kind"
)
_ACTIONS = sa.text(
    "SELECT what, source, details FROM action WHERE what IN (:out, :back) ORDER BY id"
)


@dataclass(frozen=True, slots=True)
class StoredAlert:
    """One alert. until_ns: None while it is open. label: "", "real" or "nuisance".

    channel: its first suspect, "" without one. comment: what was last written about it.
    model: under which it was raised.
    """

    source: str
    kind: str
    since_ns: int
    until_ns: int | None
    label: str
    channel: str
    comment: str = ""
    model: str = ""


@dataclass(frozen=True, slots=True)
class OutOfService:
    """A period in which a source was out of service; end_ns: None while it is."""

    source: str
    start_ns: int
    end_ns: int | None
    reason: str


def read_alerts(store: Store, window: Window) -> tuple[StoredAlert, ...]:
    """Return the alerts that touch a window, in order of time."""
    wanted = {"since": window.since_ns, "until": window.until_ns}
    with store.connect() as connection:
        rows = connection.execute(_ALERTS, wanted).all()
    return tuple(_alert(store, row) for row in rows)


def _alert(store: Store, row: Any) -> StoredAlert:
    data = _parsed(store, row.data)
    suspects, channels = data.get("suspects") or [], data.get("channels") or []
    channel = suspects[0]["channel"] if suspects else (channels[0] if channels else "")
    notes = data.get("notes") or []
    return StoredAlert(
        source=str(row.source),
        kind=str(row.kind),
        since_ns=int(row.since_ns),
        until_ns=None if row.until_ns is None else int(row.until_ns),
        label=str(data.get("label") or ""),
        channel=str(channel),
        comment=str(notes[-1]["text"]) if notes else "",
        model=str(data.get("model") or ""),
    )


def read_out_of_service(store: Store) -> tuple[OutOfService, ...]:
    """Return all periods out of service, in order of source and start."""
    with store.connect() as connection:
        rows = connection.execute(_ACTIONS, {"out": OUT, "back": BACK}).all()
    found: dict[tuple[str, int], OutOfService] = {}
    for row in rows:
        # An action that ends a period tells the whole of it, with the end that came.
        said = _parsed(store, row.details)
        start_ns = _ns(said.get("start"))
        if start_ns is not None:
            period = OutOfService(
                str(row.source), start_ns, _ns(said.get("end")), str(said.get("reason", ""))
            )
            found[period.source, start_ns] = period
    return tuple(found[key] for key in sorted(found))


def _parsed(store: Store, text: str) -> dict[str, Any]:
    try:
        found = json.loads(text)
    except ValueError:
        found = None
    if not isinstance(found, dict):
        raise BadStore(str(store.path), f"holds an alert or action that is no JSON: {text[:60]!r}")
    return found


def _ns(text: str | None) -> int | None:
    """Return the time of an RFC 3339 text with up to nine decimals, in ns since 1970."""
    if text is None:
        return None
    whole, _, decimals = text.removesuffix("Z").partition(".")
    seconds = datetime.fromisoformat(f"{whole}+00:00").timestamp()
    return round(seconds) * 10**9 + int(decimals.ljust(9, "0") if decimals else 0)


def in_alert(
    alerts: Iterable[StoredAlert], now_ns: int, join_ns: int
) -> dict[str, list[tuple[int, int]]]:
    """Return per source the stretches of unlabelled alert, in order, first and last time.

    now_ns: where open alerts end. join_ns: what lies between two alerts that follow each
    other this closely belongs to them.
    """
    found: dict[str, list[tuple[int, int]]] = {}
    for alert in sorted(alerts, key=lambda one: (one.source, one.since_ns)):
        if alert.label or alert.kind not in TEACHING:
            continue
        own = found.setdefault(alert.source, [])
        end_ns = now_ns if alert.until_ns is None else alert.until_ns
        if own and alert.since_ns <= own[-1][1] + join_ns:
            own[-1] = (own[-1][0], max(own[-1][1], end_ns))
        else:
            own.append((alert.since_ns, end_ns))
    return found
