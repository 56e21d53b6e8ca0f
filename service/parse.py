"""From bytes to arrays: the body of POST /records.

The plain case goes column by column from orjson's objects into arrays. Whatever is not
plain goes item by item through `_ItemReader`, which says exactly what is wrong, so that
one bad item harms no other and the quick way needs no messages of its own.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from itertools import chain
from typing import Any, NoReturn

import numpy as np
import orjson
from numpy.typing import NDArray

from service.layout import Layout
from service.nearest import nearest_of
from service.problems import Problem
from service.times import parse_time, parse_times

MAX_NAME_CHARS = 200
MAX_WORD_CHARS = 200
_MEMBERS = frozenset(("source", "time", "readings"))
_QUALITY_MEMBERS = frozenset(("value", "quality"))
# The OPC UA words for the quality of a reading; an uncertain one is used, a bad one never.
QUALITIES = ("good", "uncertain", "bad")
# Control characters break logs and lines, and PostgreSQL stores no NUL.
NAME_PATTERN = r"^[^\x00-\x1f\x7f]+$"
_NAME = re.compile(NAME_PATTERN)
# Below this many times their columns cost more to set up than they save.
_FEW_TIMES = 16
_PLAIN = {float, int, type(None)}
# JSON numbers reach 1.8e308, and a float64 holds them all; above this no instrument reads,
# and sums of squares would overflow.
MAX_ABS_READING = 1e100


@dataclass(slots=True)
class Batch:
    """The items of one body, the good ones as arrays.

    positions: (n,) place of every good item in the body; sources, times_ns (n,) and
    values (n, n_channels; NaN = missing) beside it. bad: True where a reading was marked
    bad, or None. unknown: names by row; extra: what the store keeps beside the values.
    problems: the refused items by position.
    """

    layout: Layout
    n_items: int
    positions: list[int]
    sources: list[str]
    times_ns: NDArray[np.int64]
    values: NDArray[np.float64]
    bad: NDArray[np.bool_] | None = None
    unknown: dict[int, list[str]] = field(default_factory=dict)
    extra: dict[int, dict[str, Any]] = field(default_factory=dict)
    problems: dict[int, Problem] = field(default_factory=dict)


@dataclass(slots=True)
class _Item:
    source: str
    time_ns: int
    values: list[float]
    bad: list[int]
    unknown: list[str]
    extra: dict[str, Any] | None


class _TooLarge:
    """Stands for a number that JSON allows to write and no reading can be."""

    def __init__(self, text: str) -> None:
        self.text = text


def load_json(body: bytes | bytearray | memoryview) -> Any:
    """Return the parsed JSON of a body; raises Problem.

    NaN, Infinity and numbers beyond float64 come back as marks, so that only the items
    which hold them are refused.
    """
    try:
        return orjson.loads(body)
    except orjson.JSONDecodeError as error:
        return _load_with_marks(bytes(body), error)


def _load_with_marks(body: bytes, first: orjson.JSONDecodeError) -> Any:
    place = f"line {first.lineno}, column {first.colno}"
    if not body.strip():
        raise Problem("bad-json", "the body is empty; send one record, an array, or NDJSON")
    refusal = Problem("bad-json", f"the body is not JSON at {place}: {first.msg}")
    # Only a number beyond float64 or a bare NaN is worth the slow reader.
    if not re.search(rb"NaN|Infinity|[0-9]{300}|[eE]\+?[0-9]{3}", body):
        raise refusal
    # The slow reader takes half of a surrogate pair, which no answer could repeat.
    if re.search(rb"\\u[dD][89a-fA-F]", body):
        raise refusal
    try:
        text = body.decode("utf-8")
        return json.loads(
            text, parse_float=_marked_float, parse_int=_marked_int, parse_constant=_TooLarge
        )
    except (ValueError, RecursionError):
        raise refusal from None


def _marked_int(text: str) -> int | float | _TooLarge:
    # Longer ones are beyond 64 bits, where the quick reader makes a float of them too.
    return int(text) if len(text) < 19 else _marked_float(text)


def _marked_float(text: str) -> float | _TooLarge:
    number = float(text)
    return number if math.isfinite(number) else _TooLarge(text)


def parse_items(items: Sequence[Any], layout: Layout, n_readings_max: int) -> Batch:
    """Return the batch that a sequence of parsed items holds; never raises for an item."""
    reader = _ItemReader(layout, n_readings_max)
    quick, odd = _quick_columns(items, layout)
    if quick is None:
        return _from_items(reader, items, range(len(items)))
    if not odd:
        return quick
    return _merged(quick, _from_items(reader, items, odd), len(items))


def parse_lines(lines: Sequence[bytes], layout: Layout, n_readings_max: int) -> Batch:
    """Return the batch that NDJSON lines hold; a broken line is a problem in its place."""
    items: list[Any] = []
    broken: dict[int, Problem] = {}
    for position, line in enumerate(lines):
        try:
            items.append(load_json(line))
        except Problem as problem:
            broken[position] = problem
            items.append(None)
    batch = parse_items(items, layout, n_readings_max)
    batch.problems.update(broken)
    return batch


def _quick_columns(items: Sequence[Any], layout: Layout) -> tuple[Batch | None, list[int]]:
    """Return the plain items as a batch and the positions of all others."""
    rows, positions, odd = _plain_rows(items, layout)
    if not rows:
        return None, odd
    sources = [items[position]["source"] for position in positions]
    times = [items[position]["time"] for position in positions]
    # An unhashable source (a list) is no plain item either.
    if set(map(type, sources)) != {str} or set(map(type, times)) != {str}:
        return None, odd
    if not all(_is_name(source) for source in set(sources)):
        return None, odd
    times_ns = parse_times(times) if len(times) >= _FEW_TIMES else None
    if times_ns is None:
        times_ns = _times_one_by_one(times)
        if times_ns is None:
            return None, odd
    values = _values(rows, layout)
    if values is None:
        return None, odd
    return Batch(layout, len(items), positions, sources, times_ns, values), odd


def _plain_rows(
    items: Sequence[Any], layout: Layout
) -> tuple[list[tuple[Any, ...] | list[Any]], list[int], list[int]]:
    rows: list[tuple[Any, ...] | list[Any]] = []
    row: tuple[Any, ...] | list[Any]
    positions: list[int] = []
    odd: list[int] = []
    getter, known, names, n_names = layout.getter, layout.known, layout.names, len(layout.names)
    for position, item in enumerate(items):
        try:
            readings = item["readings"]
            if len(item) != 3 or "source" not in item or "time" not in item:
                odd.append(position)
                continue
            if len(readings) == n_names:
                row = getter(readings)
            elif readings.keys() <= known:
                row = list(map(readings.get, names))
            else:
                odd.append(position)
                continue
        except (KeyError, TypeError, AttributeError):
            odd.append(position)
            continue
        rows.append(row)
        positions.append(position)
    return rows, positions, odd


def _times_one_by_one(times: Sequence[str]) -> NDArray[np.int64] | None:
    try:
        return np.array([parse_time(text) for text in times], dtype=np.int64)
    except ValueError:
        return None


def _values(rows: Sequence[Sequence[Any]], layout: Layout) -> NDArray[np.float64] | None:
    """Return rows of plain readings as an array, or None where a cell is not plain."""
    n_names = len(layout.names)
    cells = list(chain.from_iterable(rows))
    for column, words in layout.states.items():
        states = cells[column::n_names]
        try:
            cells[column::n_names] = [math.nan if w is None else words[w] for w in states]
        except (KeyError, TypeError):
            return None
    if not set(map(type, cells)) <= _PLAIN:
        return None
    return _finite(np.array(cells, dtype=np.float64).reshape(len(rows), n_names))


def _finite(values: NDArray[np.float64]) -> NDArray[np.float64] | None:
    if (np.abs(values) > MAX_ABS_READING).any():
        return None
    # Minus zero is zero: the same reading must give the same bytes in the store.
    values += 0.0
    return values


def _is_name(text: str) -> bool:
    return 0 < len(text) <= MAX_NAME_CHARS and _NAME.fullmatch(text) is not None


def _from_items(reader: _ItemReader, items: Sequence[Any], positions: Iterable[int]) -> Batch:
    read: list[_Item] = []
    places: list[int] = []
    problems: dict[int, Problem] = {}
    for position in positions:
        try:
            read.append(reader.read(items[position]))
        except Problem as problem:
            problems[position] = problem
        else:
            places.append(position)
    layout = reader.layout
    values = np.array([item.values for item in read], dtype=np.float64)
    bad = None
    if any(item.bad for item in read):
        bad = np.zeros((len(read), len(layout.names)), dtype=np.bool_)
        for row, item in enumerate(read):
            bad[row, item.bad] = True
    return Batch(
        layout=layout,
        n_items=len(items),
        positions=places,
        sources=[item.source for item in read],
        times_ns=np.array([item.time_ns for item in read], dtype=np.int64),
        values=values.reshape(len(read), len(layout.names)),
        bad=bad,
        unknown={row: item.unknown for row, item in enumerate(read) if item.unknown},
        extra={row: item.extra for row, item in enumerate(read) if item.extra},
        problems=problems,
    )


def _merged(quick: Batch, slow: Batch, n_items: int) -> Batch:
    """Return both batches as one, in the order of the body."""
    positions = quick.positions + slow.positions
    order = np.argsort(np.array(positions), kind="stable")
    row_of = {old: new for new, old in enumerate(order.tolist())}
    n_quick = len(quick.positions)
    bad = None
    if slow.bad is not None:
        bad = np.concatenate([np.zeros_like(quick.values, dtype=np.bool_), slow.bad])[order]
    sources = quick.sources + slow.sources
    return Batch(
        layout=quick.layout,
        n_items=n_items,
        positions=[positions[old] for old in order],
        sources=[sources[old] for old in order],
        times_ns=np.concatenate([quick.times_ns, slow.times_ns])[order],
        values=np.concatenate([quick.values, slow.values])[order],
        bad=bad,
        unknown={row_of[n_quick + row]: names for row, names in slow.unknown.items()},
        extra={row_of[n_quick + row]: extra for row, extra in slow.extra.items()},
        problems=slow.problems,
    )


class _ItemReader:
    """Reads one item with care; every refusal names the member and the way out."""

    def __init__(self, layout: Layout, n_readings_max: int) -> None:
        self.layout = layout
        self.n_readings_max = n_readings_max

    def read(self, item: Any) -> _Item:
        if not isinstance(item, dict):
            _refuse("", f"a record is an object, not {_a(item)}")
        self._members(item)
        source = self._source(item["source"])
        time_ns = self._time(item["time"])
        readings = item["readings"]
        if not isinstance(readings, dict):
            _refuse("/readings", f"readings is an object of channels, not {_a(readings)}")
        if len(readings) > self.n_readings_max:
            _refuse(
                "/readings",
                f"readings has {len(readings)} channels; at most {self.n_readings_max} are taken",
            )
        return self._readings(source, time_ns, readings)

    @staticmethod
    def _members(item: dict[str, Any]) -> None:
        for member in ("source", "time", "readings"):
            if member not in item:
                near = nearest_of(member, [name for name in item if name not in _MEMBERS])
                hint = f"; is {_clip(near)} meant?" if near else ""
                _refuse(f"/{member}", f"the record has no {member}{hint}")
        extra = item.keys() - _MEMBERS
        if extra:
            name = min(extra)
            _refuse(
                _pointer(name),
                f"{_clip(name)} is not a member of a record, which has source, time and readings",
            )

    @staticmethod
    def _source(source: Any) -> str:
        if not isinstance(source, str):
            _refuse("/source", f"source is a text, not {_a(source)}")
        if not _is_name(source):
            _refuse(
                "/source",
                f"source must have 1 to {MAX_NAME_CHARS} characters and no control character",
            )
        return source

    @staticmethod
    def _time(time: Any) -> int:
        if not isinstance(time, str):
            _refuse("/time", f"time is a text in RFC 3339 with an offset, not {_a(time)}")
        try:
            return parse_time(time)
        except ValueError as error:
            _refuse("/time", f"time {_clip(time)} {error}")

    def _readings(self, source: str, time_ns: int, readings: dict[str, Any]) -> _Item:
        layout = self.layout
        item = _Item(source, time_ns, [math.nan] * len(layout.names), [], [], None)
        unknown: dict[str, Any] = {}
        words: dict[str, str] = {}
        quality: dict[str, str] = {}
        for name, given in readings.items():
            column = layout.columns.get(name)
            value, mark = _split_quality(name, given)
            if mark not in (None, "good"):
                quality[name] = mark
            if column is None:
                unknown[name] = self._unknown(name, value)
                item.unknown.append(name)
                continue
            if mark == "bad":
                item.bad.append(column)
            if value is None:
                continue
            if column in layout.states:
                number = self._word(name, column, value)
                if number == len(layout.channels[column].words):
                    words[name] = value
                item.values[column] = number
            else:
                item.values[column] = self._number(name, column, value)
        extra = {"unknown": unknown, "words": words, "quality": quality}
        item.extra = {key: part for key, part in extra.items() if part} or None
        return item

    @staticmethod
    def _unknown(name: str, value: Any) -> Any:
        if not _is_name(name):
            _refuse(
                _pointer("readings", name),
                f"the name of a channel must have 1 to {MAX_NAME_CHARS} characters "
                "and no control character",
            )
        if value is None:
            return None
        if isinstance(value, str):
            return _checked_word(name, value)
        return _checked_number(name, value, "channel")

    def _word(self, name: str, column: int, value: Any) -> int:
        words = self.layout.channels[column].words
        if not isinstance(value, str):
            shown = ", ".join(repr(word) for word in words[:5])
            _refuse(
                _pointer("readings", name),
                f"{_clip(name)} is a state; send one of its words ({shown}), not {_a(value)}",
            )
        # A word never seen has a number of its own, one past the last.
        return self.layout.states[column].get(_checked_word(name, value), len(words))

    def _number(self, name: str, column: int, value: Any) -> float:
        unit = self.layout.channels[column].unit
        return _checked_number(name, value, f"measurement in {unit}" if unit else "measurement")


def _split_quality(name: str, given: Any) -> tuple[Any, str | None]:
    if not isinstance(given, dict):
        return given, None
    extra = given.keys() - _QUALITY_MEMBERS
    if extra or "value" not in given:
        _refuse(
            _pointer("readings", name),
            f"{_clip(name)} given as an object has the members value and quality, nothing else",
        )
    mark = given.get("quality", "good")
    if mark not in QUALITIES:
        _refuse(
            _pointer("readings", name, "quality"),
            f"quality of {_clip(name)} is one of {', '.join(QUALITIES)}",
        )
    return given["value"], str(mark)


def _checked_word(name: str, value: str) -> str:
    if len(value) > MAX_WORD_CHARS:
        _refuse(
            _pointer("readings", name),
            f"{_clip(name)} has a word of {len(value)} characters; "
            f"at most {MAX_WORD_CHARS} are taken",
        )
    return value


def _checked_number(name: str, value: Any, what: str) -> float:
    if isinstance(value, _TooLarge):
        _refuse(
            _pointer("readings", name),
            f"{_clip(name)} is {_clip(value.text)}, which is not a finite number; "
            "send null where there is no reading",
        )
    if isinstance(value, bool) or not isinstance(value, int | float):
        _refuse(
            _pointer("readings", name),
            f"{_clip(name)} is a {what}; send a number or null, not {_a(value)}",
        )
    if abs(value) > MAX_ABS_READING:
        _refuse(
            _pointer("readings", name),
            f"{_clip(name)} is beyond {MAX_ABS_READING:g}, which no instrument reads; "
            "send null where there is no reading",
        )
    return float(value) + 0.0


def _refuse(pointer: str, detail: str) -> NoReturn:
    raise Problem("bad-record", detail, pointer=pointer)


def _pointer(*parts: str) -> str:
    """Return a JSON pointer (RFC 6901), clipped so that no answer repeats a huge name."""
    return "".join("/" + p.replace("~", "~0").replace("/", "~1")[:MAX_NAME_CHARS] for p in parts)


def _clip(text: str, n_chars: int = 60) -> str:
    return repr(text if len(text) <= n_chars else text[: n_chars - 3] + "...")


def _a(value: Any) -> str:
    names = {dict: "an object", list: "a list", str: "a text", bool: "true or false"}
    if value is None:
        return "null"
    if isinstance(value, _TooLarge):
        return f"{value.text[:20]}, no finite number"
    return names.get(type(value), "a number")
