"""A promise in sentences, for the terminal and for the report."""

from __future__ import annotations

import math

from training.promise import Promise
from training.tail import LEAST_PEAKS

# A held-out record this much more surprising than a fitted one, in nats, is worth a word.
_LARGE_GAP = 1.0
# Clusters below this are the usual scatter.
_LARGE_DISPERSION = 2.0
# Slow channels that a sentence names, the slowest first.
_MOST_SLOW = 8


def promise_lines(promise: Promise) -> list[str]:
    """Return the promise, most important first, a sentence or two a line."""
    return [*main_lines(promise), *doubt_lines(promise), *budget_lines(promise)]


def main_lines(promise: Promise) -> list[str]:
    """Return what is expected and what it rests on."""
    p = promise
    week, month = (interval_words(*p.interval(days)) for days in (7, 30))
    return [
        f"levels for {p.alerts_per_day:.3g} alerts a day over {_sources(p.n_sources)}: excess "
        f"{p.record:.1f}, sustained {p.sustained:.1f} nats",
        f"expected {p.per_day():.2f} alerts a day ({p.rate:.3f} a source and day, so it follows "
        f"the number of sources); 95 % interval {week} in a week, {month} in 30 days",
        f"seen {p.n_seen} episodes in {p.source_days * 24:.0f} source-hours held out, "
        f"{p.time_share:.2%} of the time in alert",
    ]


def doubt_lines(promise: Promise) -> list[str]:
    """Return what makes the promise weak, nothing for a promise without a doubt."""
    p = promise
    lines = [beyond_words(p)]
    if p.held_back:
        lines.append(
            "the limit of 1 % of the time in alert, outside of stretches that tables do not use, "
            "decides, not the budget: lower levels would bring few more alerts but long ones"
        )
    if p.at_limit:
        lines.append(
            "the budget asks for less than one alert in ten times the held-out span, which no "
            "history of this length can promise; the levels are those of one in ten spans"
        )
    if p.dispersion > _LARGE_DISPERSION:
        lines.append(
            f"alerts come together: half of them fell on {p.busiest_days} of {p.n_days} days, so "
            f"counts scatter {math.sqrt(p.dispersion):.1f} times as widely as single events would"
        )
    if p.unseen_nats > _LARGE_GAP:
        lines.append(
            f"held-out records are {p.unseen_nats:.1f} nats more surprising than fitted ones: "
            "the history is short for so many channels"
        )
    if p.slow:
        lines.append(season_words(p))
    return [line for line in lines if line]


def beyond_words(promise: Promise) -> str:
    """Return how far the levels lie beyond what was seen, "" if they do not."""
    p = promise
    over = [
        f"{name} level {level - highest:.1f} nats beyond the highest seen"
        for name, level, highest in (
            ("excess", p.record, p.record_highest),
            ("sustained", p.sustained, p.sustained_highest),
        )
        if level > highest
    ]
    if not over and p.reach <= 1.0:
        return ""
    how = (
        "along a tail fitted on episode maxima"
        if p.fitted
        else f"along a straight tail, because fewer than {LEAST_PEAKS} episodes were seen: a guess"
    )
    where = " and ".join(over) or "the levels lie at the edge of the data"
    often = f", passed about once in {p.reach:.1f} held-out spans" if p.reach > 1.0 else ""
    return f"{where}{often}, {how}"


def season_words(promise: Promise) -> str:
    """Return which channels the history has not seen all of."""
    named = ", ".join(
        f"{one.name} ({one.low:.4g} to {one.high:.4g} {one.unit})".replace(" )", ")")
        for one in promise.slow[:_MOST_SLOW]
    )
    if len(promise.slow) > _MOST_SLOW:
        named += f" and {len(promise.slow) - _MOST_SLOW} more"
    return (
        f"the history shows only part of how far {named} can go: outside of what it has seen, in "
        "another season or weather, expect more alerts than promised until the model is renewed; "
        "the intervals are widened for it, the more the further they look ahead"
    )


def budget_lines(promise: Promise) -> list[str]:
    """Return what a stricter or looser budget would cost."""
    lines = ["other budgets (alerts a day: excess and sustained level, expected a day):"]
    for one in promise.budgets:
        mark = "  <- asked for" if one.alerts_per_day == promise.alerts_per_day else ""
        lines.append(
            f"  {one.alerts_per_day:.3g}: {one.record:.1f} and {one.sustained:.1f} nats, "
            f"{one.expected:.2f}{mark}"
        )
    return lines


def interval_words(low: float, high: float) -> str:
    """Return a prediction interval of whole counts in words."""
    if math.isinf(high):
        return "any number"
    return f"{math.ceil(low - 1e-9)} to {math.floor(high + 1e-9)}"


def _sources(n: int) -> str:
    return "1 source" if n == 1 else f"{n} sources"
