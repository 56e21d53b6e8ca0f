"""Small histories for tests, and short ways to read them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scoring.channels import ChannelTable, parse_channels
from tests.conftest import ROOT
from training.history.batch import HistoryBatch
from training.history.options import HistoryOptions
from training.history.reading import read_history
from training.history.tally import Tally
from training.history.times import NO_TIME

DATA = ROOT / "tests" / "data"

FLOW_PUMP = (
    {"name": "flow", "span": [0, 1000]},
    {"name": "pump", "kind": "state", "words": ["running", "stopped"]},
)


def a_table(*channels: dict[str, Any], **more: Any) -> ChannelTable:
    """Return a channel table; without channels, one of a flow and a pump."""
    return parse_channels({"channel": list(channels or FLOW_PUMP), **more}, "test")


def write(folder: Path, text: str | bytes, name: str = "history.csv") -> Path:
    """Write a history file and return its path."""
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def read(
    paths: Path | list[Path],
    table: ChannelTable | None = None,
    tally: Tally | None = None,
    **options: Any,
) -> list[HistoryBatch]:
    """Return all batches of a history."""
    return list(
        read_history(
            paths if isinstance(paths, list) else [paths],
            table or a_table(),
            HistoryOptions(**options),
            tally or Tally(),
        )
    )


def stamps(times_ns: NDArray[np.int64]) -> list[str]:
    """Return times as people write them, "" for a broken one."""
    texts = np.datetime_as_string(times_ns.astype("datetime64[ns]"), unit="s").tolist()
    return ["" if t == NO_TIME else s for t, s in zip(times_ns.tolist(), texts, strict=True)]


def rows(batches: list[HistoryBatch]) -> list[tuple[Any, ...]]:
    """Return (line, time, source, values, problem) of every row, NaN as None."""
    return [
        (line, time, source, [None if v != v else v for v in values], problem)
        for batch in batches
        for line, time, source, values, problem in zip(
            batch.lines.tolist(),
            stamps(batch.times_ns),
            batch.sources,
            batch.values.tolist(),
            batch.problem.tolist(),
            strict=True,
        )
    ]
