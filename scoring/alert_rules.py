"""One source's levels, delays and limits, laid out for the alert kernel."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scoring import alert_kernel as kernel
from scoring.alert_settings import AlertSettings
from scoring.model import Levels, Member, Model
from scoring.stillness import Motion, StillnessLimits, neighbour_lists

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# A channel in at least this share of records is meant to come in every one.
REGULAR_SHARE = 0.5
# One record counts for no more than this many of a channel's spreads above its usual
# surprise, so that one glitch does not decide who is suspected.
CAP_SPREADS = 5.0
# But for as many nats as this: a state that follows from the others has hardly a spread, and
# is all the odder when it does not follow.
LEAST_CAP = 10.0


@dataclass(frozen=True)
class Rules:
    """What the alert machine needs to know of the sources of one member.

    knobs, rows, limits, codes, states, neighbours: see alert_kernel.watch_rows.
    longest: as limits, the longest normal stillness itself.
    beside: names of each instrument's neighbours in the tree. silent_s, hold_s,
        chatter_s, fleeting_s: seconds.
    """

    knobs: Floats
    rows: Floats
    limits: Floats
    longest: Floats
    codes: Ints
    states: Ints
    neighbours: Ints
    beside: tuple[tuple[str, ...], ...]
    silent_s: float
    hold_s: float
    chatter_s: float
    fleeting_s: float
    chatter_cycles: int


def channels_key(names: Sequence[str]) -> int:
    """Return a number that stands for the instruments' names in their order."""
    digest = hashlib.blake2b("\n".join(names).encode(), digest_size=8).digest()
    return int.from_bytes(digest, "little", signed=True)


def level_knobs(levels: Levels, settings: AlertSettings, usual_sustained: float) -> Floats:
    """Return the knobs of the kernel. usual_sustained: where the source's sustained rests."""
    delays, step_s = levels.delays, levels.step_s
    kept = 1.0 - delays.deadband
    above = levels.sustained - usual_sustained
    knobs = np.zeros(kernel.N_KNOBS)
    knobs[kernel.RECORD] = levels.record
    # Excess rests at zero. A level below its resting value would be held for ever.
    knobs[kernel.RECORD_OFF] = min(levels.record, kept * levels.record)
    knobs[kernel.SUSTAINED] = levels.sustained
    knobs[kernel.SUSTAINED_OFF] = min(levels.sustained, usual_sustained + kept * above)
    knobs[kernel.HALF] = usual_sustained + 0.5 * above
    knobs[kernel.RUN_LENGTH] = delays.record_run
    knobs[kernel.ON_S] = delays.sustained_on_steps * step_s
    knobs[kernel.OFF_S] = delays.off_delay_steps * step_s
    knobs[kernel.STEP_S] = step_s
    knobs[kernel.SPAN_S] = settings.span_steps * step_s
    knobs[kernel.CLOCK_S] = settings.clock_steps * step_s
    return knobs


def rules_of(model: Model, member: Member, levels: Levels, settings: AlertSettings) -> Rules:
    """Return the rules for the sources that a member stands for."""
    step_s, n = levels.step_s, len(model.table.instruments)
    motion, limits = Motion.of(model.table), member.stillness
    edges = [(int(a), int(b)) for part in member.parts for a, b in part.tree.edges.tolist()]
    if limits is None:
        codes, longest = np.zeros(0, dtype=np.int64), np.zeros((0, 2, n + 1))
        neighbours = neighbour_lists(model.table, edges)
    else:
        codes, neighbours = limits.codes, limits.neighbours
        longest = np.stack([limits.still_s, limits.moving_s], axis=1)
    least_s = settings.stuck_least_steps * step_s
    away = _away_limits(limits, n, step_s, settings)
    usual = member.usual
    spread = usual.channel_spread if len(usual.channel_spread) == n else np.ones(n)
    middle = usual.channel_median if len(usual.channel_median) == n else np.zeros(n)
    return Rules(
        knobs=level_knobs(levels, settings, usual.sustained),
        rows=np.vstack(
            [motion.rows, middle, np.maximum(CAP_SPREADS * spread, LEAST_CAP), away[:n]]
        ),
        limits=np.maximum(settings.stuck_factor * longest, least_s),
        longest=longest,
        codes=codes,
        states=motion.states,
        neighbours=neighbours,
        beside=tuple(model.beside(member.source, i) for i in range(n)),
        silent_s=float(away[n]),
        hold_s=settings.hold_steps * step_s,
        chatter_s=max(settings.chatter_window_s, 2 * settings.chatter_cycles * step_s),
        fleeting_s=settings.fleeting_steps * step_s,
        chatter_cycles=settings.chatter_cycles,
    )


def _away_limits(
    limits: StillnessLimits | None, n: int, step_s: float, settings: AlertSettings
) -> Floats:
    """Return (n + 1,) seconds after which a channel, and the source, is missed."""
    least = np.full(n + 1, settings.absent_steps * step_s)
    least[n] = settings.silent_steps * step_s
    if limits is None:
        return least
    own = limits.away_s.copy()
    # How long a channel that should come in every record stays away is a matter of lines
    # and loggers: what happened to one of them can happen to the next.
    regular = np.isfinite(own[:n]) & (limits.present >= REGULAR_SHARE)
    own[:n][regular] = own[:n][regular].max(initial=0.0)
    most = np.full(n + 1, settings.away_most_s)
    most[:n][~regular] = np.inf
    return np.asarray(np.maximum(np.minimum(settings.away_factor * own, most), least))
