"""The parser: the quick way and the careful way agree, and every refusal says what is wrong."""

from __future__ import annotations

import json
import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.careful import load_json
from service.layout import Layout
from service.parse import Batch, parse_items, parse_lines
from service.problems import Problem
from tests.service_fakes import CHANNELS
from tests.service_http import START_S, record

LAYOUT = Layout(CHANNELS)

names = st.sampled_from(["flow", "power", "pump", "speed", "valve", "", "x" * 201, "a\nb"])
numbers = st.one_of(
    st.floats(allow_nan=False, allow_infinity=False), st.integers(), st.none(), st.booleans()
)
values = st.one_of(
    numbers,
    st.sampled_from(["running", "stopped", "creeping", "241,3", "y" * 201]),
    st.lists(st.integers(), max_size=2),
    st.fixed_dictionaries({"value": numbers}, optional={"quality": st.sampled_from(
        ["good", "uncertain", "bad", "fine", 3])}),
    st.dictionaries(st.text(max_size=3), st.integers(), max_size=2),
)  # fmt: skip
times = st.one_of(
    st.sampled_from(["2026-12-01T04:00:10Z", "2026-12-01T04:00:20Z", "2026-12-01T04:00:10.25Z",
                     "2026-12-01T05:00:10+01:00", "2026-12-01T04:00:10", "2026-02-30T00:00:00Z"]),
    st.text(max_size=25), st.integers(), st.none(),
)  # fmt: skip
sources = st.one_of(st.sampled_from(["mill-lane-1", "mill-lane-2"]), st.text(max_size=3), st.none())
items = st.one_of(
    st.fixed_dictionaries(
        {"source": sources, "time": times, "readings": st.dictionaries(names, values, max_size=5)}
    ),
    st.dictionaries(st.sampled_from(["source", "time", "readings", "tag"]), values, max_size=4),
    values,
)
good_items = st.builds(
    lambda minute, flow, pump: record(minute, flow=flow, pump=pump),
    st.integers(0, 500),
    st.one_of(st.none(), st.floats(-1e6, 1e6), st.integers(-5, 5)),
    st.sampled_from(["running", "stopped", None]),
)


def parse(*given_items: Any) -> Batch:
    return parse_items(list(given_items), LAYOUT, 2000)


def one_by_one(given_items: list[Any]) -> list[Any]:
    """Return what each item alone becomes: the slow twin of a whole batch."""
    found: list[Any] = []
    for item in given_items:
        batch = parse(item)
        if batch.problems:
            found.append(batch.problems[0].as_dict())
        else:
            found.append((batch.sources[0], int(batch.times_ns[0]), batch.values[0].tobytes(),
                          None if batch.bad is None else batch.bad[0].tolist(),
                          batch.unknown.get(0), batch.extra.get(0)))  # fmt: skip
    return found


@settings(max_examples=150, deadline=None)
@given(st.lists(st.one_of(good_items, items), max_size=30))
def test_a_batch_becomes_what_its_items_become_alone(given_items: list[Any]) -> None:
    batch = parse(*given_items)
    assert batch.n_items == len(given_items)
    found: list[Any] = [None] * len(given_items)
    for row, position in enumerate(batch.positions):
        bad = None if batch.bad is None else batch.bad[row].tolist()
        found[position] = (
            batch.sources[row], int(batch.times_ns[row]), batch.values[row].tobytes(),
            bad if bad and any(bad) else None, batch.unknown.get(row), batch.extra.get(row),
        )  # fmt: skip
    for position, problem in batch.problems.items():
        found[position] = problem.as_dict()
    assert found == one_by_one(given_items)


@settings(max_examples=100, deadline=None)
@given(st.binary(max_size=60) | st.text(max_size=60).map(str.encode))
def test_any_bytes_are_parsed_or_refused_with_a_problem(body: bytes) -> None:
    try:
        data = load_json(body)
    except Problem as problem:
        data = [problem.as_dict()]
    batch = parse_items(data if isinstance(data, list) else [data], LAYOUT, 2000)
    assert len(batch.positions) + len(batch.problems) == batch.n_items


def test_a_plain_record_becomes_a_row() -> None:
    batch = parse(record(flow=241, speed=None, pump="stopped"))
    assert batch.sources == ["mill-lane-2"]
    assert batch.times_ns.tolist() == [START_S * 10**9]
    assert batch.values[0, :3].tolist() == [241.0, 31.5, 1.0]
    assert math.isnan(batch.values[0, 3])


def test_an_absent_channel_is_missing_like_a_null() -> None:
    item = record()
    del item["readings"]["speed"]
    batch = parse(*[item] * 8)
    assert np.isnan(batch.values[:, 3]).all()
    assert not np.isnan(batch.values[:, :3]).any()


def test_a_word_never_seen_has_a_number_of_its_own_and_is_kept() -> None:
    batch = parse(record(pump="creeping"))
    assert batch.values[0, 2] == len(CHANNELS[2].words)
    assert batch.extra[0] == {"words": {"pump": "creeping"}}


def test_quality_is_kept_and_a_bad_reading_is_marked() -> None:
    batch = parse(
        record(flow={"value": 3.0, "quality": "bad"}, power={"value": 2.0, "quality": "uncertain"})
    )
    assert batch.bad is not None
    assert batch.bad[0].tolist() == [True, False, False, False]
    assert batch.values[0, :2].tolist() == [3.0, 2.0]
    assert batch.extra[0] == {"quality": {"flow": "bad", "power": "uncertain"}}


def test_an_unknown_channel_is_named_and_kept() -> None:
    batch = parse(record(valve=3), record(1))
    assert batch.unknown == {0: ["valve"]}
    assert batch.extra == {0: {"unknown": {"valve": 3.0}}}


def test_minus_zero_is_zero() -> None:
    assert parse(record(flow=-0.0)).values.tobytes() == parse(record(flow=0)).values.tobytes()


def refusal(item: Any) -> Problem:
    return parse(item).problems[0]


@pytest.mark.parametrize(
    ("item", "pointer", "message"),
    [
        (3, "", "a record is an object, not a number"),
        ([], "", "a record is an object, not a list"),
        ({"sorce": "a", "time": "", "readings": {}}, "/source", "no source; is 'sorce' meant"),
        ({**record(), "tag": 1}, "/tag", "'tag' is not a member of a record"),
        ({**record(), "source": ""}, "/source", "1 to 200 characters"),
        ({**record(), "source": "a\x00"}, "/source", "no control character"),
        ({**record(), "source": "a\n"}, "/source", "no control character"),
        ({**record(), "source": 4}, "/source", "source is a text, not a number"),
        ({**record(), "time": "2026-12-01T04:00:10"}, "/time", "has no offset from UTC"),
        ({**record(), "time": None}, "/time", "not null"),
        ({**record(), "readings": []}, "/readings", "an object of channels, not a list"),
        (record(flow="241,3"), "/readings/flow", "'flow' is a measurement in m3/h; .* not a text"),
        (record(flow=True), "/readings/flow", "not true or false"),
        (record(flow=1e200), "/readings/flow", "no instrument reads"),
        (record(pump=1), "/readings/pump", "'pump' is a state; .*'running', 'stopped'.*a number"),
        (record(pump="x" * 201), "/readings/pump", "a word of 201 characters"),
        (record(flow={"value": 1, "unit": "l"}), "/readings/flow", "members value and quality"),
        (record(flow={"quality": "good"}), "/readings/flow", "members value and quality"),
        (record(flow={"value": 1, "quality": "fine"}), "/readings/flow/quality", "good, uncertain"),
        (record(**{"a/b~": []}), "/readings/a~1b~0", "not a list"),
        (record(**{"x" * 300: 1}), "/readings/" + "x" * 200, "1 to 200 characters"),
    ],
)
def test_a_record_that_cannot_be_used_gets_place_and_reason(
    item: Any, pointer: str, message: str
) -> None:
    problem = refusal(item)
    assert problem.kind == "bad-record"
    assert problem.as_dict()["pointer"] == pointer
    with pytest.raises(Problem, match=message):
        raise problem


def test_more_readings_than_the_limit_are_refused() -> None:
    batch = parse_items([record(**{f"c{i}": 1 for i in range(9)})], LAYOUT, 10)
    with pytest.raises(Problem, match="readings has 13 channels; at most 10 are taken"):
        raise batch.problems[0]


@pytest.mark.parametrize("number", ["1e999", "-1e999", "NaN", "Infinity", "9" * 400])
def test_a_number_that_is_not_finite_harms_only_its_record(number: str) -> None:
    body = json.dumps([record(), record(1, flow=0.125)]).replace("0.125", number)
    batch = parse_items(load_json(body.encode()), LAYOUT, 2000)
    assert batch.positions == [0]
    assert batch.problems[1].as_dict()["pointer"] == "/readings/flow"


@pytest.mark.parametrize(
    ("body", "message"),
    [
        (b"", "the body is empty"),
        (b"  \n", "the body is empty"),
        (b"{", "not JSON at line 1, column 2"),
        (b"[1,\n2,", "line 2"),
        (b"\xff\xfe{\x00}\x00", "not JSON"),
        (b'{"a":"\xc3"}', "not JSON"),
        (b"[" * 5000, "not JSON"),
        (b"[1e999," + b"[" * 100_000, "not JSON"),
        (b'{"source":"\\ud800","x":1e999}', "not JSON"),
    ],
)
def test_a_body_that_is_not_json_is_refused_with_the_place(body: bytes, message: str) -> None:
    with pytest.raises(Problem, match=message) as caught:
        load_json(body)
    assert caught.value.status == 400


def test_a_broken_line_is_refused_in_its_place() -> None:
    lines = [json.dumps(record(i)).encode() for i in range(8)]
    lines[3] = lines[3][:-5]
    batch = parse_lines(lines, LAYOUT, 2000)
    assert batch.positions == [0, 1, 2, 4, 5, 6, 7]
    assert batch.problems[3].kind == "bad-json"


def test_two_lines_that_only_together_are_json_are_refused() -> None:
    text = json.dumps(record())
    batch = parse_lines([text[:10].encode(), text[10:].encode()], LAYOUT, 2000)
    assert sorted(batch.problems) == [0, 1]
