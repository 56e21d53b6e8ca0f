"""Alerts of the demo: those the service raised, and those that rivals would have raised."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import orjson
from numpy.typing import NDArray

from scoring.alert_settings import AlertSettings
from scoring.channels import ChannelTable, load_channels
from scoring.model import Levels
from training.calls import calls_by_pair, with_suspects
from training.demo_plant import Plant, joined
from training.history.options import HistoryOptions
from training.history.spool import spool_history
from training.history.times import parse_time
from training.judging import Call
from training.plant.channels import NAMES, PUMP_WORDS
from training.rival_streams import LIMITS, SPE, T2, fit_rivals
from training.served import Served

# More alerts than the demo can have, so that one page holds them all.
_ONE_PAGE = 1000


@dataclass(frozen=True, slots=True)
class Told:
    """An alert as the service tells it.

    cleared_ns: None while it stands. in_budget: scored, so that it counts. level: which
    one was passed. sentence: where to look and why. suspects: the likeliest first.
    """

    id: str
    source: str
    in_budget: bool
    level: str
    raised_ns: int
    cleared_ns: int | None
    n_over: int
    sentence: str
    suspects: tuple[str, ...]

    @classmethod
    def of(cls, item: Mapping[str, Any]) -> Told:
        """Return one item of the service's page of alerts."""
        cleared = item["cleared"]
        return cls(
            id=item["id"],
            source=item["source"],
            in_budget=item["in_budget"],
            level=item["level"],
            raised_ns=parse_time(item["raised"]),
            cleared_ns=None if cleared is None else parse_time(cleared),
            n_over=item["n_over"],
            sentence=item["sentence"],
            suspects=tuple(one["channel"] for one in item["suspects"]),
        )

    def call(self, end_ns: int) -> Call:
        """Return it as far as judging needs; end_ns: for one that still stands."""
        cleared_ns = end_ns if self.cleared_ns is None else self.cleared_ns
        at_first = next(iter(self.suspects), "")
        return Call(self.source, self.raised_ns, cleared_ns, at_first, self.suspects, self.level)


def post_live(served: Served, plant: Plant) -> Iterator[Told]:
    """Post the live days in the order of time; yield every alert once it is cleared.

    Those that still stand at the end come last.
    """
    told: set[str] = set()
    for records in plant.requests():
        served.post(records)
        ended = [one for one in alerts_of(served) if one.cleared_ns is not None]
        yield from (one for one in ended if one.id not in told)
        told |= {one.id for one in ended}
    yield from (one for one in alerts_of(served) if one.id not in told)


def alerts_of(served: Served) -> list[Told]:
    """Return all alerts of a service so far, in the order in which they were raised."""
    items = orjson.loads(served.get(f"/alerts?limit={_ONE_PAGE}"))["items"]
    return sorted(map(Told.of, items), key=lambda one: (one.raised_ns, one.source))


def rival_calls(
    plant: Plant, history: Path, channels: Path, levels: Levels, alerts_per_day: float, folder: Path
) -> dict[str, list[Call]]:
    """Return what operating limits, T2 and SPE would have raised on the live days, by method.

    history, channels: what ours was learned from. levels: ours, for the interval and the
    time constant; their own are set on the history, for the same budget, as ours are.
    folder: for their scores.
    """
    table, settings = load_channels(channels), AlertSettings()
    with spool_history([history], table, HistoryOptions()) as spool:
        wanted = (LIMITS, T2, SPE)
        rivals = fit_rivals(spool, levels, alerts_per_day, settings, folder, wanted)
    names = [channel.name for channel in table.instruments]
    found = {}
    for rival in rivals:
        for source, (times_ns, values) in joined(plant.live).items():
            rival.add(source, times_ns, in_order_of(table, values), folder)
        calls, _ = calls_by_pair(rival.streams, rival.pairs(levels), levels, settings)
        found[rival.name] = with_suspects(rival.streams, calls[rival.curve.chosen], names)
    return found


def in_order_of(table: ChannelTable, values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the plant's values, (n, N_CHANNELS), in a table's order of channels and words."""
    columns = [NAMES.index(channel.name) for channel in table.instruments]
    ordered = values[:, columns]
    for column, channel in enumerate(table.instruments):
        if channel.is_state:
            codes = np.array([channel.words.index(word) for word in PUMP_WORDS], dtype=np.float64)
            there = ~np.isnan(ordered[:, column])
            ordered[there, column] = codes[ordered[there, column].astype(np.int64)]
    return ordered
