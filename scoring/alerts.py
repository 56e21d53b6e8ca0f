"""What an alert is: one episode at one source, as people and stores see it.

An alert is of one kind, and of each kind a source has at most one that is open. `scored`
alerts come from excess and sustained and count against the alarm budget; the others say
that readings or records are not what they should be, and are counted apart.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from datetime import UTC, datetime
from typing import Any

ADVICE = (
    "Advice, not a protective function: it replaces no alarm, trip or interlock; local codes "
    "and licensed practice decide."
)

# Kinds of alerts. absent: a channel stopped coming. span: its readings are outside its
# span. silent: the source stopped sending. clock: the times it sends jump.
SCORED, STUCK, ABSENT, SPAN, SILENT, CLOCK = (
    "scored", "stuck", "absent", "span", "silent", "clock",
)  # fmt: skip
KINDS = (SCORED, STUCK, ABSENT, SPAN, SILENT, CLOCK)

# What a scored alert is likely to be, beside STUCK: one instrument apart from its
# neighbours, or several channels that moved together.
INSTRUMENT, SEVERAL = "instrument", "several"

# States of an alert. Shelves and out of service belong to the source (see Alert.quiet).
RAISED, ACKNOWLEDGED, CLEARED = "raised", "acknowledged", "cleared"

# Why an open alert calls nobody; "" where it does.
SHELVED, DAMPED = "shelved", "damped"

# What people say of an alert afterwards.
LABELS = ("real", "nuisance")


@dataclass(frozen=True, slots=True)
class Suspect:
    """A channel under suspicion and the reading that speaks most against it.

    reading: in the channel's unit, or a state's word; low, high, best: what was expected,
        None on an open side; words: the same for a state.
    time_ns: of that reading. share: of the episode's summed excess over the channel's
    usual, 0 to 1.
    """

    channel: str
    unit: str
    reading: float | str | None
    low: float | None
    high: float | None
    best: float | None
    words: dict[str, float] | None
    time_ns: int
    share: float


@dataclass(frozen=True, slots=True)
class Note:
    """Something a person wrote about an alert."""

    at_ns: int
    by: str
    text: str


@dataclass(frozen=True, slots=True)
class Alert:
    """One episode.

    likely: INSTRUMENT, SEVERAL or a kind. level: "record" or "sustained", the highest
        reached; "" for kinds apart from the budget.
    since_ns: when the trouble began as far as readings show; raised_ns: when the alert
        was; announced_ns: when someone was first called; None: never so far.
    worst_ns, worst_excess: the record with most excess, None for kinds without one.
    suspects: at most three, the likeliest first. channels: all that are concerned.
    neighbours: of the first suspect. quiet: why nobody is called, see SHELVED.
    n_records: judged records while it was open; n_over: of them, over a level; n_cycles:
        how often it went over a level. chattering, fleeting: ISA-18.2's words.
    label: see LABELS. model: under which it was raised.
    """

    id: str
    source: str
    kind: str
    likely: str
    state: str
    level: str
    since_ns: int
    raised_ns: int
    model: str = ""
    announced_ns: int | None = None
    cleared_ns: int | None = None
    why_cleared: str = ""
    worst_ns: int | None = None
    worst_excess: float | None = None
    suspects: tuple[Suspect, ...] = ()
    channels: tuple[str, ...] = ()
    neighbours: tuple[str, ...] = ()
    sentence: str = ""
    quiet: str = ""
    n_records: int = 0
    n_over: int = 0
    n_cycles: int = 0
    chattering: bool = False
    fleeting: bool = False
    acknowledged_ns: int | None = None
    acknowledged_by: str = ""
    label: str = ""
    notes: tuple[Note, ...] = ()

    @property
    def in_budget(self) -> bool:
        """True for the kind that the alarm budget counts."""
        return self.kind == SCORED

    @property
    def is_open(self) -> bool:
        """True until it is cleared."""
        return self.state != CLEARED

    def to_dict(self) -> dict[str, Any]:
        """Return plain data that `from_dict` turns into an equal alert."""
        return asdict(self)

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> Alert:
        """Return the alert that `to_dict` wrote, also after a way through JSON."""
        whole = dict(data)
        whole["suspects"] = tuple(Suspect(**one) for one in data["suspects"])
        whole["notes"] = tuple(Note(**one) for one in data["notes"])
        for name in ("channels", "neighbours"):
            whole[name] = tuple(data[name])
        return cls(**whole)

    def as_json(self) -> dict[str, Any]:
        """Return the alert as clients see it: times as RFC 3339 under names without _ns."""
        return _with_times(self.to_dict()) | {"in_budget": self.in_budget, "advice": ADVICE}


@dataclass(frozen=True, slots=True)
class Event:
    """Something that happened to an alert, or that someone did.

    what: raised, announced (was quiet, is heard now), worsened (from the record level to
        sustained), grown (another channel), raised_again, cleared; acknowledged, noted,
        labelled; shelved, unshelved, out_of_service, back_in_service; flood_started,
        flood_ended.
    alert: as it stood just after, None where the event is of no alert.
    annunciate: someone should be called. by: who did it, "" for the machine.
    """

    what: str
    source: str
    time_ns: int
    alert: Alert | None = None
    annunciate: bool = False
    by: str = ""
    comment: str = ""
    details: dict[str, Any] = field(default_factory=dict)

    def as_json(self) -> dict[str, Any]:
        """Return the event as clients see it, times as RFC 3339."""
        return {
            "what": self.what,
            "source": self.source,
            "time": time_text(self.time_ns),
            "alert": None if self.alert is None else self.alert.as_json(),
            "annunciate": self.annunciate,
            "by": self.by,
            "comment": self.comment,
            "details": _with_times(self.details),
        }


def blank_alert(source: str, kind: str, level: str, since_ns: int, at_ns: int, model: str) -> Alert:
    """Return an alert of which only source, kind and times are known."""
    return Alert(
        id="",
        source=source,
        kind=kind,
        likely=kind,
        state=RAISED,
        level=level,
        since_ns=since_ns,
        raised_ns=at_ns,
        model=model,
    )


def alert_id(source: str, kind: str, raised_ns: int) -> str:
    """Return an alert's name: the same for the same source, kind and time, always."""
    text = f"{source}\n{kind}\n{raised_ns}".encode()
    return hashlib.blake2b(text, digest_size=8).hexdigest()


def time_text(time_ns: int) -> str:
    """Return a time as RFC 3339 in UTC, with decimals only where it has some."""
    seconds, rest = divmod(time_ns, 1_000_000_000)
    text = datetime.fromtimestamp(seconds, UTC).strftime("%Y-%m-%dT%H:%M:%S")
    return f"{text}.{rest:09d}".rstrip("0") + "Z" if rest else text + "Z"


def second_text(time_ns: int) -> str:
    """Return the same to the second, as sentences say it."""
    return time_text(time_ns - time_ns % 1_000_000_000)


def _with_times(data: Mapping[str, Any]) -> dict[str, Any]:
    """Return the same with every `_ns` number as a time, also inside lists."""
    shown: dict[str, Any] = {}
    for name, value in data.items():
        if name.endswith("_ns"):
            shown[name.removesuffix("_ns")] = None if value is None else time_text(value)
        elif isinstance(value, list | tuple):
            shown[name] = [_with_times(one) if isinstance(one, dict) else one for one in value]
        else:
            shown[name] = value
    return shown
