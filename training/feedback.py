"""What people said of alerts, by channel: where an instrument, a span or a budget needs one.

Periods labelled nuisance stay in history, real ones leave it; this sums up both, so that
a person sees which channel makes work for nothing.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from scoring.alerts import ABSENT, SCORED, SPAN, STUCK
from training.stored_alerts import NUISANCE, REAL, StoredAlert

# So many nuisance alerts of a channel ask for a person.
_ASKS_FROM = 3


@dataclass(frozen=True, slots=True)
class ChannelFeedback:
    """Alerts with one channel as first suspect, by label. kinds: of the nuisance ones."""

    channel: str
    nuisance: int
    real: int
    unlabelled: int
    kinds: tuple[str, ...]
    advice: str


def feedback(alerts: Iterable[StoredAlert]) -> list[ChannelFeedback]:
    """Return what was said, most nuisance first."""
    by_channel: dict[str, list[StoredAlert]] = {}
    for alert in alerts:
        by_channel.setdefault(alert.channel or "-", []).append(alert)
    found = [_of_channel(channel, own) for channel, own in by_channel.items()]
    return sorted(found, key=lambda one: (-one.nuisance, -one.real, -one.unlabelled, one.channel))


def _of_channel(channel: str, own: Sequence[StoredAlert]) -> ChannelFeedback:
    labels = Counter(alert.label for alert in own)
    kinds = Counter(alert.kind for alert in own if alert.label == NUISANCE)
    advice = ""
    if labels[NUISANCE] >= _ASKS_FROM and labels[NUISANCE] > labels[REAL]:
        advice = _ADVICE.get(kinds.most_common(1)[0][0], _ADVICE[SCORED])
    named = tuple(f"{kind} ({n})" for kind, n in kinds.most_common())
    return ChannelFeedback(channel, labels[NUISANCE], labels[REAL], labels[""], named, advice)


_ADVICE = {
    SCORED: "look at the instrument; if it is sound, at its place in the channel table",
    SPAN: "its span in the channel table may be too narrow",
    STUCK: "the instrument may be still by nature: state its resolution, or leave it out",
    ABSENT: "it comes too seldom to be waited for: mend its line, or leave it out",
}


def budget_advice(found: Sequence[ChannelFeedback]) -> str:
    """Return a sentence on the alarm budget where no single channel is to blame, else ""."""
    nuisance, real = sum(one.nuisance for one in found), sum(one.real for one in found)
    if nuisance < 2 * _ASKS_FROM or nuisance <= real or any(one.advice for one in found):
        return ""
    return (
        f"{nuisance} alerts were labelled nuisance and {real} real, and no channel stands out: "
        "the budget (budget.alerts_per_day of learn.toml) may ask for more alerts than there is "
        "trouble."
    )
