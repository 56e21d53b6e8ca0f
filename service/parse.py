"""From bytes to arrays: the body of POST /records.

A plain body takes the compiled way of `quick`. Any other is read by orjson, and its plain
items go column by column into arrays. Whatever is left goes item by item through
`careful`, which says exactly what is wrong, so that one bad item harms no other and the
quick ways need no messages of their own.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from itertools import chain
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.careful import MAX_ABS_READING, Item, ItemReader, is_name, load_json
from service.layout import Layout
from service.problems import Problem
from service.quick import ARRAY, LINES, ONE, QuickParser
from service.times import parse_time, parse_times

# Below this many times their columns cost more to set up than they save.
_FEW_TIMES = 16
_PLAIN = {float, int, type(None)}


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


class Parser:
    """Reads bodies for one model's layout.

    n_batch_max: records in one array; n_readings_max: readings in one record.
    """

    def __init__(self, layout: Layout, *, n_batch_max: int, n_readings_max: int) -> None:
        self.layout = layout
        self.n_batch_max, self.n_readings_max = n_batch_max, n_readings_max
        self._quick = QuickParser(layout)

    def body(self, body: bytes) -> tuple[Batch, bool]:
        """Return the batch that a body holds, and whether it is a single record.

        Raises Problem where the whole body cannot be used.
        """
        start = body.lstrip(b" \t\r\n")[:1] if body[:1] not in (b"{", b"[") else body[:1]
        single = start == b"{"
        plain = self._quick.parse(body, ONE if single else ARRAY)
        if plain is not None:
            self._check_length(len(plain[0]))
            return self._batch(*plain), single
        data = load_json(body)
        if not isinstance(data, dict | list):
            raise Problem("bad-record", "the body is one record (an object) or an array of records")
        items = [data] if isinstance(data, dict) else data
        self._check_length(len(items))
        return parse_items(items, self.layout, self.n_readings_max), isinstance(data, dict)

    def lines(self, lines: Sequence[bytes]) -> Batch:
        """Return the batch that NDJSON lines hold; never raises for a line."""
        plain = self._quick.parse(b"\n".join(lines), LINES)
        if plain is not None and len(plain[0]) == len(lines):
            return self._batch(*plain)
        return parse_lines(lines, self.layout, self.n_readings_max)

    def _batch(
        self, sources: list[str], times_ns: NDArray[np.int64], values: NDArray[np.float64]
    ) -> Batch:
        n = len(sources)
        return Batch(self.layout, n, list(range(n)), sources, times_ns, values)

    def _check_length(self, n_items: int) -> None:
        if n_items > self.n_batch_max:
            raise Problem(
                "too-large",
                f"the array has {n_items} records; at most {self.n_batch_max} are taken "
                "(limits.n_batch); send several arrays, or stream them as application/x-ndjson",
            )


def parse_items(items: Sequence[Any], layout: Layout, n_readings_max: int) -> Batch:
    """Return the batch that a sequence of parsed items holds; never raises for an item."""
    reader = ItemReader(layout, n_readings_max)
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
    if not all(is_name(source) for source in set(sources)):
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


def _from_items(reader: ItemReader, items: Sequence[Any], positions: Iterable[int]) -> Batch:
    read: list[Item] = []
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
