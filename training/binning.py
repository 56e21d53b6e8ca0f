"""Where the bins of a channel lie, from a sample of its readings.

Bins of equal frequency over the range seen; own bins for values that repeat and for
wide empty gaps between modes; beyond both ends a ladder of widening bins. Every border
has a normal score: inside the range from its quantile, beyond it going on linearly in
units of the channel's spread, so that surprise rises with distance.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri

from scoring.bins import Bins
from scoring.channels import Channel

Floats = NDArray[np.float64]

# Rungs of the ladder beyond each end of the range, in spreads. The last leaves normal
# scores of about 12, a probability near 1e-33.
LADDER = np.array([0.0, 0.25, 0.5, 1.0, 1.5, 2.0, 3.0, 4.0, 6.0, 8.0])
# No score lies beyond this: a reading further out is as impossible as one that far, so that
# no single channel outweighs a whole record, and no bin is rarer than the normal's tail there.
FARTHEST, LEAST_MARGINAL = 13.0, 1e-38
# However far the blocks of time lie apart, no more than this share of readings is expected
# beyond either end: a short history must not make its own range meaningless.
MOST_UNSEEN = 0.01
# A value that makes up this share of the readings, relative to one equal-frequency bin,
# has a bin of its own.
REPEAT_SHARE = 0.5
# An empty stretch is a gap of its own if it is wider than this many spreads and than this
# many times the usual distance between neighbouring values.
GAP_SPREADS, GAP_SPACINGS = 0.5, 20.0
# The spread beyond the range is the middle 68 % half-width times this. Measured on open
# data whose history is a short piece of a drifting run: 1.0 is too sure of the range.
TAIL_STRETCH = 1.4


# The ends of the range are cut on at quarters of a bin's share, down to this many readings,
# so that one stray reading far out does not make everything up to it look normal.
LEAST_IN_TAIL = 4
# A stretch between gaps with this share of the readings has a spread of its own.
MODE_SHARE = 0.02
# At most this many gaps get a bin of their own, the widest first.
MAX_GAPS = 6
# Learning counts once on this many bins of equal frequency; all choices are unions of them.
FINE_BINS = 96
# A fine partition with more bins than this is made again with half as many.
MOST_FINE_BINS = 220


@dataclass(frozen=True)
class NodeBins:
    """The bins of one node with what tables need of them.

    scores: (n_borders,) normal scores of the borders, rising; empty for a state.
    marginal: (n_bins,) positive, summing to 1.
    firm: (n_borders,) a border stays in every coarser choice whose equal share is at most
        this over REPEAT_SHARE; inf for ladder, gaps and borders fixed by hand.
    """

    bins: Bins
    scores: Floats
    marginal: Floats
    firm: Floats

    @property
    def n_bins(self) -> int:
        """How many bins there are."""
        return len(self.marginal)


@dataclass(frozen=True)
class _Modes:
    """Stretches of readings parted by wide gaps.

    gaps: (n_gaps,) a gap lies between distinct values k and k + 1. spreads: (n_gaps + 1,)
    ends: readings' worth of probability beyond either end.
    """

    gaps: NDArray[np.int64]
    spreads: Floats
    ends: tuple[float, float]


def unseen_ends(sample: Floats, blocks: NDArray[np.int64]) -> tuple[float, float]:
    """Return how many readings lie beyond the range of all other blocks of time.

    sample: (n,) readings, blocks: (n,) the block of each. Slow channels leave a range that
    thousands of readings agree on, because those readings are near copies; what one block
    would have been to the others is what the next block may be to all.
    Returns readings below and above, at least half a one, at most MOST_UNSEEN of all.
    """
    if not len(sample):
        return 0.5, 0.5
    numbers, group = np.unique(blocks, return_inverse=True)
    if len(numbers) < 2:
        return 0.5, 0.5
    low, high = np.full(len(numbers), np.inf), np.full(len(numbers), -np.inf)
    np.minimum.at(low, group, sample)
    np.maximum.at(high, group, sample)
    below = int((sample < np.sort(low)[1]).sum())
    above = int((sample > np.sort(high)[-2]).sum())
    most = MOST_UNSEEN * len(sample)
    return max(0.5, min(float(below), most)), max(0.5, min(float(above), most))


def choose_bins(
    sample: Floats,
    channel: Channel,
    n_bins: int = FINE_BINS,
    ends: tuple[float, float] = (0.5, 0.5),
) -> NodeBins:
    """Return the bins of one channel from a sample of its readings.

    sample: (n,) readings, no NaN; the number of the word for a state.
    ends: readings' worth of probability beyond either end (see unseen_ends).
    n_bins: wanted number of equal-frequency bins; values that repeat and gaps add to it.
    """
    if channel.is_state:
        return _state_bins(sample, channel)
    values, counts = np.unique(sample, return_counts=True)
    if not len(values):
        return _never_read()
    modes = _modes(values, counts, channel, ends)
    found = _measured_bins(values, counts, modes, channel, n_bins)
    while found.n_bins > MOST_FINE_BINS and n_bins > 8:
        n_bins //= 2
        found = _measured_bins(values, counts, modes, channel, n_bins)
    return found


def coarsen(fine: NodeBins, n_bins: int) -> tuple[NodeBins, NDArray[np.uint8]]:
    """Return bins that are unions of fine ones, and for each fine bin the one that holds it.

    n_bins: wanted number of equal-frequency bins inside the range.
    """
    if fine.bins.n_words or not len(fine.scores):
        return fine, np.arange(fine.n_bins, dtype=np.uint8)
    below = np.cumsum(fine.marginal)[:-1]
    keep = fine.firm >= REPEAT_SHARE / n_bins
    targets = np.arange(1, n_bins) / n_bins
    at = np.clip(np.searchsorted(below, targets), 0, len(below) - 1)
    at -= (at > 0) & (targets - below[np.maximum(at - 1, 0)] < below[at] - targets)
    keep[at] = True
    into = np.concatenate([[0], np.cumsum(keep)]).astype(np.uint8)
    return merge_bins(fine, into), into


def merge_bins(fine: NodeBins, into: NDArray[np.uint8]) -> NodeBins:
    """Return the unions of fine bins that `into` (n_fine_bins,) says."""
    if fine.bins.n_words or not len(fine.scores):
        return fine
    keep = np.diff(into.astype(np.int64)) > 0
    starts = np.concatenate([[0], np.flatnonzero(keep) + 1])
    marginal = np.add.reduceat(fine.marginal, starts)
    bins = Bins(fine.bins.borders[keep])
    return NodeBins(bins, fine.scores[keep], marginal, fine.firm[keep])


def _measured_bins(
    values: Floats, counts: NDArray[np.int64], modes: _Modes, channel: Channel, n_bins: int
) -> NodeBins:
    inner, firm = _inner_borders(values, counts, modes, n_bins, channel)
    # A border belongs to the bin above it, so the highest reading must lie below its rung.
    low, top = values[0], np.nextafter(values[-1], np.inf)
    low_rungs = low - modes.spreads[0] * LADDER[::-1]
    borders = np.concatenate([low_rungs, inner, top + modes.spreads[-1] * LADDER])
    always = np.full(len(LADDER), np.inf)
    scores, marginal = _placed(borders, values, counts, modes)
    return NodeBins(Bins(borders), scores, marginal, np.concatenate([always, firm, always]))


def within(
    node: NodeBins, sample: Floats, channel: Channel, ends: tuple[float, float] = (0.5, 0.5)
) -> NodeBins:
    """Return the same bins with the scores and marginal of some of the readings.

    sample: (n,) readings, no NaN, for example those of one regime: beyond their own range
    scores go on by their own spread, though other readings may lie there.
    """
    if channel.is_state:
        return _state_bins(sample, channel)
    values, counts = np.unique(sample, return_counts=True)
    if not len(values):
        return node
    scores, marginal = _placed(
        node.bins.borders, values, counts, _modes(values, counts, channel, ends)
    )
    return NodeBins(node.bins, scores, marginal, node.firm)


def _placed(
    borders: Floats, values: Floats, counts: NDArray[np.int64], modes: _Modes
) -> tuple[Floats, Floats]:
    """Return borders' normal scores and bins' probabilities for some readings.

    Inside their range by counts, an empty bin half a record. Beyond
    it the normal tails go on by the spread of the outermost stretch.
    """
    below = np.concatenate([[0], np.cumsum(counts)])
    under = below[np.searchsorted(values, borders)]
    first, last = int((borders <= values[0]).sum()), int((borders <= values[-1]).sum())
    inside = np.diff(np.concatenate([[0], under[first:last], [below[-1]]])).astype(float)
    inside[inside == 0] = 0.5
    total = inside.sum() + sum(modes.ends)
    share_below, share_above = modes.ends[0] / total, modes.ends[1] / total
    scores = np.empty(len(borders))
    scores[:first] = ndtri(share_below) - (values[0] - borders[:first]) / modes.spreads[0]
    scores[first:last] = ndtri((modes.ends[0] + np.cumsum(inside)[:-1]) / total)
    scores[last:] = (borders[last:] - values[-1]) / modes.spreads[-1] - ndtri(share_above)
    scores = np.clip(scores, -FARTHEST, FARTHEST)
    marginal = np.empty(len(borders) + 1)
    low, high = ndtr(scores[:first]), ndtr(-scores[last:])
    marginal[:first] = np.diff(low, prepend=0.0)
    marginal[first : last + 1] = inside / total
    marginal[last + 1 :] = -np.diff(high, append=0.0)
    # What lies between the range's end and the nearest border belongs to the end's bin.
    marginal[first] += share_below - (low[-1] if first else 0.0)
    marginal[last] += share_above - (high[0] if last < len(borders) else 0.0)
    return _rising(scores), np.asarray(np.maximum(marginal, LEAST_MARGINAL) / marginal.sum())


def _rising(scores: Floats) -> Floats:
    """Keep scores strictly rising where floats cannot tell them apart."""
    least = np.arange(len(scores)) * 1e-9
    return np.asarray(np.maximum.accumulate(scores - least) + least)


def _state_bins(sample: Floats, channel: Channel) -> NodeBins:
    n_words = len(channel.words)
    counts = np.bincount(sample.astype(np.int64), minlength=n_words + 1).astype(float)
    # Half a record for each word, as Krichevsky & Trofimov 1981 give each symbol.
    marginal = (counts + 0.5) / (counts.sum() + 0.5 * len(counts))
    return NodeBins(Bins(np.zeros(0), n_words), np.zeros(0), marginal, np.zeros(0))


def _never_read() -> NodeBins:
    return NodeBins(Bins(np.zeros(1)), np.zeros(1), np.array([0.5, 0.5]), np.full(1, np.inf))


def _modes(
    values: Floats, counts: NDArray[np.int64], channel: Channel, ends: tuple[float, float]
) -> _Modes:
    """Find the wide gaps and the spread of each stretch between them."""
    # A channel that hardly moves is known no better than it is read.
    scale = max(abs(values[0]), abs(values[-1]), 1e-12)
    least = max(channel.resolution or 0.0, 1e-9 * scale)
    if len(values) < 2:
        only = least if channel.resolution else max(channel.accuracy or 0.0, 0.01 * scale)
        return _Modes(np.zeros(0, dtype=np.int64), np.array([only]), ends)
    steps = np.diff(values)
    # Where most readings are one value the others still speak of the spread.
    least = max(least, (values[-1] - values[0]) / 100, float(np.median(steps)) / 2)
    whole = max(_half_width(values, counts), least)
    wide = np.flatnonzero(steps > max(GAP_SPREADS * whole, GAP_SPACINGS * float(np.median(steps))))
    gaps = np.sort(wide[np.argsort(-steps[wide], kind="stable")[:MAX_GAPS]])
    cuts = np.concatenate([[0], gaps + 1, [len(values)]])
    total = counts.sum()
    spreads = [
        max(_half_width(values[a:b], counts[a:b]), least)
        if counts[a:b].sum() >= MODE_SHARE * total
        else whole
        for a, b in pairwise(cuts.tolist())
    ]
    return _Modes(gaps, np.array(spreads), ends)


def _half_width(values: Floats, counts: NDArray[np.int64]) -> float:
    """Return the half-width of the middle 68 % of readings, stretched."""
    share = np.cumsum(counts) / counts.sum()
    low, high = values[np.searchsorted(share, [0.16, 0.84], side="left")]
    return float(TAIL_STRETCH * (high - low) / 2)


def _inner_borders(
    values: Floats,
    counts: NDArray[np.int64],
    modes: _Modes,
    n_bins: int,
    channel: Channel,
) -> tuple[Floats, Floats]:
    """Return the borders inside the range and how firm each is (see NodeBins.firm)."""
    if channel.bins:
        fixed = np.array(channel.bins)
        fixed = fixed[(fixed > values[0]) & (fixed <= values[-1])]
        return fixed, np.full(len(fixed), np.inf)
    if len(values) < 2:
        return np.zeros(0), np.zeros(0)
    below = np.concatenate([[0], np.cumsum(counts)])
    total = int(below[-1])
    targets = np.concatenate([_tail_targets(total, n_bins), np.arange(1, n_bins) * total / n_bins])
    targets = np.concatenate([targets, total - targets])
    # The border nearest in count, on whichever side of a value that repeats.
    cut = np.clip(np.searchsorted(below, targets), 1, len(values) - 1)
    cut -= (cut > 1) & (targets - below[cut - 1] < below[cut] - targets)
    firm = np.zeros(len(values) + 1)
    chosen = np.zeros(len(values) + 1, dtype=bool)
    chosen[cut] = True
    repeats = np.flatnonzero(counts >= max(2.0, REPEAT_SHARE * total / n_bins))
    for side in (repeats, repeats + 1):
        chosen[side] = True
        np.maximum.at(firm, side, counts[repeats] / total)
    tail = (below <= total / n_bins) | (below >= total - total / n_bins)
    firm[chosen & tail] = np.inf
    wide = modes.gaps
    chosen[[0, -1]] = False
    chosen[wide + 1] = False
    at = np.flatnonzero(chosen)
    # A gap's own bin keeps clear of the readings on either side.
    room = 0.1 * (values[wide + 1] - values[wide])
    after = values[wide] + np.minimum(room, modes.spreads[:-1] / 4)
    before = values[wide + 1] - np.minimum(room, modes.spreads[1:] / 4)
    gaps = np.concatenate([after, before])
    borders = np.concatenate([(values[at - 1] + values[at]) / 2, gaps])
    firmness = np.concatenate([firm[at], np.full(len(gaps), np.inf)])
    order = np.argsort(borders, kind="stable")
    borders, firmness = borders[order], firmness[order]
    distinct = np.concatenate([borders[:1] > values[0], np.diff(borders) > 0])
    return borders[distinct], firmness[distinct]


def _tail_targets(total: int, n_bins: int) -> Floats:
    """Return counts from the end at which the outer bin is cut on, by quarters."""
    found = []
    count = total / n_bins / 4
    while count >= LEAST_IN_TAIL:
        found.append(count)
        count /= 4
    return np.array(found)
