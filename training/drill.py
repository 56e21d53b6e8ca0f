"""`oddbranch drill`: find out beforehand which faults a model would catch."""

from __future__ import annotations

import csv
import json
import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import click
import numpy as np

from scoring.artefact import read_model
from scoring.model import Model
from training.drill_page import drill_page, normal_ranges
from training.drill_words import as_data, drill_lines
from training.drilled import Drill, Result, unwatched
from training.history.files import history_n_bytes
from training.history.flags import history_flags, history_options
from training.history.spool import Spool, spool_history
from training.planting import SIZED
from training.progress import Progress
from training.report.page import BadReport, write_text
from training.trials import OnlinePath, find_trials


@click.command("drill")
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
    help="Where to write drill.html, drill.json and drill.csv.",
)
@click.option(
    "--within",
    type=click.IntRange(min=2),
    default=60,
    show_default=True,
    metavar="RECORDS",
    help="Records from a fault's start in which it must be caught.",
)
@click.option(
    "--stuck-within",
    type=click.IntRange(min=2),
    default=720,
    show_default=True,
    metavar="RECORDS",
    help="The longest that a channel is held still.",
)
@click.option(
    "--trials", type=click.IntRange(min=10), default=40, show_default=True, metavar="N",
    help="Trials of every fault and size, spread over the sources.",
)  # fmt: skip
@click.option("--seed", type=int, default=1, show_default=True, metavar="N", help="Of the draws.")
@history_flags
def drill_command(
    records: tuple[str, ...],
    model_path: Path,
    out: Path,
    within: int,
    stuck_within: int,
    trials: int,
    seed: int,
    **flags: Any,
) -> None:
    """Plant faults into RECORDS, normal ones that the model never saw, and see what it catches."""
    began = time.perf_counter()
    model, options = read_model(model_path), history_options(**flags)
    with Progress("reading records", history_n_bytes(records)) as progress:
        spool = spool_history(records, model.table, options, progress)
    with spool:
        for line in doubts(model, spool):
            click.echo(line)
        drill = prepare(model, spool, trials, within, max(stuck_within, within), seed)
    results = run(drill)
    bare = unwatched(results, model)
    step_s = model.levels.step_s
    ranges = normal_ranges([c.name for c in drill.channels], drill.normal)
    made = f"Drill of model {model.name} on {' '.join(records)}, seed {seed}."
    write_text(out / "drill.html", drill_page(results, ranges, bare, within, step_s, made))
    data = as_data(results, within, step_s, seed, model.name, bare)
    write_text(out / "drill.json", json.dumps(data, indent=1, allow_nan=False) + "\n")
    write_csv(results, out / "drill.csv")
    for line in drill_lines(results, step_s, within, bare):
        click.echo(line)
    click.echo(f"written to {out / 'drill.html'}, {time.perf_counter() - began:.1f} s")


def prepare(
    model: Model, spool: Spool, n_trials: int, within: int, longest: int, seed: int
) -> Drill:
    """Return a drill over quiet stretches of a spool."""
    path = OnlinePath(model)
    rng = np.random.default_rng(seed)
    return Drill.of(path, find_trials(path, spool, n_trials, longest, rng), within, seed)


def run(drill: Drill) -> list[Result]:
    """Return all results: channel by channel, each kind, then the swaps."""
    wanted = [k for k, channel in enumerate(drill.channels) if not channel.is_state]
    results: list[Result] = []
    with Progress("drilling", len(wanted)) as progress:
        for channel in wanted:
            results += [drill.sized(channel, kind) for kind in SIZED]
            results.append(drill.stuck(channel))
            results += [drill.swapped(channel, partner) for partner in drill.partners(channel)]
            progress.advance(1)
    return results


def doubts(model: Model, spool: Spool) -> list[str]:
    """Return what makes these records unfit to judge this model by."""
    lines = []
    learned: tuple[Any, Any] = (model.about.get("first_ns"), model.about.get("last_ns"))
    these: tuple[Any, Any] = (spool.report.first_ns, spool.report.last_ns)
    if None not in (*learned, *these) and these[0] <= learned[1] and these[1] >= learned[0]:
        lines.append(
            "these records overlap the time that the model was learned from: it knows them, so "
            "that faults look easier to catch than they are"
        )
    strangers = [source for source in spool.sources if source not in model.members]
    if strangers:
        lines.append(f"scored by the fleet's member, not seen in learning: {', '.join(strangers)}")
    return lines


def write_csv(results: Sequence[Result], path: Path) -> None:
    """Write one row a result; raises BadReport."""
    names = list(Result.__dataclass_fields__)
    try:
        with path.open("w", encoding="utf-8", newline="") as file:
            out = csv.writer(file, lineterminator="\n")
            out.writerow([*names, "is_caught"])
            for one in results:
                cells = ["" if v is None else v for v in (getattr(one, name) for name in names)]
                out.writerow([*cells, "yes" if one.is_caught else "no"])
    except OSError as error:
        raise BadReport(str(path), f"cannot be written: {error.strerror}") from None
