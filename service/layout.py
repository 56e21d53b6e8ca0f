"""What a parser must know of a model: its channels in order, their words and spans.

A layout is what gives a row of numbers its meaning, so it is stored once beside the
records that were written with it.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from operator import itemgetter
from typing import Any, Literal, Protocol

import numpy as np
from numpy.typing import NDArray


class ChannelLike(Protocol):
    """What is needed of a channel; `scoring.channels.Channel` has it."""

    @property
    def name(self) -> str: ...
    @property
    def unit(self) -> str: ...
    @property
    def kind(self) -> Literal["measurement", "state"]: ...
    @property
    def span(self) -> tuple[float, float] | None: ...
    @property
    def words(self) -> tuple[str, ...]: ...


@dataclass(frozen=True)
class Layout:
    """The instruments of one model, in the order of the columns of its arrays.

    states: column -> word -> number. low, high: (n_channels,) spans, infinite where a
    channel has none.
    """

    channels: tuple[ChannelLike, ...]
    names: tuple[str, ...] = field(init=False)
    columns: Mapping[str, int] = field(init=False)
    known: frozenset[str] = field(init=False)
    states: Mapping[int, Mapping[str, int]] = field(init=False)
    low: NDArray[np.float64] = field(init=False)
    high: NDArray[np.float64] = field(init=False)
    has_spans: bool = field(init=False)
    getter: Any = field(init=False)

    def __post_init__(self) -> None:
        spans = [c.span or (-math.inf, math.inf) for c in self.channels]
        names = tuple(c.name for c in self.channels)
        put = object.__setattr__
        put(self, "names", names)
        put(self, "columns", {name: column for column, name in enumerate(names)})
        put(self, "known", frozenset(names))
        put(self, "states", {
            column: {word: number for number, word in enumerate(c.words)}
            for column, c in enumerate(self.channels) if c.kind == "state"
        })  # fmt: skip
        put(self, "low", np.array([low for low, _ in spans]))
        put(self, "high", np.array([high for _, high in spans]))
        put(self, "has_spans", any(c.span is not None for c in self.channels))
        put(self, "getter", itemgetter(*names) if len(names) > 1 else _one(names[0]))

    def reading(self, column: int, value: float) -> float | str | None:
        """Return what a client sent for a cell: a number, a word, or None where missing.

        A word that the model does not know is not in the cell; it is None here.
        """
        if math.isnan(value):
            return None
        if column in self.states:
            words = self.channels[column].words
            return words[int(value)] if int(value) < len(words) else None
        return value

    def as_json(self) -> list[dict[str, Any]]:
        """Return the form in which the store keeps a layout."""
        return [
            {
                "name": c.name, "kind": c.kind, "unit": c.unit,
                "words": list(c.words), "span": c.span,
            }
            for c in self.channels
        ]  # fmt: skip


def _one(name: str) -> Any:
    def get(readings: Mapping[str, Any]) -> tuple[Any]:
        return (readings[name],)

    return get


def unpack_readings(
    stored: bytes, extra: Mapping[str, Any] | None, layout: Sequence[Mapping[str, Any]]
) -> dict[str, float | str | None]:
    """Return a stored record's readings by name, as the client sent them.

    stored: float64 of every channel in the layout's order. extra: what does not fit there,
    words and channels that the model did not know.
    """
    values = np.frombuffer(stored, dtype=np.float64).tolist()
    readings: dict[str, float | str | None] = {}
    for channel, value in zip(layout, values, strict=True):
        if math.isnan(value):
            readings[channel["name"]] = None
        elif channel["kind"] == "state":
            words = channel["words"]
            readings[channel["name"]] = words[int(value)] if value < len(words) else None
        else:
            readings[channel["name"]] = value
    if extra:
        readings.update(extra.get("words", {}))
        readings.update(extra.get("unknown", {}))
    return readings
