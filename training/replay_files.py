"""The outcome of a replay as CSV files, for a spreadsheet or the next program.

alerts.csv: every alert. incidents.csv: what became of each. levels.csv: the sweep.
methods.csv: the comparison, each method's sweep included. days.csv: alerts by day.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np

from scoring.alerts import Alert, time_text
from training.judging import DAY_NS, Sum
from training.replayed import LevelRow, Replayed
from training.report.page import BadReport

ALERTS = (
    "raised", "cleared", "source", "kind", "likely", "level", "worst", "worst_excess", "suspect",
    "reading", "expected_low", "expected_high", "second", "third", "suspect_at_first", "in_budget",
    "sentence",
)  # fmt: skip
INCIDENTS = (
    "source", "start", "end", "kind", "size", "channels", "caught", "raised", "delay_s", "suspect",
    "right_in_first", "right_in_three", "right_at_first",
)  # fmt: skip
LEVELS = (
    "record_level", "sustained_level", "alerts_per_day", "false_per_day", "incidents", "caught",
    "median_delay_s", "time_share", "false_time_share", "of_the_model",
)  # fmt: skip


def write_files(done: Replayed, at_first: dict[str, str], folder: Path) -> None:
    """Write all files; raises BadReport for a folder that cannot be written."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        _write(folder / "alerts.csv", ALERTS, (_alert(a, at_first) for a in done.alerts))
        if done.known:
            _write(folder / "incidents.csv", INCIDENTS, _incidents(done))
        _write(folder / "levels.csv", LEVELS, (_level(row) for row in done.rows))
        if done.methods:
            _write(folder / "methods.csv", ("method", "choice", *LEVELS[2:-1]), _methods(done))
        first = min(first for first, _ in done.spans.values())
        days = ((_text(first + k * DAY_NS), n) for k, n in enumerate(done.by_day.tolist()))
        _write(folder / "days.csv", ("from", "alerts"), days)
    except OSError as error:
        raise BadReport(str(folder), f"cannot be written: {error.strerror}") from None


def _write(path: Path, heading: Sequence[str], rows: Iterable[Sequence[object]]) -> None:
    with path.open("w", encoding="utf-8", newline="") as file:
        out = csv.writer(file, lineterminator="\n")
        out.writerow(heading)
        out.writerows([_cell(cell) for cell in row] for row in rows)


def _cell(value: object) -> object:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:.6g}" if math.isfinite(value) else ""
    return value


def _text(time_ns: int | None) -> str:
    return "" if time_ns is None else time_text(time_ns)


def _alert(alert: Alert, at_first: dict[str, str]) -> tuple[object, ...]:
    suspect = alert.suspects[0] if alert.suspects else None
    named = [one.channel for one in alert.suspects] + ["", "", ""]
    return (
        _text(alert.raised_ns),
        _text(alert.cleared_ns),
        alert.source,
        alert.kind,
        alert.likely,
        alert.level,
        _text(alert.worst_ns),
        alert.worst_excess,
        named[0] or "|".join(alert.channels),
        suspect.reading if suspect else None,
        suspect.low if suspect else None,
        suspect.high if suspect else None,
        named[1],
        named[2],
        at_first.get(alert.id, ""),
        alert.in_budget,
        alert.sentence,
    )


def _incidents(done: Replayed) -> Iterable[tuple[object, ...]]:
    for finding in done.verdict.findings:
        one, call = finding.incident, finding.call
        yield (
            one.source,
            _text(one.start_ns),
            _text(one.end_ns),
            one.kind,
            one.size,
            "|".join(one.channels),
            call is not None,
            _text(call.raised_ns) if call else "",
            finding.delay_s,
            call.suspects[0] if call and call.suspects else "",
            finding.right_in(1),
            finding.right_in(3),
            finding.right_at_first,
        )


def _level(row: LevelRow) -> tuple[object, ...]:
    total = Sum.of(row.verdict.findings)
    return (
        row.record,
        row.sustained,
        row.verdict.alerts_per_day,
        row.verdict.false_per_day,
        total.n,
        total.n_caught,
        total.delay_s,
        row.time_share,
        row.verdict.false_share,
        row.is_model,
    )


def _methods(done: Replayed) -> Iterable[tuple[object, ...]]:
    for method in done.methods:
        row = LevelRow(np.nan, np.nan, method.verdict, method.time_share)
        yield (method.name, method.how, *_level(row)[2:-1])
    for name, rows in done.curves.items():
        for row in rows:
            yield (name, "sweep", *_level(row)[2:-1])
