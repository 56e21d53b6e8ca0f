"""The outcome of a replay in words: for the terminal, and for the page's sentences."""

from __future__ import annotations

from collections.abc import Sequence

from scoring.sentences import lasting_text
from training.judging import Sum, grouped
from training.promise_words import interval_words
from training.replayed import MethodRow, Replayed

_DASH = "-"


def replay_lines(done: Replayed) -> list[str]:
    """Return the outcome for a person, the most important first."""
    lines = [burden_line(done), promise_line(done)]
    if done.known:
        lines += incident_lines(done)
    lines += other_lines(done)
    if done.methods:
        lines += ["beside it, with levels on a record's score and on its weighted mean as ours:"]
        lines += _table([METHOD_HEADING, *(method_cells(row) for row in done.methods)])
    if done.known:
        lines += ["by kind:"]
        lines += _table([GROUP_HEADING, *group_rows(done, "kind")])
        lines += ["by size:"]
        lines += _table([GROUP_HEADING, *group_rows(done, "size")])
    return [line for line in lines if line]


def burden_line(done: Replayed) -> str:
    """Return how many alerts there were, with limits."""
    verdict, (low, high) = done.verdict, done.per_day_limits
    return (
        f"{verdict.n_alerts} alerts in {verdict.source_days / verdict.n_sources:.1f} days of "
        f"{verdict.n_sources} source{'s' if verdict.n_sources != 1 else ''}: "
        f"{verdict.alerts_per_day:.2f} a day (95 % limits {low:.2f} to {high:.2f}), "
        f"{done.time_share:.2%} of the time in alert"
    )


def promise_line(done: Replayed) -> str:
    """Return whether the promise was kept; incidents are no part of a promise."""
    promise = done.promise
    if promise is None:
        return ""
    verdict = done.verdict
    days = verdict.quiet_days / verdict.n_sources
    low, high = promise.interval(days, verdict.n_sources)
    n = len(verdict.false)
    kept = "as promised" if n <= high else "more than promised"
    outside = " outside incidents" if done.known else ""
    return (
        f"{n} of them{outside} in {days:.1f} quiet days; promised were "
        f"{promise.per_day(verdict.n_sources) * days:.0f}, 95 % interval "
        f"{interval_words(low, high)}: {kept}"
    )


def incident_lines(done: Replayed) -> list[str]:
    """Return what became of the incidents in all."""
    total = Sum.of(done.verdict.findings)
    n, (low, high) = total.n_caught, total.caught_limits
    false_low, false_high = done.verdict.false_limits(done.dispersion)
    n = total.n_caught
    return [
        f"{n} of {total.n} incidents caught ({_percent(n, total.n)}, 95 % limits "
        f"{100 * low:.0f} to {100 * high:.0f} %), median delay {duration(total.delay_s)}, "
        f"nine in ten within {duration(total.late_s)}",
        f"of those caught the suspect was right in {_percent(total.n_first, n)}, among the first "
        f"three in {_percent(total.n_three, n)}, at once in {_percent(total.n_at_once, n)}",
        f"with the kinds apart from the budget (stuck, absent, span ...) "
        f"{Sum.of(done.with_others.findings).n_caught} of {total.n} were caught",
        f"false alerts: {done.verdict.false_per_day:.2f} a day (95 % limits {false_low:.2f} to "
        f"{false_high:.2f}); {done.verdict.n_after} more while machines recovered",
    ]


def other_lines(done: Replayed) -> list[str]:
    """Return what is apart from the budget, and what was odd about the records."""
    lines = []
    if done.others:
        kinds = ", ".join(f"{n} {kind}" for kind, n in sorted(done.others.items()))
        lines.append(f"apart from the budget: {kinds}")
    if done.n_damped:
        lines.append(f"{done.n_damped} alerts opened without calling anyone, as repeats")
    if done.n_again:
        lines.append(f"{done.n_again} calls were repeated because an alert still stood")
    if done.n_not_judged:
        lines.append(f"{done.n_not_judged} records had too few readings to be judged")
    if done.n_late:
        lines.append(f"{done.n_late} records came late and changed nothing")
    if done.fleet_only:
        shown = ", ".join(done.fleet_only[:5])
        lines.append(f"scored by the fleet's member, not seen in learning: {shown}")
    return lines


METHOD_HEADING = (
    "method", "levels", "caught", "right suspect", "in first 3", "median delay", "false a day",
    "time in false alerts",
)  # fmt: skip


def method_cells(row: MethodRow) -> tuple[str, ...]:
    """Return one method's line of the comparison."""
    total = Sum.of(row.verdict.findings)
    return (
        row.name,
        row.how,
        f"{total.n_caught} of {total.n}",
        _percent(total.n_first, total.n_caught),
        _percent(total.n_three, total.n_caught),
        duration(total.delay_s),
        f"{row.verdict.false_per_day:.2f}",
        f"{row.verdict.false_share:.2%}",
    )


GROUP_HEADING = (
    "", "incidents", "caught", "95 % limits", "right suspect", "in first 3", "median delay",
    "by any kind",
)  # fmt: skip


def group_rows(done: Replayed, key: str) -> list[tuple[str, ...]]:
    """Return a line for each kind, or for each size band."""
    rows: list[tuple[str, ...]] = []
    with_others = grouped(done.with_others.findings, key)
    for name, findings in grouped(done.verdict.findings, key).items():
        total, of_any = Sum.of(findings), Sum.of(with_others[name])
        low, high = total.caught_limits
        rows.append(
            (
                name,
                str(total.n),
                f"{total.n_caught} ({_percent(total.n_caught, total.n)})",
                f"{100 * low:.0f} to {100 * high:.0f} %",
                _percent(total.n_first, total.n_caught),
                _percent(total.n_three, total.n_caught),
                duration(total.delay_s),
                str(of_any.n_caught),
            )
        )
    return rows


def duration(seconds: float | None) -> str:
    """Return a length of time as people say it, a dash for none."""
    return _DASH if seconds is None else lasting_text(seconds)


def _percent(n: int, of: int) -> str:
    return f"{100 * n / of:.0f} %" if of else _DASH


def _table(rows: Sequence[tuple[str, ...]]) -> list[str]:
    """Return rows as lines with columns of equal width, the first to the left."""
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    return [
        "  "
        + "  ".join(
            cell.ljust(width) if k == 0 else cell.rjust(width)
            for k, (cell, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in rows
    ]
