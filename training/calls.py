"""From streams of scores on disk to the alerts that pairs of levels would have raised."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from scoring.alert_settings import AlertSettings
from scoring.model import Levels
from training.heldexcess import HeldExcess
from training.judging import Call
from training.sweep import Pairs, Sweep

# Suspects that are named, as in an alert.
_N_SUSPECTS = 3


def calls_by_pair(
    sources: Sequence[HeldExcess], pairs: Pairs, levels: Levels, settings: AlertSettings
) -> tuple[list[list[Call]], list[float]]:
    """Return each pair's alerts, and the share of time in alert of each.

    An alert that still stands is given the time of the source's last record.
    """
    sweep = Sweep(pairs, levels, settings)
    found: list[list[Call]] = [[] for _ in range(len(pairs))]
    for one in sources:
        opened: dict[int, int] = {}
        last_ns = 0
        for times_ns, excess in one.chunks():
            marks = sweep.add(one.source, one.usual, times_ns, excess)
            for pair, row, raised in zip(
                marks.pair.tolist(), marks.row.tolist(), marks.raised.tolist(), strict=True
            ):
                if raised:
                    opened[pair] = int(times_ns[row])
                else:
                    call = Call(one.source, opened.pop(pair), int(times_ns[row]))
                    found[pair].append(call)
            last_ns = max(last_ns, int(times_ns.max(initial=0)))
        for pair, raised_ns in opened.items():
            found[pair].append(Call(one.source, raised_ns, last_ns))
    return found, (sweep.n_over / max(sweep.n_judged, 1)).tolist()


def with_suspects(
    sources: Sequence[HeldExcess], calls: Sequence[Call], names: Sequence[str]
) -> list[Call]:
    """Return alerts with their suspects: the channels named while they stood, by summed score.

    names: of the suspects' numbers.
    """
    found: list[Call] = []
    for one in sources:
        own = sorted((c for c in calls if c.source == one.source), key=lambda c: c.raised_ns)
        if not own:
            continue
        summed = np.zeros((len(own), len(names)))
        first = np.full(len(own), -1)
        starts = np.array([call.raised_ns for call in own])
        ends = np.array([call.cleared_ns for call in own])
        for times_ns, excess, suspect in one.rows():
            at = np.searchsorted(starts, times_ns, side="right") - 1
            use = (at >= 0) & (times_ns <= ends[at]) & (suspect >= 0) & ~np.isnan(excess)
            np.add.at(summed, (at[use], suspect[use]), np.maximum(excess[use], 0.0))
            new = use & (times_ns == starts[at])
            first[at[new]] = suspect[new]
        for k, call in enumerate(own):
            order = np.argsort(-summed[k], kind="stable")[:_N_SUSPECTS]
            named = tuple(names[i] for i in order if summed[k, i] > 0)
            at_first = names[first[k]] if first[k] >= 0 else ""
            found.append(Call(one.source, call.raised_ns, call.cleared_ns, at_first, named))
    return sorted(found, key=lambda call: (call.raised_ns, call.source))
