"""Has a channel run away from its neighbours: the question that a slow drift cannot pass.

Asked of the oldest kept model, because newer ones may have learned the drift's beginning.
A reading is held against what the other readings of its record let expect; the middle of
those residuals over the judge's days is given in spreads of what the neighbours leave
open. A channel whose own range moved together with its neighbours has not run away.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.channels import ChannelTable
from scoring.derived import derive
from scoring.model import Member, Model
from training.coverage import intervals_of, usual_widths

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Records of one source that are tried, at 20 to 50 microseconds a reading.
MOST_RECORDS: Final = 400
# A middle of fewer residuals says nothing, nor one of a smaller share of the records: the
# few hours in two days in which a standby pump runs are its own weather.
LEAST_RESIDUALS: Final = 30
LEAST_SHARE: Final = 0.2
# Half of an interval that holds 95 % of a normal distribution, in its standard deviations.
_HALF_95: Final = 1.959964
# A value that so large a share of the readings have is one at which the channel stands.
_COMMON: Final = 0.05
# Of a channel without a stated resolution, this share of its own spread is taken for one.
_GRAIN: Final = 1e-3


@dataclass(frozen=True, slots=True)
class Residual:
    """One channel of one source over the judge's days, under the witness.

    apart: middle distance from what its neighbours say, in conditional spreads. tie:
    conditional spread as a share of the channel's own spread; small: neighbours tell much.
    moved: how far its own middle moved, in own spreads.
    """

    source: str
    channel: str
    apart: float
    tie: float
    moved: float
    n: int


def residuals_of(witness: Model, source: str, times_ns: Ints, values: Floats) -> list[Residual]:
    """Return the residuals of one source's channels, those with enough to tell.

    values: (n, n_instruments) in the order of the witness's table, NaN for missing.
    """
    at = np.linspace(0, len(values) - 1, min(MOST_RECORDS, len(values))).astype(int)
    nodes, _ = derive(witness.table, times_ns, values, None)
    nodes, member, table = nodes[np.unique(at)], witness.member(source), witness.table
    middle, width = expected_middles(member, table, nodes)
    own_width, middles = usual_widths(member, table), own_middles(member)
    found = []
    for i, channel in enumerate(table.instruments):
        there = np.isfinite(width[:, i]) & np.isfinite(nodes[:, i])
        if channel.is_state or there.sum() < LEAST_RESIDUALS or not np.isfinite(own_width[i]):
            continue
        # Rounding is no distance.
        own, reading = own_width[i] / 2 / _HALF_95, nodes[there, i]
        grain = max(channel.resolution or 0.0, _GRAIN * own)
        spread = np.maximum(width[there, i] / 2, grain) / _HALF_95
        apart = reading - middle[there, i]
        apart = np.sign(apart) * np.maximum(np.abs(apart) - grain, 0.0) / spread
        apart = apart[~_standing(reading, middle[there, i], member.bins[i].borders)]
        if len(apart) < max(LEAST_RESIDUALS, LEAST_SHARE * len(nodes)):
            continue
        found.append(
            Residual(
                source,
                channel.name,
                float(np.median(apart)),
                float(np.median(spread)) / own,
                float(np.median(reading) - middles[i]) / own,
                len(apart),
            )
        )
    return found


def _standing(reading: Floats, middle: Floats, borders: Floats) -> NDArray[np.bool_]:
    """Return where a channel stands at its commonest value and is expected in that bin, (n,).

    A stopped pump reads 0 all the time: that 0 lies at one end of its bin says nothing, and
    half a day of it must not outvote what is read when the pump runs.
    """
    values, counts = np.unique(reading, return_counts=True)
    if counts.max() < _COMMON * len(reading):
        return np.zeros(len(reading), dtype=np.bool_)
    same = np.searchsorted(borders, reading, "right") == np.searchsorted(borders, middle, "right")
    return np.asarray(same & (reading == values[counts.argmax()]))


def expected_middles(member: Member, table: ChannelTable, nodes: Floats) -> tuple[Floats, Floats]:
    """Return what the rest of each record lets expect of each measurement, (n, n_nodes) each.

    The middle of the belief, and the width of the shortest interval that holds 95 % of it.
    NaN for states, for what is derived, for missing readings and unread regimes; an open
    interval has no finite width.
    """
    low, high, middle = intervals_of(member, table, nodes, [0.0] * len(table.instruments))
    return middle, high - low


def own_middles(member: Member) -> Floats:
    """Return the middle of each node's own distribution, (n_nodes,), interpolated in its bin."""
    found = np.full(len(member.bins), np.nan)
    for i, bins in enumerate(member.bins):
        if bins.n_words or not len(bins.borders):
            continue
        upto = np.cumsum(np.exp(member.parts[-1].tree.log_marginals[i]))
        found[i] = np.interp(0.5, upto[:-1], bins.borders)
    return found
