"""`oddbranch nightly`: a new model from the last weeks' records, judged before it is used.

Choose, learn, judge, publish: each step is a function, and nothing is changed before the
last. Exit 0: published. 1: the judge refused, and the report says why. 3: the job failed,
or another one was at work. Whatever happens, the model in use goes on until a new one is
whole.
"""

from __future__ import annotations

import tempfile
import traceback
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path

import click

from scoring.artefact import read_model
from scoring.channels import ChannelTable, load_channels
from scoring.errors import BadArtefact, OddbranchError
from scoring.model import Model
from training.changes import load_changes
from training.chosen import Chosen, Wanted, choose
from training.cluster import cluster_at, cluster_option
from training.hands import HERE, Hands
from training.history.exclusions import Exclusion, load_exclusions
from training.judge import (
    Case,
    Judgement,
    Witness,
    enough,
    judge,
    left_out_share,
)
from training.judge_answers import Answer
from training.kept import BusyModels, Kept, KeptModels
from training.learn import LearnResult, learn_model
from training.night_files import NightFiles
from training.night_metrics import FAILED, PUBLISHED, REFUSED, night_metrics, write_metrics
from training.night_report import Night, lead, night_data, night_page, unlabelled_words
from training.nightly_settings import NightlySettings, load_nightly_settings
from training.progress import Progress
from training.settings import LearnSettings, load_learn_settings
from training.settings_file import BadSettings
from training.stages import Stages
from training.stored import Store

Tell = Callable[[str], None]


class Refused(OddbranchError):
    """The judge refused the new model; the one in use goes on."""

    exit_code = 1


class Failed(OddbranchError):
    """The job could not do its work; the model in use goes on."""

    exit_code = 3


@dataclass(frozen=True, slots=True)
class Job:
    """What one night needs, read before anything is begun."""

    settings: NightlySettings
    table: ChannelTable
    learning: LearnSettings
    exclusions: tuple[Exclusion, ...]


@dataclass(frozen=True)
class Outcome:
    """What came of a night. kept: the published model, or the one in use where it is the same.

    page: of the report.
    """

    verdict: str
    judgement: Judgement
    kept: Kept | None
    page: Path


def read_job(config: Path | None) -> Job:
    """Return the job that a settings file describes; raises what names the wrong file."""
    settings = load_nightly_settings(config)
    wanted = settings.learn
    _refuse_without_folder(config, settings.report.metrics)
    exclude = Path(wanted.exclude) if wanted.exclude else None
    return Job(
        settings,
        load_channels(wanted.channels),
        load_learn_settings(Path(wanted.settings) if wanted.settings else None),
        load_exclusions(exclude, settings.files.options()) if exclude else (),
    )


def _refuse_without_folder(config: Path | None, metrics: str) -> None:
    folder = Path(metrics).parent
    if metrics and not folder.is_dir():
        raise BadSettings(
            "settings" if config is None else str(config),
            f'report.metrics = "{metrics}": there is no folder {folder}; name a file in the folder '
            "that the node exporter's text-file collector reads, make that folder first, or leave "
            "report.metrics empty",
        )


def run_night(job: Job, now: Callable[[], datetime], tell: Tell, hands: Hands = HERE) -> Outcome:
    """Run one night and return its outcome; a refusal is one. Raises what makes it fail.

    now: the clock. tell: takes one line per stage. hands: who learns.
    """
    settings, stages = job.settings, Stages(tell)
    models, files = KeptModels(settings.models.folder), NightFiles(settings.report.folder)
    with (
        models.lock(),
        tempfile.TemporaryDirectory(prefix="oddbranch-night-") as name,
        _chosen(job, Path(name), stages) as chosen,
    ):
        in_use = models.current()
        before = _read(in_use, tell)
        for line in chosen.stray:
            tell(f"  warning: {line}")
        first = enough(chosen, settings.history)
        learned = None
        if all(one.passed for one in first):
            with stages.stage("learning") as said, _bar(chosen) as bar:
                learned = learn_model(
                    chosen.learning, job.table, job.learning, bar, chosen.in_alert, hands
                )
                said.append(f"{len(learned.model.members)} members")
            with stages.stage("judging") as said:
                case = Case(
                    chosen, learned, before, Witnesses(models.kept()), settings.judge,
                    files.last_left_out(), Path(name), hands,
                )  # fmt: skip
                judgement = judge(case, first)
                said.append(f"{len(judgement.refusals)} of {len(judgement.answers)} refused")
        else:
            judgement = Judgement(tuple(first))
        for answer in judgement.answers:
            tell(_line(answer))
        for source in chosen.unlabelled_for_long:
            tell(f"  {unlabelled_words(chosen, source)}")
        prepared = _prepare(models, learned, judgement, now()) if judgement.passed else None
        night = Night(
            PUBLISHED if prepared else REFUSED, now(), chosen, judgement, learned,
            prepared or "", before, in_use.name if in_use else "", stages.total_s,
        )  # fmt: skip
        with stages.stage("reporting"):
            page = files.prepare(night.at, night.verdict, night_page(night), night_data(night))
        kept = None
        if prepared:
            with stages.stage("publishing") as said:
                if night.is_same:
                    # A copy a night would push every other kept model out.
                    models.drop_prepared()
                    kept = in_use
                    said.append("the same model is in use already, no further copy is kept")
                else:
                    kept = models.publish_prepared(prepared, night.at)
                    models.prune(settings.models.keep)
        shown = files.show(page)
        files.prune(settings.report.keep)
        _note(job, night, models, stages, learned)
    tell(lead(night))
    tell(f"report {shown}, done in {stages.total_s:.1f} s")
    return Outcome(night.verdict, judgement, kept, shown)


@contextmanager
def _chosen(job: Job, folder: Path, stages: Stages) -> Iterator[Chosen]:
    settings = job.settings
    wanted = Wanted(
        settings.history,
        settings.judge.days,
        settings.files.paths,
        settings.files.options(),
        job.exclusions,
        load_changes(settings.models.folder),
    )
    with (
        stages.stage("reading") as said,
        closing(Store(settings.store.data, settings.store.url)) as store,
    ):
        n_rows = store.n_rows(store.newest(settings.history.days))
        with Progress("reading records", n_rows) as progress:
            chosen = choose(store, job.table, wanted, progress, folder)
        n_held = sum(chosen.held.report.n_records.values())
        said += [
            f"{chosen.n_records} records of {len(chosen.learning.sources)} sources to learn from",
            f"{n_held} to judge by",
            f"{sum(chosen.left_out.values())} left out of everything",
            f"{chosen.n_in_alert} in unlabelled alert",
        ]
    with chosen:
        yield chosen


@contextmanager
def _bar(chosen: Chosen) -> Iterator[Progress]:
    with Progress("learning", len(chosen.learning.sources) + 1) as progress:
        yield progress


def _read(kept: Kept | None, tell: Tell) -> Model | None:
    if kept is None:
        return None
    try:
        return read_model(kept.path)
    except BadArtefact as error:
        tell(f"the model in use is no measure: {error}")
        return None


class Witnesses:
    """Kept models, oldest first, read when they are asked for; damaged ones are passed over."""

    def __init__(self, kept: tuple[Kept, ...]) -> None:
        self._kept = list(kept)
        self._read: list[Witness] = []

    def __iter__(self) -> Iterator[Witness]:
        yield from self._read
        while self._kept:
            kept = self._kept.pop(0)
            try:
                witness = Witness(
                    f"{kept.name} of {kept.published:%Y-%m-%d}", read_model(kept.path)
                )
            except BadArtefact:
                continue
            self._read.append(witness)
            yield witness


def _prepare(
    models: KeptModels, learned: LearnResult | None, judgement: Judgement, now: datetime
) -> str:
    """Write the model beside the others, with the judge's numbers; return its name."""
    assert learned is not None, "what was not learned cannot pass"
    about = {
        **learned.model.about,
        "created_timestamp_seconds": now.timestamp(),
        "judge": judgement.numbers,
    }
    return models.prepare(replace(learned.model, about=about)).name


def _note(
    job: Job, night: Night, models: KeptModels, stages: Stages, learned: LearnResult | None
) -> None:
    """Write the night's numbers for Prometheus, if the site wants them."""
    if not job.settings.report.metrics:
        return
    chosen = night.chosen
    figures = {
        "records": ("Records learned from.", float(chosen.n_records)),
        "sources": ("Sources learned from.", float(len(chosen.learning.sources))),
        "left_out_records": (
            "Records left out of everything.", float(sum(chosen.left_out.values())),
        ),
    }  # fmt: skip
    if learned is not None:
        share = left_out_share(learned)
        figures["left_out_ratio"] = ("Share of records left out of the tables.", share)
        if night.judgement.own_nats is not None:
            text = "The new model's surprise at the judge's days, nats a reading."
            figures["held_out_nats_per_reading"] = (text, night.judgement.own_nats)
    answers = [(one.name, one.passed, one.number) for one in night.judgement.answers]
    current = models.current()
    _write(job, night.verdict, night.at, stages.total_s, current, figures, answers)


def _write(
    job: Job,
    verdict: str,
    at: datetime,
    seconds: float,
    current: Kept | None,
    figures: dict[str, tuple[str, float]] | None = None,
    answers: list[tuple[str, bool, float | None]] | None = None,
) -> None:
    published_s = current.published.timestamp() if current else None
    text = night_metrics(
        verdict, at.timestamp(), seconds, published_s, figures or {}, answers or []
    )
    write_metrics(Path(job.settings.report.metrics), text)


def _line(answer: Answer) -> str:
    verdict = "passed" if answer.passed else "REFUSED"
    return f"  {answer.name}: {verdict}. {answer.sentence}"


def _note_failure(job: Job | None) -> None:
    """Leave the failure in the numbers; nothing more may go wrong over it."""
    if job is None or not job.settings.report.metrics:
        return
    try:
        current = KeptModels(job.settings.models.folder).current()
        _write(job, FAILED, datetime.now(UTC), 0.0, current)
    except OSError as error:
        click.echo(f"the numbers of this night could not be written: {error}", err=True)


@click.command("nightly")
@click.option(
    "--config",
    required=True,
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Settings, as in config/nightly.toml.",
)
@cluster_option
def nightly_command(config: Path, cluster: str | None) -> None:
    """Learn from the stored records of the last weeks, judge the model, and put it into use.

    Ends with 0 if it was published, 1 if the judge refused it, 3 if the job failed.
    """
    job = None
    try:
        job = read_job(config)
        with cluster_at(cluster) as hands:
            outcome = run_night(job, lambda: datetime.now(UTC), click.echo, hands)
    except BusyModels as error:
        # The other job writes the night's numbers.
        raise Failed(str(error)) from None
    except OddbranchError as error:
        _note_failure(job)
        raise Failed(str(error)) from None
    except Exception as error:  # noqa: BLE001 - whatever it was, a timer must see "failed"
        _note_failure(job)
        traceback.print_exc()
        raise Failed(f"the job ended early: {error!r}; the model in use goes on") from None
    if outcome.verdict == REFUSED:
        named = "; ".join(f"{one.name}: {one.sentence}" for one in outcome.judgement.refusals)
        raise Refused(f"refused, and the model in use goes on. {named} Report: {outcome.page}")
