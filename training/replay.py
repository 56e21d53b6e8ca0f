"""`oddbranch replay`: what the alerts would have been, and what they would have been worth."""

from __future__ import annotations

import tempfile
import time
from pathlib import Path
from typing import Any

import click
import numpy as np

from scoring.alert_settings import AlertSettings
from scoring.artefact import read_model
from scoring.model import Model
from training.history.files import find_files, history_n_bytes
from training.history.flags import history_flags, history_options
from training.history.options import HistoryOptions
from training.history.reading import read_history
from training.history.spool import spool_history
from training.history.tally import Tally
from training.known import Known, load_known, refuse_unknown_sources
from training.online import Online
from training.progress import Progress
from training.replay_files import write_files
from training.replay_page import replay_page
from training.replay_words import replay_lines
from training.replayed import Replayed, judge_replay
from training.report.page import write_text
from training.rival_streams import Rival, fit_rivals
from training.settings import AlarmBudget


@click.command("replay")
@click.argument("records", nargs=-1, required=True, metavar="RECORDS...")
@click.option(
    "--model",
    "model_path",
    required=True,
    type=click.Path(path_type=Path),
    metavar="MODEL",
    help="Model directory.",
)
@click.option(
    "--out",
    required=True,
    type=click.Path(path_type=Path),
    metavar="FOLDER",
    help="Where to write replay.html and the CSV files.",
)
@click.option(
    "--incidents",
    type=click.Path(path_type=Path),
    metavar="F.csv",
    help="Known incidents: source,start,end,kind,size,channels (joined by |).",
)
@click.option(
    "--history",
    multiple=True,
    metavar="HISTORY",
    help="History to fit operating limits and PCA on, for comparison. May be repeated.",
)
@click.option(
    "--recovery",
    "recovery_min",
    type=click.FloatRange(min=0),
    default=120.0,
    show_default=True,
    metavar="MINUTES",
    help="After an incident's end an alert is not false for this long.",
)
@history_flags
def replay_command(
    records: tuple[str, ...],
    model_path: Path,
    out: Path,
    incidents: Path | None,
    history: tuple[str, ...],
    recovery_min: float,
    **flags: Any,
) -> None:
    """Run RECORDS through a model as if they came in live, and judge its alerts."""
    began = time.perf_counter()
    model, options = read_model(model_path), history_options(**flags)
    find_files(records)
    names = [channel.name for channel in model.table.instruments]
    known = load_known(incidents, options, names) if incidents else ()
    with tempfile.TemporaryDirectory(prefix="oddbranch-replay-") as folder:
        rivals = fit_on(history, model, options, Path(folder)) if history else []
        online = run_online(records, model, options, rivals, Path(folder))
        if incidents:
            refuse_unknown_sources(incidents, known, sorted(online.sources))
        done = judge_replay(online, _within(known, online), rivals, recovery_min * 60)
    write_files(done, online.at_first, out)
    write_text(out / "replay.html", replay_page(done, " ".join(records)))
    for line in replay_lines(done):
        click.echo(line)
    for line in _left_out(known, done):
        click.echo(line)
    click.echo(f"written to {out / 'replay.html'}, {time.perf_counter() - began:.1f} s")


def fit_on(
    history: tuple[str, ...], model: Model, options: HistoryOptions, folder: Path
) -> list[Rival]:
    """Return operating limits and PCA fitted on a history, with levels for the budget."""
    with Progress("reading history", history_n_bytes(history)) as progress:
        spool = spool_history(history, model.table, options, progress)
    with spool:
        budget = float(model.about.get("alerts_per_day", AlarmBudget().alerts_per_day))
        return fit_rivals(spool, model.levels, budget, AlertSettings(), folder)


def run_online(
    records: tuple[str, ...],
    model: Model,
    options: HistoryOptions,
    rivals: list[Rival],
    folder: Path,
) -> Online:
    """Put records through the online path, and past the rivals, in the order of the files."""
    online = Online(model, folder)
    with Tally(None) as tally, Progress("replaying", history_n_bytes(records)) as progress:
        for batch in read_history(
            records, model.table, options, tally, progress, every_channel=False
        ):
            rows = np.flatnonzero(batch.good)
            for code in np.unique(batch.source_codes[rows]).tolist():
                own = rows[batch.source_codes[rows] == code]
                source, times_ns, values = (
                    batch.source_names[code],
                    batch.times_ns[own],
                    batch.values[own],
                )
                online.add(source, times_ns, values)
                for rival in rivals:
                    rival.add(source, times_ns, values, folder)
        tally.refuse_if_mostly_bad(str(records[0]))
    online.finish()
    return online


def _within(known: tuple[Known, ...], online: Online) -> tuple[Known, ...]:
    """Return the incidents that the records cover at least in part."""
    return tuple(
        one
        for one in known
        if online.sources[one.source].first_ns < one.end_ns
        and one.start_ns <= online.sources[one.source].last_ns
    )


def _left_out(known: tuple[Known, ...], done: Replayed) -> list[str]:
    n = len(known) - len(done.known)
    return [f"{n} incidents lie outside the time of the records and were left out"] if n else []
