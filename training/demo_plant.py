"""What the demo watches: an invented utility's quiet history, and live days with incidents."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from training.judging import Judge
from training.known import Known
from training.plant.draw import IncidentRates
from training.plant.records import records_of
from training.plant.simulate import Chunk, PlantConfig, incidents_of, simulate

# Past on every clock: the service leaves the standing alone for records ahead of its own.
START: Final = datetime(2024, 6, 29, tzinfo=UTC)
STEP_S: Final = 60
N_STATIONS: Final = 6
HISTORY_DAYS: Final = 28
LIVE_DAYS: Final = 8
# Days without incidents after the history, for the drill.
DRILL_DAYS: Final = 4
INCIDENTS_PER_STATION_DAY: Final = 2.0
# Two hours after an incident's end its traces (temperatures, the reservoir's level) are
# gone, and the next begins later still.
RECOVERY_NS: Final = 2 * 3600 * 10**9
# Records of all stations for this long go in one request.
POST_HOURS: Final = 2

# One source's records: times (n,) and values (n, n_channels).
Records = tuple[NDArray[np.int64], NDArray[np.float64]]


@dataclass(frozen=True)
class Plant:
    """What was simulated: history without incidents, live days with them.

    history, live: chunks of a day of a station, in the order of time. incidents: in order
    of source and start.
    """

    history: tuple[Chunk, ...]
    live: tuple[Chunk, ...]
    incidents: tuple[Known, ...]

    @property
    def n_live(self) -> int:
        """How many records the live days have."""
        return sum(len(chunk.times_ns) for chunk in self.live)

    def judge(self) -> Judge:
        """Return who holds alerts of any method against these incidents."""
        spans = {s: (int(t[0]), int(t[-1])) for s, (t, _) in joined(self.live).items()}
        return Judge(self.incidents, RECOVERY_NS, spans, STEP_S * 10**9)

    def requests(self) -> Iterator[list[dict[str, Any]]]:
        """Yield the live days in the order of time, as much as goes in one request."""
        n = N_STATIONS * POST_HOURS * 3600 // STEP_S
        for first in range(0, len(self.live), N_STATIONS):
            records = list(records_of(self.live[first : first + N_STATIONS]))
            for start in range(0, len(records), n):
                yield records[start : start + n]


def plant_config(
    seed: int, history_days: int = HISTORY_DAYS, live_days: int = LIVE_DAYS
) -> PlantConfig:
    """Return what to simulate: quiet history, then days with incidents."""
    return PlantConfig(
        seed=seed,
        n_stations=N_STATIONS,
        start=START,
        days=history_days + live_days,
        step_s=STEP_S,
        rates=IncidentRates(per_station_day=INCIDENTS_PER_STATION_DAY),
        quiet_days=history_days,
    )


def simulate_plant(
    seed: int, history_days: int = HISTORY_DAYS, live_days: int = LIVE_DAYS
) -> Plant:
    """Return the utility's history and live days."""
    config = plant_config(seed, history_days, live_days)
    chunks = tuple(simulate(config, chunk_hours=24.0))
    border = history_days * N_STATIONS
    known = [
        Known(one.source, one.start_ns, one.end_ns, one.kind, one.size, one.channels)
        for one in incidents_of(config)
    ]
    known.sort(key=lambda one: (one.source, one.start_ns))
    return Plant(chunks[:border], chunks[border:], tuple(known))


def quiet_station(
    seed: int, history_days: int = HISTORY_DAYS, drill_days: int = DRILL_DAYS
) -> tuple[Chunk, ...]:
    """Return the first station's days after the history as they were without incidents."""
    config = plant_config(seed, history_days, drill_days)
    config = replace(config, n_stations=1, quiet_days=config.days)
    return tuple(simulate(config, chunk_hours=24.0))[history_days:]


def joined(chunks: Sequence[Chunk]) -> dict[str, Records]:
    """Return times and values of each source, all its chunks together."""
    found: dict[str, list[Chunk]] = {}
    for chunk in chunks:
        found.setdefault(chunk.source, []).append(chunk)
    return {
        source: (
            np.concatenate([chunk.times_ns for chunk in own]),
            np.concatenate([chunk.values for chunk in own]),
        )
        for source, own in found.items()
    }
