"""`oddbranch demo`: the whole job on an invented water utility, with known incidents.

History is simulated, surveyed and learned by the very commands a site runs; a service is
started as a second process; live days with incidents are posted to it over HTTP; every
stretch over a level is told with the truth beside it. Limits and PCA stand beside ours.
"""

from __future__ import annotations

import contextlib
import signal
import sys
import tempfile
import time
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, NoReturn

import click
import numpy as np

from training.demo_text import (
    OURS,
    Judged,
    incident_table,
    method_table,
    stretch_lines,
    where_others_win,
)
from training.history.times import parse_time
from training.judging import Call, Judge
from training.known import Known
from training.learn import learn_command
from training.plant.channels import INSTRUMENTS, NAMES
from training.plant.draw import IncidentRates
from training.plant.incidents import Incident
from training.plant.records import records_of
from training.plant.simulate import Chunk, PlantConfig, incidents_of, simulate
from training.plant.utility import UTILITY
from training.plant.writers import write_incidents, write_wide_csv
from training.report.page import ADVICE
from training.rivals import Records, Rule, fit_rivals
from training.served import Served, serve
from training.settings import LearnSettings
from training.stretches import OverLevel, Stretch, Stretches
from training.survey import survey_command

# Figures are published with seeds from 9000 up, which nobody looks at while tuning.
FIGURE_SEED = 9001
# Past on every clock: the service leaves the standing alone for records ahead of its own.
START = datetime(2024, 6, 29, tzinfo=UTC)
STEP_S = 60
N_STATIONS = 6
HISTORY_DAYS = 28
LIVE_DAYS = 8
INCIDENTS_PER_STATION_DAY = 2.0
# Records of all stations for this long go in one request.
POST_HOURS = 2
# Half an hour under the level ends a stretch; two hours after an incident's end its traces
# (temperatures, the reservoir's level) are gone, and the next begins later still.
GAP_NS = 30 * 60 * 10**9
RECOVERY_NS = 2 * 3600 * 10**9


@dataclass(frozen=True)
class Plant:
    """What was simulated: history without incidents, live days with them.

    history, live: chunks of a day of a station, in the order of time.
    """

    history: tuple[Chunk, ...]
    live: tuple[Chunk, ...]
    incidents: tuple[Incident, ...]


def plant_config(seed: int, history_days: int, live_days: int) -> PlantConfig:
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


def simulate_plant(seed: int, history_days: int, live_days: int) -> Plant:
    """Return the utility's history and live days."""
    config = plant_config(seed, history_days, live_days)
    chunks = tuple(simulate(config, chunk_hours=24.0))
    border = history_days * N_STATIONS
    return Plant(chunks[:border], chunks[border:], incidents_of(config))


def add_data_sheets(path: Path) -> None:
    """Write unit and span of every instrument into a proposed channel table, as a site does."""
    by_name = {f'name = "{i.name}"': i for i in INSTRUMENTS if not i.is_state}
    lines = []
    for line in path.read_text(encoding="utf-8").splitlines():
        lines.append(line)
        instrument = by_name.get(line)
        if instrument is not None:
            low, high = instrument.span
            lines += [f'unit = "{instrument.unit}"', f"span = [{low:g}, {high:g}]"]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def over_level_of(answer: Mapping[str, Any]) -> OverLevel | None:
    """Return an answer of the service as a record over a level; None for one under."""
    if answer["alert"] is None:
        return None
    time_ns = parse_time(answer["time"])
    suspect = answer["suspect"]
    if suspect is None:
        return OverLevel(answer["source"], time_ns, answer["alert"])
    expected, reading = suspect["expected"], suspect["reading"]
    common = (answer["source"], time_ns, answer["alert"], suspect["channel"])
    weight = float(suspect["surprise"] or 0.0)
    if "words" in expected:
        likely = max(expected["words"], key=lambda word: float(expected["words"][word]), default="")
        return OverLevel(*common, weight, word=str(reading), word_expected=likely)
    low = -np.inf if expected["low"] is None else float(expected["low"])
    high = np.inf if expected["high"] is None else float(expected["high"])
    return OverLevel(*common, weight, np.nan if reading is None else float(reading), low, high)


def post_live(served: Served, plant: Plant) -> Iterator[Stretch]:
    """Post the live days in the order of time; yield every stretch when it has ended."""
    stretches = Stretches(GAP_NS)
    for records in _requests(plant.live):
        for answer in served.post(records):
            over = over_level_of(answer)
            if over is not None:
                stretches.add(over)
        yield from stretches.close(parse_time(records[-1]["time"]))
    yield from stretches.close()


def _requests(chunks: Sequence[Chunk]) -> Iterator[list[dict[str, Any]]]:
    """Yield what goes in one request: POST_HOURS of all stations."""
    n = N_STATIONS * POST_HOURS * 3600 // STEP_S
    for first in range(0, len(chunks), N_STATIONS):
        records = list(records_of(chunks[first : first + N_STATIONS]))
        for start in range(0, len(records), n):
            yield records[start : start + n]


def joined(chunks: Sequence[Chunk]) -> dict[str, Records]:
    """Return times and values of each source, all its chunks together."""
    found: dict[str, list[Chunk]] = {}
    for chunk in chunks:
        found.setdefault(chunk.source, []).append(chunk)
    return {
        source: (
            np.concatenate([c.times_ns for c in own]),
            np.concatenate([c.values for c in own]),
        )
        for source, own in found.items()
    }


def rival_stretches(plant: Plant, settings: LearnSettings) -> dict[str, list[Stretch]]:
    """Return the live stretches of operating limits, T2 and SPE, by method."""
    rule = Rule(
        alerts_per_day=settings.budget.alerts_per_day,
        tau_s=settings.sustained.time_constant_steps * STEP_S,
        step_s=STEP_S,
        gap_ns=GAP_NS,
    )
    found = {}
    for rival in fit_rivals(joined(plant.history), rule):
        stretches = Stretches(GAP_NS)
        for source, records in joined(plant.live).items():
            for over in rival.over_level(source, records, NAMES):
                stretches.add(over)
        found[rival.name] = stretches.close()
    return found


def judge_all(plant: Plant, found: Mapping[str, Sequence[Stretch]]) -> dict[str, Judged]:
    """Return every method's verdict on the live days."""
    spans = {
        source: (int(times_ns[0]), int(times_ns[-1]))
        for source, (times_ns, _) in joined(plant.live).items()
    }
    judge = Judge(known_of(plant.incidents), RECOVERY_NS, spans, STEP_S * 10**9)
    judged = {}
    for name, stretches in found.items():
        verdict = judge.verdict(call_of(stretch) for stretch in stretches)
        over = (Call(o.source, o.time_ns, o.time_ns) for s in stretches for o in s.over)
        n_quiet = verdict.quiet_days * 86_400 / STEP_S
        judged[name] = Judged(verdict, len(judge.verdict(over).false) / n_quiet)
    return judged


def known_of(incidents: Iterable[Incident]) -> tuple[Known, ...]:
    """Return incidents as a site would know them, in order of source and start."""
    found = [Known(i.source, i.start_ns, i.end_ns, i.kind, i.size, i.channels) for i in incidents]
    return tuple(sorted(found, key=lambda one: (one.source, one.start_ns)))


def call_of(stretch: Stretch) -> Call:
    """Return a stretch as far as judging it needs."""
    return Call(
        stretch.source,
        stretch.start_ns,
        stretch.end_ns,
        stretch.over[0].suspect,
        stretch.suspects,
        stretch.kind,
    )


def truth_of(stretch: Stretch, incidents: Iterable[Incident]) -> Incident | None:
    """Return the first incident that a stretch touches, its recovery included."""
    touched = (
        incident
        for incident in incidents
        if incident.source == stretch.source
        and stretch.end_ns >= incident.start_ns
        and stretch.start_ns < incident.end_ns + RECOVERY_NS
    )
    return min(touched, key=lambda incident: incident.start_ns, default=None)


@click.command("demo")
@click.option("--once", is_flag=True, help="End by itself; otherwise it keeps serving.")
@click.option("--seed", default=FIGURE_SEED, show_default=True, help="Which plant to invent.")
@click.option(
    "--folder",
    type=click.Path(file_okay=False, path_type=Path),
    help="Where to put what it makes, and to keep it; otherwise a folder that goes at the end.",
)
def demo_command(once: bool, seed: int, folder: Path | None) -> None:
    """Learn and watch an invented water utility whose incidents are known."""
    began_s = time.perf_counter()
    with _ended_by_signal(), _working_in(folder) as place:
        plant = _make_history(seed, place)
        _run("survey", survey_command, "history.csv", "--out", "channels.toml")
        add_data_sheets(Path("channels.toml"))
        click.echo("units and spans added from the instruments' data sheets\n")
        words = ("history.csv", "--channels", "channels.toml", "--out", "model")
        _run("learn", learn_command, *words)
        click.echo("\n$ oddbranch serve --model model --data data --port 0")
        with serve(place, ("--model", "model", "--data", "data")) as served:
            click.echo(f"serving on {served.url} in process {served.process.pid}\n")
            ours = _show_live(served, plant)
            judged = judge_all(plant, {OURS: ours} | rival_stretches(plant, LearnSettings()))
            _show_tables(judged, seed)
            click.echo(f"\n{ADVICE}\nThe demo took {time.perf_counter() - began_s:.0f} s.")
            if not once:
                _keep_serving(served, place)


def _make_history(seed: int, place: Path) -> Plant:
    click.echo(f"{UTILITY}, an invented utility of {N_STATIONS} pumping stations, seed {seed}")
    plant = simulate_plant(seed, HISTORY_DAYS, LIVE_DAYS)
    n_records = write_wide_csv(plant.history, Path("history.csv"))
    write_incidents(plant.incidents, Path("incidents.csv"))
    click.echo(
        f"{HISTORY_DAYS} days of history without incidents, a record every {STEP_S} s: "
        f"{n_records} records\nin {place}\n"
    )
    return plant


def _run(name: str, command: click.Command, *words: str) -> None:
    """Run one of our commands as a person would, its line shown first."""
    click.echo(f"$ oddbranch {name} {' '.join(words)}")
    command.main(args=list(words), prog_name=f"oddbranch {name}", standalone_mode=False)


def _show_live(served: Served, plant: Plant) -> list[Stretch]:
    n_records = sum(len(chunk.times_ns) for chunk in plant.live)
    click.echo(
        f"{LIVE_DAYS} live days, {n_records} records, {len(plant.incidents)} incidents; "
        "every stretch over its level, as it ends:\n"
    )
    began_s = time.perf_counter()
    found = []
    for stretch in post_live(served, plant):
        found.append(stretch)
        truth = truth_of(stretch, plant.incidents)
        click.echo("\n".join(stretch_lines(stretch, truth)))
    took_s = time.perf_counter() - began_s
    click.echo(
        f"\n{n_records} records posted, scored, stored and answered in {took_s:.1f} s "
        f"({n_records / took_s:.0f} a second)"
    )
    return found


def _show_tables(judged: Mapping[str, Judged], seed: int) -> None:
    budget = LearnSettings().budget.alerts_per_day
    click.echo(
        f"\nIncidents by kind and size, seed {seed}. Sizes in spreads: multiples of the "
        "instrument's accuracy\nclass or of its usual spread, whichever is larger. Right of "
        "ours: caught by operating limits\nand by PCA, set on the same history to the same "
        f"{budget:g} alerts a day.\n"
    )
    click.echo(incident_table(judged))
    click.echo()
    click.echo(method_table(judged))
    click.echo()
    click.echo("\n".join(where_others_win(judged)))


def _keep_serving(served: Served, place: Path) -> None:
    click.echo(
        f"\nStill serving; end it with Ctrl-C.\n"
        f"  sources and alerts   {served.url}/\n"
        f"  stored records       {served.url}/records?source=mill-lane&limit=5\n"
        f"  numbers to scrape    {served.url}/metrics\n"
        f"  interface            {served.url}/openapi.json\n"
        f"  what was made        {place}"
    )
    served.wait()


@contextlib.contextmanager
def _working_in(folder: Path | None) -> Iterator[Path]:
    """Work in a folder, so that the commands shown are the commands run."""
    with contextlib.ExitStack() as stack:
        if folder is None:
            name = stack.enter_context(tempfile.TemporaryDirectory(prefix="oddbranch-demo-"))
            place = Path(name)
        else:
            folder.mkdir(parents=True, exist_ok=True)
            place = folder.resolve()
        stack.enter_context(contextlib.chdir(place))
        yield place


@contextlib.contextmanager
def _ended_by_signal() -> Iterator[None]:
    """Turn a request to end into an exit, so that the service and the folder go too."""

    def leave(_number: int, _frame: object) -> NoReturn:
        sys.exit(128 + signal.SIGTERM)

    before = signal.signal(signal.SIGTERM, leave)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)
