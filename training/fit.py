"""From rows to one member's density: bins, structure, choices, tables.

Records are read three times (a sample for the bins, counts of all pairs on coarse bins,
counts of the chosen edges on fine bins) and never held.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scoring.bins import MISSING, Bins, BinTable
from scoring.channels import ChannelTable
from scoring.tree import Tree
from training.binning import NodeBins, choose_bins, coarsen
from training.blocks import N_FOLDS
from training.choices import Choice, choose, merge_counts
from training.counts import count_pairs
from training.rows import Rows
from training.structure import CoarseNode, edge_weights, pair_shape, spanning_forest
from training.tables import log_ratio, mutual_information, shaped_joint

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Bins that weigh edges: finer where there are few pairs.
WEIGHING_BINS_FEW, WEIGHING_BINS_MANY, FEW_PAIRS = 24, 10, 2000
# An edge must gain this many standard errors of its gain over the folds.
LEAST_ERRORS = 1.0


@dataclass(frozen=True)
class Density:
    """What one fit learned: bins, a tree on them, and how they were chosen.

    fine: the fine bins; nodes: the chosen bins; weights: (n_nodes, n_nodes) nats.
    """

    fine: list[NodeBins]
    nodes: list[NodeBins]
    tree: Tree
    choice: Choice
    weights: Floats
    n_records: int

    @property
    def bins(self) -> tuple[Bins, ...]:
        """The chosen bins of every node."""
        return tuple(node.bins for node in self.nodes)


def fit(
    rows: Rows,
    folds: tuple[int, ...] = tuple(range(N_FOLDS)),
    choice: Choice | None = None,
    edges: list[tuple[int, int]] | None = None,
) -> Density:
    """Learn the density of some rows from the given folds.

    choice, edges: taken as given where not None.
    """
    channels = rows.table.nodes
    sample = rows.sample(folds)
    fine = []
    for k, channel in enumerate(channels):
        readings = sample[:, k]
        fine.append(choose_bins(readings[~np.isnan(readings)], channel))
    bin_table = BinTable.of(tuple(node.bins for node in fine))
    weights = np.zeros((len(channels), len(channels)))
    if edges is None:
        weights, edges = _structure(rows, folds, fine, bin_table)
    left = np.array([e[0] for e in edges], dtype=np.int64)
    right = np.array([e[1] for e in edges], dtype=np.int64)
    width = max(node.n_bins for node in fine)
    same = [np.arange(node.n_bins, dtype=np.uint8) for node in fine]
    counts, n_records = _count(rows, folds, bin_table, same, left, right, width)
    if choice is None or len(choice.mass) != len(edges):
        choice = choose(counts, left, right, fine)
    coarse, into = zip(*(coarsen(node, choice.n_bins) for node in fine), strict=True)
    nodes = list(coarse)
    merged = merge_counts(
        counts.sum(axis=0)[None], list(into), left, right, max(n.n_bins for n in nodes)
    )[0]
    tree = build_tree(nodes, merged, edges, choice)
    return Density(fine, nodes, tree, choice, weights, n_records)


def build_tree(
    nodes: list[NodeBins], counts: Floats, edges: list[tuple[int, int]], choice: Choice
) -> Tree:
    """Return the tree with shaped, raked tables. counts: (n_edges, width, width)."""
    tables, nats = [], []
    for e, (a, b) in enumerate(edges):
        p, q = nodes[a].marginal, nodes[b].marginal
        cells = np.ascontiguousarray(counts[e, : len(p), : len(q)])
        shape = pair_shape(cells, p, q, nodes[a].scores, nodes[b].scores)
        joint = shaped_joint(cells, shape, float(choice.mass[e]), choice.share, p, q)
        tables.append(log_ratio(joint, p, q))
        nats.append(mutual_information(joint, p, q))
    return Tree(
        np.array(edges, dtype=np.int64).reshape(-1, 2),
        np.array(nats),
        tuple(np.log(node.marginal) for node in nodes),
        tuple(tables),
    )


def _structure(
    rows: Rows, folds: tuple[int, ...], fine: list[NodeBins], bin_table: BinTable
) -> tuple[Floats, list[tuple[int, int]]]:
    """Weigh all pairs on coarse bins and return the weights and the forest's edges."""
    n_nodes = len(fine)
    left, right = np.triu_indices(n_nodes, 1)
    wanted = WEIGHING_BINS_FEW if len(left) <= FEW_PAIRS else WEIGHING_BINS_MANY
    merged = [by_mass(node, wanted) for node in fine]
    width = max(len(node.marginal) for node, _ in merged)
    counts, _ = _count(rows, folds, bin_table, [into for _, into in merged], left, right, width)
    weights, doubt = edge_weights(counts, left, right, [node for node, _ in merged])
    required, forbidden = _site_says(rows.table)
    paying = np.where(weights > LEAST_ERRORS * doubt, weights, -1.0)
    return weights, spanning_forest(paying, required, forbidden)


def _site_says(
    table: ChannelTable,
) -> tuple[tuple[tuple[int, int], ...], frozenset[tuple[int, int]]]:
    number = {name: k for k, name in enumerate(table.names)}
    required = tuple((number[a], number[b]) for a, b in table.edges.require)
    forbidden = frozenset(
        (min(number[a], number[b]), max(number[a], number[b])) for a, b in table.edges.forbid
    )
    return required, forbidden


def by_mass(node: NodeBins, n_bins: int) -> tuple[CoarseNode, NDArray[np.uint8]]:
    """Merge fine bins, ladder included, into about n_bins of equal mass for weighing."""
    if node.bins.n_words:
        into = np.arange(node.n_bins, dtype=np.uint8)
        return CoarseNode(np.zeros(0), node.marginal, True), into
    middle = np.cumsum(node.marginal) - node.marginal / 2
    shares = np.minimum((middle * n_bins).astype(int), n_bins - 1)
    group = np.unique(shares, return_inverse=True)[1]
    ends = np.flatnonzero(np.diff(group))
    marginal = np.bincount(group, weights=node.marginal).astype(np.float64)
    return CoarseNode(node.scores[ends], marginal, False), group.astype(np.uint8)


def _count(
    rows: Rows,
    folds: tuple[int, ...],
    bin_table: BinTable,
    into: list[NDArray[np.uint8]],
    left: Ints,
    right: Ints,
    width: int,
) -> tuple[NDArray[np.int64], int]:
    """Count pairs per fold, (n_folds, n_pairs, width + 1, width + 1), and the records.

    The number `width` stands for a missing reading; its row and column are not used.
    """
    lookup = np.full((len(into), MISSING + 1), width, dtype=np.uint8)
    for k, target in enumerate(into):
        lookup[k, : len(target)] = target
    counts = np.zeros((len(folds), len(left), width + 1, width + 1), dtype=np.int64)
    n_records = 0
    for chunk in rows.chunks():
        columns = bin_table.columns(chunk.values)
        coarse = np.stack([lookup[k][column] for k, column in enumerate(columns)])
        for f, fold in enumerate(folds):
            use = chunk.kept & (chunk.fold == fold)
            if use.any():
                part = np.ascontiguousarray(coarse[:, use])
                count_pairs(part, left, right, width + 1, counts[f])
                n_records += int(use.sum())
    return counts, n_records
