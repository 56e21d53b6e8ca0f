"""What a site says of its instruments: the channel table.

A table is read from commented TOML (`load_channels`) or taken from a model. It
lists instruments in a fixed order, then derived channels, and carries the site's
say on edges. Names are compared exactly.
"""

from __future__ import annotations

import math
import tomllib
from collections import Counter
from difflib import get_close_matches
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from scoring.errors import BadChannelTable

# The version of the channel table's file format that this package writes and reads.
CHANNELS_FORMAT = 1

Kind = Literal["measurement", "state"]
Operation = Literal["difference", "ratio", "previous", "step", "hour"]

# How many inputs each operation takes; `hour` reads the record's own time.
N_INPUTS: dict[str, int] = {"difference": 2, "ratio": 2, "previous": 1, "step": 1, "hour": 0}

Name = Annotated[str, Field(min_length=1, max_length=200)]


class _Frozen(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class Channel(_Frozen):
    """One instrument or condition of a source.

    span: lowest and highest value the instrument can report, in its own unit; a
        reading outside counts as missing and is named.
    resolution: smallest step the instrument reports, in its own unit.
    accuracy: half-width of the instrument's accuracy band, in its own unit.
    words: the values a `state` can take, in a fixed order.
    bins: inner bin borders fixed by hand, rising, in the channel's unit.
    """

    name: Name
    unit: str = ""
    kind: Kind = "measurement"
    span: tuple[float, float] | None = None
    resolution: float | None = Field(default=None, gt=0)
    accuracy: float | None = Field(default=None, gt=0)
    words: tuple[str, ...] = ()
    bins: tuple[float, ...] = ()
    leave_out: bool = False

    @model_validator(mode="after")
    def _consistent(self) -> Channel:
        if self.kind == "state" and not self.words:
            raise ValueError("a state needs its words, for example words = ['running', 'stopped']")
        if self.kind == "measurement" and self.words:
            raise ValueError("words belong to a state; a measurement has none")
        if len(set(self.words)) != len(self.words):
            raise ValueError("a word stands twice in words")
        if len(self.words) > 200:
            raise ValueError(f"{len(self.words)} words are too many for a state; at most 200")
        if self.span is not None and not self.span[0] < self.span[1]:
            raise ValueError(f"span {list(self.span)} must rise")
        if any(not math.isfinite(b) for b in self.bins) or any(
            a >= b for a, b in zip(self.bins, self.bins[1:], strict=False)
        ):
            raise ValueError("bins must be finite and strictly rising")
        return self

    @property
    def is_state(self) -> bool:
        """True for a state channel."""
        return self.kind == "state"


class Derived(_Frozen):
    """A channel computed from others by a named operation, alike offline and online.

    difference: first less second. ratio: first over second, missing where the second
    is zero. previous: the value one record earlier. step: the change since the record
    before. hour: the hour of day of the record's time (UTC), a state.
    """

    name: Name
    operation: Operation
    of: tuple[Name, ...] = ()
    unit: str = ""

    @model_validator(mode="after")
    def _consistent(self) -> Derived:
        wanted = N_INPUTS[self.operation]
        if len(self.of) != wanted:
            raise ValueError(
                f"operation {self.operation!r} takes {wanted} channels, {len(self.of)} given"
            )
        return self


class EdgeSay(_Frozen):
    """Edges that the site forbids or requires, as pairs of channel names."""

    forbid: tuple[tuple[Name, Name], ...] = ()
    require: tuple[tuple[Name, Name], ...] = ()


class ChannelTable(_Frozen):
    """The instruments and derived channels of a fleet, in order.

    step_s: the usual interval between two records of one source, in seconds.
    regime: state channels whose combination may choose a tree of its own.
    """

    format: int = CHANNELS_FORMAT
    step_s: float | None = Field(default=None, gt=0)
    channel: tuple[Channel, ...]
    derived: tuple[Derived, ...] = ()
    edges: EdgeSay = EdgeSay()
    regime: tuple[Name, ...] | None = None

    @model_validator(mode="after")
    def _consistent(self) -> ChannelTable:
        if self.format != CHANNELS_FORMAT:
            raise ValueError(
                f"format {self.format} is not known; this version reads {CHANNELS_FORMAT}"
            )
        names = [c.name for c in self.channel] + [d.name for d in self.derived]
        twice = [name for name, n in Counter(names).items() if n > 1]
        if twice:
            raise ValueError(f"channel {twice[0]!r} stands twice")
        if not self.instruments:
            raise ValueError("no channel is left to watch")
        known = {c.name: c for c in self.instruments}
        for derived in self.derived:
            for name in derived.of:
                self._known(name, set(known), f"derived channel {derived.name!r}")
                if known[name].is_state:
                    raise ValueError(
                        f"derived channel {derived.name!r}: {name!r} is a state and has no number"
                    )
        for key, pairs in (("forbid", self.edges.forbid), ("require", self.edges.require)):
            for pair in pairs:
                for name in pair:
                    self._known(name, set(self.names), f"edges.{key}")
                if pair[0] == pair[1]:
                    raise ValueError(f"edges.{key}: {pair[0]!r} is paired with itself")
        forbidden = {frozenset(p) for p in self.edges.forbid}
        for pair in self.edges.require:
            if frozenset(pair) in forbidden:
                raise ValueError(f"edges: {pair[0]!r} - {pair[1]!r} is both required and forbidden")
        self._no_required_cycle()
        for name in self.regime or ():
            self._known(name, set(known), "regime")
            if not known[name].is_state:
                raise ValueError(f"regime: {name!r} is not a state")
        return self

    @staticmethod
    def _known(name: str, known: set[str], where: str) -> None:
        if name not in known:
            raise ValueError(f"{where} names {name!r}, which is not a watched channel")

    def _no_required_cycle(self) -> None:
        group = {name: name for name in self.names}

        def root(name: str) -> str:
            while group[name] != name:
                name = group[name]
            return name

        for left, right in self.edges.require:
            a, b = root(left), root(right)
            if a == b:
                raise ValueError(
                    f"edges.require: {left!r} - {right!r} closes a cycle with the edges "
                    "required before it; a tree has none, so drop one of them"
                )
            group[a] = b

    @property
    def instruments(self) -> tuple[Channel, ...]:
        """The channels that are watched: those not left out."""
        return tuple(c for c in self.channel if not c.leave_out)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of all nodes: instruments in order, then derived channels."""
        return tuple(c.name for c in self.instruments) + tuple(d.name for d in self.derived)

    @property
    def nodes(self) -> tuple[Channel, ...]:
        """Instruments, then each derived channel as the channel that its values form."""
        return self.instruments + tuple(_as_channel(d) for d in self.derived)


def _as_channel(derived: Derived) -> Channel:
    if derived.operation == "hour":
        return Channel(
            name=derived.name, kind="state", words=tuple(f"{hour:02d}" for hour in range(24))
        )
    return Channel(name=derived.name, unit=derived.unit)


def parse_channels(data: dict[str, Any], place: str) -> ChannelTable:
    """Return the table held in parsed TOML or JSON.

    place: how errors name the source of the data, usually a path.
    Raises BadChannelTable with the key and the reason.
    """
    try:
        return ChannelTable.model_validate(data)
    except ValidationError as error:
        first = error.errors()[0]
        where = _where(data, first["loc"])
        what = str(first["msg"]).removeprefix("Value error, ")
        if first["type"] == "extra_forbidden":
            what = _unknown(first["loc"])
        raise BadChannelTable(place, f"{where}{what}") from None


def _where(data: dict[str, Any], loc: tuple[int | str, ...]) -> str:
    if len(loc) >= 2 and loc[0] in ("channel", "derived") and isinstance(loc[1], int):
        entry = data[str(loc[0])][loc[1]]
        name = entry.get("name", f"number {loc[1] + 1}") if isinstance(entry, dict) else loc[1]
        rest = ".".join(str(part) for part in loc[2:])
        return f"{loc[0]} {name!r}{', ' + rest if rest else ''}: "
    return ".".join(str(part) for part in loc) + ": " if loc else ""


def _unknown(loc: tuple[int | str, ...]) -> str:
    """Return what to say of a key that there is not."""
    kinds: dict[str, type[BaseModel]] = {
        "channel": Channel, "derived": Derived, "edges": EdgeSay
    }  # fmt: skip
    kind = kinds.get(str(loc[0]), ChannelTable) if len(loc) > 1 else ChannelTable
    names = list(kind.model_fields)
    near = get_close_matches(str(loc[-1]), names, 1)
    return "not known" + (f"; is {near[0]} meant?" if near else f"; known are {', '.join(names)}")


def load_channels(path: Path) -> ChannelTable:
    """Return the channel table in a TOML file; raises BadChannelTable."""
    try:
        data = tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise BadChannelTable(
            str(path), "no such file; `oddbranch survey` proposes a channel table from history"
        ) from None
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise BadChannelTable(str(path), f"cannot be read as TOML: {error}") from None
    return parse_channels(data, str(path))
