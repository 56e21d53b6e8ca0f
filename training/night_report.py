"""One night as a page and as data: the verdict first, then what it rests on."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from datetime import datetime
from typing import Any, Final

from scoring.model import Levels, Model
from training.changes import change_line
from training.chosen import Chosen
from training.feedback import ChannelFeedback, budget_advice, feedback
from training.judge import Judgement, left_out_share
from training.judge_answers import Answer
from training.judge_drill import Smallest
from training.judge_runaway import Residual
from training.learn import LearnResult
from training.night_metrics import PUBLISHED
from training.promise_words import main_lines
from training.report.page import (
    ADVICE,
    Section,
    bullets,
    facts,
    html_page,
    paragraph,
    side_by_side,
    table,
    warning,
)
from training.report.readings import count_text, time_text
from training.report.treepicture import draw_tree
from training.trouble_words import trouble_words

REPORT_FORMAT: Final = 1
# Rows of tables that could grow with the fleet.
_MOST_ROWS: Final = 40
_MOST_RESIDUALS: Final = 15
_TREE_LEGEND: Final = (
    "Every line is an edge, as wide as its nats; the number behind a name is that of the edge to "
    "its left. Circles are measurements, squares states, diamonds derived channels."
)


@dataclass(frozen=True)
class Night:
    """What a report tells of. model: the new one's name; "" where none was learned.

    before: the model in use until now, and its name.
    """

    verdict: str
    at: datetime
    chosen: Chosen
    judgement: Judgement
    learned: LearnResult | None
    model: str
    before: Model | None
    before_name: str
    seconds: float

    @property
    def is_same(self) -> bool:
        """Whether the new model is the one in use until now, and that one is whole."""
        return self.before is not None and self.model == self.before_name


def night_page(night: Night) -> str:
    """Return the whole page."""
    day = night.at.strftime("%Y-%m-%d")
    sections = [_answers(night.judgement.answers), _history(night)]
    if night.learned is not None:
        sections.append(_levels(night.learned, night.before))
        sections += _trees(night, night.learned)
        sections += [_drill(night.judgement.smallest), _neighbours(night.judgement.residuals)]
    sections.append(_people(feedback(night.chosen.alerts)))
    made = f"oddbranch nightly, {night.at.strftime('%Y-%m-%d %H:%M')} UTC, {night.seconds:.0f} s."
    return html_page(f"Night of {day}: {night.verdict}", lead(night), sections, made)


def lead(night: Night) -> str:
    """Return the verdict in a sentence or two."""
    n = len(night.judgement.answers)
    instead = f" instead of {night.before_name}" if night.before_name else ", the first one"
    if night.is_same:
        instead = " as before: the records gave the same one again, so no further copy is kept"
    elif night.before_name == night.model:
        instead = " instead of a damaged copy of it"
    if night.verdict == PUBLISHED:
        return f"Model {night.model} is in use{instead}. All {n} questions were passed."
    against = night.judgement.refusals
    named = ", ".join(one.name for one in against)
    goes_on = f"Model {night.before_name} goes on" if night.before_name else "No model is in use"
    return f"{goes_on}. Against the new one {'speaks' if len(against) == 1 else 'speak'}: {named}."


def _answers(found: Sequence[Answer]) -> Section:
    rows = [
        (one.name, "passed" if one.passed else "REFUSED", number_text(one.number),
         number_text(one.limit))
        for one in found
    ]  # fmt: skip
    against = "".join(warning(f"{one.name}: {one.sentence}") for one in found if not one.passed)
    pieces = (
        against,
        table(("question", "verdict", "number", "limit"), rows, words=(0, 1)),
        bullets(f"{one.name}: {one.sentence}" for one in found if one.passed),
    )
    return Section("The judge's questions", pieces)


def number_text(number: float | None) -> str:
    """Return a number in three digits, a count whole, and a dash for none."""
    if number is None:
        return "-"
    if abs(number) >= 1000 or number == int(number):
        return count_text(number)
    return f"{number:.3g}"


def _history(night: Night) -> Section:
    chosen = night.chosen
    report = chosen.learning.report
    first, last = report.first_ns, report.last_ns
    strip = facts(
        {
            "records learned from": count_text(chosen.n_records),
            "sources": str(len(report.n_records)),
            "from": time_text(first) if first is not None else "-",
            "to": time_text(last) if last is not None else "-",
            "records of the judge": count_text(sum(chosen.held.report.n_records.values())),
            "in unlabelled alert": count_text(chosen.n_in_alert),
        }
    )
    reasons = [(reason, count_text(n)) for reason, n in chosen.left_out.most_common()]
    pieces = [strip]
    if reasons:
        pieces.append(paragraph("Left out altogether, the judge's days included:"))
        pieces.append(table(("why", "records"), reasons))
    else:
        pieces.append(paragraph("No record was left out altogether."))
    pieces += [warning(line) for line in chosen.stray]
    pieces += [warning(unlabelled_words(chosen, s)) for s in chosen.unlabelled_for_long]
    stretches = _stretches(night)
    if stretches:
        pieces.append(paragraph(f"Left out of the tables, not of the levels: {_rates(night)}."))
        shown = [
            (source, time_text(start), time_text(end), why)
            for source, start, end, why in stretches[:_MOST_ROWS]
        ]
        heading = ("source", "from", "to", "why")
        pieces.append(table(heading, shown, words=(0, 1, 2, 3), whole=(0, 1, 2, 3)))
        if len(stretches) > _MOST_ROWS:
            pieces.append(paragraph(f"And {len(stretches) - _MOST_ROWS} more."))
    pieces.append(bullets(change_line(change) for change in chosen.changes))
    problems = [f"{n} rows rejected: {why}" for why, n in report.rejected.most_common()]
    for what, counter in (
        ("outside the span", report.outside_span),
        ("unknown words", report.unknown_words),
        ("of bad quality", report.bad_quality),
    ):
        problems += [f"{channel}: {n} readings {what}" for channel, n in counter.most_common()]
    pieces.append(bullets(problems[:_MOST_ROWS]))
    return Section("What was learned from, and what was left out", tuple(pieces))


def unlabelled_words(chosen: Chosen, source: str) -> str:
    """Return what to do about a source that is in alert and never learned from."""
    share = chosen.n_in_alert_of[source] / chosen.learning.report.n_records[source]
    return (
        f"{share:.0%} of {source} lie in alerts that nobody labelled, and are not learned. Label "
        "them: real leaves everything, nuisance is learned. A season that is never labelled stays "
        "an alert."
    )


def _stretches(night: Night) -> list[tuple[str, int, int, str]]:
    found = [
        (source, int(start), int(end), "in alert, not labelled")
        for source, own in night.chosen.in_alert.items()
        for start, end in own
        if start <= night.chosen.cut_ns
    ]
    if night.learned is not None:
        found += [
            (s.source, s.start_ns, s.end_ns, f"{s.peak:.0f} nats above the usual")
            for one in night.learned.learned.values()
            for s in one.left_out
        ]
    return sorted(found)


def _rates(night: Night) -> str:
    learned = night.learned
    if learned is None or learned.curve is None:
        return f"{night.chosen.n_in_alert} records"
    found = [stretch for one in learned.learned.values() for stretch in one.left_out]
    n_in_alert = sum(len(one.in_alert) for one in learned.learned.values())
    return trouble_words(found, learned.curve, n_in_alert)


def _levels(learned: LearnResult, before: Model | None) -> Section:
    now = learned.model.levels
    then = before.levels if before is not None else None
    rows = [
        (name, f"{then_value:.2f}" if then_value is not None else "-", f"{value:.2f}")
        for name, then_value, value in _level_rows(now, then)
    ]
    pieces = [table(("nats", "in use", "new"), rows)]
    if learned.promise is not None:
        pieces.append(bullets(main_lines(learned.promise)))
    return Section("Levels", tuple(pieces))


def _level_rows(now: Levels, then: Levels | None) -> list[tuple[str, float | None, float]]:
    names = {"record": "level on excess", "sustained": "level on sustained", "cap": "cap"}
    return [
        (text, getattr(then, name) if then is not None else None, getattr(now, name))
        for name, text in names.items()
    ]


def _trees(night: Night, learned: LearnResult) -> list[Section]:
    model, before = learned.model, night.before
    common = [s for s in model.members if before is not None and s in before.members]
    candidates = common or list(model.members)
    if not candidates:
        return []
    source = max(candidates, key=lambda s: learned.learned[s].density.plain.n_records)
    after = draw_tree(model.table, model.members[source].parts[-1].tree, "after")
    drawn = [(f"{source}, new", after.piece)]
    if before is not None and source in before.members:
        tree = before.members[source].parts[-1].tree
        drawn.insert(0, (f"{source}, in use", draw_tree(before.table, tree, "before").piece))
    pieces = [paragraph(_TREE_LEGEND, quiet=True), side_by_side(drawn)]
    change = night.judgement.tree
    if change is not None and change.changes:
        rows = [
            (one.source or "the fleet", one.left, one.right, "gained" if one.gained else "lost",
             f"{one.nats:.3f}")
            for one in sorted(change.changes, key=lambda one: -one.nats)[:_MOST_ROWS]
        ]  # fmt: skip
        heading = ("source", "channel", "channel", "edge", "nats")
        pieces.append(table(heading, rows, words=(0, 1, 2, 3), whole=(0, 1, 2, 3)))
        if len(change.changes) > _MOST_ROWS:
            pieces.append(paragraph(f"And {len(change.changes) - _MOST_ROWS} with fewer nats."))
    elif change is not None:
        pieces.append(paragraph("No source gained or lost an edge."))
    return [Section("The tree before and after", tuple(pieces))]


def _drill(found: Sequence[Smallest]) -> Section:
    title = "Smallest offset that is caught"
    if not found:
        return Section(title, (paragraph("No drill was run."),))
    rows = [
        (one.channel, _size(one.old, one.unit), _size(one.new, one.unit), f"{one.factor:.2f}")
        for one in found
    ]
    text = "Planted into the judge's days, caught in half of the trials; oddbranch drill tells all."
    return Section(
        title, (table(("channel", "in use", "new", "times"), rows), paragraph(text, quiet=True))
    )


def _size(size: float | None, unit: str) -> str:
    return "-" if size is None else f"{size:.3g} {unit}".strip()


def _neighbours(found: Sequence[Residual]) -> Section:
    title = "Channels against their neighbours, under the oldest kept model"
    if not found:
        return Section(title, (paragraph("No kept model could be asked."),))
    rows = [
        (one.source, one.channel, f"{one.apart:+.2f}", f"{one.tie:.2f}", f"{one.moved:+.2f}")
        for one in sorted(found, key=lambda one: -abs(one.apart))[:_MOST_RESIDUALS]
    ]
    moved = sorted(found, key=lambda one: -abs(one.moved))[:_MOST_RESIDUALS]
    text = (
        "Apart: middle distance of the judge's days from what the neighbours say, in spreads of "
        "what they leave open. Tie: those spreads as a share of the channel's own; near 1, the "
        "neighbours tell nothing. Moved: how far the channel's own middle moved, in own spreads; "
        "seasons do that, and are no fault."
    )
    seasons = [f"{one.channel} of {one.source} ({one.moved:+.1f})" for one in moved[:5]]
    heading = ("source", "channel", "apart", "tie", "moved")
    return Section(
        title,
        (
            table(heading, rows, words=(0, 1), whole=(0, 1)),
            paragraph(text, quiet=True),
            paragraph(f"Moved most by themselves: {', '.join(seasons)}."),
        ),
    )


def _people(found: Sequence[ChannelFeedback]) -> Section:
    title = "What people said of alerts"
    if not found:
        return Section(title, (paragraph("There was no alert in this time."),))
    rows = [
        (one.channel, str(one.nuisance), str(one.real), str(one.unlabelled),
         ", ".join(one.kinds) or "-", one.advice or "-")
        for one in found[:_MOST_ROWS]
    ]  # fmt: skip
    heading = ("first suspect", "nuisance", "real", "unlabelled", "nuisance kinds", "advice")
    pieces = [table(heading, rows, words=(0, 4, 5), whole=(0,), wide=True)]
    budget = budget_advice(found)
    if budget:
        pieces.append(warning(budget))
    return Section(title, tuple(pieces))


def _levels_data(levels: Levels) -> dict[str, Any]:
    return {**asdict(levels), "delays": levels.delays.model_dump()}


def night_data(night: Night) -> dict[str, Any]:
    """Return the same as plain data, for other programs and for the next night."""
    chosen, judgement, learned = night.chosen, night.judgement, night.learned
    report = chosen.learning.report
    data: dict[str, Any] = {
        "format": REPORT_FORMAT,
        "verdict": night.verdict,
        "sentence": lead(night),
        "at": night.at.strftime("%Y-%m-%dT%H:%M:%SZ"),
        "seconds": round(night.seconds, 1),
        "model": night.model,
        "before": night.before_name,
        "answers": [asdict(one) for one in judgement.answers],
        "history": {
            "first_ns": report.first_ns,
            "last_ns": report.last_ns,
            "judge_from_ns": chosen.cut_ns,
            "until_ns": chosen.window.until_ns,
            "n_records": report.n_records,
            "n_held": chosen.held.report.n_records,
            "left_out": dict(chosen.left_out),
            "rejected": dict(report.rejected),
            "left_out_of_tables": [
                {"source": s, "start_ns": a, "end_ns": b, "why": why}
                for s, a, b, why in _stretches(night)
            ],
            "changes": [asdict(change) for change in chosen.changes],
        },
        "feedback": [asdict(one) for one in feedback(chosen.alerts)],
        "advice": ADVICE,
    }
    if learned is not None:
        curve = learned.curve
        data |= {
            "left_out_share": left_out_share(learned),
            "levels": _levels_data(learned.model.levels),
            "levels_before": _levels_data(night.before.levels) if night.before else None,
            "alerts_seen": None if curve is None else int(curve.seen[curve.chosen]),
            "alerts_seen_without_left_out": None if curve is None else curve.seen_without,
            "source_days": None if curve is None else curve.source_days,
            "tree": [asdict(one) for one in judgement.tree.changes] if judgement.tree else [],
            "drill": [asdict(one) for one in judgement.smallest],
            "neighbours": [asdict(one) for one in judgement.residuals],
            "density": asdict(judgement.compared) if judgement.compared else None,
            "judge_alerts": judgement.n_alerts,
        }
    return data
