"""A site that lives night after night: the invented plant, a real service, the nightly job.

Days are simulated and posted to a service that scores with the model in use and raises its
alerts; then the night comes, with the same store and models folder that a site would have.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np

from scoring.alerts import Alert
from scoring.artefact import read_model
from scoring.channels import ChannelTable
from scoring.model import Model
from service.scoring_engine import load_engine
from tests.service_http import Api, Clock, running
from tests.spools import Floats
from training.chosen import DAY_NS
from training.history.batch import HistoryBatch
from training.history.spool import Spool
from training.history.tally import Tally
from training.kept import KeptModels
from training.learn import learn_model
from training.nightly import Job, Outcome, run_night
from training.nightly_settings import NightlySettings
from training.online import Online
from training.plant.channels import NAMES, channel_table
from training.plant.demand import draw_weather
from training.plant.incidents import Incident, of_source
from training.plant.records import records_of
from training.plant.simulate import Chunk, PlantConfig, StationRun
from training.plant.utility import Physics, Station, build_stations
from training.settings import LearnSettings

# Three weeks before the height of summer: seasons stand nearly still.
START = datetime(2025, 6, 29, tzinfo=UTC)
HISTORY_DAYS = 28


def day_ns(day: float) -> int:
    """Return when a day of the simulation begins."""
    return round(START.timestamp()) * 10**9 + round(day * DAY_NS)


@dataclass
class Month:
    """One site. day: how many have been lived, the history among them.

    outcomes: of the nights, by day. live: the days' records after the history, by day.
    """

    folder: Path
    config: PlantConfig
    channels: Sequence[str]
    settings: NightlySettings
    day: int = 0
    outcomes: dict[int, Outcome] = field(default_factory=dict)
    live: dict[int, list[Chunk]] = field(default_factory=dict)
    told: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.stations = build_stations(self.config.seed, self.config.n_stations)
        self.runs = [self._run(self.config, station) for station in self.stations]
        self.clock = Clock(day_ns(0))
        self.models = KeptModels(self.settings.models.folder)
        full = channel_table(self.config.step_s)
        kept = tuple(c for c in full.channel if c.name in self.channels)
        self.table = ChannelTable(step_s=full.step_s, channel=kept)
        self._columns = [NAMES.index(channel.name) for channel in kept]
        self._api: Api | None = None

    def _run(self, config: PlantConfig, station: Station) -> StationRun:
        incidents = of_source(self.config.incidents or (), station.name)
        return StationRun(config, station, draw_weather(config.seed), incidents)

    @property
    def api(self) -> Api:
        """The running service."""
        assert self._api is not None, "call serving first"
        return self._api

    @property
    def in_use(self) -> Model:
        """The model in use."""
        current = self.models.current()
        assert current is not None
        return read_model(current.path)

    def rebuild(self, number: int, physics: Physics) -> None:
        """Change the plant of one station for good, from now on."""
        config = replace(self.config, start=START + timedelta(days=self.day))
        station = replace(self.stations[number], physics=physics)
        self.runs[number] = self._run(config, station)

    @contextmanager
    def serving(self) -> Iterator[Month]:
        """Learn from the history, start the service, and let it see the history too."""
        days = [self._simulate() for _ in range(HISTORY_DAYS)]
        with self._spool([chunk for day in days for chunk in day]) as spool:
            model = learn_model(spool, self.table, LearnSettings()).model
        self.models.publish(model, START + timedelta(days=self.day))
        current = {"path": self.models.folder / "current"}
        with running(
            self.folder, load=load_engine, clock_ns=self.clock, model=current,
            limits={"n_batch": 100_000, "body_mb": 256},
        ) as api:  # fmt: skip
            self._api = api
            for day, chunks in enumerate(days):
                self._post(chunks, day)
            yield self
            self._api = None

    def _simulate(self) -> list[Chunk]:
        chunks = [run.advance(self.config.steps_per_day) for run in self.runs]
        self.day += 1
        return chunks

    def _post(self, chunks: Iterable[Chunk], day: int) -> None:
        self.clock.now_ns = day_ns(day + 1)
        records = [self._few(record) for record in records_of(chunks)]
        answer = self.api.post(records)
        assert answer.status_code == 200, answer.text

    def _few(self, record: Mapping[str, Any]) -> dict[str, Any]:
        readings = {name: record["readings"][name] for name in self.channels}
        return {**record, "readings": readings}

    def _spool(self, chunks: Iterable[Chunk]) -> Spool:
        spool, tally = Spool(len(self._columns)), Tally()
        for chunk in chunks:
            n = len(chunk.times_ns)
            spool.add(
                HistoryBatch(
                    Path("plant"), np.arange(n), chunk.times_ns, np.zeros(n, np.int32),
                    (chunk.source,), self.values(chunk), np.full(n, "", dtype=object),
                ),
                (),
                tally,
            )  # fmt: skip
        spool.finish(tally)
        return spool

    def values(self, chunk: Chunk) -> Floats:
        """Return a chunk's readings of the channels that the site has."""
        return chunk.values[:, self._columns]

    def live_day(self) -> None:
        """Simulate a day and post it."""
        chunks = self._simulate()
        self.live[self.day - 1] = chunks
        self._post(chunks, self.day - 1)

    def night(self) -> Outcome:
        """Run the nightly job, and let the service look for a new model."""
        job = Job(self.settings, self.table, LearnSettings(), ())
        now = datetime.fromtimestamp(self.clock.now_ns / 1e9, UTC)
        outcome = run_night(job, lambda: now, self.told.append)
        self.outcomes[self.day] = outcome
        self.api.call(self.api.service.models.look())
        return outcome

    def days_and_nights(self, n_days: int, every: int = 1) -> list[Outcome]:
        """Live some days, a night after every so many and after the last."""
        found = []
        for k in range(1, n_days + 1):
            self.live_day()
            if k % every == 0 or k == n_days:
                found.append(self.night())
        return found

    def alerts(self, source: str, from_day: float) -> list[dict[str, Any]]:
        """Return what the service raised at a source from some day on, latest first."""
        start = datetime.fromtimestamp(day_ns(from_day) / 1e9, UTC).isoformat()
        page = self.api.get("/alerts", params={"source": source, "from": start, "limit": 500})
        return [one for one in page.json()["items"] if one["kind"] == "scored"]

    def label(self, label: str) -> None:
        """Label every scored alert of the live days that has no label yet, as a crew would."""
        for station in self.stations:
            for alert in self.alerts(station.name, HISTORY_DAYS):
                if not alert["label"]:
                    answer = self.api.post({"label": label}, f"/alerts/{alert['id']}/label")
                    assert answer.status_code == 200, answer.text

    def replayed(self, days: Iterable[int], source: str, model: Model | None = None) -> list[Alert]:
        """Return what a model, the one in use unless said, makes of some days of one source."""
        online = Online(model or self.in_use, self.folder)
        for day in days:
            for chunk in self.live[day]:
                if chunk.source == source:
                    online.add(source, chunk.times_ns, self.values(chunk))
        online.finish()
        return [alert for alert in online.alerts if alert.in_budget]

    def spool(self, days: Iterable[int]) -> Spool:
        """Return some lived days of all sources as history, to be closed."""
        return self._spool([chunk for day in days for chunk in self.live[day]])

    def last_report(self) -> dict[str, Any]:
        """Return the newest report's data."""
        paths = sorted(self.settings.report.folder.glob("*.json"))
        found: dict[str, Any] = json.loads(paths[-1].read_text(encoding="utf-8"))
        return found

    def story(self) -> list[str]:
        """Return a line for each night."""
        lines = []
        for day, outcome in self.outcomes.items():
            against = "; ".join(f"{a.name} {a.number}" for a in outcome.judgement.refusals)
            lines.append(f"night {day}: {outcome.verdict} {against}".rstrip())
        return lines


def a_month(
    folder: Path,
    channels: Sequence[str],
    *,
    seed: int,
    n_stations: int,
    step_s: int,
    incidents: Sequence[Incident] = (),
    **sections: Mapping[str, Any],
) -> Month:
    """Return a site in a folder; sections: settings of the nightly job beside the places."""
    config = PlantConfig(
        seed=seed, n_stations=n_stations, start=START, days=365, step_s=step_s,
        incidents=tuple(incidents),
    )  # fmt: skip
    places: dict[str, dict[str, Any]] = {
        "store": {"data": folder / "data"},
        "models": {"folder": folder / "models"},
        "report": {"folder": folder / "nightly"},
    }
    for name, keys in sections.items():
        places[name] = places.get(name, {}) | dict(keys)
    settings = NightlySettings.model_validate(places)
    return Month(folder, config, channels, settings)
