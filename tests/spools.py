"""Spools filled from arrays, for tests of learning."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scoring.channels import ChannelTable, parse_channels
from training.history.batch import HistoryBatch
from training.history.spool import Spool
from training.history.tally import Tally

Floats = NDArray[np.float64]

START_NS = 1_767_225_600_000_000_000  # 2026-01-01T00:00:00Z
NS_PER_S = 1_000_000_000


def times(n: int, step_s: float = 60.0, start_ns: int = START_NS) -> NDArray[np.int64]:
    """Return n times, step_s apart."""
    return np.asarray(start_ns + np.arange(n) * int(step_s * NS_PER_S), dtype=np.int64)


def spool_of(
    sources: Mapping[str, Floats], step_s: float = 60.0, folder: Path | None = None
) -> Spool:
    """Return a spool of sources' records, (n, n_instruments) each, from one start on."""
    n_values = next(iter(sources.values())).shape[1]
    spool, tally, names = Spool(n_values, folder), Tally(), tuple(sources)
    for code, values in enumerate(sources.values()):
        n = len(values)
        spool.add(
            HistoryBatch(
                Path("history.csv"),
                np.arange(2, n + 2),
                times(n, step_s),
                np.full(n, code, np.int32),
                names,
                np.asarray(values, dtype=np.float64),
                np.full(n, "", dtype=object),
            ),
            (),
            tally,
        )
    spool.finish(tally)
    return spool


def measurements(n: int, **more: Any) -> ChannelTable:
    """Return a table of n measurements c0, c1, ... a minute apart."""
    return parse_channels(
        {"step_s": 60.0, "channel": [{"name": f"c{k}"} for k in range(n)]} | more, "test"
    )


def states(*words: int, **more: Any) -> ChannelTable:
    """Return a table of states s0, s1, ... with that many words each."""
    return parse_channels(
        {
            "step_s": 60.0,
            "channel": [
                {"name": f"s{k}", "kind": "state", "words": [f"w{j}" for j in range(n)]}
                for k, n in enumerate(words)
            ],
        }
        | more,
        "test",
    )


def gaussian_tree(
    rng: np.random.Generator, n: int, edges: list[tuple[int, int]], correlation: float
) -> Floats:
    """Return n records of a Gaussian tree, every edge (parent, child) with one correlation."""
    n_channels = 1 + max(max(edge) for edge in edges)
    values = rng.normal(size=(n, n_channels))
    rest = np.sqrt(1 - correlation**2)
    for parent, child in edges:
        values[:, child] = correlation * values[:, parent] + rest * values[:, child]
    return values
