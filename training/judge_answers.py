"""The judge's questions one by one: a number, its limit, and a sentence that says both.

Each function takes what was measured and returns an answer; nothing is measured here.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from scoring.alerts import time_text
from scoring.channels import Channel
from training.judge_cover import Covered, TreeChange
from training.judge_density import Compared
from training.judge_drill import MOST_SPREADS, Smallest
from training.judge_runaway import Residual

# Channels that a sentence names.
_MOST_NAMED = 3
NOTHING_IN_USE = "No model is in use yet, so there is nothing to compare with."


@dataclass(frozen=True, slots=True)
class Answer:
    """One question answered. number: None where it could not be measured, or need not be.

    limit: in the same unit, None where there is none. passed: the new model may be
    published as far as this goes.
    """

    name: str
    number: float | None
    limit: float | None
    passed: bool
    sentence: str


def at_least(name: str, number: float, limit: float, what: str) -> Answer:
    """Return the answer to whether there is enough of something. what: "records", ..."""
    passed = number >= limit
    verb = "are enough" if passed else "are too few"
    sentence = f"{number:,.0f} {what} {verb}; at least {limit:,.0f} are needed."
    return Answer(name, number, limit, passed, sentence)


@dataclass(frozen=True, slots=True)
class Anew:
    """A source whose history the site declared to begin anew, with too few records since.

    n: records to learn from since then. least: needed for a member of its own. enough_ns:
    when there can be so many at the earliest, the judge's days behind them.
    """

    source: str
    since_ns: int
    reason: str
    n: int
    least: int
    enough_ns: int

    @property
    def words(self) -> str:
        """What to say of it."""
        return (
            f"{self.source} (history counts from {time_text(self.since_ns)} on, {self.reason}: "
            f"{self.n} of {self.least} records needed to learn from, enough from "
            f"{time_text(self.enough_ns)} on at the earliest)"
        )


def known_sources(
    kept: Sequence[str],
    lost: Sequence[str],
    gone: Sequence[str],
    limit: float,
    came: Sequence[str],
    anew: Sequence[Anew] = (),
) -> Answer:
    """Return whether sources with a member of their own still have one.

    gone: sources that sent nothing in the window, which do not count. came: new ones.
    anew: those that a declared change leaves without one, which do not count either: it is
    the site's own word that what was known of them holds no longer.
    """
    n = len(kept) + len(lost)
    share = len(kept) / n if n else 1.0
    said = f"{len(kept)} of {n} sources with a member of their own keep one"
    if lost:
        said += f"; {listed(lost)} would be scored by the fleet's, for want of quiet records"
    if anew:
        said += (
            f"; not counted, and scored by the fleet's meanwhile, after a declared change: "
            f"{listed([one.words for one in anew])}"
        )
    if came:
        said += f"; new with a member: {listed(came)}"
    if gone:
        said += f"; without a record in the window, and so let go: {listed(gone)}"
    passed = share >= limit
    return Answer(
        "known sources", share, limit, passed, f"{said}. At least {limit:.0%} must keep theirs."
    )


def covered(name: str, found: Sequence[Covered], limit: float, what: str) -> Answer:
    """Return whether channels are covered as before; the least covered is named."""
    if not found:
        return Answer(name, None, limit, True, f"No {what} to compare.")
    least = min(found, key=lambda one: one.share)
    below = [one for one in found if one.share < limit]
    sentence = (
        f"Least of its former {what} has {least.channel} of {least.source}: {least.share:.0%}; "
        f"at least {limit:.0%} are needed."
    )
    if len(below) > 1:
        sentence += f" Below that are {len(below)}: {_pairs(below)}."
    return Answer(name, least.share, limit, not below, sentence)


def without_readings(channels: Sequence[Channel], removed: Sequence[str]) -> str:
    """Return a sentence on channels that came and went by the table, "" for none."""
    said = [f"new in the channel table: {listed([c.name for c in channels])}"] if channels else []
    said += [f"no longer in it: {listed(removed)}"] if removed else []
    return f"{'; '.join(said).capitalize()}." if said else ""


def density(found: Compared | None, slack: float) -> Answer:
    """Return whether the judge's days surprise the new model more than the one in use."""
    if found is None:
        sentence = (
            "There is no reading of the judge's days that both know and neither learned from."
        )
        return Answer("held-out density", None, slack, True, sentence)
    # Worse only if the whole interval lies beyond what is allowed.
    passed = found.low <= slack
    how = "more" if found.nats > 0 else "less"
    share = found.n_hidden / max(found.n_hidden + found.n_readings, 1)
    sentence = (
        f"The judge's days surprise the new model {abs(found.nats):.3f} nats a reading {how} than "
        f"the one in use (95 % from {found.low:+.3f} to {found.high:+.3f} over {found.n_blocks} "
        f"blocks of time); the lower end may be {slack:g} at most. "
        f"Compared are {found.n_readings:,} readings that both know, {share:.1%} hidden."
    )
    return Answer("held-out density", found.nats, slack, passed, sentence)


def alerts(n: int, low: float, high: float, source_days: float, confidence: float) -> Answer:
    """Return whether alerts in the judge's days lie in the interval the new model states."""
    passed = low <= n <= high
    sentence = (
        f"The new model would have raised {n} alert{'' if n == 1 else 's'} in the judge's "
        f"{source_days:.1f} source-days; it states {low:.0f} to {high:.0f} ({confidence:.0%})."
    )
    if n > high:
        sentence += " Either these days hold trouble that nobody has labelled, or it is too touchy."
    return Answer("alerts", float(n), high, passed, sentence)


def drill(
    found: Sequence[Smallest],
    worst: Smallest | None,
    limit: float,
    n_trials: int,
    alone: str = NOTHING_IN_USE,
) -> Answer:
    """Return whether the smallest caught offsets stay as small as they were.

    alone: why there is no other model's drill to compare with, where there is none.
    """
    if worst is None:
        return Answer("drill", None, limit, True, "No channel to plant a fault into.")
    if all(one.old is None and one.factor == 1.0 for one in found):
        n = sum(one.new is not None for one in found)
        sentence = f"An offset is caught on {n} of {len(found)} channels. {alone}"
        return Answer("drill", 1.0, limit, True, sentence)
    passed = worst.factor <= limit
    sizes = [
        f"more than {MOST_SPREADS:g} spreads"
        if size is None
        else f"{size:.3g} {worst.unit}".strip()
        for size in (worst.new, worst.old)
    ]
    sentence = (
        f"The smallest offset that half of {n_trials} trials catch grew most for "
        f"{worst.channel}: {sizes[0]} for {sizes[1]}, {worst.factor:.2f} times; at most "
        f"{limit:g} times is allowed."
    )
    return Answer("drill", worst.factor, limit, passed, sentence)


def tree(found: TreeChange, limit: float) -> Answer:
    """Return whether the tree is still much the same."""
    gained = [one for one in found.changes if one.gained]
    lost = [one for one in found.changes if not one.gained]
    sentence = (
        f"Edges lost held {found.share:.0%} of the nats, at most {limit:.0%} may go: "
        f"{len(lost)} lost ({sum(e.nats for e in lost):.2f} nats), {len(gained)} gained "
        f"({sum(e.nats for e in gained):.2f} nats), over all sources."
    )
    return Answer("tree", found.share, limit, found.share <= limit, sentence)


def run_away(
    found: Sequence[Residual], limit: float, most_tie: float, witness: str, unasked: Sequence[str]
) -> Answer:
    """Return whether any channel has run away from its neighbours, and name it.

    witness: how the oldest kept model is called. unasked: sources without a witness.
    """
    name = "run-away"
    asked = [one for one in found if one.tie <= most_tie]
    beyond = sorted((o for o in asked if abs(o.apart) > limit), key=lambda o: -abs(o.apart))
    rest = f" Without a witness from after their last change: {listed(unasked)}." if unasked else ""
    if not asked:
        return Answer(name, None, limit, True, f"No channel could be asked.{rest}")
    worst = max(asked, key=lambda one: abs(one.apart))
    sentence = (
        f"Under {witness}, {worst.channel} of {worst.source} lies furthest from what its "
        f"neighbours say: {worst.apart:+.2f} conditional spreads in the middle of the judge's "
        f"days; at most {limit:g} is allowed."
    )
    if len(beyond) > 1:
        names = [f"{o.channel} of {o.source} ({o.apart:+.1f})" for o in beyond]
        sentence += f" Beyond that are {len(beyond)}: {listed(names)}."
    weak = sorted({one.channel for one in found if one.tie > most_tie})
    if weak:
        sentence += f" Not asked, because neighbours tell too little: {listed(weak)}."
    return Answer(name, abs(worst.apart), limit, not beyond, sentence + rest)


def left_out(share: float, before: float | None, limit: float) -> Answer:
    """Return whether the share left out of the tables has not grown night over night."""
    if before is None:
        sentence = (
            f"{share:.1%} of the records are left out of the tables; there is no night before."
        )
        return Answer("left out", None, limit, True, sentence)
    grown = share - before
    sentence = (
        f"{share:.1%} of the records are left out of the tables, {before:.1%} the night before; "
        f"it may grow by {limit:.1%}."
    )
    return Answer("left out", grown, limit, grown <= limit, sentence)


def listed(names: Sequence[str], most: int = _MOST_NAMED) -> str:
    """Return the first of some names, and how many more there are."""
    more = len(names) - most
    return ", ".join(names[:most]) + (f" and {more} more" if more > 0 else "")


def _pairs(found: Sequence[Covered]) -> str:
    return listed([f"{one.channel} of {one.source}" for one in found])
