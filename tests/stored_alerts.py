"""Alerts and actions put into a store by hand, as the service would keep them."""

from __future__ import annotations

import json
import sqlite3
from contextlib import closing
from pathlib import Path
from typing import Any

from training.stored import DATABASE_FILE


def put_alert(
    data: Path,
    source: str,
    since_ns: int,
    until_ns: int | None,
    label: str = "",
    kind: str = "scored",
    channel: str = "flow",
    model: str = "",
) -> None:
    """Add one alert to the SQLite store of a data folder."""
    told: dict[str, Any] = {"label": label, "channels": [channel], "notes": [], "model": model}
    told["suspects"] = [{"channel": channel}]
    row = (
        f"{source} {kind} {since_ns}", source, kind, "raised" if until_ns is None else "cleared",
        since_ns, since_ns, until_ns, json.dumps(told),
    )  # fmt: skip
    with closing(sqlite3.connect(data / DATABASE_FILE)) as connection, connection:
        connection.execute(
            "INSERT INTO alert (id, source, kind, state, since_ns, raised_ns, until_ns, data) "
            "VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
            row,
        )
