"""What the pages answer, with a unit and an example for every field.

These classes are the description; bodies are written straight from the store. A test
holds real answers against them.
"""

from __future__ import annotations

from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field

ADVICE = (
    "Advice only: no protective function; it replaces no alarm, trip or interlock. "
    "Local codes and licensed practice decide."
)
TIME_EXAMPLE = "2026-12-01T04:00:10Z"
# As strict as the parser, for the days of months too; 29 February it takes as well.
TIME_PATTERN = (
    r"^(197[1-9]|19[89][0-9]|20[0-9]{2}|21[0-9]{2}|22[0-5][0-9])-"
    r"((0[13578]|1[02])-(0[1-9]|[12][0-9]|3[01])|(0[469]|11)-(0[1-9]|[12][0-9]|30)"
    r"|02-(0[1-9]|1[0-9]|2[0-8]))"
    r"T([01][0-9]|2[0-3]):[0-5][0-9]:[0-5][0-9](\.[0-9]{1,9})?"
    r"(Z|[+-](0[0-9]|1[0-4]):[0-5][0-9])$"
)
_MODEL = "6b1f0c9a2e7d4835"


class _Answer(BaseModel):
    model_config = ConfigDict(extra="forbid")


class ExpectedRange(_Answer):
    """The shortest interval that holds 95 % of what a measurement should have read."""

    low: float | None = Field(
        description="lower end, the channel's unit; null: open", examples=[268.0]
    )
    high: float | None = Field(
        description="upper end, the channel's unit; null: open", examples=[281.0]
    )
    best: float | None = Field(description="middle, the channel's unit", examples=[274.0])


class ExpectedWords(_Answer):
    """What a state should have been."""

    words: dict[str, float] = Field(
        description="probability of each word, ratio 0 to 1",
        examples=[{"running": 0.98, "stopped": 0.02}],
    )


class Suspect(_Answer):
    """The channel whose removal explains most of the surprise."""

    channel: str = Field(description="name of the channel, no unit", examples=["flow"])
    surprise: float | None = Field(
        description="surprise of its reading given the others, nats", examples=[17.0]
    )
    reading: float | str | None = Field(
        description="what it read, the channel's unit", examples=[241.3]
    )
    expected: ExpectedRange | ExpectedWords = Field(
        description="what it should have read, the channel's unit",
        examples=[{"low": 268.0, "high": 281.0, "best": 274.0}],
    )
    neighbours: list[str] = Field(
        default=[], description="names of the channels that go with it, no unit",
        examples=[["power"]],
    )  # fmt: skip


class ChannelScore(_Answer):
    """One channel of a record, with `channels=true`."""

    channel: str = Field(description="name of the channel, no unit", examples=["power"])
    surprise: float | None = Field(
        description="surprise given the others, nats; null: missing", examples=[0.8]
    )
    expected: ExpectedRange | ExpectedWords = Field(
        description="what it should have read, the channel's unit",
        examples=[{"low": 31.0, "high": 33.5, "best": 32.2}],
    )


class Score(_Answer):
    """The answer to one record."""

    source: str = Field(description="name of the source, no unit", examples=["mill-lane-2"])
    time: str = Field(description="time of the record, RFC 3339 in UTC", examples=[TIME_EXAMPLE])
    model: str = Field(description="name of the model that scored, no unit", examples=[_MODEL])
    member: Literal["own", "fleet"] = Field(
        description="whether the model knows this source itself, no unit", examples=["own"]
    )
    surprise: float | None = Field(description="-ln p of all its readings, nats", examples=[31.2])
    excess: float | None = Field(
        description="surprise against what is usual for the source and these readings, nats; "
        "null: not judged",
        examples=[18.4],
    )
    sustained: float | None = Field(
        description="weighted mean of the source's excess, nats", examples=[2.9]
    )
    missing: list[str] = Field(
        description="channels without a usable reading, no unit", examples=[["speed"]]
    )
    unknown: list[str] = Field(
        description="channels that the model does not know, no unit", examples=[[]]
    )
    suspect: Suspect | None = Field(
        description="the channel to look at first, no unit",
        examples=[None],
    )
    alert: Literal["record", "sustained"] | None = Field(
        description="which level was passed, no unit", examples=[None]
    )
    known: bool = Field(default=False, description="true: stored before, no unit", examples=[True])
    late: bool = Field(
        default=False,
        description="true: older than the standing, which it left alone, no unit",
        examples=[True],
    )
    ahead: bool = Field(
        default=False,
        description="true: 5 minutes and more ahead of the clock, standing left alone, no unit",
        examples=[True],
    )
    judged: bool = Field(
        default=True, description="false: too few readings to judge, no unit", examples=[False]
    )
    channels: list[ChannelScore] = Field(
        default=[], description="every channel, with channels=true, no unit", examples=[[]]
    )


class ProblemBody(BaseModel):
    """A refusal (RFC 9457)."""

    model_config = ConfigDict(extra="allow")

    type: str = Field(
        description="path that explains this sort of refusal, no unit",
        examples=["/problems/bad-record"],
    )
    title: str = Field(description="the sort in words, no unit", examples=["Record cannot be used"])
    status: int = Field(description="HTTP status, no unit", examples=[422], ge=400, le=599)
    detail: str = Field(
        description="what is wrong here and what to do, no unit",
        examples=["time '2026-12-01T04:00:10' has no offset from UTC; end it with Z or +hh:mm"],
    )
    way_out: str = Field(
        description="what to do about this sort of refusal, no unit",
        examples=["Correct the member that the detail names."],
    )
    pointer: str = Field(
        default="", description="place in the record (RFC 6901), no unit", examples=["/time"]
    )
    index: int = Field(default=0, description="place in the batch, from 0, no unit", examples=[3])


class ProblemItem(_Answer):
    """What stands in a batch answer for an item that was refused."""

    index: int = Field(description="place in the batch, from 0, no unit", examples=[3])
    problem: ProblemBody = Field(
        description="why it was refused, no unit",
        examples=[{"type": "/problems/bad-record", "title": "Record cannot be used",
                   "status": 422, "detail": "the record has no time",
                   "way_out": "Correct the member that the detail names.", "index": 3}],
    )  # fmt: skip


class StoredItem(_Answer):
    """A stored record."""

    source: str = Field(description="name of the source, no unit", examples=["mill-lane-2"])
    time: str = Field(description="time of the record, RFC 3339 in UTC", examples=[TIME_EXAMPLE])
    received: str = Field(
        description="when the service took it, RFC 3339 in UTC", examples=["2026-12-01T04:00:11Z"]
    )
    request: str = Field(
        description="id of the request that brought it, no unit", examples=["9f3a0c1d-2f"]
    )
    model: str = Field(description="name of the model that scored, no unit", examples=[_MODEL])
    readings: dict[str, Any] = Field(
        description="readings by channel, each in its channel's unit",
        examples=[{"flow": 241.3, "pump": "running", "speed": None}],
    )
    surprise: float | None = Field(description="-ln p of all its readings, nats", examples=[31.2])
    excess: float | None = Field(
        description="surprise against what is usual, nats; null: not judged", examples=[18.4]
    )
    sustained: float | None = Field(
        description="weighted mean of the source's excess, nats", examples=[2.9]
    )
    missing: list[str] = Field(
        description="channels without a usable reading, no unit", examples=[["speed"]]
    )
    suspect: Suspect | None = Field(
        description="the channel to look at first, no unit", examples=[None]
    )
    alert: Literal["record", "sustained"] | None = Field(
        description="which level was passed, no unit", examples=[None]
    )
    late: bool = Field(default=False, description="true: came late, no unit", examples=[True])
    ahead: bool = Field(
        default=False, description="true: ahead of the server's clock, no unit", examples=[True]
    )
    judged: bool = Field(
        default=True, description="false: too few readings to judge, no unit", examples=[False]
    )


_NEXT = Field(
    description="send it as `after` for the next page, no unit; null: this is the last",
    examples=[None],
)
_ITEMS = Field(description="the items of this page, no unit")


class RecordsPage(_Answer):
    """A page of stored records."""

    items: list[StoredItem] = _ITEMS
    next: str | None = _NEXT


class SourceItem(_Answer):
    """A source and what is remembered of it."""

    source: str = Field(description="name of the source, no unit", examples=["mill-lane-2"])
    records: int = Field(description="records stored, count", examples=[8640], ge=0)
    over_level: int = Field(description="records over a level, count", examples=[3], ge=0)
    last: str | None = Field(
        description="time of the newest record in the standing, RFC 3339 in UTC",
        examples=[TIME_EXAMPLE],
    )
    model: str = Field(description="model that scored it, no unit", examples=[_MODEL])
    member: Literal["own", "fleet"] = Field(
        description="whether the model in use knows it itself, no unit", examples=["own"]
    )
    excess: float | None = Field(description="excess of that record, nats", examples=[0.4])
    sustained: float | None = Field(description="sustained excess, nats", examples=[0.1])
    alert: Literal["record", "sustained"] | None = Field(
        description="level that record passed, no unit", examples=[None]
    )


class SourcesPage(_Answer):
    """A page of sources, by name."""

    items: list[SourceItem] = _ITEMS
    next: str | None = _NEXT


class ModelItem(BaseModel):
    """The model in use, as it is for one source or for the fleet."""

    model_config = ConfigDict(extra="allow")

    model: str = Field(description="its name, the hash of its content, no unit", examples=[_MODEL])
    source: str | None = Field(
        description="the source asked for, no unit; null: the fleet", examples=["mill-lane-2"]
    )
    member: Literal["own", "fleet"] = Field(
        description="whether it knows this source itself, no unit", examples=["own"]
    )
    members: list[str] = Field(
        description="sources it knows, no unit", examples=[["mill-lane-1", "mill-lane-2"]]
    )
    levels: dict[str, float] = Field(
        description="level by kind of alert, nats", examples=[{"record": 14.2, "sustained": 3.1}]
    )
    channels: list[dict[str, Any]] = Field(
        description="its channels in order, each with its unit",
        examples=[[{"name": "flow", "kind": "measurement", "unit": "m3/h", "words": [],
                    "span": [0, 400]}]],
    )  # fmt: skip
    edges: list[dict[str, Any]] = Field(
        description="edges of its tree, weighted in nats",
        examples=[[{"left": "flow", "right": "power", "nats": 1.31}]],
    )


class ModelPage(_Answer):
    """The model in use, as a page of one item."""

    items: list[ModelItem] = _ITEMS
    next: str | None = _NEXT


class PrunedItem(_Answer):
    """What retention took out."""

    at: str = Field(description="when, RFC 3339 in UTC", examples=[TIME_EXAMPLE])
    reason: Literal["age", "size"] = Field(description="why, no unit", examples=["age"])
    before: str = Field(
        description="records received and alerts cleared before this went, RFC 3339 in UTC",
        examples=["2025-10-27T04:00:00Z"],
    )
    records: int = Field(description="how many records, count", examples=[8640], ge=0)
    alerts: int = Field(description="how many alerts, count", examples=[0], ge=0)
    actions: int = Field(description="how many actions, count", examples=[0], ge=0)


class PrunedPage(_Answer):
    """A page of what retention took out, newest first."""

    items: list[PrunedItem] = _ITEMS
    next: str | None = _NEXT


class Health(_Answer):
    """Whether the service lives and can take records."""

    status: Literal["live", "ready"] = Field(description="the answer, no unit", examples=["ready"])
    model: str | None = Field(
        default=None, description="name of the model in use, no unit", examples=[_MODEL]
    )
    model_refused: str | None = Field(
        default=None,
        description="why a newer model is not in use, no unit; null: none waits",
        examples=[None],
    )
