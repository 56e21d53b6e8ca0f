"""`oddbranch learn`: from history to a model directory, and what a person wants to know."""

from __future__ import annotations

import tempfile
import time
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import click
import numpy as np
from numpy.typing import NDArray

from scoring.artefact import write_model
from scoring.channels import ChannelTable, load_channels
from scoring.model import Levels, Model
from training.cluster import cluster_at, cluster_option
from training.hands import HERE, Hands
from training.history.files import history_n_bytes
from training.history.flags import history_flags, history_options
from training.history.reading import Advances
from training.history.spool import Spool, spool_history
from training.history.spool_parts import parts_read_by
from training.learn_report import learn_page
from training.levels import Curve, set_levels
from training.members import Learned, learn_fleet, learn_members, share_tables, with_enough
from training.progress import Progress
from training.promise import Promise, promise_of
from training.promise_words import promise_lines
from training.report.page import write_text
from training.report.readings import time_text
from training.report.treesections import commonest_part, fitted_parts, shown_source, tree_names
from training.rows import DEFAULT_STEP_S, Rows
from training.season import slow_channels, unseen_nats
from training.settings import LearnSettings, load_learn_settings
from training.stillness import with_stillness
from training.treetext import tree_lines
from training.trouble_words import trouble_words

Ints = NDArray[np.int64]

# Stretches left out that the terminal lists; the report has them all.
MAX_STRETCHES_SHOWN = 12


@dataclass(frozen=True)
class LearnResult:
    """A model with all that its report needs."""

    model: Model
    learned: dict[str, Learned]
    curve: Curve | None
    promise: Promise | None
    seconds: float


def learn_model(
    spool: Spool,
    table: ChannelTable,
    settings: LearnSettings,
    progress: Advances | None = None,
    in_alert: dict[str, Ints] | None = None,
    hands: Hands = HERE,
) -> LearnResult:
    """Learn a model from spooled history.

    Sources with too few records of their own are left to the fleet's member.
    in_alert: per source (n, 2) first and last times in ns of stretches that tables must not
    use; levels count them. hands: who works on the records; whoever it is, the model is the
    same. Raises NoCluster where they cannot.
    """
    began = time.perf_counter()
    step_s = table.step_s or DEFAULT_STEP_S
    rows = Rows(spool, table, spool.sources, step_s, in_alert or {}, hands)
    with tempfile.TemporaryDirectory(prefix="oddbranch-held-out-") as folder:
        hands.must_see(Path(folder))
        enough = with_enough(rows)
        learned = {}
        for one in learn_members(rows, enough, Path(folder)):
            learned[one.member.source] = one
            if progress is not None:
                progress.advance(1)
        learned = share_tables(rows, learned, Path(folder))
        left_out = {s: one.unused for s, one in learned.items() if len(one.unused)}
        # Sources without a member of their own keep what was known beforehand.
        rows = replace(rows, left_out={**rows.left_out, **left_out})
        only = learned[enough[0]] if len(spool.sources) == 1 and enough else None
        fleet = learn_fleet(rows, only)
        if progress is not None:
            progress.advance(1)
        start = Levels(
            record=1e6,
            sustained=1e6,
            cap=1e6,
            tau_s=settings.sustained.time_constant_steps * step_s,
            step_s=step_s,
            least_readings=max(1, round(settings.judging.least_share * len(table.instruments))),
            delays=settings.alerts,
        )
        members = {s: one.member for s, one in learned.items()}
        # Sources without a member of their own are scored by the fleet's and take their
        # share of the budget.
        budget = settings.budget.alerts_per_day * len(enough) / max(len(spool.sources), 1)
        held_out = {s: one.held_out for s, one in learned.items()}
        levels, members, curve = set_levels(
            rows, members, held_out, start, budget, left_out=left_out
        )
    promise = None
    if curve is not None:
        unseen = unseen_nats(members, held_out, hands)
        promise = promise_of(curve, levels, budget, slow_channels(rows), unseen)
    members = {s: replace(m, about=_about(rows, learned[s])) for s, m in members.items()}
    rests = [m.usual.sustained for m in members.values()] or [0.0]
    fleet = replace(fleet, usual=replace(fleet.usual, sustained=sum(rests) / len(rests)), source="")
    members, fleet = with_stillness(rows, members, fleet)
    table = table.model_copy(update={"step_s": step_s})
    about = {
        "n_records": rows.n_records,
        "n_sources": len(spool.sources),
        "alerts_per_day": settings.budget.alerts_per_day,
        "first_ns": spool.report.first_ns,
        "last_ns": spool.report.last_ns,
        "promise": promise.as_data() if promise else None,
    }
    model = Model(table, members, fleet, levels, about=about)
    return LearnResult(model, learned, curve, promise, time.perf_counter() - began)


def _about(rows: Rows, one: Learned) -> dict[str, Any]:
    first, last = rows.spool.first_last_ns(one.member.source)
    return {
        "n_records": one.density.plain.n_records,
        "first_ns": first,
        "last_ns": last,
        "held_out_records": one.held_out.n_scored,
        "held_out_surprise": round(one.held_out.density, 4),
        "n_bins": one.density.plain.choice.n_bins,
        "share": one.density.plain.choice.share,
        "masses": one.density.plain.choice.mass.tolist(),
    }


@click.command("learn")
@click.argument("history", nargs=-1, required=True, metavar="HISTORY...")
@click.option(
    "--channels",
    required=True,
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Channel table, as `oddbranch survey` proposes it.",
)
@click.option(
    "--out",
    required=True,
    type=click.Path(path_type=Path),
    metavar="MODEL",
    help="Model directory to write.",
)
@click.option(
    "--config",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Settings, as in config/learn.toml.",
)
@click.option(
    "--exclude",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Periods to leave out: source,start,end,reason.",
)
@click.option(
    "--report",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="HTML page to write: the tree, bins, held-out records, levels.",
)
@click.option(
    "--rejected",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Where to list rows that were not used.",
)
@cluster_option
@history_flags
def learn_command(
    history: tuple[str, ...],
    channels: Path,
    out: Path,
    config: Path | None,
    exclude: Path | None,
    report: Path | None,
    rejected: Path | None,
    cluster: str | None,
    **flags: Any,
) -> None:
    """Learn a model from HISTORY: files, folders or patterns, CSV or Parquet."""
    began = time.perf_counter()
    table = load_channels(channels)
    settings = load_learn_settings(config)
    options = history_options(**flags)
    with cluster_at(cluster) as hands:
        with Progress("reading history", history_n_bytes(history)) as progress:
            fill = None
            # A list of rejected rows is in the order of the history: one process writes it.
            if cluster is not None and rejected is None:
                fill = parts_read_by(hands, table, options, progress)
            spool = spool_history(
                history, table, options, progress, exclude=exclude, rejected=rejected, fill=fill
            )
        with spool:
            for line in history_lines(spool):
                click.echo(line)
            with Progress("learning", len(spool.sources) + 1) as progress:
                result = learn_model(spool, table, settings, progress, hands=hands)
            result = replace(result, model=write_model(result.model, out))
            for line in result_lines(result):
                click.echo(line)
            if report is not None:
                write_report(result, spool, report)
                click.echo(f"report written to {report}")
    name = result.model.name
    click.echo(f"model {name} written to {out} in {time.perf_counter() - began:.1f} s")


def write_report(result: LearnResult, spool: Spool, path: Path) -> None:
    """Write the page on what was learned; raises BadReport."""
    page = learn_page(
        result.model,
        result.learned,
        result.curve,
        result.promise,
        spool.sources,
        history_lines(spool),
        result.seconds,
    )
    write_text(path, page)


def history_lines(spool: Spool) -> list[str]:
    """Return what came of reading the history, for a person."""
    report = spool.report
    n_kept = sum(report.n_records.values())
    n_bad = sum(report.rejected.values())
    lines = [
        f"{report.n_rows} rows read, {n_kept} records kept of {len(report.n_records)} "
        f"source{'s' if len(report.n_records) != 1 else ''}, {n_bad} rejected"
    ]
    for reason, n in report.rejected.most_common():
        lines.append(f"  rejected: {n} {reason} (first: {report.first[reason]})")
    for reason, n in report.excluded.most_common():
        lines.append(f"  excluded: {n} {reason}")
    lines += [f"  warning: {line}" for line in report.stray]
    for what, counter in (
        ("outside the span", report.outside_span),
        ("unknown word", report.unknown_words),
        ("bad quality", report.bad_quality),
    ):
        for channel, n in counter.most_common():
            lines.append(f"  {channel}: {n} readings {what}")
    return lines


def _regime_words(result: LearnResult, one: Learned) -> str:
    names = result.model.table.names
    if not one.density.regimes:
        return ""
    by = " and ".join(names[node] for node in one.density.regime)
    return f"{len(one.density.regimes)} trees by {by}, "


def _when(result: LearnResult, one: Learned, part: int) -> str:
    """Return when a tree of a member holds, where it has several, and what its numbers are."""
    if not one.density.regimes:
        return " (nats on its edges)"
    name = tree_names(result.model.table, one.member)[part]
    n, n_all = fitted_parts(one)[part].n_records, one.density.plain.n_records
    return (
        f" while {name}, {n} of its {n_all} records and the most of its {len(one.density.regimes)} "
        "regimes (nats on its edges; --report draws more)"
    )


def left_out_lines(result: LearnResult) -> list[str]:
    """Return which stretches the tables did not use, and both alert rates."""
    stretches = [stretch for one in result.learned.values() for stretch in one.left_out]
    n_in_alert = sum(len(one.in_alert) for one in result.learned.values())
    if (not stretches and not n_in_alert) or result.curve is None:
        return []
    return [trouble_words(stretches, result.curve, n_in_alert)] + [
        f"  {stretch.source}: {time_text(stretch.start_ns)} to {time_text(stretch.end_ns)}, "
        f"{stretch.n_records} records, up to {stretch.peak:.0f} nats above the usual"
        for stretch in sorted(stretches, key=lambda s: -s.peak)[:MAX_STRETCHES_SHOWN]
    ]


def result_lines(result: LearnResult) -> list[str]:
    """Return what was learned: the tree, held-out figures, levels."""
    model = result.model
    lines = []
    if result.learned:
        # The source that the report shows.
        shown = result.learned[shown_source(result.learned)]
        part = commonest_part(shown)
        lines.append(f"tree of {shown.member.source}{_when(result, shown, part)}:")
        lines += ["  " + line for line in tree_lines(model.table, shown.member.parts[part].tree)]
        for source, one in result.learned.items():
            choice = one.density.plain.choice
            lines.append(
                f"{source}: {one.density.plain.n_records} records, "
                f"{len(one.density.plain.edges)} edges, {choice.n_bins} bins, "
                f"{_regime_words(result, one)}{one.member.tables} tables, "
                f"held-out surprise {one.held_out.density:.2f} nats a record "
                f"over {one.held_out.n_scored} records"
            )
    lines += left_out_lines(result)
    if result.promise is None:
        lines.append("no source has history enough for levels of its own: no alert will be raised")
        return lines
    return lines + promise_lines(result.promise)
