"""The careful reader of one item, and of JSON that the quick readers do not take.

Every refusal names the member, what was met and the way out. It is what the quick ways
must agree with.
"""

from __future__ import annotations

import json
import math
import re
from dataclasses import dataclass
from typing import Any, NoReturn

import orjson

from service.layout import Layout
from service.nearest import nearest_of
from service.problems import Problem
from service.times import parse_time

MAX_NAME_CHARS = 200
MAX_WORD_CHARS = 200
_MEMBERS = frozenset(("source", "time", "readings"))
_TIME_WANTED = 'time is a text in RFC 3339 such as "2026-12-01T04:00:10Z"'
_QUALITY_MEMBERS = frozenset(("value", "quality"))
# The OPC UA words for the quality of a reading; an uncertain one is used, a bad one never.
QUALITIES = ("good", "uncertain", "bad")
# Control characters break logs and lines, and PostgreSQL stores no NUL.
NAME_PATTERN = r"^[^\x00-\x1f\x7f]+$"
_NAME = re.compile(NAME_PATTERN)
# JSON numbers reach 1.8e308, and a float64 holds them all; above this no instrument reads,
# and sums of squares would overflow.
MAX_ABS_READING = 1e100


@dataclass(slots=True)
class Item:
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


def is_name(text: str) -> bool:
    """Return whether a text can name a source or a channel."""
    return 0 < len(text) <= MAX_NAME_CHARS and _NAME.fullmatch(text) is not None


class ItemReader:
    """Reads one item with care; every refusal names the member and the way out."""

    def __init__(self, layout: Layout, n_readings_max: int) -> None:
        self.layout = layout
        self.n_readings_max = n_readings_max

    def read(self, item: Any) -> Item:
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
                _refuse(
                    f"/{member}",
                    f"the record has no {member}{hint}; it needs source, time and readings",
                )
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
        if not is_name(source):
            _refuse(
                "/source",
                f"source must have 1 to {MAX_NAME_CHARS} characters and no control character",
            )
        return source

    @staticmethod
    def _time(time: Any) -> int:
        if not isinstance(time, str):
            _refuse("/time", f"{_TIME_WANTED}, not {_a(time)}")
        try:
            return parse_time(time)
        except ValueError as error:
            _refuse("/time", f"time {_clip(time)} {error}")

    def _readings(self, source: str, time_ns: int, readings: dict[str, Any]) -> Item:
        layout = self.layout
        item = Item(source, time_ns, [math.nan] * len(layout.names), [], [], None)
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
        if not is_name(name):
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
