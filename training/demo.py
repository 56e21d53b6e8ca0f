"""`oddbranch demo`: the whole job on an invented water utility, with known incidents.

History is simulated, surveyed and learned by the very commands a site runs; a service is
started as a second process; live days with incidents are posted to it over HTTP; every
alert is told with the truth beside it. Limits and PCA stand beside ours at the end.
"""

from __future__ import annotations

import contextlib
import signal
import sys
import tempfile
import time
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Final, NoReturn

import click

from scoring.alerts import ADVICE
from scoring.artefact import read_model
from scoring.model import Levels
from training.demo_alerts import Told, post_live, rival_calls
from training.demo_plant import (
    DRILL_DAYS,
    HISTORY_DAYS,
    LIVE_DAYS,
    N_STATIONS,
    STEP_S,
    Plant,
    plant_config,
    quiet_station,
    simulate_plant,
)
from training.demo_text import (
    OURS,
    alert_lines,
    budget_words,
    incident_table,
    method_table,
    where_others_win,
)
from training.drill import drill_command
from training.judging import Verdict
from training.learn import learn_command
from training.plant.channels import INSTRUMENTS
from training.plant.simulate import incidents_of
from training.plant.utility import UTILITY
from training.plant.writers import write_incidents, write_wide_csv
from training.promise import Promise
from training.served import Served, serve
from training.settings import LearnSettings
from training.survey import survey_command

# Figures are published with seeds from 9000 up, which nobody looks at while tuning.
FIGURE_SEED: Final = 9001
_HISTORY, _CHANNELS, _MODEL, _QUIET = "history.csv", "channels.toml", "model", "quiet.csv"
# Enough for a first look, in half the time of the command's own number.
DRILL_TRIALS: Final = 20


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
        _run("survey", survey_command, _HISTORY, "--out", _CHANNELS)
        add_data_sheets(Path(_CHANNELS))
        click.echo("units and spans added from the instruments' data sheets\n")
        _run("learn", learn_command, _HISTORY, "--channels", _CHANNELS, "--out", _MODEL)
        click.echo(f"\n$ oddbranch serve --model {_MODEL} --data data --port 0")
        with serve(place, ("--model", _MODEL, "--data", "data")) as served:
            click.echo(f"serving on {served.url} in process {served.process.pid}\n")
            alerts = _show_live(served, plant)
            model = read_model(Path(_MODEL))
            judged = _judge_all(plant, alerts, model.levels)
            _show_tables(judged, seed)
            _show_budget(alerts, judged[OURS], Promise.from_data(model.about["promise"]))
            _drill(seed)
            click.echo(f"\n{ADVICE}\nThe demo took {time.perf_counter() - began_s:.0f} s.")
            if not once:
                _keep_serving(served, place)


def _make_history(seed: int, place: Path) -> Plant:
    click.echo(f"{UTILITY}, an invented utility of {N_STATIONS} pumping stations, seed {seed}")
    plant = simulate_plant(seed)
    n_records = write_wide_csv(plant.history, Path(_HISTORY))
    write_incidents(incidents_of(plant_config(seed)), Path("incidents.csv"))
    click.echo(
        f"{HISTORY_DAYS} days of history without incidents, a record every {STEP_S} s: "
        f"{n_records} records\nin {place}\n"
    )
    return plant


def _run(name: str, command: click.Command, *words: str) -> None:
    """Run one of our commands as a person would, its line shown first."""
    click.echo(f"$ oddbranch {name} {' '.join(words)}")
    command.main(args=list(words), prog_name=f"oddbranch {name}", standalone_mode=False)


def _show_live(served: Served, plant: Plant) -> list[Told]:
    click.echo(
        f"{LIVE_DAYS} live days, {plant.n_live} records, {len(plant.incidents)} incidents; "
        "every alert, as it is cleared:\n"
    )
    began_s = time.perf_counter()
    found = []
    for alert in post_live(served, plant):
        found.append(alert)
        click.echo("\n".join(alert_lines(alert, plant.incidents)))
    took_s = time.perf_counter() - began_s
    click.echo(
        f"\n{plant.n_live} records posted, scored, stored and answered in {took_s:.1f} s "
        f"({plant.n_live / took_s:.0f} a second)"
    )
    return found


def _judge_all(plant: Plant, alerts: list[Told], levels: Levels) -> dict[str, Verdict]:
    """Return the verdict on our alerts in the budget, and on each rival's."""
    judge = plant.judge()
    end_ns = max(last_ns for _, last_ns in judge.spans.values())
    budget = LearnSettings().budget.alerts_per_day
    found = {OURS: [alert.call(end_ns) for alert in alerts if alert.in_budget]}
    with tempfile.TemporaryDirectory(prefix="oddbranch-rivals-") as folder:
        history, channels = Path(_HISTORY), Path(_CHANNELS)
        found |= rival_calls(plant, history, channels, levels, budget, Path(folder))
    return {name: judge.verdict(calls) for name, calls in found.items()}


def _show_tables(judged: Mapping[str, Verdict], seed: int) -> None:
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


def _show_budget(alerts: list[Told], ours: Verdict, promise: Promise) -> None:
    n_used = sum(alert.in_budget for alert in alerts)
    click.echo("\n" + budget_words(promise, n_used, len(alerts) - n_used, ours))


def _drill(seed: int) -> None:
    """Ask beforehand which faults of one station's instruments would be caught."""
    n_records = write_wide_csv(quiet_station(seed), Path(_QUIET))
    click.echo(
        f"\n{DRILL_DAYS} quiet days of one station that nothing learned from: {n_records} records\n"
    )
    words = ("--model", _MODEL, "--out", "drill", "--trials", str(DRILL_TRIALS))
    _run("drill", drill_command, _QUIET, *words)


def _keep_serving(served: Served, place: Path) -> None:
    click.echo(
        f"\nStill serving; end it with Ctrl-C.\n"
        f"  sources and alerts   {served.url}/\n"
        f"  stored records       {served.url}/records?source=mill-lane&limit=5\n"
        f"  alerts               {served.url}/alerts\n"
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
