"""A site with a nightly job: its files, and records of two pumps as a service has stored them."""

from __future__ import annotations

import json
import math
import random
from pathlib import Path
from typing import Any

from tests.service_http import record

CHANNELS = """\
format = 1
step_s = 60
[[channel]]
name = "flow"
[[channel]]
name = "power"
[[channel]]
name = "speed"
"""
# The last 72 of the minutes are the judge's.
SETTINGS = """\
[history]
least_records = 100
least_hours = 3
join_alerts_h = 0.0
[judge]
days = 0.05
least_hours = 1
block_h = 0.25
drill_trials = 0
[report]
metrics = "night.prom"
"""
N_RECORDS, N_HELD = 500, 72
SOURCES = ("mill-lane", "quarry-rise")


def some_records(source: str, seed: int, until: int = 0) -> list[dict[str, Any]]:
    """Return records of a pump whose flow and power follow its speed, up to a minute."""
    rng = random.Random(seed)
    found = []
    for minute in range(until - N_RECORDS, until):
        speed = 1300 + 120 * math.sin(minute / 40) + rng.gauss(0, 5)
        flow, power = speed / 6 + rng.gauss(0, 1), (speed / 1300) ** 3 * 30 + rng.gauss(0, 0.2)
        readings = {"flow": round(flow, 1), "power": round(power, 2), "speed": round(speed)}
        found.append(record(minute, source, **readings))
    return found


def write_site(folder: Path) -> None:
    """Write the site's channel table and settings."""
    (folder / "channels.toml").write_text(CHANNELS, encoding="utf-8")
    (folder / "nightly.toml").write_text(SETTINGS, encoding="utf-8")


def last_night() -> dict[str, Any]:
    """Return the newest report's data."""
    found: dict[str, Any] = json.loads(sorted(Path("nightly").glob("*.json"))[-1].read_text())
    return found
