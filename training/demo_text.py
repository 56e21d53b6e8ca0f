"""What the demo says: an alert and the truth beside it, the tables at its end.

Everything is plain text of about 100 columns, the same on a terminal and in a pipe.
"""

from __future__ import annotations

import textwrap
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from datetime import UTC, datetime
from typing import Final

from training.channel_toml import text_table
from training.demo_alerts import Told
from training.demo_plant import LIVE_DAYS, RECOVERY_NS
from training.judging import Sum, Verdict
from training.known import Known
from training.plant.incidents import KINDS
from training.promise import Promise
from training.promise_words import interval_words

_WIDTH: Final = 100
_INDENT: Final = 18
OURS: Final = "oddbranch"
# Sizes in spreads; the kinds without a size are a band of their own.
BANDS: Final = ("below 3", "3 to 6", "6 and more", "no size")
# How the rows of the second table begin.
METHOD_ROWS: Final = (
    *(f"caught, {band}" for band in BANDS),
    "caught, all",
    "caught with the right suspect",
    "median delay",
    "false in",
    "false a day",
    "quiet time in alert",
)


def band_of(size: float | None) -> str:
    """Return the band of an incident's size."""
    if size is None:
        return BANDS[3]
    return BANDS[0] if size < 3 else BANDS[1] if size < 6 else BANDS[2]


def stamp(time_ns: int) -> str:
    """Return a time to the minute, UTC."""
    return datetime.fromtimestamp(time_ns // 10**9, UTC).strftime("%Y-%m-%d %H:%M")


def duration(seconds: float) -> str:
    """Return a span of time as people say it."""
    minutes = round(seconds / 60)
    if minutes < 60:
        return f"{minutes} min"
    return f"{minutes // 60} h {minutes % 60:02d} min"


def alert_lines(alert: Told, known: Sequence[Known]) -> list[str]:
    """Return an alert: when and where, what it says, what truly was the matter."""
    if alert.cleared_ns is None:
        lasted = "still standing"
    else:
        lasted = f"for {duration((alert.cleared_ns - alert.raised_ns) / 1e9)}"
    level = f", over the {alert.level} level" if alert.level else ", apart from the budget"
    records = f", {alert.n_over} records" if alert.in_budget else ""
    return [
        f"{stamp(alert.raised_ns)}  {alert.source}{level} {lasted}{records}",
        *_under("says", alert.sentence),
        *_under("truth", truth_words(alert, known)),
    ]


def _under(name: str, words: str) -> list[str]:
    first = f"{'':{_INDENT}}{name:7}"
    later = " " * len(first)
    return textwrap.wrap(words, _WIDTH, initial_indent=first, subsequent_indent=later)


def truth_words(alert: Told, known: Sequence[Known]) -> str:
    """Return what truly was the matter, how long it took, and whether the suspect is right."""
    own = [one for one in known if one.source == alert.source]
    during = [one for one in own if one.start_ns <= alert.raised_ns < one.end_ns]
    if during:
        one = during[0]
        took = duration((alert.raised_ns - one.start_ns) / 1e9)
        right = "right" if alert.suspects[:1] and alert.suspects[0] in one.channels else "wrong"
        return f"{incident_words(one)}, seen after {took}; suspect {right}"
    after = [one for one in own if one.end_ns <= alert.raised_ns < one.end_ns + RECOVERY_NS]
    if after:
        return f"{incident_words(after[-1])}, over since {stamp(after[-1].end_ns)}"
    return "nothing was the matter"


def incident_words(known: Known) -> str:
    """Return an incident as a few words."""
    size = "" if known.size is None else f", {known.size:.1f} spreads"
    kind = known.kind.replace("_", " ")
    if KINDS[known.kind].of_machine:
        return f"{kind}{size}"
    return f"{kind} of {' and '.join(known.channels)}{size}"


def incident_table(judged: Mapping[str, Verdict]) -> str:
    """Return the incidents by kind and size, a row each; judged: by method, ours among them."""
    rivals = [name for name in judged if name != OURS]
    heading = ["kind", "spreads", "n", "caught", "median delay", "suspect right", *rivals]
    rows = []
    for kind in KINDS:
        for band in BANDS:
            at = [
                place
                for place, finding in enumerate(judged[OURS].findings)
                if (finding.incident.kind, band_of(finding.incident.size)) == (kind, band)
            ]
            if at:
                part = {name: _summed(verdict, at) for name, verdict in judged.items()}
                rows.append([kind.replace("_", " "), band, *_cells(part, rivals)])
    return text_table(heading, rows, left=2)


def _summed(verdict: Verdict, at: Iterable[int]) -> Sum:
    return Sum.of([verdict.findings[place] for place in at])


def _cells(part: Mapping[str, Sum], rivals: Sequence[str]) -> list[str]:
    ours = part[OURS]
    delay = "" if ours.delay_s is None else duration(ours.delay_s)
    own = [str(ours.n), str(ours.n_caught), delay, str(ours.n_first)]
    return [*own, *(str(part[name].n_caught) for name in rivals)]


def method_table(judged: Mapping[str, Verdict]) -> str:
    """Return the methods side by side: caught by size, suspects, delay, false alerts."""
    every = list(judged.values())
    findings = every[0].findings
    rows = []
    for band in BANDS:
        at = [i for i, one in enumerate(findings) if band_of(one.incident.size) == band]
        unit = "" if band == BANDS[-1] else " spreads"
        counts = [str(_summed(one, at).n_caught) for one in every]
        rows.append([f"caught, {band}{unit} ({len(at)})", *counts])
    sums = [Sum.of(one.findings) for one in every]
    delays = ["" if one.delay_s is None else duration(one.delay_s) for one in sums]
    quiet = f"{every[0].quiet_days:.1f} quiet station-days"
    rows += [
        [f"caught, all ({len(findings)})", *(str(one.n_caught) for one in sums)],
        ["caught with the right suspect", *(str(one.n_first) for one in sums)],
        ["median delay", *delays],
        [f"false in {quiet}", *(str(len(one.false)) for one in every)],
        ["false a day", *(f"{one.false_per_day:.1f}" for one in every)],
        ["quiet time in alert", *(f"{100 * one.false_share:.2f} %" for one in every)],
    ]
    return text_table(["", *judged], rows)


def budget_words(promise: Promise, n_used: int, n_apart: int, ours: Verdict) -> str:
    """Return what was promised and what was used of it, incidents included.

    n_used: alerts that count against the budget, n_apart: those that do not.
    """
    low, high = promise.interval(LIVE_DAYS)
    n_false = len(ours.false)
    words = (
        f"Budget: {promise.alerts_per_day:g} alerts a day asked for, {promise.per_day():.2f} "
        f"expected, {interval_words(low, high)} in {LIVE_DAYS} days without incidents. Used: "
        f"{n_used} in {LIVE_DAYS} days, {n_used - n_false} of them in incidents or their "
        f"recovery, {n_false} false. Stuck and silent channels raised {n_apart} more, which are "
        "apart from the budget."
    )
    return textwrap.fill(words, _WIDTH)


def where_others_win(judged: Mapping[str, Verdict]) -> list[str]:
    """Return a sentence for each rival: what it caught that ours missed, and the reverse."""
    ours = judged[OURS].findings
    lines = []
    for name, verdict in judged.items():
        if name == OURS:
            continue
        pairs = list(zip(ours, verdict.findings, strict=True))
        theirs = [b.incident for a, b in pairs if b.call is not None and a.call is None]
        n_ours = sum(a.call is not None and b.call is None for a, b in pairs)
        line = f"{name}: caught {len(theirs)} that {OURS} missed{_listed(theirs)}; missed {n_ours}"
        lines += textwrap.wrap(f"{line} that {OURS} caught.", _WIDTH, subsequent_indent="  ")
    return lines


def _listed(incidents: Iterable[Known]) -> str:
    counted = Counter(f"{i.kind.replace('_', ' ')} {band_of(i.size)}" for i in incidents)
    listed = ", ".join(f"{n} {words}" if n > 1 else words for words, n in counted.items())
    return f" ({listed})" if listed else ""
