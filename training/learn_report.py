"""The report on learning: one page that says what a model holds and what to expect of it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Final

from scoring.model import Model
from training.levels import Curve
from training.members import LEAST_OWN_RECORDS, Learned
from training.promise import Promise
from training.promise_picture import promise_picture
from training.promise_words import doubt_lines, interval_words, main_lines
from training.report.heldsections import (
    block_section,
    coverage_section,
    covered_channels,
    trouble_section,
    worst_section,
)
from training.report.page import Section, bullets, facts, html_page, paragraph, table, warning
from training.report.readings import count_text, day_text, percent_text
from training.report.treesections import bin_section, choice_section, tree_section

# Rows of the table of sources.
MOST_SOURCES: Final = 80
# Sources named in a sentence.
_MOST_NAMED: Final = 20


def learn_page(
    model: Model,
    learned: Mapping[str, Learned],
    curve: Curve | None,
    promise: Promise | None,
    sources: Sequence[str],
    history: Sequence[str],
    seconds: float,
) -> str:
    """Return the whole page.

    learned: the sources with a member of their own; curve, promise: of their levels, None
    without any. sources: all there were. history: what came of reading it, in sentences.
    seconds: how long learning took.
    """
    sections: list[Section | None] = [_levels_section(promise)]
    if learned:
        sections += [
            trouble_section(learned, curve, model.levels.step_s),
            worst_section(model.table, learned),
            coverage_section(model.table, learned),
            block_section(learned),
        ]
    sections.append(tree_section(model.table, learned, model.fleet))
    if learned:
        sections += [bin_section(model.table, learned), choice_section(learned)]
    sections += [
        _sources_section(model, learned, sources),
        Section("What was read", (bullets(history),)),
    ]
    name = model.name
    return html_page(
        f"What was learned: model {name}",
        _lead(model, promise, sources),
        [section for section in sections if section is not None],
        f"Model {name}, learned in {seconds:.0f} s by oddbranch learn.",
    )


def _lead(model: Model, promise: Promise | None, sources: Sequence[str]) -> str:
    about = model.about
    first, last = (day_text(int(about[key])) for key in ("first_ns", "last_ns"))
    n = len(sources)
    read = (
        f"{count_text(about['n_records'])} records of {n} source{'' if n == 1 else 's'}, "
        f"{first} to {last}."
    )
    if promise is None:
        return f"{read} No source has history enough for levels: no alert will be raised."
    week = interval_words(*promise.interval(7))
    return (
        f"{read} Expect {promise.per_day():.2f} alerts a day over the sources with levels, "
        f"{week} in a week."
    )


def _levels_section(promise: Promise | None) -> Section:
    title = "Levels and what they promise"
    if promise is None:
        text = f"No source has {LEAST_OWN_RECORDS} records, so no level could be set."
        return Section(title, (warning(text),))
    strip = facts(
        {
            "level on excess, nats": f"{promise.record:.1f}",
            "level on sustained, nats": f"{promise.sustained:.1f}",
            "expected alerts a day": f"{promise.per_day():.2f}",
            "asked for, a day": f"{promise.alerts_per_day:.3g}",
        }
    )
    rows = [
        (f"{b.alerts_per_day:.3g}", f"{b.record:.1f}", f"{b.sustained:.1f}", f"{b.expected:.2f}",
         count_text(b.n_seen), percent_text(b.time_share, 2))
        for b in promise.budgets
    ]  # fmt: skip
    heading = ("alerts a day", "excess", "sustained", "expected a day", "seen", "time in alert")
    text = "What other budgets would bring, levels in nats; seen: alerts in held-out time."
    doubts = doubt_lines(promise)
    return Section(
        title,
        (
            strip,
            bullets(main_lines(promise)),
            paragraph("What makes this promise weak:") + bullets(doubts) if doubts else "",
            promise_picture(promise),
            paragraph(text),
            table(heading, rows, words=()),
        ),
    )


def _sources_section(
    model: Model, learned: Mapping[str, Learned], sources: Sequence[str]
) -> Section:
    pieces = []
    order = sorted(learned, key=lambda source: -learned[source].held_out.density)
    if len(order) > MOST_SOURCES:
        pieces.append(
            paragraph(
                f"Shown are the {MOST_SOURCES} of {len(order)} sources with the highest "
                "held-out surprise."
            )
        )
    shown = set(order[:MOST_SOURCES])
    if learned:
        heading = (
            "source", "tables", "records", "from", "to", "trees", "edges", "bins",
            "held out", "nats a record", "in interval",
        )  # fmt: skip
        rows = [
            _source_row(model, source, learned[source]) for source in learned if source in shown
        ]
        text = (
            "Shared tables take their structure and correlations from the fleet, where that made "
            "held-out records less surprising; bins and counts stay the source's. "
            f"{_regime_words(model, learned)}Held out: records scored by tables that had not "
            "seen them, and their mean surprise. In interval: the share of readings that lay "
            "where they were expected."
        )
        shown_table = table(heading, rows, words=(0, 1, 3, 4), whole=(0, 1, 3, 4), wide=True)
        pieces += [paragraph(text), shown_table]
    without = [source for source in sources if source not in learned]
    if without:
        named = ", ".join(without[:_MOST_NAMED])
        more = f" and {len(without) - _MOST_NAMED} more" if len(without) > _MOST_NAMED else ""
        pieces.append(
            paragraph(
                f"Without a member of their own, because they have fewer than "
                f"{LEAST_OWN_RECORDS} records: {named}{more}. They, and any source never seen, "
                "are scored by the fleet's member."
            )
        )
    else:
        pieces.append(paragraph("A source never seen is scored by the fleet's member."))
    return Section("Sources: own and shared members", tuple(pieces))


def _regime_words(model: Model, learned: Mapping[str, Learned]) -> str:
    names = model.table.names
    by = {names[node] for one in learned.values() if one.density.regimes
          for node in one.density.regime}  # fmt: skip
    if not by:
        return ""
    return f"More than one tree: chosen by the state of {' and '.join(sorted(by))}. "


def _source_row(model: Model, source: str, one: Learned) -> tuple[str, ...]:
    about = model.members[source].about
    first, last = (day_text(int(about[key])) for key in ("first_ns", "last_ns"))
    density = one.density
    covered = covered_channels(model.table, {source: one})
    n, inside = sum(c.n for c in covered), sum(c.n_inside for c in covered)
    return (
        source,
        model.members[source].tables,
        count_text(density.plain.n_records),
        first,
        last,
        str(len(density.regimes) + 1),
        str(len(density.plain.edges)),
        str(density.plain.choice.n_bins),
        count_text(one.held_out.n_scored),
        f"{one.held_out.density:.2f}",
        percent_text(inside / n) if n else "",
    )
