"""Levels for a budget of alert episodes, from held-out time.

Two levels, one on excess and one on sustained, share one budget: an episode that passes
both is one alert. They move together, sustained passed three times as often by itself as
excess, and are the lowest such that they and all higher ones keep to the budget and to a
limit on the time in alert. Beyond what was seen they follow the tail of episode maxima, no
further than ten times the held-out span.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.alert_settings import AlertSettings
from scoring.model import Levels, Member
from training.crossfit import HeldOut, follow
from training.hands import HERE, Hands
from training.heldexcess import HeldExcess, keep_excess
from training.passes import DAY_NS, Passes
from training.rows import Rows
from training.scale import ENOUGH_COUNTED, LEAST_COUNT, Scale, scale_of, threshold_of
from training.sweep import Pairs, cap_of

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Together the sources may spend no more than this share of their time in alert.
MAX_TIME_SHARE: Final = 0.01
# How much more often sustained is passed than excess. Measured on the plant: equal shares
# catch as much, but raise a quarter more alerts in weather that the history did not show.
SUSTAINED_TIMES: Final = 3.0
# Levels of each kind that are tried, and pairs.
N_TRIED: Final = 120
N_PAIRS: Final = 100
# Pairs reach from this many times the budget down to less than one held-out episode.
LOOSEST: Final = 20.0
# No level is put below this share of the records of quiet time.
_LOWEST_QUANTILE: Final = 0.9


@dataclass(frozen=True)
class Curve:
    """Episodes over pairs of levels, from strict to loose, held-out time of all sources.

    record, sustained: (n,) nats, falling. alone: (n,) how often sustained would be passed
    by itself. seen: (n,) episodes of the pair. expected: (n,) the same, along the
    tail where too few were seen. time_share: (n,) of records that held an alert;
    quiet_share: (n,) the same outside the stretches that the tables do not use.
    by_day: (n, n_days) seen episodes by day of held-out time.
    source_days: judged time summed over sources. n_sources: how many those are.
    chosen: the place that keeps the budget. left_share: share of the records that lie in
    stretches left out of the tables; seen_without: episodes of the chosen pair without them.
    """

    record: Floats
    sustained: Floats
    alone: Floats
    seen: Ints
    expected: Floats
    time_share: Floats
    quiet_share: Floats
    by_day: Ints
    source_days: float
    n_sources: int
    scales: tuple[Scale, Scale]
    allowed: float
    chosen: int
    left_share: float = 0.0
    seen_without: int = 0

    def place(self, allowed: float) -> int:
        """Return the loosest pair that, with every stricter one, keeps to a count."""
        # Stretches of trouble are in alert and should be; the limit is for the rest. Were their
        # share allowed on top, every false alert that nobody labelled would lower the levels
        # of the night after it.
        too_long = self.quiet_share > MAX_TIME_SHARE
        bad = (self.expected > allowed) | (self.seen > allowed) | too_long
        first_bad = int(np.argmax(bad)) if bad.any() else len(bad)
        return max(first_bad - 1, 0)


def set_levels(
    rows: Rows,
    members: dict[str, Member],
    held_out: dict[str, HeldOut],
    start: Levels,
    alerts_per_day: float,
    settings: AlertSettings | None = None,
    left_out: dict[str, Ints] | None = None,
) -> tuple[Levels, dict[str, Member], Curve | None]:
    """Return levels that keep to the budget, members with their usual sustained, the curve.

    alerts_per_day: over all of these sources together. Files of 24 bytes a record are
    written beside the held-out scores. Without any held-out record the levels stay as they
    start, and there is no curve.
    """
    items = [(rows.part(source), members[source], held_out[source]) for source in members]
    kept = list(rows.hands.each(partial(_keep, start=start), items))
    curve = curve_of(kept, start, alerts_per_day, settings or AlertSettings(), left_out, rows.hands)
    rest = {one.source: one.usual for one in kept}
    members = {s: replace(m, usual=replace(m.usual, sustained=rest[s])) for s, m in members.items()}
    return levels_at(curve, start, max(rest.values(), default=0.0)), members, curve


def levels_at(curve: Curve | None, start: Levels, usual: float) -> Levels:
    """Return the levels at a curve's chosen place; as they start without a curve.

    usual: the highest value at which sustained rests at any source.
    """
    if curve is None:
        return start
    level = curve.sustained[curve.chosen]
    cap = cap_of(np.array([level]), usual, start.tau_s, start.step_s)
    record = float(curve.record[curve.chosen])
    return replace(start, record=record, sustained=float(level), cap=float(cap[0]))


def curve_of(
    kept: list[HeldExcess],
    start: Levels,
    alerts_per_day: float,
    settings: AlertSettings,
    left_out: dict[str, Ints] | None = None,
    hands: Hands = HERE,
) -> Curve | None:
    """Return how often pairs of levels are passed in held-out time, the budget's one chosen.

    kept: one a source; where sustained rests is set on them. hands: who follows them. None
    without any record.
    """
    sources = [one for one in kept if one.n_judged]
    if not sources:
        return None
    passes = Passes(sources, start, settings, hands)
    sustained, highest, days = passes.rest()
    tried = (
        _tried(passes.sample(), max(one.highest for one in sources)),
        _tried(sustained, highest),
    )
    usual = max(one.usual for one in sources)
    scales = _scales(passes, tried, usual)
    return _curve(passes, scales, usual, days, alerts_per_day, left_out or {})


def _keep(item: tuple[Rows, Member, HeldOut], start: Levels) -> HeldExcess:
    rows, member, held_out = item
    parts = ((part.times_ns, part.excess) for part in follow(rows, member, held_out, start))
    path = held_out.path.with_suffix(".excess")
    return keep_excess(member.source, held_out.n_records, parts, path)


def _tried(sample: Floats, highest: float) -> Floats:
    """Return levels from the upper tenth of what was seen to just over the highest.

    Steps grow upwards, because a few far outliers must not take all the places.
    """
    low = float(np.quantile(sample, _LOWEST_QUANTILE))
    span = max(highest - low, 1e-6) * (1.0 + 1e-9)
    bend = max(span / max(float(np.quantile(sample, 0.999)) - low, 1e-6), 1.0 + 1e-6)
    steps = (bend ** np.linspace(0.0, 1.0, N_TRIED) - 1.0) / (bend - 1.0)
    return np.asarray(low + span * steps)


def _scales(passes: Passes, tried: tuple[Floats, Floats], usual: float) -> tuple[Scale, Scale]:
    """Return how often each kind of level is passed by itself: record, sustained."""
    n, start = N_TRIED, passes.start
    never = np.full(n, np.inf)
    caps = cap_of(tried[1], usual, start.tau_s, start.step_s)
    pairs = Pairs(
        np.concatenate([tried[0], never]),
        np.concatenate([never, tried[1]]),
        np.concatenate([never, caps]),
    )
    episodes = passes.episodes(pairs)
    at = [threshold_of(episodes[k * n : (k + 1) * n]) for k in range(2)]
    over = [at[0], n + at[1]]
    peaks = passes.peaks(Pairs(pairs.record[over], pairs.sustained[over], pairs.cap[over]))
    record, sustained = (
        scale_of(tried[k], episodes[k * n : (k + 1) * n], peaks[k], float(tried[k][at[k]]))
        for k in range(2)
    )
    return record, sustained


def _curve(
    passes: Passes,
    scales: tuple[Scale, Scale],
    usual: float,
    days: Ints,
    alerts_per_day: float,
    left_out: dict[str, Ints],
) -> Curve:
    sources, start = passes.sources, passes.start
    n_judged = sum(one.n_judged for one in sources)
    source_days = n_judged * start.step_s * 1e9 / DAY_NS
    allowed = alerts_per_day * source_days / len(sources)
    loosest = max(LOOSEST * allowed, 10.0 * LEAST_COUNT)
    alone = np.geomspace(LEAST_COUNT, loosest, N_PAIRS)
    record, sustained = (
        # Where counting takes over from the tail a stricter level must not become lower.
        np.minimum.accumulate(np.array([scale.level(float(c)) for c in counts]))
        for scale, counts in zip(scales, (alone / SUSTAINED_TIMES, alone), strict=True)
    )
    # Where sustained passes, some record has passed as much: beyond the record level a
    # level on sustained says nothing.
    sustained = np.minimum(sustained, record)
    pairs = Pairs(record, sustained, cap_of(sustained, usual, start.tau_s, start.step_s))
    # Only sources with stretches left out are followed once more without them.
    some = {one.source for one in sources if one.source in left_out}
    others = passes.raised(pairs, days, {one.source for one in sources} - some)
    every = others + passes.raised(pairs, days, some)
    seen = every.by_day.sum(axis=1)
    time_share = every.n_over / max(every.n_judged, 1)
    quiet_share, without, n_hidden = time_share, seen, 0
    if some:
        quiet = others + passes.raised(pairs, days, some, left_out)
        without, n_hidden = quiet.by_day.sum(axis=1), quiet.n_hidden
        quiet_share = quiet.n_over / max(quiet.n_judged, 1)
    curve = Curve(
        record=record,
        sustained=sustained,
        alone=alone,
        seen=seen,
        expected=_expected(alone, seen),
        time_share=time_share,
        quiet_share=quiet_share,
        by_day=every.by_day,
        source_days=source_days,
        n_sources=len(sources),
        scales=scales,
        allowed=allowed,
        chosen=0,
        left_share=n_hidden / max(n_judged, 1),
    )
    curve = replace(curve, chosen=curve.place(allowed))
    return replace(curve, seen_without=int(without[curve.chosen]))


def _expected(alone: Floats, seen: Ints) -> Floats:
    """Return the episodes to expect of each pair in as long a time as was held out.

    Where few are seen, both kinds of level share alerts as they do at the strictest pair
    that saw enough to tell.
    """
    enough, most = seen >= ENOUGH_COUNTED, 1.0 + 1.0 / SUSTAINED_TIMES
    if not enough.any():
        return np.asarray(np.maximum(most * alone, seen))
    first = int(np.argmax(enough))
    ratio = min(max(float(seen[first] / alone[first]), 1.0), most)
    return np.asarray(np.where(enough, seen, np.maximum(ratio * alone, seen)))
