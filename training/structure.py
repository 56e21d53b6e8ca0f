"""Which channels go with which: edge weights and the forest of greatest weight.

Two measurements, or a measurement and a state, are weighed by what their shaped table
gains on blocks of time that it did not see, in nats a record. Two states are weighed by
their mutual information less Suzuki's penalty (Suzuki 1993, UAI). Only edges that pay
are taken, heaviest first (Kruskal 1956), which gives the forest of greatest weight.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from training.heldgains import best_mass, gathered, held_out_gains, held_out_shapes
from training.shapes import bin_scores, score_correlation
from training.tables import mutual_information
from training.threads import in_slices

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Weights of the shape, in records, and independent share while edges are weighed: each pair
# is weighed with the mass that suits it, since a short history says little by counts.
WEIGHING_MASSES = np.array([30.0, 300.0, 3000.0, 100_000.0])
WEIGHING_SHARE = 0.01
# An edge must gain this many standard errors of its gain over the folds.
LEAST_ERRORS = 1.0


@dataclass(frozen=True)
class CoarseNode:
    """A node on the coarse bins that weigh edges; no state has scores.

    scores: (n_bins - 1,) normal scores of the borders. marginal: (n_bins,).
    """

    scores: Floats
    marginal: Floats
    is_state: bool


def spanning_forest(
    weights: Floats,
    required: tuple[tuple[int, int], ...] = (),
    forbidden: frozenset[tuple[int, int]] = frozenset(),
    least: float = 0.0,
) -> list[tuple[int, int]]:
    """Return the edges of the forest of greatest weight, (left, right) with left < right.

    weights: (n, n) symmetric; only edges above `least` are taken, but for the required.
    Equal weights are cut by channel order, so that two trainings give the same tree.
    """
    n = len(weights)
    group = list(range(n))

    def root(i: int) -> int:
        while group[i] != i:
            group[i] = group[group[i]]
            i = group[i]
        return i

    chosen = []
    for left, right in sorted((min(p), max(p)) for p in required):
        group[root(left)] = root(right)
        chosen.append((left, right))
    left_nodes, right_nodes = np.triu_indices(n, 1)
    order = np.lexsort((right_nodes, left_nodes, -weights[left_nodes, right_nodes]))
    for k in order.tolist():
        if len(chosen) == n - 1:
            break
        left, right = int(left_nodes[k]), int(right_nodes[k])
        if not weights[left, right] > least:
            break
        if (left, right) in forbidden or root(left) == root(right):
            continue
        group[root(left)] = root(right)
        chosen.append((left, right))
    return sorted(chosen)


def suzuki_weight(counts: NDArray[np.int64]) -> float:
    """Return a state pair's weight: I - (a - 1)(b - 1) ln n / 2n, nats.

    counts: (a_all, b_all) records per cell; a and b are the words that occur.
    """
    n = int(counts.sum())
    if n == 0:
        return -math.inf
    joint = counts / n
    left, right = joint.sum(axis=1), joint.sum(axis=0)
    a, b = int((left > 0).sum()), int((right > 0).sum())
    penalty = (a - 1) * (b - 1) * math.log(n) / (2 * n)
    safe_left, safe_right = np.where(left > 0, left, 1.0), np.where(right > 0, right, 1.0)
    return float(mutual_information(joint, safe_left, safe_right)) - penalty


@njit(cache=True, nogil=True)
def _move(counts: Floats) -> bool:
    """Return whether both channels have more than one bin: a constant one goes with nothing."""
    n_folds, n, m = counts.shape
    left, right = -1, -1
    left_moves = right_moves = False
    for f in range(n_folds):
        for i in range(n):
            for j in range(m):
                if counts[f, i, j] > 0.0:
                    left_moves |= left not in (-1, i)
                    right_moves |= right not in (-1, j)
                    left, right = i, j
    return left_moves and right_moves


@njit(cache=True, nogil=True)
def _weigh(
    start: int,
    stop: int,
    counts: NDArray[np.int64],
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
    empty = np.empty(0)
    for p in range(start, stop):
        a, b = left[p], right[p]
        if is_state[a] and is_state[b]:
            continue
        n, m = n_bins[a], n_bins[b]
        cells = gathered(counts, p, n, m)
        if not _move(cells):
            continue
        left_scores = empty if is_state[a] else scores[a, : n - 1]
        right_scores = empty if is_state[b] else scores[b, : m - 1]
        own, other = marginal[a, :n], marginal[b, :m]
        shapes = held_out_shapes(cells, own, other, left_scores, right_scores)
        found = held_out_gains(cells, shapes, own, other, masses, shares)
        best = best_mass(found)
        for f in range(gains.shape[1]):
            gains[p, f] = found[f, best, 0]


@njit(cache=True, nogil=True)
def _correlate(
    start: int,
    stop: int,
    counts: NDArray[np.int64],
    left: Ints,
    right: Ints,
    n_bins: Ints,
    means: Floats,
    is_state: NDArray[np.bool_],
    found: Floats,
) -> None:
    for p in range(start, stop):
        a, b = left[p], right[p]
        if not (is_state[a] or is_state[b]):
            cells = np.zeros((n_bins[a], n_bins[b]))
            for f in range(counts.shape[0]):
                for i in range(n_bins[a]):
                    for j in range(n_bins[b]):
                        cells[i, j] += counts[f, p, i, j]
            found[p] = score_correlation(cells, means[a], means[b])


@dataclass(frozen=True)
class Laid:
    """Coarse nodes as arrays: n_bins, is_state (n_nodes,), the rest (n_nodes, width)."""

    n_bins: Ints
    is_state: NDArray[np.bool_]
    marginal: Floats
    scores: Floats
    means: Floats

    @classmethod
    def of(cls, nodes: list[CoarseNode]) -> Laid:
        """Lay out nodes; means: of the normal scores inside each bin, nought for a state."""
        n_bins = np.array([len(node.marginal) for node in nodes])
        is_state = np.array([node.is_state for node in nodes])
        marginal, scores, means = (np.zeros((len(nodes), n_bins.max())) for _ in range(3))
        for k, node in enumerate(nodes):
            marginal[k, : n_bins[k]] = node.marginal
            scores[k, : len(node.scores)] = node.scores
            if not node.is_state:
                means[k, : n_bins[k]] = bin_scores(node.scores, node.marginal)
        return cls(n_bins, is_state, marginal, scores, means)


def correlations_of(
    counts: NDArray[np.int64], left: Ints, right: Ints, nodes: list[CoarseNode]
) -> Floats:
    """Return the correlation of every pair's normal scores, (n_nodes, n_nodes).

    counts: (n_folds, n_pairs, width, width). NaN where one of two is a state.
    """
    laid, found = Laid.of(nodes), np.full(len(left), np.nan)
    arrays = (counts, left, right, laid.n_bins, laid.means, laid.is_state, found)
    in_slices(len(left), _correlate, *arrays)
    correlations = np.zeros((len(nodes), len(nodes)))
    correlations[left, right] = correlations[right, left] = found
    return correlations


def edge_weights(
    counts: NDArray[np.int64], left: Ints, right: Ints, nodes: list[CoarseNode]
) -> tuple[Floats, Floats]:
    """Return every pair's weight and the doubt of it, (n_nodes, n_nodes) nats a record.

    counts: (n_folds, n_pairs, width, width). The doubt is the standard error over folds
    (0 for state pairs); a pair never read together weighs nothing.
    """
    mean, error = pair_weights(counts, left, right, Laid.of(nodes))
    weights, doubt = np.zeros((len(nodes), len(nodes))), np.zeros((len(nodes), len(nodes)))
    weights[left, right] = weights[right, left] = mean
    doubt[left, right] = doubt[right, left] = error
    return weights, doubt


def pair_weights(
    counts: NDArray[np.int64], left: Ints, right: Ints, laid: Laid
) -> tuple[Floats, Floats]:
    """Return pairs' weights and the doubt of each, (n_pairs,) nats; see edge_weights."""
    n_bins, is_state = laid.n_bins, laid.is_state
    gains = np.zeros((len(left), len(counts)))
    shares = np.array([WEIGHING_SHARE])
    arrays = (
        counts, left, right, n_bins, laid.marginal, laid.scores, is_state, WEIGHING_MASSES,
        shares, gains,
    )  # fmt: skip
    in_slices(len(left), _weigh, *arrays)
    n_rows = counts[:, :, :-1, :-1].sum(axis=(0, 2, 3))
    mean = gains.sum(axis=1) / np.maximum(n_rows, 1)
    error = gains.std(axis=1, ddof=1) * math.sqrt(len(counts)) / np.maximum(n_rows, 1)
    for p in np.flatnonzero(is_state[left] & is_state[right]):
        a, b = n_bins[left[p]], n_bins[right[p]]
        mean[p], error[p] = suzuki_weight(counts[:, p, :a, :b].sum(axis=0)), 0.0
    return mean, error
