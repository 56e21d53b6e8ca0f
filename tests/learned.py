"""A small fleet learned once for all tests of its report."""

from __future__ import annotations

from functools import cache

import numpy as np

from scoring.channels import ChannelTable, parse_channels
from tests.spools import Floats, spool_of
from training.learn import LearnResult, history_lines, learn_model
from training.settings import LearnSettings

SPITEFUL = "<b>flow</b>"


def fleet_table() -> ChannelTable:
    """Return a pump's channels, one with a name that is markup, and one derived."""
    return parse_channels(
        {
            "step_s": 60.0,
            "channel": [
                {"name": "speed", "unit": "rpm", "resolution": 1.0},
                {"name": SPITEFUL, "unit": "m3/h", "resolution": 0.1},
                {"name": "head", "unit": "m"},
                {"name": "room", "unit": "degC"},
                {"name": "pump", "kind": "state", "words": ["running", "stopped"]},
            ],
            # One tree a source is enough here, and learned in half the time.
            "regime": [],
            "derived": [{"name": "room before", "operation": "previous", "of": ["room"]}],
        },
        "test",
    )


def pump_records(n: int, seed: int) -> Floats:
    """Return records of one pump that stops now and then, with one odd stretch."""
    rng = np.random.default_rng(seed)
    stopped = (np.arange(n) // 40 + seed) % 3 == 0
    speed = np.where(stopped, 0.0, 1400 + 60 * rng.normal(size=n))
    flow = np.where(stopped, 0.1 * rng.normal(size=n), speed / 7 + 2 * rng.normal(size=n))
    head = np.where(stopped, 3.0, 5 + (speed / 1000) ** 2) + 0.05 * rng.normal(size=n)
    room = 20 + np.cumsum(rng.normal(size=n)) / 20
    flow[n // 2 + 20 : n // 2 + 25] += 60
    flow[::50] = np.nan
    return np.column_stack([np.round(speed), np.round(flow, 1), head, room, stopped])


@cache
def small_fleet() -> tuple[LearnResult, tuple[str, ...], tuple[str, ...]]:
    """Return what was learned of two sources, all sources' names, and what was read."""
    records = {"east": pump_records(700, 1), "north": pump_records(500, 2)}
    with spool_of(records | {"west": pump_records(60, 3)}) as spool:
        result = learn_model(spool, fleet_table(), LearnSettings())
        return result, spool.sources, tuple(history_lines(spool))
