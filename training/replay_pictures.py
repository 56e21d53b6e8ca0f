"""The pictures of a replay's page."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from scoring.alerts import time_text
from training.judging import DAY_NS, Sum, Verdict, grouped
from training.replayed import OURS, LevelRow, Replayed
from training.report.figures import OCHRE, RUST, SERIES, SLATE, TEAL, draw

# Sources that are shown over time.
MOST_SOURCES: Final = 30
# An alert is drawn at least so long, in days, or nobody would see it.
_LEAST_DAYS: Final = 0.02


def days_picture(done: Replayed) -> str:
    """Return alerts by day against the budget."""

    def paint(figure: Figure) -> None:
        axes = figure.subplots()
        axes.bar(np.arange(len(done.by_day)) + 0.5, done.by_day, width=0.85, color=TEAL)
        budget = budget_of(done)
        if budget is not None:
            axes.axhline(budget, color=RUST, label=f"budget, {budget:.3g} a day")
            axes.legend()
        axes.set_ylabel("alerts")
        _days_axis(axes, done)

    return draw(
        paint,
        name="days",
        alt=f"Alerts by day: {done.by_day.sum()} in {len(done.by_day)} days, at most "
        f"{done.by_day.max(initial=0)} in one.",
        caption="Alerts that count against the budget, by day, all sources together.",
        height_in=2.4,
    )


def timeline_picture(done: Replayed) -> str:
    """Return alerts and incidents of each source over time."""
    sources = list(done.spans)[:MOST_SOURCES]

    def paint(figure: Figure) -> None:
        axes = figure.subplots()
        caught = {finding.incident for finding in done.verdict.findings if finding.call}
        for row, source in enumerate(sources):
            for one in done.known:
                if one.source == source:
                    colour = OCHRE if one in caught else RUST
                    _bar(axes, done, (one.start_ns, one.end_ns), row - 0.32, colour)
            for call in done.calls:
                if call.source == source:
                    _bar(axes, done, (call.raised_ns, call.cleared_ns), row + 0.02, TEAL)
        axes.set_yticks(range(len(sources)), sources)
        axes.set_ylim(len(sources) - 0.4, -0.6)
        _days_axis(axes, done)

    caption = "Alerts of each source."
    if done.known:
        caption = "Above: incidents, caught in ochre, missed in red. Below: alerts, in green."
    return draw(
        paint,
        name="timeline",
        alt=f"{len(done.calls)} alerts and {len(done.known)} incidents of {len(sources)} sources "
        "over time.",
        caption=caption,
        height_in=1.2 + 0.32 * len(sources),
    )


def caught_picture(done: Replayed) -> str:
    """Return the share of incidents caught by size, for every method."""
    found = grouped(done.verdict.findings, "size")
    shown: list[tuple[str, Verdict]] = [(OURS, done.verdict)]
    shown += [(m.name, m.verdict) for m in done.methods[1:] if not m.own_levels]

    def paint(figure: Figure) -> None:
        axes = figure.subplots()
        width = 0.8 / len(shown)
        for k, (name, verdict) in enumerate(shown):
            sums = [Sum.of(group) for group in grouped(verdict.findings, "size").values()]
            shares = np.array([100 * total.n_caught / total.n for total in sums])
            at = np.arange(len(sums)) - 0.4 + width * (k + 0.5)
            axes.bar(at, shares, width * 0.92, color=SERIES[k], label=name)
            limits = 100 * np.array([total.caught_limits for total in sums])
            doubt = np.maximum([shares - limits[:, 0], limits[:, 1] - shares], 0.0)
            axes.errorbar(at, shares, doubt, fmt="none", ecolor="#808080", capsize=2, lw=1)
        axes.set_xticks(range(len(found)), list(found))
        axes.set_xlabel("size, as the file of incidents gives it")
        axes.set_ylabel("caught, %")
        axes.set_ylim(0, 105)
        if len(shown) > 1:
            axes.legend(fontsize=9)

    shares = ", ".join(f"{band} {Sum.of(f).n_caught} of {len(f)}" for band, f in found.items())
    return draw(
        paint,
        name="caught",
        alt=f"Incidents caught by size: {shares}.",
        caption="Share caught by size with 95 % limits (Wilson). Other methods at no more false "
        "alerts than ours.",
    )


def levels_picture(done: Replayed) -> str:
    """Return the sweep: what other levels would have caught and cost."""

    def paint(figure: Figure) -> None:
        axes = figure.subplots()
        if done.known:
            _trade(axes, done)
            return
        rates = [row.verdict.alerts_per_day for row in done.rows]
        axes.plot([row.record for row in done.rows], rates, marker=".", color=TEAL)
        own = next(row for row in done.rows if row.is_model)
        axes.scatter([own.record], [own.verdict.alerts_per_day], s=60, color=RUST, zorder=3)
        axes.set_yscale("symlog", linthresh=0.1)
        axes.set_xlabel("level on excess, nats (sustained moves with it)")
        axes.set_ylabel("alerts a day")

    return draw(
        paint,
        name="levels",
        alt=f"{len(done.rows)} pairs of levels: what each would have caught and cost.",
        caption="Every dot is a pair of levels; the large one is the model's.",
        height_in=3.3,
    )


def _trade(axes: Axes, done: Replayed) -> None:
    """Caught share over false alerts a day, for us and the rivals."""
    lines: list[tuple[str, Sequence[LevelRow]]] = [(OURS, done.rows), *done.curves.items()]
    for k, (name, rows) in enumerate(lines):
        false = [row.verdict.false_per_day for row in rows]
        share = [100 * len(row.verdict.caught) / len(row.verdict.findings) for row in rows]
        axes.plot(false, share, marker=".", color=SERIES[k], label=name)
    own = next(row for row in done.rows if row.is_model)
    axes.scatter(
        [own.verdict.false_per_day],
        [100 * len(own.verdict.caught) / len(own.verdict.findings)],
        s=70,
        color=TEAL,
        zorder=3,
    )
    budget = budget_of(done)
    if budget is not None:
        axes.axvline(budget, color=SLATE, linestyle=":", label="budget")
        axes.set_xlim(0, 5 * budget)
    axes.set_ylim(0, 100)
    axes.set_xlabel("false alerts a day, whole fleet")
    axes.set_ylabel("incidents caught, %")
    axes.legend(fontsize=9)


def budget_of(done: Replayed) -> float | None:
    """Return the budget for as many sources as were replayed, None if none is known."""
    if done.promise is None:
        return None
    return done.promise.alerts_per_day * len(done.spans) / done.promise.n_sources


def _bar(axes: Axes, done: Replayed, period_ns: tuple[int, int], low: float, colour: str) -> None:
    start, end = (_day(done, time_ns) for time_ns in period_ns)
    axes.broken_barh([(start, max(end - start, _LEAST_DAYS))], (low, 0.3), facecolors=colour)


def _day(done: Replayed, time_ns: int) -> float:
    return (time_ns - min(first for first, _ in done.spans.values())) / DAY_NS


def _days_axis(axes: Axes, done: Replayed) -> None:
    first = min(first for first, _ in done.spans.values())
    axes.set_xlim(0, _day(done, max(last for _, last in done.spans.values())))
    axes.set_xlabel(f"days from {time_text(first)}")
    axes.grid(axis="y", visible=False)
