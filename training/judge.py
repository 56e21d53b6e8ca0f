"""The judge: may the new model replace the one in use?

Held against each other are the new model, the one in use, and as a witness the oldest
kept one, on days that the new model was not learned from. Where the site declared a
change of plant, models from before it are no measure for the sources it touched.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np

from scoring.model import Model
from training import judge_answers as answers
from training.changes import Change, since
from training.chosen import HOUR_NS, Chosen
from training.hands import HERE, Hands
from training.history.batch import HistoryBatch
from training.history.spool import Spool
from training.history.tally import Tally
from training.intervals import count_to_come
from training.judge_answers import Answer
from training.judge_cover import (
    TreeChange,
    both_own,
    readings_covered,
    spans_covered,
    tree_change,
)
from training.judge_density import Compared, as_read_by, compared
from training.judge_drill import (
    Quiet,
    Smallest,
    drill_both,
    drilled_sources,
    smallest,
    worst,
)
from training.judge_runaway import Residual
from training.judge_source import Asked, Told, only, tell
from training.judging import DAY_NS
from training.learn import LearnResult
from training.members import LEAST_OWN_RECORDS
from training.nightly_settings import HistoryWanted, JudgeLimits


@dataclass(frozen=True)
class Judgement:
    """What the judge found; the rest is for the report.

    smallest: offsets of the drill. residuals: of all sources under their witness. own_nats:
    the new model's surprise on the judge's days, nats a reading.
    """

    answers: tuple[Answer, ...]
    tree: TreeChange | None = None
    smallest: tuple[Smallest, ...] = ()
    residuals: tuple[Residual, ...] = ()
    compared: Compared | None = None
    n_alerts: int = 0
    own_nats: float | None = None

    @property
    def refusals(self) -> tuple[Answer, ...]:
        """The answers that speak against publishing."""
        return tuple(one for one in self.answers if not one.passed)

    @property
    def passed(self) -> bool:
        """Whether nothing speaks against publishing."""
        return not self.refusals

    @property
    def numbers(self) -> dict[str, float | None]:
        """The answers' numbers by name."""
        return {one.name: one.number for one in self.answers}


@dataclass(frozen=True)
class Witness:
    """A kept model that may speak of some sources. name: for people."""

    name: str
    model: Model


@dataclass(frozen=True)
class Case:
    """What the judge looks at. witnesses: kept models, oldest first.

    left_out_before: the share left out of the tables the night before.
    folder: for temporary files. hands: who looks at the sources.
    """

    chosen: Chosen
    learned: LearnResult
    in_use: Model | None
    witnesses: Iterable[Witness]
    limits: JudgeLimits
    left_out_before: float | None
    folder: Path
    hands: Hands = HERE

    @property
    def new(self) -> Model:
        """The model to judge."""
        return self.learned.model

    @property
    def changes(self) -> tuple[Change, ...]:
        """The changes of plant that the site declared."""
        return self.chosen.changes

    @property
    def block_ns(self) -> int:
        """The blocks of time that are drawn anew."""
        return round(self.limits.block_h * HOUR_NS)


def enough(chosen: Chosen, wanted: HistoryWanted) -> list[Answer]:
    """Return the answers that need no model: is there enough to learn from?"""
    report = chosen.learning.report
    n_own = sum(n >= LEAST_OWN_RECORDS for n in report.n_records.values())
    return [
        answers.at_least("records", chosen.n_records, wanted.least_records, "records"),
        answers.at_least("hours", chosen.hours, wanted.least_hours, "hours with a record"),
        answers.at_least(
            "sources", n_own, wanted.least_sources,
            f"sources with {LEAST_OWN_RECORDS} records or more",
        ),
    ]  # fmt: skip


def judge(case: Case, first: Sequence[Answer] = ()) -> Judgement:
    """Return the judgement. first: answers found before, which stand first."""
    limits = case.limits
    alike = [] if case.in_use is None else comparable(case.new, case.in_use, case.changes)
    spoke = {source: witness_of(case, source) for source in case.chosen.held.sources}
    told = _told(case, alike, spoke)
    hours = {hour for one in told for hour in one.hours.tolist()}
    found = [*first, _known_sources(case)]
    found.append(
        answers.at_least("judge's hours", len(hours), limits.least_hours, "hours to judge by")
    )
    n_alerts, alert_answer = _alerts(case, told)
    residuals, run_away = _run_away(case, told, spoke)
    own = compared([one.own for one in told])
    own_nats = own.new if own is not None else None
    share = left_out_share(case.learned)
    left_out = answers.left_out(share, case.left_out_before, limits.most_left_out_growth)
    if case.in_use is None:
        offsets, drilled = _drill(case, None)
        found += [alert_answer, drilled, run_away, left_out]
        return Judgement(tuple(found), None, offsets, residuals, None, n_alerts, own_nats)
    both = compared([one.compared for one in told if one.compared is not None])
    tree = tree_change(case.new, case.in_use, alike) if alike else None
    offsets, drilled = _drill(case, case.in_use if alike else None)
    found += [
        _readings(case, case.in_use, alike),
        answers.covered(
            "spans", spans_covered(case.new, case.in_use, alike), limits.least_span, "range"
        ),
        answers.density(both, limits.density_slack_nats),
        alert_answer,
        drilled,
    ]
    if tree is not None:
        found.append(answers.tree(tree, limits.most_tree_change))
    found += [run_away, left_out]
    return Judgement(tuple(found), tree, offsets, residuals, both, n_alerts, own_nats)


def comparable(new: Model, old: Model, changes: Sequence[Change]) -> list[str]:
    """Return the sources of both whose old member is not from before a declared change."""
    return [source for source in both_own(new, old) if is_after(old, source, changes)]


def _told(case: Case, alike: Sequence[str], spoke: dict[str, Witness | None]) -> list[Told]:
    """Return what is found at each source with a record on the judge's days, in their order."""
    held = case.chosen.held
    if not held.sources:
        return []
    case.hands.must_see(case.folder)
    until_ns = max(held.first_last_ns(source)[1] for source in held.sources)
    asked = [
        Asked(
            source,
            held.only((source,)),
            only(case.new, source),
            only(case.in_use, source) if case.in_use is not None and source in alike else None,
            learned_until(case.in_use, source),
            only(witness.model, source) if witness is not None else None,
        )
        for source, witness in spoke.items()
    ]
    work = partial(tell, block_ns=case.block_ns, until_ns=until_ns, folder=case.folder)
    return list(case.hands.each(work, asked))


def learned_until(model: Model | None, source: str) -> int:
    """Return the last time that a source's member learned from, -1 if that is not known.

    A model that was learned by hand may know the judge's days; what it knows is no measure.
    """
    if model is None or source not in model.members:
        return -1
    last_ns = model.members[source].about.get("last_ns")
    return -1 if last_ns is None else int(last_ns)


def is_after(model: Model, source: str, changes: Sequence[Change]) -> bool:
    """Return whether a source's member was learned only from after its last change."""
    change = since(changes, source)
    if change is None:
        return True
    first_ns = model.members[source].about.get("first_ns") if source in model.members else None
    return first_ns is not None and int(first_ns) >= change.since_ns


def left_out_share(learned: LearnResult) -> float:
    """Return the share of the records that the tables did not use."""
    return learned.curve.left_share if learned.curve is not None else 0.0


def _known_sources(case: Case) -> Answer:
    before = set(case.in_use.members) if case.in_use is not None else set()
    now = set(case.new.members)
    seen = {*case.chosen.learning.sources, *case.chosen.held.sources}
    anew = [one for source in sorted(before - now) if (one := _anew(case, source)) is not None]
    before -= {one.source for one in anew}
    return answers.known_sources(
        sorted(before & now),
        sorted((before - now) & seen),
        sorted(before - now - seen),
        case.limits.least_known_sources,
        sorted(now - before),
        anew,
    )


def _anew(case: Case, source: str) -> answers.Anew | None:
    """Return what is to be said of a source that lost its member to a declared change alone.

    None where that is not why: no change since what the model in use learned, one before
    the window, or records enough since, which then are not quiet.
    """
    change, chosen = since(case.changes, source), case.chosen
    n = chosen.learning.report.n_records.get(source, 0)
    if (
        change is None
        or case.in_use is None
        or is_after(case.in_use, source, case.changes)
        or change.since_ns <= chosen.window.since_ns
        or n >= LEAST_OWN_RECORDS
    ):
        return None
    held_ns = chosen.window.until_ns - chosen.cut_ns
    learned_ns = round(LEAST_OWN_RECORDS * case.new.levels.step_s * 1e9)
    return answers.Anew(
        source, change.since_ns, change.reason, n, LEAST_OWN_RECORDS,
        change.since_ns + learned_ns + held_ns,
    )  # fmt: skip


def _readings(case: Case, old: Model, alike: Sequence[str]) -> Answer:
    found = answers.covered(
        "channels", readings_covered(case.new, old, alike), case.limits.least_readings, "readings"
    )
    mine, theirs = case.new.table.instruments, old.table.instruments
    came = [c for c in mine if c.name not in {o.name for o in theirs}]
    went = [o.name for o in theirs if o.name not in {c.name for c in mine}]
    said = answers.without_readings(came, went)
    return Answer(
        found.name, found.number, found.limit, found.passed, f"{found.sentence} {said}".strip()
    )


def _alerts(case: Case, told: Sequence[Told]) -> tuple[int, Answer]:
    confidence, promise = case.limits.alert_confidence, case.learned.promise
    if promise is None:
        sentence = "The new model has no levels: it would raise no alert at all."
        return 0, Answer("alerts", None, None, False, sentence)
    n = sum(one.n_alerts for one in told)
    step_s = case.new.levels.step_s
    source_days = sum(one.n_judged for one in told) * step_s * 1e9 / DAY_NS
    # Beyond the data fewer episodes were seen than the tail expects; the larger counts.
    count = max(float(promise.n_seen), promise.rate * promise.source_days)
    low, high = count_to_come(
        count, promise.source_days, max(source_days, 1e-9), promise.dispersion, confidence
    )
    return n, answers.alerts(n, math.floor(low), math.ceil(high), source_days, confidence)


def _drill(case: Case, old: Model | None) -> tuple[tuple[Smallest, ...], Answer]:
    limits = case.limits
    if not limits.drill_trials:
        return (), Answer("drill", None, limits.drill_factor, True, "Switched off by the site.")
    wanted = (limits.drill_trials, limits.drill_within)
    sources = drilled_sources(case.chosen.held.sources, limits.drill_trials)
    held = case.chosen.held.only(sources)
    mine = Quiet.of(case.new, held, *wanted)
    if isinstance(mine, str):
        # A model that is in alert all the time fails by its alerts, not by this.
        sentence = f"No drill with the new model: {mine}."
        return (), Answer("drill", None, limits.drill_factor, True, sentence)
    alone = answers.NOTHING_IN_USE
    if case.in_use is not None:
        alone = "The one in use is from before a change of plant, and no measure."
    both = None
    if old is not None:
        with respooled(case, old, held) as spool:
            theirs = Quiet.of(old, spool, *wanted)
        both = None if isinstance(theirs, str) else drill_both(mine, theirs)
        alone = "Too few stretches are quiet to both models."
    new, other = both if both is not None else (mine.drilled(), None)
    found = smallest(new, other)
    answer = answers.drill(found, worst(found), limits.drill_factor, new.n_trials, alone)
    return tuple(found), answer


def respooled(case: Case, old: Model, held: Spool) -> Spool:
    """Return records in the order of another model's instruments, to be closed."""
    spool, tally = Spool(len(old.table.instruments), case.folder), Tally()
    for source in held.sources:
        for times_ns, values in held.chunks(source):
            n = len(times_ns)
            spool.add(
                HistoryBatch(
                    Path(source), np.arange(n), times_ns, np.zeros(n, dtype=np.int32), (source,),
                    as_read_by(old, case.new, values), np.full(n, "", dtype=object),
                ),
                (),
                tally,
            )  # fmt: skip
    spool.finish(tally)
    return spool


def witness_of(case: Case, source: str) -> Witness | None:
    """Return the oldest kept model that may speak of a source."""
    return next((w for w in case.witnesses if _may_speak(w, source, case.changes)), None)


def _run_away(
    case: Case, told: Sequence[Told], spoke: dict[str, Witness | None]
) -> tuple[tuple[Residual, ...], Answer]:
    found = [residual for one in told for residual in one.residuals]
    names = [witness.name for witness in spoke.values() if witness is not None]
    unasked = [source for source, witness in spoke.items() if witness is None]
    limits = case.limits
    name = f"the oldest kept model, {names[0]}" if names else "no kept model"
    answer = answers.run_away(
        found, limits.run_away_spreads, limits.run_away_most_tie, name, unasked
    )
    return tuple(found), answer


def _may_speak(witness: Witness, source: str, changes: Sequence[Change]) -> bool:
    return source in witness.model.members and is_after(witness.model, source, changes)
