"""The outcome of a replay as a page: what it costs, what it catches, where else to set it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from scoring.alerts import ADVICE, time_text
from training.judging import Finding, Sum
from training.promise_words import doubt_lines, main_lines
from training.replay_pictures import (
    MOST_SOURCES,
    caught_picture,
    days_picture,
    levels_picture,
    timeline_picture,
)
from training.replay_words import (
    GROUP_HEADING,
    METHOD_HEADING,
    burden_line,
    duration,
    group_rows,
    incident_lines,
    method_cells,
    other_lines,
    promise_line,
)
from training.replayed import LevelRow, Replayed
from training.report.page import (
    Section,
    bullets,
    facts,
    html_page,
    paragraph,
    table,
    warning,
)

# Rows of a table that a person still reads.
_MOST_ALERTS: Final = 60
_MOST_LEVELS: Final = 40


def replay_page(done: Replayed, records: str) -> str:
    """Return the whole page. records: how the records were named on the command line."""
    first = min(first for first, _ in done.spans.values())
    last = max(last for _, last in done.spans.values())
    sections = [_burden(done), _timeline(done)]
    if done.known:
        sections += [_incidents(done), _kinds(done)]
    sections.append(_levels(done))
    if done.methods:
        sections.append(_methods(done))
    sections += [_alerts(done)]
    if done.known:
        sections.append(_missed(done))
    lead = burden_line(done) + "."
    if done.known:
        lead += f" {incident_lines(done)[0]}."
    made = (
        f"Replay of {records}: {done.n_records} records of {len(done.spans)} sources from "
        f"{time_text(first)} to {time_text(last)} under model {done.model.name}."
    )
    return html_page("What the alerts would have been", lead, sections, made)


def _burden(done: Replayed) -> Section:
    verdict, total = done.verdict, Sum.of(done.verdict.findings)
    named = {
        "alerts a day": f"{verdict.alerts_per_day:.2f}",
        "promised a day": f"{done.promise.per_day(verdict.n_sources):.2f}" if done.promise else "-",
        "time in alert": f"{done.time_share:.2%}",
    }
    if done.known:
        named |= {
            "false a day": f"{verdict.false_per_day:.2f}",
            "time in false alerts": f"{verdict.false_share:.2%}",
            "caught": f"{total.n_caught} of {total.n}",
            "right suspect": f"{total.n_first} of {total.n_caught}",
            "median delay": duration(total.delay_s),
        }
    pieces = [facts(named)]
    line = promise_line(done)
    if line:
        pieces.append(warning(line + ".") if "more than" in line else paragraph(line + "."))
    pieces.append(days_picture(done))
    pieces.append(bullets(line + "." for line in other_lines(done)))
    if done.promise:
        said = [*main_lines(done.promise), *doubt_lines(done.promise)]
        pieces += [paragraph("What the model had promised:"), bullets(line + "." for line in said)]
    return Section("The burden", tuple(pieces))


def _timeline(done: Replayed) -> Section:
    left = len(done.spans) - MOST_SOURCES
    more = [paragraph(f"{left} more sources are not shown.", quiet=True)] if left > 0 else []
    return Section("Over time", (timeline_picture(done), *more))


def _incidents(done: Replayed) -> Section:
    sentences = bullets(line + "." for line in incident_lines(done))
    by_size = table(("size", *GROUP_HEADING[1:]), group_rows(done, "size"))
    return Section("What would have been caught", (sentences, caught_picture(done), by_size))


def _kinds(done: Replayed) -> Section:
    by_kind = table(("kind", *GROUP_HEADING[1:]), group_rows(done, "kind"))
    return Section("By kind", (by_kind,))


def _levels(done: Replayed) -> Section:
    heading = ["excess", "sustained", "alerts a day"]
    if done.known:
        heading += ["false a day", "caught", "median delay"]
    heading += ["in false alerts" if done.known else "time in alert", ""]
    cells = [_level_cells(row, with_incidents=bool(done.known)) for row in _thinned(done.rows)]
    rows = table(heading, cells, words=(len(heading) - 1,), caption="Strict to loose; nats.")
    return Section("Other levels", (levels_picture(done), rows))


def _thinned(rows: Sequence[LevelRow]) -> list[LevelRow]:
    """Return at most so many rows, the model's among them."""
    every = max(1, len(rows) // _MOST_LEVELS)
    return [row for k, row in enumerate(rows) if row.is_model or k % every == 0]


def _level_cells(row: LevelRow, *, with_incidents: bool) -> list[str]:
    cells = [f"{row.record:.1f}", f"{row.sustained:.1f}", f"{row.verdict.alerts_per_day:.2f}"]
    if with_incidents:
        total = Sum.of(row.verdict.findings)
        cells += [
            f"{row.verdict.false_per_day:.2f}",
            f"{total.n_caught} of {total.n}",
            duration(total.delay_s),
        ]
    share = row.verdict.false_share if with_incidents else row.time_share
    return [*cells, f"{share:.2%}", "the model's" if row.is_model else ""]


def _methods(done: Replayed) -> Section:
    rows = [method_cells(row) for row in done.methods]
    said = paragraph(
        "Operating limits and PCA are fitted on the history that was given, source by source, and "
        "get two levels like ours: on a record's score and on its weighted mean over time.",
        quiet=True,
    )
    return Section(
        "Beside operating limits and PCA",
        (table(METHOD_HEADING, rows, words=(0, 1)), said, *_wins(done)),
    )


def _wins(done: Replayed) -> str:
    """Return what other methods caught and ours missed; it is said, not hidden."""
    lines = []
    for method in done.methods[1:]:
        if method.own_levels:
            continue
        both = zip(method.verdict.findings, done.verdict.findings, strict=True)
        only = [theirs.incident for theirs, own in both if theirs.call and not own.call]
        if only:
            kinds = ", ".join(sorted({one.kind for one in only}))
            lines.append(f"{method.name} caught {len(only)} that ours missed: {kinds}.")
    return bullets(lines)


def _alerts(done: Replayed) -> Section:
    shown = sorted(done.alerts, key=lambda a: -(a.worst_excess or 0.0))[:_MOST_ALERTS]
    rows = [
        (time_text(alert.raised_ns), alert.sentence.removesuffix(ADVICE).strip()) for alert in shown
    ]
    title = f"The alerts, worst first ({len(shown)} of {len(done.alerts)})"
    return Section(title, (table(("raised", "what it says"), rows, words=(0, 1)),))


def _missed(done: Replayed) -> Section:
    missed: list[Finding] = [f for f in done.verdict.findings if f.call is None]
    missed.sort(key=lambda f: -(f.incident.size or 0.0))
    rows = [
        (
            time_text(f.incident.start_ns),
            f.incident.source,
            f.incident.kind,
            f"{f.incident.size:.2f}" if f.incident.size is not None else "",
            ", ".join(f.incident.channels[:4]),
        )
        for f in missed[:_MOST_ALERTS]
    ]
    heading = ("start", "source", "kind", "size", "channels")
    title = f"Missed incidents, largest first ({len(rows)} of {len(missed)})"
    return Section(title, (table(heading, rows, words=(0, 1, 2, 4)),))
