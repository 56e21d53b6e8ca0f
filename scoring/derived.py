"""Derived channels: the same values offline and online, record by record.

`previous` and `step` look one record back. What they need of the last record is kept
as a `Carry`, so that a batch, single records and a restarted service agree. A last
record older than `MAX_AGE_STEPS` usual intervals is a gap and gives no value.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scoring.channels import ChannelTable

Floats = NDArray[np.float64]

# Two records further apart than this many usual intervals do not speak of one change.
MAX_AGE_STEPS = 2.5

NS_PER_S = 1_000_000_000
NS_PER_HOUR = 3600 * NS_PER_S


@dataclass(frozen=True, slots=True)
class Carry:
    """The last record's instruments, for what looks back: time in ns, (n_instruments,)."""

    time_ns: int
    values: Floats


def looks_back(table: ChannelTable) -> bool:
    """True if some derived channel needs the record before."""
    return any(d.operation in ("previous", "step") for d in table.derived)


def derive(
    table: ChannelTable, times_ns: NDArray[np.int64], values: Floats, carry: Carry | None
) -> tuple[Floats, Carry | None]:
    """Return readings with the derived channels' columns added, and the new carry.

    times_ns: (n,) rising. values: (n, n_instruments), NaN = missing.
    Returns (n, n_nodes); a derived value is NaN where an input is.
    """
    if not len(times_ns):
        return np.zeros((0, values.shape[1] + len(table.derived))), carry
    start = np.array([0, len(times_ns)])
    nodes, carries = derive_runs(table, start, times_ns, values, [carry])
    return nodes, carries[0]


def derive_runs(
    table: ChannelTable,
    start: NDArray[np.int64],
    times_ns: NDArray[np.int64],
    values: Floats,
    carries: Sequence[Carry | None],
) -> tuple[Floats, list[Carry | None]]:
    """Do what `derive` does for the records of several sources, one after the other.

    start: (n_runs + 1,) where each source's records begin; none is empty. carries: (n_runs,).
    """
    if not table.derived:
        return values, list(carries)
    column = {c.name: i for i, c in enumerate(table.instruments)}
    last: list[Carry | None] = [None] * len(carries)
    before = values
    if looks_back(table):
        before = _before(table, start, times_ns, values, carries)
        ends = start[1:] - 1
        last = [
            Carry(time_ns, row)
            for time_ns, row in zip(times_ns[ends].tolist(), values[ends], strict=True)
        ]
    n, n_instruments = values.shape
    nodes = np.empty((n, n_instruments + len(table.derived)))
    nodes[:, :n_instruments] = values
    for k, d in enumerate(table.derived, n_instruments):
        inputs = [values[:, column[name]] for name in d.of]
        if d.operation == "difference":
            nodes[:, k] = inputs[0] - inputs[1]
        elif d.operation == "ratio":
            zero = inputs[1] == 0
            nodes[:, k] = np.where(zero, np.nan, inputs[0] / np.where(zero, 1.0, inputs[1]))
        elif d.operation == "hour":
            nodes[:, k] = times_ns // NS_PER_HOUR % 24
        elif d.operation == "previous":
            nodes[:, k] = before[:, column[d.of[0]]]
        else:
            nodes[:, k] = inputs[0] - before[:, column[d.of[0]]]
    return nodes, last


def _before(
    table: ChannelTable,
    start: NDArray[np.int64],
    times_ns: NDArray[np.int64],
    values: Floats,
    carries: Sequence[Carry | None],
) -> Floats:
    """Return the instruments one record earlier, NaN across a gap."""
    before, age_ns = np.empty(values.shape), np.empty(len(times_ns), dtype=np.int64)
    before[1:], age_ns[1:] = values[:-1], np.diff(times_ns)
    for first, carry in zip(start[:-1].tolist(), carries, strict=True):
        if carry is None:
            age_ns[first] = 0
        else:
            before[first], age_ns[first] = carry.values, times_ns[first] - carry.time_ns
    longest_ns = MAX_AGE_STEPS * (table.step_s or np.inf) * NS_PER_S
    before[(age_ns > longest_ns) | (age_ns <= 0)] = np.nan
    return before


def groups(table: ChannelTable) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return which nodes fall with each instrument: (n_instruments + 1,) starts, nodes.

    A channel is judged by removal together with everything derived from it.
    """
    n_instruments = len(table.instruments)
    starts, nodes = [0], []
    for instrument in table.instruments:
        for k, d in enumerate(table.derived):
            if instrument.name in d.of:
                nodes.append(n_instruments + k)
        starts.append(len(nodes))
    return np.array(starts, dtype=np.int64), np.array(nodes, dtype=np.int64)
