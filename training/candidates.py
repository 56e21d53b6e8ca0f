"""The forest of many channels: only pairs that could be in it are weighed in full.

No table gains more on held-out records than the records' own distribution would (Gibbs'
inequality), and that bound takes one pass over the counts of a pair. So all pairs begin
with their bound for a weight, the heaviest forest is found, those of its edges that were
not weighed yet are, and so on until every edge of the forest is weighed: then no other
pair can weigh more than the edges that already join its two channels.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from training.structure import LEAST_ERRORS, CoarseNode, Laid, pair_weights, spanning_forest
from training.threads import in_slices

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Pairs weighed in the first round, a channel; each later round takes twice as many.
FIRST_A_CHANNEL = 2


@njit(cache=True, nogil=True)
def _bound(
    start: int,
    stop: int,
    counts: NDArray[np.int64],
    left: Ints,
    right: Ints,
    n_bins: Ints,
    marginal: Floats,
    bounds: Floats,
    n_rows: Floats,
) -> None:
    for p in range(start, stop):
        a, b = left[p], right[p]
        n = total = 0.0
        for i in range(n_bins[a]):
            for j in range(n_bins[b]):
                c = 0.0
                for f in range(counts.shape[0]):
                    c += counts[f, p, i, j]
                if c > 0.0:
                    n += c
                    total += c * math.log(c / (marginal[a, i] * marginal[b, j]))
        if n > 0.0:
            bounds[p], n_rows[p] = total / n - math.log(n), n


def gain_bounds(
    counts: NDArray[np.int64], left: Ints, right: Ints, laid: Laid
) -> tuple[Floats, Floats]:
    """Return what no table of a pair can gain more than, and about what it gains, nats a record.

    counts: (n_folds, n_pairs, width, width). The first, (n_pairs,), is the divergence of all
    the records' own distribution from the product of the marginals, nought for a pair never
    read together. The second has what chance adds to it for each free cell taken off.
    """
    bounds, n_rows = np.zeros(len(left)), np.zeros(len(left))
    arrays = (counts, left, right, laid.n_bins, laid.marginal, bounds, n_rows)
    in_slices(len(left), _bound, *arrays)
    free = (laid.n_bins[left] - 1) * (laid.n_bins[right] - 1)
    return bounds, bounds - free / (2 * np.maximum(n_rows, 1.0))


def heaviest_forest(
    counts: NDArray[np.int64],
    left: Ints,
    right: Ints,
    nodes: list[CoarseNode],
    required: tuple[tuple[int, int], ...] = (),
    forbidden: frozenset[tuple[int, int]] = frozenset(),
) -> tuple[Floats, list[tuple[int, int]]]:
    """Return weights (n_nodes, n_nodes) and the edges of the forest of greatest weight.

    counts: (n_folds, n_pairs, width, width) of all pairs left < right, in the order of
    numpy.triu_indices. The edges are those that weighing every pair would give. Weights of
    pairs that were not weighed are about what they would gain.
    """
    n = len(nodes)
    laid = Laid.of(nodes)
    key, weight = gain_bounds(counts, left, right, laid)
    weighed = np.zeros(len(left), dtype=bool)
    number = np.zeros((n, n), dtype=np.int64)
    number[left, right] = np.arange(len(left))
    n_more = FIRST_A_CHANNEL * n
    while True:
        edges = spanning_forest(_square(key, left, right, n), required, forbidden)
        chosen = np.array([number[edge] for edge in edges], dtype=np.int64)
        new = chosen[~weighed[chosen]]
        if not len(new):
            return _square(weight, left, right, n), edges
        # What would be asked for next if these turn out lighter than their bounds.
        rest = np.flatnonzero(~weighed & _apart(edges, weighed[chosen], left, right, n))
        rest = rest[np.argsort(-key[rest], kind="stable")[:n_more]]
        n_more *= 2
        new = np.union1d(new, rest)
        mean, doubt = pair_weights(counts[:, new], left[new], right[new], laid)
        weight[new] = mean
        key[new] = np.where(mean > LEAST_ERRORS * doubt, mean, -1.0)
        weighed[new] = True


def _square(values: Floats, left: Ints, right: Ints, n: int) -> Floats:
    out = np.zeros((n, n))
    out[left, right] = out[right, left] = values
    return out


def _apart(
    edges: list[tuple[int, int]], known: NDArray[np.bool_], left: Ints, right: Ints, n: int
) -> NDArray[np.bool_]:
    """Return which pairs the known edges leave in two different pieces."""
    piece = np.arange(n)
    for (a, b), is_known in zip(edges, known.tolist(), strict=True):
        if is_known:
            piece[piece == piece[b]] = piece[a]
    return np.asarray(piece[left] != piece[right])
