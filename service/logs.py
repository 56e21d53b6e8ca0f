"""One structured line per event on standard error: JSON with a time, an event and facts.

No readings and no tokens go in; names of sources are cut.
"""

from __future__ import annotations

import sys
import time
from typing import TextIO

import orjson

from service.times import format_time

_MAX_TEXT_CHARS = 300


def log_event(
    event: str, *, stream: TextIO | None = None, **facts: str | int | float | None
) -> None:
    """Write one line; facts are plain values, texts are cut."""
    line: dict[str, object] = {"time": format_time(time.time_ns() // 1_000_000 * 1_000_000)}
    line["event"] = event
    for name, value in facts.items():
        line[name] = value[:_MAX_TEXT_CHARS] if isinstance(value, str) else value
    target = stream or sys.stderr
    # One write a line, so that lines of several threads do not mix.
    target.write(orjson.dumps(line).decode() + "\n")
    target.flush()
