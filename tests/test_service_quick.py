"""The compiled parser agrees with the careful one, or gives up."""

from __future__ import annotations

import json
import math
from datetime import datetime
from typing import Any

import numpy as np
import orjson
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from service.layout import Layout
from service.parse import Batch, Parser, parse_items, parse_lines
from service.quick import ARRAY, LINES, ONE, QuickParser
from service.quick_values import number, time_ns
from service.times import parse_time
from tests.service_fakes import CHANNELS, FakeChannel
from tests.service_http import record

LAYOUT = Layout(CHANNELS)
QUICK = QuickParser(LAYOUT)
PARSER = Parser(LAYOUT, n_batch_max=100, n_readings_max=100)

# Of the sizes that instruments read: others are left to the careful way.
readings = st.one_of(
    st.none(), st.floats(-1e7, 1e7).map(lambda x: round(x, 6)), st.integers(-(10**15), 10**15)
)
good_items = st.builds(
    lambda minute, source, flow, power, pump: record(
        minute, source, flow=flow, power=power, pump=pump
    ),
    st.integers(0, 500),
    st.sampled_from(["mill-lane-1", "mill-lane-2", "x"]),
    readings,
    readings,
    st.sampled_from(["running", "stopped", None]),
)
spaces = st.sampled_from([(",", ":"), (", ", ": "), (" ,\n", "\t:\r\n ")])


def same(plain: tuple[list[str], Any, Any], careful: Batch) -> bool:
    sources, times_ns, values = plain
    return (
        careful.problems == {}
        and not careful.unknown
        and not careful.extra
        and sources == careful.sources
        and times_ns.tolist() == careful.times_ns.tolist()
        and values.tobytes() == careful.values.tobytes()
    )


@given(st.lists(good_items, min_size=1, max_size=12), spaces)
def test_plain_arrays_come_out_like_the_careful_way(
    items: list[Any], separators: tuple[str, str]
) -> None:
    plain = QUICK.parse(json.dumps(items, separators=separators).encode(), ARRAY)
    assert plain is not None
    assert same(plain, parse_items(items, LAYOUT, 100))


@given(good_items, spaces)
def test_a_plain_record_comes_out_like_the_careful_way(
    item: Any, separators: tuple[str, str]
) -> None:
    plain = QUICK.parse(b" " + json.dumps(item, separators=separators).encode() + b"\n", ONE)
    assert plain is not None
    assert same(plain, parse_items([item], LAYOUT, 100))


@given(st.lists(good_items, min_size=1, max_size=12))
def test_plain_lines_come_out_like_the_careful_way(items: list[Any]) -> None:
    lines = [json.dumps(item).encode() for item in items]
    plain = QUICK.parse(b"\n".join(lines), LINES)
    assert plain is not None
    assert same(plain, parse_lines(lines, LAYOUT, 100))


@given(good_items, st.integers(0, 400), st.integers(0, 255))
def test_one_changed_byte_is_never_read_as_something_else(item: Any, at: int, byte: int) -> None:
    body = bytearray(json.dumps(item).encode())
    body[at % len(body)] = byte
    plain = QUICK.parse(bytes(body), ONE)
    if plain is not None:
        data = orjson.loads(body)
        assert same(plain, parse_items([data], LAYOUT, 100))


@given(good_items, st.integers(0, 400))
def test_a_body_that_breaks_off_is_given_up(item: Any, at: int) -> None:
    body = json.dumps(item).encode()
    assert QUICK.parse(body[: at % len(body)], ONE) is None


@pytest.mark.parametrize(
    "text",
    [
        '{"source":"a","time":"2025-12-01T04:00:00Z","readings":{"flow":1,"valve":2}}',
        '{"source":"a","time":"2025-12-01T04:00:00Z","readings":{"pump":"creeping"}}',
        '{"source":"a","time":"2025-12-01T04:00:00Z","readings":{"flow":"1"}}',
        '{"source":"a","time":"2025-12-01T04:00:00Z","readings":{"flow":{"value":1}}}',
        '{"source":"a","time":"2025-12-01T04:00:00Z","readings":{"flow":1,}}',
        '{"source":"a","time":"2025-12-01T04:00:00Z","readings":{"flow":1}',
        '{"source":"a","time":"2025-12-01T04:00:00Z","readings":{"flow":1}} 1',
        '{"source":"a","time":"2025-12-01T04:00:00Z","readings":{"flow":1}},',
        '{"source":"a","time":"2025-12-01T04:00:00Z"}',
        '{"source":"a","time":"2025-12-01T04:00:00Z","readings":{},"tag":1}',
        '{"source":"a","source":"b","time":"2025-12-01T04:00:00Z","readings":{}}',
        '{"source":"","time":"2025-12-01T04:00:00Z","readings":{}}',
        '{"source":"\\u0061","time":"2025-12-01T04:00:00Z","readings":{}}',
        '{"source":"a\x7f","time":"2025-12-01T04:00:00Z","readings":{}}',
        '{"source":"mühle","time":"2025-12-01T04:00:00Z","readings":{}}',
        '{"source":"a","time":"2025-12-01T04:00:00","readings":{}}',
        '{"source":"a","time":null,"readings":{}}',
        "",
        "{}",
        "[]",
        "null",
    ],
)
def test_what_is_not_plain_is_left_to_the_careful_way(text: str) -> None:
    for form in (ONE, LINES):
        assert QUICK.parse(text.encode(), form) is None
    assert QUICK.parse(f"[{text}]".encode(), ARRAY) is None


def test_two_lines_that_only_together_are_json_are_not_joined() -> None:
    text = json.dumps(record())
    assert QUICK.parse((text[:10] + "\n" + text[10:]).encode(), LINES) is None


def test_more_sources_than_there_is_room_for_are_left_to_the_careful_way() -> None:
    items = [record(i, f"source-{i % 300}") for i in range(300)]
    assert QUICK.parse(json.dumps(items).encode(), ARRAY) is None
    batch, single = Parser(LAYOUT, n_batch_max=999, n_readings_max=9).body(
        json.dumps(items).encode()
    )
    assert not single
    assert len(set(batch.sources)) == 300


def test_names_beyond_ascii_are_found() -> None:
    layout = Layout(
        (FakeChannel("Lager °C"), FakeChannel("Zustand", kind="state", words=("läuft",)))
    )
    body = json.dumps(
        {**record(), "readings": {"Zustand": "läuft", "Lager °C": 61.5}}, ensure_ascii=False
    )
    plain = QuickParser(layout).parse(body.encode(), ONE)
    assert plain is not None
    assert plain[2].tolist() == [[61.5, 0.0]]


def test_both_ways_of_the_parser_give_the_same() -> None:
    items = [record(i, flow=0.1 * i) for i in range(20)]
    plain, _ = PARSER.body(json.dumps(items).encode())
    careful, _ = PARSER.body(json.dumps(items).replace("mill", "\\u006dill").encode())
    assert careful.sources == plain.sources
    assert careful.values.tobytes() == plain.values.tobytes()
    assert careful.positions == plain.positions


def text_number(text: str) -> tuple[float, int]:
    value, place = number(np.frombuffer(text.encode() + b" ", dtype=np.uint8), 0)
    return float(value), int(place)


# Halfway and next-to-halfway cases are where rounding goes wrong; 9007199254740993 lies
# exactly between two float64 (IEEE 754 binary64 has 53 bits).
@given(
    st.floats(allow_nan=False, allow_infinity=False).map(repr)
    | st.decimals(allow_nan=False, allow_infinity=False, places=9).map(str)
    | st.from_regex(r"-?(0|[1-9][0-9]{0,18})(\.[0-9]{1,18})?([eE][+-]?[0-9]{1,2})?", fullmatch=True)
)
@example("9007199254740993")
@example("9007199254740993.0")
@example("0.1")
@example("1e22")
@example("123456789012345678.5")
@example("4503599627370496.5")
@example("8.5e-1")
def test_a_number_is_the_nearest_float_or_left_alone(text: str) -> None:
    value, place = text_number(text)
    if place >= 0:
        assert place == len(text)
        assert value == float(text)
        assert math.copysign(1, value) == math.copysign(1, float(text))


def test_nearly_all_numbers_that_programs_write_are_read() -> None:
    draw = np.random.default_rng(5)
    texts = [repr(x) for x in draw.uniform(-1000, 1000, 20_000).tolist()]
    texts += [repr(x) for x in np.exp(draw.normal(0, 3, 20_000)).tolist()]
    left = [text for text in texts if text_number(text)[1] < 0]
    assert len(left) < 40, left[:10]


@pytest.mark.parametrize("text", ["01", "-", "1.", ".5", "+1", "1e", "1e+", "1e999", "0x1", "--1"])
def test_what_is_no_json_number_is_left_alone(text: str) -> None:
    place = text_number(text)[1]
    assert place < len(text)


@given(
    st.datetimes(datetime(1971, 1, 2), datetime(2261, 1, 1)),  # noqa: DTZ001 - zone added as text
    st.sampled_from(["Z", "+00:00", "-05:30", "+14:00"]),
    st.sampled_from(["", ".5", ".123456789", ".000"]),
)
def test_a_time_is_read_like_the_careful_way(moment: datetime, offset: str, part: str) -> None:
    text = moment.strftime("%Y-%m-%dT%H:%M:%S").rjust(19, "0") + part + offset
    cells = np.frombuffer(text.encode(), dtype=np.uint8)
    assert time_ns(cells, 0, len(text)) == parse_time(text)


@pytest.mark.parametrize(
    "text",
    ["2025-02-29T00:00:00Z", "2100-02-29T00:00:00Z", "2025-04-31T00:00:00Z",
     "2025-13-01T00:00:00Z", "2025-12-01T24:00:00Z", "2025-12-01T00:00:60Z",
     "2025-12-01T00:00:00", "2025-12-01 00:00:00Z", "2025-12-01T00:00:00.Z",
     "2025-12-01T00:00:00.1234567891Z", "2025-12-01T00:00:00+0100", "1970-01-01T00:00:00Z",
     "2025-12-01T00:00:00.5"],
)  # fmt: skip
def test_a_time_that_needs_care_is_left_alone(text: str) -> None:
    assert time_ns(np.frombuffer(text.encode(), dtype=np.uint8), 0, len(text)) == -1


def test_leap_days_are_read() -> None:
    for text in ("2024-02-29T23:59:59Z", "2000-02-29T00:00:00Z"):
        cells = np.frombuffer(text.encode(), dtype=np.uint8)
        assert time_ns(cells, 0, len(text)) == parse_time(text)
