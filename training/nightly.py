"""`oddbranch nightly`: a new model from the records of the last weeks, put into use.

Read, learn, publish: each step is a function, and nothing is changed before the last.
The command ends with 0 when a model was published, and with 1 and a sentence when it
failed, when there was too little to learn from, or when another job was at work.
"""

from __future__ import annotations

import time
from contextlib import closing
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path

import click

from scoring.channels import ChannelTable, load_channels
from scoring.errors import OddbranchError
from training.history.exclusions import Exclusion, load_exclusions
from training.history.options import HistoryOptions
from training.history.spool import Spool
from training.kept import Kept, KeptModels
from training.learn import LearnResult, history_lines, learn_model, result_lines
from training.nightly_settings import NightlySettings, load_nightly_settings
from training.progress import Progress
from training.settings import LearnSettings, load_learn_settings
from training.stored import Store, spool_stored


class TooLittle(OddbranchError):
    """The store holds too few records to learn from, for now."""


@dataclass(frozen=True, slots=True)
class Job:
    """What one night needs, read before anything is begun."""

    settings: NightlySettings
    table: ChannelTable
    learning: LearnSettings
    exclusions: tuple[Exclusion, ...]


def read_job(config: Path | None) -> Job:
    """Return the job that a settings file describes; raises what names the wrong file."""
    settings = load_nightly_settings(config)
    wanted = settings.learn
    exclude = Path(wanted.exclude) if wanted.exclude else None
    return Job(
        settings,
        load_channels(wanted.channels),
        load_learn_settings(Path(wanted.settings) if wanted.settings else None),
        load_exclusions(exclude, HistoryOptions()) if exclude else (),
    )


def read_records(job: Job) -> Spool:
    """Return the stored records to learn from, which the caller closes; raises TooLittle."""
    wanted = job.settings.history
    with closing(Store(job.settings.store.data)) as store:
        window = store.newest(wanted.days)
        with Progress("reading records", store.n_rows(window)) as progress:
            spool = spool_stored(
                store, job.table, window, exclusions=job.exclusions, progress=progress
            )
        n_records = sum(spool.n_records(source) for source in spool.sources)
        if n_records < wanted.least_records:
            spool.close()
            raise TooLittle(
                f"{store.path}: {n_records} records of the last {wanted.days:g} days are fewer "
                f"than history.least_records = {wanted.least_records}; nothing was published"
            )
    return spool


def learn(job: Job, spool: Spool) -> LearnResult:
    """Return a model learned from spooled records."""
    with Progress("learning", len(spool.sources) + 1) as progress:
        return learn_model(spool, job.table, job.learning, progress)


def publish(models: KeptModels, result: LearnResult, n_keep: int, now: datetime) -> Kept:
    """Put a model into use and remove the oldest kept ones; hold the lock meanwhile."""
    about = result.model.about | {"created_timestamp_seconds": now.timestamp()}
    kept = models.publish(replace(result.model, about=about), now)
    models.prune(n_keep)
    return kept


@click.command("nightly")
@click.option(
    "--config",
    required=True,
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Settings, as in config/nightly.toml.",
)
def nightly_command(config: Path) -> None:
    """Learn from the stored records of the last weeks and put the model into use."""
    began_s = time.perf_counter()
    job = read_job(config)
    models = KeptModels(job.settings.models.folder)
    with models.lock(), read_records(job) as spool:
        for line in history_lines(spool):
            click.echo(line)
        result = learn(job, spool)
        for line in result_lines(result):
            click.echo(line)
        before = models.current()
        kept = publish(models, result, job.settings.models.keep, datetime.now(UTC))
    click.echo(f"model {kept.name} is in use as {kept.path}, {_instead_of(before)}")
    click.echo(f"done in {time.perf_counter() - began_s:.1f} s")


def _instead_of(before: Kept | None) -> str:
    return "the first one" if before is None else f"instead of {before.name}"
