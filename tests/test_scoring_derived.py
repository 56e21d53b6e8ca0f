"""Derived channels: the operations, gaps, and one record at a time against a batch."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from scoring.channels import ChannelTable, parse_channels
from scoring.derived import MAX_AGE_STEPS, Carry, derive, groups, looks_back
from tests.strategies import SOME

NAN = float("nan")
S = 1_000_000_000
ALL: list[dict[str, Any]] = [
    {"name": "head", "operation": "difference", "of": ["out", "in"]},
    {"name": "per in", "operation": "ratio", "of": ["out", "in"]},
    {"name": "before", "operation": "previous", "of": ["out"]},
    {"name": "change", "operation": "step", "of": ["in"]},
    {"name": "hour", "operation": "hour"},
]


def a_table(*derived: dict[str, Any], step_s: float | None = 10.0) -> ChannelTable:
    """Return a table of two measurements, a state and derived channels."""
    channels = [
        {"name": "in"},
        {"name": "out"},
        {"name": "pump", "kind": "state", "words": ["on", "off"]},
    ]
    return parse_channels({"step_s": step_s, "channel": channels, "derived": list(derived)}, "t")


def times(*seconds: float) -> NDArray[np.int64]:
    """Return times in ns."""
    return np.array([int(s * S) for s in seconds], dtype=np.int64)


VALUES = np.array([[2.0, 6.0, 0.0], [4.0, 5.0, 1.0], [NAN, 7.0, 1.0], [0.0, 8.0, NAN]])


def test_each_operation_gives_what_it_says() -> None:
    at = times(0, 10, 20, 3 * 3600 + 20)
    nodes, _ = derive(a_table(*ALL, step_s=None), at, VALUES, None)
    np.testing.assert_array_equal(nodes[:, :3], VALUES)
    np.testing.assert_array_equal(
        nodes[:, 3:],
        [
            [4.0, 3.0, NAN, NAN, 0.0],
            [1.0, 1.25, 6.0, 2.0, 0.0],
            [NAN, NAN, 5.0, NAN, 0.0],
            [8.0, NAN, 7.0, NAN, 3.0],
        ],
    )


def test_what_looks_back_is_missing_after_a_gap() -> None:
    longest = MAX_AGE_STEPS * 10
    nodes, _ = derive(
        a_table(*ALL), times(0, longest, 2 * longest + 0.001), VALUES[[0, 1, 1]], None
    )
    np.testing.assert_array_equal(nodes[:, 5], [NAN, 6.0, NAN])
    np.testing.assert_array_equal(nodes[:, 6], [NAN, 2.0, NAN])


def test_the_carry_of_the_last_record_is_used_and_handed_on() -> None:
    table = a_table(*ALL)
    carry = Carry(10 * S, np.array([1.0, 3.0, NAN]))
    nodes, after = derive(table, times(20), VALUES[:1], carry)
    assert nodes[0, 5:7].tolist() == [3.0, 1.0]
    assert after is not None
    assert after.time_ns == 20 * S
    np.testing.assert_array_equal(after.values, VALUES[0])


@SOME
@given(
    st.lists(st.integers(1, 40), min_size=1, max_size=12),
    st.integers(0, 2**31),
    st.data(),
)
def test_any_split_into_batches_gives_the_same_values(
    steps: list[int], seed: int, data: st.DataObject
) -> None:
    table = a_table(*ALL)
    at = np.cumsum(steps).astype(np.int64) * S
    rng = np.random.default_rng(seed)
    values = rng.integers(-2, 3, (len(at), 3)).astype(float)
    values[rng.random(values.shape) < 0.2] = NAN
    whole, last = derive(table, at, values, None)
    cuts = sorted(data.draw(st.sets(st.integers(0, len(at)))))
    parts, carry = [], None
    for first, end in zip([0, *cuts], [*cuts, len(at)], strict=True):
        part, carry = derive(table, at[first:end], values[first:end], carry)
        if end > first:
            parts.append(part)
    np.testing.assert_array_equal(np.concatenate(parts), whole)
    assert carry is not None
    assert last is not None
    assert carry.time_ns == last.time_ns
    np.testing.assert_array_equal(carry.values, last.values)


def test_nothing_is_carried_where_nothing_looks_back() -> None:
    table = a_table(ALL[0], ALL[4])
    assert not looks_back(table)
    nodes, carry = derive(table, times(0, 10), VALUES[:2], None)
    assert nodes.shape == (2, 5)
    assert carry is None


def test_a_table_without_derived_channels_is_left_alone() -> None:
    nodes, carry = derive(a_table(), times(0), VALUES[:1], None)
    np.testing.assert_array_equal(nodes, VALUES[:1])
    assert carry is None


@pytest.mark.parametrize("derived", [[], ALL])
def test_no_records_give_no_rows_of_every_node(derived: list[dict[str, Any]]) -> None:
    table = a_table(*derived)
    carry = Carry(10 * S, np.array([1.0, 3.0, NAN]))
    nodes, after = derive(table, times(), np.zeros((0, 3)), carry)
    assert nodes.shape == (0, len(table.nodes))
    assert after is carry


def test_each_instrument_falls_with_all_that_is_derived_from_it() -> None:
    starts, nodes = groups(a_table(*ALL))
    found = [nodes[a:b].tolist() for a, b in pairwise(starts.tolist())]
    assert found == [[3, 4, 6], [3, 4, 5], []]
