"""What the pages of alerts answer and what actions on them take, described field by field.

Bodies of answers are written straight from the alerts; a test holds them against these.
"""

from __future__ import annotations

from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field

from service.schemas import ADVICE, TIME_EXAMPLE, TIME_PATTERN

AlertKind = Literal["scored", "stuck", "absent", "span", "silent", "clock"]
ALERT_ID = "5d0c1f9be2a47783"
ALERT_ID_PATTERN = "^[0-9a-f]{16}$"
_SENTENCE = (
    "flow at mill-lane-2 reads 241 m3/h where 268 to 281 m3/h was expected from power and speed."
)
_MODEL = "6b1f0c9a2e7d4835"


class _Strict(BaseModel):
    model_config = ConfigDict(extra="forbid")


class AlertSuspect(_Strict):
    """A channel under suspicion and the reading that speaks most against it."""

    channel: str = Field(description="name of the channel, no unit", examples=["flow"])
    unit: str = Field(description="the channel's unit, no unit", examples=["m3/h"])
    reading: float | str | None = Field(
        description="what it read, the channel's unit", examples=[241.3]
    )
    low: float | None = Field(
        description="lower end of what was expected, the channel's unit; null: open or none",
        examples=[268.0],
    )
    high: float | None = Field(
        description="upper end, the channel's unit; null: open or none", examples=[281.0]
    )
    best: float | None = Field(
        description="middle, the channel's unit; null: none", examples=[274.0]
    )
    words: dict[str, float] | None = Field(
        description="of a state: probability of each word, ratio 0 to 1", examples=[None]
    )
    time: str = Field(description="time of that reading, RFC 3339 in UTC", examples=[TIME_EXAMPLE])
    share: float = Field(
        description="its part of the episode's summed excess, ratio 0 to 1", examples=[0.8]
    )


class AlertNote(_Strict):
    """Something a person wrote about an alert."""

    at: str = Field(description="when, RFC 3339 in UTC", examples=[TIME_EXAMPLE])
    by: str = Field(description="name of the token, or local, no unit", examples=["control-room"])
    text: str = Field(description="what was written, no unit", examples=["meter is being cleaned"])


class AlertItem(_Strict):
    """One episode at one source."""

    id: str = Field(description="its name for actions, no unit", examples=[ALERT_ID])
    source: str = Field(description="name of the source, no unit", examples=["mill-lane-2"])
    kind: AlertKind = Field(
        description="scored counts against the budget, the others do not, no unit",
        examples=["scored"],
    )
    likely: str = Field(
        description="what it is likely to be: instrument, several, or its kind, no unit",
        examples=["instrument"],
    )
    state: Literal["raised", "acknowledged", "cleared"] = Field(
        description="where it stands, no unit", examples=["raised"]
    )
    level: Literal["record", "sustained", ""] = Field(
        description="highest level reached, no unit; empty where there is none",
        examples=["sustained"],
    )
    since: str = Field(
        description="when the trouble began, RFC 3339 in UTC", examples=[TIME_EXAMPLE]
    )
    raised: str = Field(
        description="when the alert was raised, RFC 3339 in UTC", examples=[TIME_EXAMPLE]
    )
    announced: str | None = Field(
        description="when someone was first called, RFC 3339 in UTC; null: nobody so far",
        examples=[TIME_EXAMPLE],
    )
    cleared: str | None = Field(
        description="when it ended, RFC 3339 in UTC; null: it is open", examples=[None]
    )
    why_cleared: str = Field(description="why it ended, no unit", examples=[""])
    worst: str | None = Field(
        description="time of the record with most excess, RFC 3339 in UTC", examples=[TIME_EXAMPLE]
    )
    worst_excess: float | None = Field(description="excess of that record, nats", examples=[18.4])
    suspects: list[AlertSuspect] = Field(
        description="the likeliest first, with what each should have read, no unit", examples=[[]]
    )
    channels: list[str] = Field(description="channels concerned, no unit", examples=[["flow"]])
    neighbours: list[str] = Field(
        description="channels that go with the first suspect, no unit",
        examples=[["power", "speed"]],
    )
    sentence: str = Field(description="what it is about, no unit", examples=[_SENTENCE])
    quiet: Literal["", "shelved", "damped"] = Field(
        description="why nobody is called, no unit; empty: someone is", examples=[""]
    )
    n_records: int = Field(description="judged records while open, count", examples=[40], ge=0)
    n_over: int = Field(description="of them over a level, count", examples=[31], ge=0)
    n_cycles: int = Field(description="how often it went over, count", examples=[1], ge=0)
    chattering: bool = Field(description="it comes and goes quickly, no unit", examples=[False])
    fleeting: bool = Field(description="it was over for a moment once, no unit", examples=[False])
    acknowledged: str | None = Field(description="when, RFC 3339 in UTC", examples=[None])
    acknowledged_by: str = Field(description="by whom, no unit", examples=[""])
    label: Literal["", "real", "nuisance"] = Field(
        description="what people say of it, no unit", examples=[""]
    )
    notes: list[AlertNote] = Field(description="what people wrote, no unit", examples=[[]])
    model: str = Field(description="model that raised it, no unit", examples=[_MODEL])
    in_budget: bool = Field(
        description="whether the alarm budget counts it, no unit", examples=[True]
    )
    advice: str = Field(description="how to take this, no unit", examples=[ADVICE])


_NEXT = Field(
    description="send it as `after` for the next page, no unit; null: this is the last",
    examples=[None],
)


class FloodItem(_Strict):
    """More alerts at once than anyone can read."""

    since: str = Field(description="when it began, RFC 3339 in UTC", examples=[TIME_EXAMPLE])
    alerts: int = Field(description="alerts in it, count", examples=[14], ge=0)
    sentence: str = Field(
        description="the one message about them, no unit",
        examples=["14 alerts in a flood since 2026-12-01T04:00:10Z; look for what they share."],
    )


class AlertsPage(_Strict):
    """A page of alerts, latest raised first."""

    items: list[AlertItem] = Field(description="the items of this page, no unit")
    next: str | None = _NEXT
    flood: FloodItem | None = Field(
        description="the flood that lasts, no unit; null: none", examples=[None]
    )
    advice: str = Field(description="how to take this, no unit", examples=[ADVICE])


class ActionItem(_Strict):
    """Something that was done about an alert or a source."""

    at: str = Field(description="when, RFC 3339 in UTC", examples=[TIME_EXAMPLE])
    by: str = Field(
        description="name of the token, or local, no unit; empty: it ended by itself",
        examples=["control-room"],
    )
    what: str = Field(description="what was done, no unit", examples=["acknowledged"])
    source: str = Field(description="name of the source, no unit", examples=["mill-lane-2"])
    alert: str = Field(
        description="id of the alert, no unit; empty: of the source", examples=[ALERT_ID]
    )
    comment: str = Field(description="text or reason given, no unit", examples=["on my way"])
    details: dict[str, Any] = Field(
        description="what else belongs to it, no unit", examples=[{"label": "real"}]
    )


class ActionsPage(_Strict):
    """A page of what was done, newest first."""

    items: list[ActionItem] = Field(description="the items of this page, no unit")
    next: str | None = _NEXT


class Period(_Strict):
    """A time out of service."""

    start: str = Field(description="when it begins, RFC 3339 in UTC", examples=[TIME_EXAMPLE])
    end: str | None = Field(
        description="when it ends, RFC 3339 in UTC; null: until put back", examples=[None]
    )
    reason: str = Field(description="why, no unit", examples=["pump is being replaced"])
    by: str = Field(description="by whom, no unit", examples=["control-room"])


class SourceService(_Strict):
    """A source's times out of service after an action."""

    source: str = Field(description="name of the source, no unit", examples=["mill-lane-2"])
    out_of_service: list[Period] = Field(
        description="now and to come, no unit",
        examples=[[{"start": TIME_EXAMPLE, "end": None, "reason": "pump is being replaced",
                    "by": "control-room"}]],
    )  # fmt: skip


class _Body(BaseModel):
    model_config = ConfigDict(extra="forbid", strict=True)


_COMMENT = Field(
    default="", max_length=2000, description="a comment to keep, no unit", examples=["on my way"]
)
_REASON = Field(
    min_length=1, max_length=2000, description="why, no unit", examples=["meter is being cleaned"]
)


class CommentBody(_Body):
    """What may be said with an action."""

    comment: str = _COMMENT


class NoteBody(_Body):
    """A note."""

    comment: str = Field(
        min_length=1, max_length=2000, description="the note, no unit", examples=["meter cleaned"]
    )


class LabelBody(_Body):
    """What an alert turned out to be."""

    label: Literal["real", "nuisance"] = Field(
        description="what it was, no unit", examples=["real"]
    )
    comment: str = _COMMENT


class ShelveBody(_Body):
    """How long and why alerts of this kind call nobody at this source."""

    until: str = Field(
        pattern=TIME_PATTERN, max_length=40, description="when the shelf ends, RFC 3339",
        examples=["2026-12-01T12:00:00Z"],
    )  # fmt: skip
    reason: str = _REASON


class OutOfServiceBody(_Body):
    """Why a source is out of service, and until when if that is known."""

    reason: str = _REASON
    until: str | None = Field(
        default=None, pattern=TIME_PATTERN, max_length=40,
        description="when it ends, RFC 3339; null: until it is put back",
        examples=["2026-12-02T12:00:00Z"],
    )  # fmt: skip
