"""The plant as a stream: day-sized chunks of records, station by station.

`simulate` holds one chunk and one day's random numbers per station and nothing else, so
that a year of sixty stations needs no more memory than a day. Random numbers belong to
station and day, never to the chunk: any chunk length gives the same bytes.
Seeds below 1000 are for development; seeds from 9000 up are for published figures only.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from typing import Final

import numpy as np
from numpy.typing import NDArray

from training.plant import columns as col
from training.plant.asked import ask
from training.plant.channels import N_CHANNELS
from training.plant.demand import Weather, draw_weather
from training.plant.draw import IncidentRates, draw_incidents
from training.plant.faults import FaultSet, draw_noise
from training.plant.incidents import Incident, of_source
from training.plant.instruments import InstrumentSet, draw_silences, report
from training.plant.station import autoregress, initial_state, run_station
from training.plant.utility import SEED_DAY, BadPlant, Station, build_stations, station_name

_NS: Final = 1_000_000_000
_DAY_S: Final = 86400
# The day before the first record, run and thrown away: nothing starts cold.
_WARM_UP_DAYS: Final = 1


@dataclass(frozen=True, slots=True)
class PlantConfig:
    """What to simulate.

    start: time of the first record, with an offset; as shipped three weeks before the
        height of summer, when demand stands still and both pumps are often needed.
    step_s: a divisor of a day, in s.
    incidents: a list of one's own, used instead of drawing; None draws by `rates`.
    quiet_days: whole days from the start in which no incident is drawn.
    silences: False gives every reading of every record.
    """

    seed: int = 1
    n_stations: int = 6
    start: datetime = datetime(2026, 6, 29, tzinfo=UTC)
    days: int = 28
    step_s: int = 10
    rates: IncidentRates = field(default_factory=IncidentRates)
    incidents: tuple[Incident, ...] | None = None
    quiet_days: int = 0
    silences: bool = True

    def __post_init__(self) -> None:
        if self.seed < 0:
            raise BadPlant(f"seed = {self.seed} must not be negative")
        if self.step_s < 1 or _DAY_S % self.step_s or self.step_s > 3600:
            raise BadPlant(f"step_s = {self.step_s} must divide a day and lie in 1 to 3600")
        if self.days < 1 or self.quiet_days < 0:
            raise BadPlant(f"days = {self.days} and quiet_days = {self.quiet_days} are too few")
        if self.start.tzinfo is None:
            raise BadPlant(f"start = {self.start.isoformat()} needs an offset, for example +00:00")
        if not 1970 <= self.start.year < 2200:
            raise BadPlant(f"start = {self.start.isoformat()} is outside the years 1970 to 2199")
        known = {station_name(n) for n in range(self.n_stations)}
        for incident in self.incidents or ():
            if incident.source not in known:
                raise BadPlant(f"an incident names {incident.source!r}, which is not simulated")

    @property
    def origin_ns(self) -> int:
        """Time of the first record in UTC nanoseconds since 1970."""
        since = self.start - datetime(1970, 1, 1, tzinfo=UTC)
        return since // timedelta(microseconds=1) * 1000

    @property
    def steps_per_day(self) -> int:
        """Grid points a day; a silent line leaves some of them without a record."""
        return _DAY_S // self.step_s


@dataclass(frozen=True, slots=True)
class Chunk:
    """Consecutive records of one source.

    times_ns: (n,) UTC nanoseconds since 1970, rising. values: (n, n_channels) in the
    order of INSTRUMENTS, NaN for a missing reading, states as the index of their word.
    """

    source: str
    times_ns: NDArray[np.int64]
    values: NDArray[np.float64]


def simulate(config: PlantConfig, *, chunk_hours: float = 24.0) -> Iterator[Chunk]:
    """Yield the records: for each stretch of `chunk_hours`, one chunk for each station.

    A station's line may be silent, so a chunk may hold fewer records than the stretch has
    grid points, even none.
    """
    chunk_steps = max(1, math.floor(chunk_hours * 3600 / config.step_s))
    runs = start_runs(config)
    n_steps = config.days * config.steps_per_day
    for first in range(0, n_steps, chunk_steps):
        for run in runs:
            yield run.advance(min(chunk_steps, n_steps - first))


def incidents_of(config: PlantConfig) -> tuple[Incident, ...]:
    """Return the incidents that `simulate` puts in, by station and time."""
    if config.incidents is not None:
        return config.incidents
    drawn: list[Incident] = []
    days = range(config.quiet_days, config.days)
    for station in build_stations(config.seed, config.n_stations):
        drawn += draw_incidents(config.rates, config.seed, station, config.origin_ns, days)
    return tuple(drawn)


def start_runs(config: PlantConfig) -> tuple[StationRun, ...]:
    """Return every station warmed up and about to give its first record."""
    weather, incidents = draw_weather(config.seed), incidents_of(config)
    return tuple(
        StationRun(config, station, weather, of_source(incidents, station.name))
        for station in build_stations(config.seed, config.n_stations)
    )


class _Day:
    """One day's random numbers of one station, drawn whole whatever part is asked for."""

    def __init__(self, config: PlantConfig, station: Station, day: int) -> None:
        self.number, self._config, self._station = day, config, station
        n = config.steps_per_day
        rng = self._generator(0)
        self.wander = rng.standard_normal((n, col.N_WANDERS))
        self.noise = rng.standard_normal((n, N_CHANNELS))
        self.missing, self.silent = draw_silences(rng, n, config.step_s)
        self._extra: dict[int, NDArray[np.float64]] = {}

    def _generator(self, branch: int) -> np.random.Generator:
        key = (SEED_DAY, self._station.number, self.number, branch)
        return np.random.default_rng(np.random.SeedSequence(self._config.seed, spawn_key=key))

    def extra_noise(self, channel: int) -> NDArray[np.float64]:
        """Return standard normals, (steps_per_day,), for a noisy instrument."""
        if channel not in self._extra:
            self._extra[channel] = draw_noise(
                self._config.seed,
                self._station.number,
                self.number,
                channel,
                self._config.steps_per_day,
            )
        return self._extra[channel]


class StationRun:
    """One station on its way through time; `advance` gives the next records."""

    def __init__(
        self,
        config: PlantConfig,
        station: Station,
        weather: Weather,
        incidents: tuple[Incident, ...],
    ) -> None:
        self._config, self._weather, self.station = config, weather, station
        self._faults = FaultSet(station.physics, incidents)
        taus = np.array([tau_s for tau_s, _ in col.WANDERS])
        self._keep = np.exp(-config.step_s / taus)
        self._wander_spread = np.array([spread for _, spread in col.WANDERS])
        self._wander_state = np.zeros(col.N_WANDERS)
        self._state = initial_state(station.physics)
        self._step = -_WARM_UP_DAYS * config.steps_per_day
        self._day = _Day(config, station, 0)
        warm_up = self._truth(self._times_ns(config.steps_per_day), slice(0, config.steps_per_day))
        self._instruments = InstrumentSet(station, config.step_s, warm_up[-1])
        self._step = 0

    def advance(self, n_steps: int) -> Chunk:
        """Return the records of the next n_steps grid points."""
        parts = []
        while n_steps > 0:
            done = self._step % self._config.steps_per_day
            take = min(n_steps, self._config.steps_per_day - done)
            parts.append(self._within_day(slice(done, done + take)))
            n_steps -= take
        times_ns = np.concatenate([times for times, _ in parts])
        return Chunk(self.station.name, times_ns, np.concatenate([rows for _, rows in parts]))

    def _within_day(self, rows: slice) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        day = self._step // self._config.steps_per_day + _WARM_UP_DAYS
        if day != self._day.number:
            self._day = _Day(self._config, self.station, day)
        times_ns = self._times_ns(rows.stop - rows.start)
        truth = self._truth(times_ns, rows)
        readings = self._instruments.read(truth, self._day.noise[rows])
        noisy = self._faults.noisy(times_ns)
        extra = {channel: self._day.extra_noise(channel)[rows] for channel in noisy}
        self._faults.disturb(readings, times_ns, extra)
        report(readings)
        self._step += len(times_ns)
        if not self._config.silences:
            return times_ns, readings
        readings[self._day.missing[rows]] = np.nan
        heard = ~self._day.silent[rows]
        return times_ns[heard], readings[heard]

    def _times_ns(self, n: int) -> NDArray[np.int64]:
        steps = np.arange(self._step, self._step + n, dtype=np.int64)
        return self._config.origin_ns + steps * self._config.step_s * _NS

    def _truth(self, times_ns: NDArray[np.int64], rows: slice) -> NDArray[np.float64]:
        """Move the station on and return its true values, (n, n_channels)."""
        config = self._config
        asked = ask(self.station, self._weather, config.origin_ns / _NS, times_ns / _NS)
        wander = self._day.wander[rows].copy()
        autoregress(wander, self._keep, self._wander_spread, self._wander_state)
        truth = np.empty((len(times_ns), N_CHANNELS))
        faults = self._faults.severities(times_ns)
        physics = self.station.physics
        run_station(physics, float(config.step_s), asked, wander, faults, self._state, truth)
        return truth
