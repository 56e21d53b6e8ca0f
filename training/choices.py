"""The number of bins, the shape's mass and the independent share, by held-out density.

Every choice's bins are unions of one fine partition, so the density of a reading inside
its fine bin is the same for all and drops out; what differs is the sum over the edges of
ln(joint / (left * right)), measured on blocks of time that the tables did not see.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numba import njit
from numpy.typing import NDArray

from training.binning import NodeBins
from training.heldgains import best_mass, gathered, held_out_gains, held_out_shapes
from training.threads import in_slices

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Columns = NDArray[np.uint8]
# Nodes on unions of their fine bins, and for each the union that each fine bin is in.
Unions = tuple[list[NodeBins], list[NDArray[np.uint8]]]

# What is tried. Few bins and a heavy shape win with little history, counts with much.
N_BINS = (12, 16, 24, 32, 48)
MASSES = (10.0, 50.0, 250.0, 1250.0, 6000.0, 100_000.0)
# Held-out density alone would take a share of 0.001 on most histories, since some record in
# thousands is odd; but a share also bounds what one edge can ever say, at -ln(share), and one
# instrument's fault must be heard above all others' noise. On seven seeds of the invented plant
# with 0.001 tried, 686 of 1,260 incidents were caught at 2.1 false alerts a day, with these 729
# at 1.8; offsets of 4 spreads among 52 channels passed a 1 % level in 48 % and 60 % of records.
SHARES = (1e-6, 1e-7, 1e-8)
# Above so many edges the number of bins and the share are settled by so many of them, evenly
# spread over the channels' order, while every edge still gets the mass that suits it.
MOST_ASKED = 100
# Bins with fewer records than this each are not tried. Borders come from all records, so with
# hardly more records than bins every held-out pair lies in a row and a column that no other
# record uses, and raking puts the one into the other: 41 records of two independent channels
# seemed to gain 0.7 nats on 48 bins.
LEAST_RECORDS_A_BIN = 4


@dataclass(frozen=True)
class Tried:
    """Held-out gains over independence with one number of bins, nats a record.

    by_mass: (n_edges, n_masses) under the middle share. by_share: (n_edges, n_shares) with
    each edge's best mass. Of a tree with more than MOST_ASKED edges, those that were asked.
    """

    n_bins: int
    by_mass: Floats
    by_share: Floats


@dataclass(frozen=True)
class Choice:
    """What was chosen and how it compared.

    n_bins: equal-frequency bins inside the range. mass: (n_edges,) records. share:
    independent share. tried: the gains of each number of bins.
    """

    n_bins: int
    mass: Floats
    share: float
    tried: list[Tried] = field(default_factory=list)


@njit(cache=True, nogil=True)
def _edge_gains(
    start: int,
    stop: int,
    counts: Floats,
    left: Ints,
    right: Ints,
    n_bins: Ints,
    marginal: Floats,
    scores: Floats,
    is_state: NDArray[np.bool_],
    masses: Floats,
    shares: Floats,
    given: Floats,
    by_mass: Floats,
    by_share: Floats,
) -> None:
    """Fill held-out sums of ln r over all folds, nats, of the edges from start to before stop.

    by_mass: (n_edges, n_masses) under the middle share. by_share: (n_edges, n_shares)
    under each edge's best mass.
    """
    empty = np.empty(0)
    middle, chosen = np.empty(1), np.empty(1)
    middle[0] = shares[shares.shape[0] // 2]
    for e in range(start, stop):
        a, b = left[e], right[e]
        n, m = n_bins[a], n_bins[b]
        left_scores = empty if is_state[a] else scores[a, : n - 1]
        right_scores = empty if is_state[b] else scores[b, : m - 1]
        cells = gathered(counts, e, n, m)
        p, q = marginal[a, :n], marginal[b, :m]
        shapes = held_out_shapes(cells, p, q, left_scores, right_scores, given[e])
        found = held_out_gains(cells, shapes, p, q, masses, middle)
        for f in range(cells.shape[0]):
            for k in range(masses.shape[0]):
                by_mass[e, k] += found[f, k, 0]
        chosen[0] = masses[best_mass(found)]
        found = held_out_gains(cells, shapes, p, q, chosen, shares)
        for f in range(cells.shape[0]):
            for k in range(shares.shape[0]):
                by_share[e, k] += found[f, 0, k]


@njit(cache=True, nogil=True)
def _merge(
    start: int,
    stop: int,
    counts: NDArray[np.int64],
    into: Columns,
    n_fine: Ints,
    left: Ints,
    right: Ints,
    out: Floats,
) -> None:
    for e in range(start, stop):
        rows, columns = into[left[e]], into[right[e]]
        for f in range(counts.shape[0]):
            for i in range(n_fine[left[e]]):
                for j in range(n_fine[right[e]]):
                    if counts[f, e, i, j] != 0:
                        out[f, e, rows[i], columns[j]] += counts[f, e, i, j]


def merge_counts(
    counts: NDArray[np.int64], into: list[Columns], left: Ints, right: Ints, width: int
) -> Floats:
    """Return fine joint counts on coarser bins, (n_folds, n_edges, width, width) float64.

    counts: (n_folds, n_edges, fine, fine). into: for each node the coarse bin of each fine.
    """
    merged = np.zeros((counts.shape[0], counts.shape[1], width, width))
    n_fine = np.array([len(target) for target in into], dtype=np.int64)
    padded_into = np.zeros((len(into), int(n_fine.max())), dtype=np.uint8)
    for k, target in enumerate(into):
        padded_into[k, : len(target)] = target
    in_slices(len(left), _merge, counts, padded_into, n_fine, left, right, merged)
    return merged


def choose(
    counts: NDArray[np.int64],
    left: Ints,
    right: Ints,
    unions: Callable[[int], Unions],
    n_bins_tried: tuple[int, ...] = N_BINS,
    given: Floats | None = None,
) -> Choice:
    """Return the best choice for one tree.

    counts: (n_folds, n_edges, fine width, fine width) joint counts of the edges' nodes.
    unions: gives the nodes on a wanted number of bins. given: (n_edges,) correlations that
    the fleet has settled.
    """
    n_rows = max(1, int(counts.sum(axis=(0, 2, 3)).max(initial=0)))
    enough = tuple(k for k in n_bins_tried if k * LEAST_RECORDS_A_BIN <= n_rows)
    n_bins_tried = enough or n_bins_tried[:1]
    if not len(left):
        return Choice(n_bins_tried[len(n_bins_tried) // 2], np.zeros(0), SHARES[2])
    settled = np.full(len(left), np.nan) if given is None else given
    asked = np.arange(len(left))
    if len(left) > MOST_ASKED and len(n_bins_tried) > 1:
        asked = np.linspace(0, len(left) - 1, MOST_ASKED).astype(np.int64)
    some = (counts, left, right)
    if len(asked) < len(left):
        some = (counts[:, asked], left[asked], right[asked])
    tried = [_tried(unions, n_bins, *some, settled[asked], n_rows) for n_bins in n_bins_tried]
    # Each pair has the mass that suits it; bins and share are the tree's.
    best = max(tried, key=lambda one: float(one.by_share.sum(axis=0).max()))
    share = SHARES[int(best.by_share.sum(axis=0).argmax())]
    all_of_best = best
    if len(asked) < len(left):
        all_of_best = _tried(unions, best.n_bins, counts, left, right, settled, n_rows)
    mass = np.array(MASSES)[all_of_best.by_mass.argmax(axis=1)]
    return Choice(best.n_bins, mass, share, tried)


def _tried(
    unions: Callable[[int], Unions],
    n_bins: int,
    counts: NDArray[np.int64],
    left: Ints,
    right: Ints,
    settled: Floats,
    n_rows: int,
) -> Tried:
    """Return what some edges gain with one number of bins; n_rows: records they come from."""
    masses, shares = np.array(MASSES), np.array(SHARES)
    coarse, into = unions(n_bins)
    sizes = np.array([node.n_bins for node in coarse])
    marginal, scores = padded(coarse)
    merged = merge_counts(counts, into, left, right, int(sizes.max()))
    is_state = np.array([bool(node.bins.n_words) for node in coarse])
    by_mass = np.zeros((len(left), len(masses)))
    by_share = np.zeros((len(left), len(shares)))
    arrays = (
        merged, left, right, sizes, marginal, scores, is_state, masses, shares, settled,
        by_mass, by_share,
    )  # fmt: skip
    in_slices(len(left), _edge_gains, *arrays)
    return Tried(n_bins, by_mass / n_rows, by_share / n_rows)


def padded(nodes: list[NodeBins]) -> tuple[Floats, Floats]:
    """Return marginals and scores of all nodes as (n_nodes, width) arrays."""
    width = max(node.n_bins for node in nodes)
    marginal, scores = np.zeros((len(nodes), width)), np.zeros((len(nodes), width))
    for k, node in enumerate(nodes):
        marginal[k, : node.n_bins] = node.marginal
        scores[k, : len(node.scores)] = node.scores
    return marginal, scores
