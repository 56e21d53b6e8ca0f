"""The number of bins, the shape's mass and the independent share, by held-out density.

Every choice's bins are unions of one fine partition, so the density of a reading inside
its fine bin is the same for all and drops out; what differs is the sum over the edges of
ln(joint / (left * right)), measured on blocks of time that the tables did not see.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from training.binning import NodeBins, coarsen
from training.structure import held_out_gains

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# What is tried. Few bins and a heavy shape win with little history, counts with much.
N_BINS = (12, 16, 24, 32, 48)
MASSES = (10.0, 30.0, 100.0, 300.0, 1000.0, 3000.0, 10_000.0, 100_000.0)
SHARES = (0.03, 0.01, 0.003, 0.001, 0.0003)


@dataclass(frozen=True)
class Choice:
    """What was chosen and how it compared.

    n_bins: equal-frequency bins inside the range. mass: (n_edges,) records. share:
    independent share. curve: gain in nats a record for each (n_bins, mass, share) tried.
    """

    n_bins: int
    mass: Floats
    share: float
    curve: list[tuple[int, float, float, float]] = field(default_factory=list)


@njit(cache=True, parallel=True)
def _edge_gains(
    counts: Floats,
    left: Ints,
    right: Ints,
    n_bins: Ints,
    marginal: Floats,
    scores: Floats,
    is_state: NDArray[np.bool_],
    masses: Floats,
    shares: Floats,
    gains: Floats,
) -> None:
    """Fill gains (n_edges, n_masses, n_shares) with held-out sums of ln r, all folds."""
    empty = np.empty(0)
    for e in prange(left.shape[0]):
        a, b = left[e], right[e]
        n, m = n_bins[a], n_bins[b]
        left_scores = empty if is_state[a] else scores[a, : n - 1]
        right_scores = empty if is_state[b] else scores[b, : m - 1]
        found = held_out_gains(
            np.ascontiguousarray(counts[:, e, :n, :m]),
            marginal[a, :n],
            marginal[b, :m],
            left_scores,
            right_scores,
            masses,
            shares,
        )
        gains[e] = found.sum(axis=0)


def merge_counts(
    counts: NDArray[np.int64], into: list[NDArray[np.uint8]], left: Ints, right: Ints, width: int
) -> Floats:
    """Return fine joint counts on coarser bins, (n_folds, n_edges, width, width) float64.

    counts: (n_folds, n_edges, fine, fine). into: for each node the coarse bin of each fine.
    """
    merged = np.zeros((counts.shape[0], counts.shape[1], width, width))
    for e, (a, b) in enumerate(zip(left.tolist(), right.tolist(), strict=True)):
        n, m = len(into[a]), len(into[b])
        rows = np.zeros((n, width))
        rows[np.arange(n), into[a]] = 1.0
        columns = np.zeros((m, width))
        columns[np.arange(m), into[b]] = 1.0
        for f in range(counts.shape[0]):
            merged[f, e] = rows.T @ counts[f, e, :n, :m] @ columns
    return merged


def choose(counts: NDArray[np.int64], left: Ints, right: Ints, fine: list[NodeBins]) -> Choice:
    """Return the best choice for one tree.

    counts: (n_folds, n_edges, fine width, fine width) joint counts of the edges' nodes.
    """
    n_rows = max(1, int(counts.sum(axis=(0, 2, 3)).max(initial=0)))
    if not len(left):
        return Choice(24, np.zeros(0), SHARES[2])
    masses, shares = np.array(MASSES), np.array(SHARES)
    curve = []
    tried: list[Floats] = []
    for n_bins in N_BINS:
        coarse, into = zip(*(coarsen(node, n_bins) for node in fine), strict=True)
        sizes = np.array([node.n_bins for node in coarse])
        marginal, scores = padded(list(coarse))
        gains = np.zeros((len(left), len(masses), len(shares)))
        merged = merge_counts(counts, list(into), left, right, int(sizes.max()))
        is_state = np.array([bool(node.bins.n_words) for node in coarse])
        _edge_gains(merged, left, right, sizes, marginal, scores, is_state, masses, shares, gains)
        tried.append(gains / n_rows)
        for k, mass in enumerate(MASSES):
            for s, share in enumerate(SHARES):
                curve.append((n_bins, mass, share, float(gains[:, k, s].sum() / n_rows)))
    # Each pair has the mass that suits it; bins and share are the tree's.
    table = np.array(
        [[gains[:, :, s].max(axis=1).sum() for s in range(len(shares))] for gains in tried]
    )
    best, chosen = (int(k) for k in np.unravel_index(int(table.argmax()), table.shape))
    own = tried[best][:, :, chosen]
    return Choice(N_BINS[best], masses[own.argmax(axis=1)], float(shares[chosen]), curve)


def padded(nodes: list[NodeBins]) -> tuple[Floats, Floats]:
    """Return marginals and scores of all nodes as (n_nodes, width) arrays."""
    width = max(node.n_bins for node in nodes)
    marginal, scores = np.zeros((len(nodes), width)), np.zeros((len(nodes), width))
    for k, node in enumerate(nodes):
        marginal[k, : node.n_bins] = node.marginal
        scores[k, : len(node.scores)] = node.scores
    return marginal, scores
