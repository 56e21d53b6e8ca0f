"""Derived channels: the same values offline and online, record by record.

`previous` and `step` look one record back. What they need of the last record is kept
as a `Carry`, so that a batch, single records and a restarted service agree. A last
record older than `MAX_AGE_STEPS` usual intervals is a gap and gives no value.
"""

from __future__ import annotations

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
    if not table.derived:
        return values, carry
    if not len(times_ns):
        return np.zeros((0, values.shape[1] + len(table.derived))), carry
    column = {c.name: i for i, c in enumerate(table.instruments)}
    before = _before(table, times_ns, values, carry) if looks_back(table) else values
    extra = np.empty((len(values), len(table.derived)))
    for k, d in enumerate(table.derived):
        inputs = [values[:, column[name]] for name in d.of]
        if d.operation == "difference":
            extra[:, k] = inputs[0] - inputs[1]
        elif d.operation == "ratio":
            zero = inputs[1] == 0
            extra[:, k] = np.where(zero, np.nan, inputs[0] / np.where(zero, 1.0, inputs[1]))
        elif d.operation == "hour":
            extra[:, k] = times_ns // NS_PER_HOUR % 24
        elif d.operation == "previous":
            extra[:, k] = before[:, column[d.of[0]]]
        else:
            extra[:, k] = inputs[0] - before[:, column[d.of[0]]]
    last = Carry(int(times_ns[-1]), values[-1].copy()) if looks_back(table) else None
    return np.hstack([values, extra]), last


def _before(
    table: ChannelTable, times_ns: NDArray[np.int64], values: Floats, carry: Carry | None
) -> Floats:
    """Return the instruments one record earlier, NaN across a gap."""
    first = carry.values if carry is not None else np.full(values.shape[1], np.nan)
    first_ns = carry.time_ns if carry is not None else times_ns[0]
    before = np.vstack([first[None, :], values[:-1]])
    age_ns = np.diff(times_ns, prepend=first_ns)
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
