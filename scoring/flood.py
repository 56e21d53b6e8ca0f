"""Floods: more alerts at once than anyone can read become one message with its list.

One `Flood` serves the whole fleet and takes the events of all sources. Figures of
ISA-18.2 (from memory): ten annunciations in ten minutes start a flood, fewer than five in
ten minutes end it.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

from scoring.alert_settings import AlertSettings
from scoring.alert_turn import NS_PER_S
from scoring.alerts import ADVICE, Event, second_text
from scoring.errors import OddbranchError

# Version of the byte form.
FLOOD_FORMAT = 1
# A longer list is cut; the count goes on.
MAX_LISTED = 500


class BadFlood(OddbranchError):
    """Bytes that are no flood of this format."""


@dataclass(frozen=True, slots=True)
class Entry:
    """One annunciation: when, and the alert it was of."""

    time_ns: int
    alert_id: str
    source: str
    kind: str
    sentence: str


@dataclass(frozen=True, slots=True)
class Flood:
    """What is remembered of the fleet's annunciations.

    started_ns: since when there is a flood, None while there is none.
    recent: of the last window. listed: of the flood, the first of them; n: of them all.
    last_ns: the latest time seen.
    """

    started_ns: int | None = None
    recent: tuple[Entry, ...] = ()
    listed: tuple[Entry, ...] = ()
    n: int = 0
    last_ns: int = -1

    def to_bytes(self) -> bytes:
        """Return the byte form; `from_bytes` gives an equal flood."""
        return json.dumps({"format": FLOOD_FORMAT, **asdict(self)}, separators=(",", ":")).encode()

    @classmethod
    def from_bytes(cls, data: bytes) -> Flood:
        """Return what `to_bytes` wrote; raises BadFlood."""
        try:
            read = json.loads(data)
            if read.pop("format") != FLOOD_FORMAT:
                raise BadFlood(
                    f"a flood of another format was met; this version reads {FLOOD_FORMAT}"
                )
            for name in ("recent", "listed"):
                read[name] = tuple(Entry(**one) for one in read[name])
            return cls(**read)
        except (ValueError, KeyError, TypeError, AttributeError) as error:
            raise BadFlood(f"a flood cannot be read: {error}") from None


def gather(
    flood: Flood, events: Iterable[Event], settings: AlertSettings, now_ns: int | None = None
) -> tuple[Flood, tuple[Event, ...]]:
    """Return the flood after some events, and the events as people should get them.

    events: of all sources, in order of time. now_ns: the caller's clock, None = take the
    events' own times; with it, call also without events, so that a flood ends.
    During a flood no event annunciates: the message that it started does, and its end
    tells the whole list.
    """
    told: list[Event] = []
    for event in events:
        at_ns = max(event.time_ns if now_ns is None else now_ns, flood.last_ns)
        flood = _pass_time(flood, at_ns, settings, told)
        if not event.annunciate:
            told.append(event)
            continue
        flood = _take(flood, event, at_ns)
        if flood.started_ns is None and len(flood.recent) < settings.flood_start_n:
            told.append(event)
            continue
        told.append(replace(event, annunciate=False, details={**event.details, "flood": True}))
        if flood.started_ns is None:
            flood = replace(flood, started_ns=at_ns, listed=flood.recent, n=len(flood.recent))
            told.append(_message("flood_started", flood, at_ns, settings))
    if now_ns is not None:
        flood = _pass_time(flood, max(now_ns, flood.last_ns), settings, told)
    return flood, tuple(told)


def _take(flood: Flood, event: Event, at_ns: int) -> Flood:
    alert = event.alert
    entry = Entry(
        at_ns,
        alert.id if alert else "",
        event.source,
        alert.kind if alert else "",
        alert.sentence if alert else "",
    )
    recent = (*flood.recent, entry)
    if flood.started_ns is None:
        return replace(flood, recent=recent)
    return replace(flood, recent=recent, listed=(*flood.listed, entry)[:MAX_LISTED], n=flood.n + 1)


def _pass_time(flood: Flood, at_ns: int, settings: AlertSettings, told: list[Event]) -> Flood:
    """Forget what is older than the window, and end the flood when little is left."""
    from_ns = at_ns - int(settings.flood_window_s * NS_PER_S)
    if flood.recent and flood.recent[0].time_ns <= from_ns:
        recent = tuple(entry for entry in flood.recent if entry.time_ns > from_ns)
        flood = replace(flood, recent=recent)
    flood = replace(flood, last_ns=at_ns) if at_ns != flood.last_ns else flood
    if flood.started_ns is not None and len(flood.recent) < settings.flood_end_n:
        told.append(_message("flood_ended", flood, at_ns, settings))
        flood = replace(flood, started_ns=None, listed=(), n=0)
    return flood


def _message(what: str, flood: Flood, at_ns: int, settings: AlertSettings) -> Event:
    assert flood.started_ns is not None
    sources = _most(entry.source for entry in flood.listed)
    if what == "flood_started":
        sentence = (
            f"{flood.n} alerts in {settings.flood_window_s / 60:g} min, most of them at "
            f"{sources}: a flood; look for what they have in common."
        )
    else:
        sentence = (
            f"the flood since {second_text(flood.started_ns)} is over: {flood.n} alerts, most of "
            f"them at {sources}."
        )
    details: dict[str, Any] = {
        "n": flood.n,
        "started_ns": flood.started_ns,
        "alerts": [asdict(entry) for entry in flood.listed],
        "sentence": sentence,
        "advice": ADVICE,
    }
    return Event(what, "", at_ns, annunciate=what == "flood_started", details=details)


def _most(sources: Iterable[str]) -> str:
    """Return the sources with most entries, for a sentence."""
    counts: dict[str, int] = {}
    for source in sources:
        counts[source] = counts.get(source, 0) + 1
    first: Sequence[str] = sorted(counts, key=lambda source: (-counts[source], source))[:3]
    return " and ".join([", ".join(first[:-1]), first[-1]] if len(first) > 1 else first)
