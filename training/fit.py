"""From rows to one member's density: bins, structure, choices, tables.

Records are read three times (a sample for the bins, counts of all pairs on coarse bins,
counts of the chosen edges on fine bins) and never held.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from scoring.bins import MISSING, Bins, BinTable
from scoring.channels import Channel, ChannelTable
from scoring.kernels import evidence_rows
from scoring.model import Part
from scoring.tree import Tree
from training.binning import NodeBins, choose_bins, coarsen, merge_bins, unseen_ends, within
from training.blocks import N_FOLDS
from training.candidates import heaviest_forest
from training.choices import N_BINS, Choice, Unions, choose, merge_counts
from training.reader import PairReader, Wanted
from training.rows import Rows
from training.shapes import pair_shape
from training.structure import (
    LEAST_ERRORS,
    CoarseNode,
    correlations_of,
    edge_weights,
    spanning_forest,
)
from training.tables import log_ratio, mutual_information, shaped_joint

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Bins that weigh edges: finer where there are few pairs. Where there are more (64 channels and
# up), tables of 10 x 10 bins weigh the edges, and only those of pairs that could be edges.
WEIGHING_BINS_FEW, WEIGHING_BINS_MANY, FEW_PAIRS = 24, 10, 2000
# A combination of regime channels with fewer records, or a smaller share of them, is rare
# and left to the plain tree; more combinations than this are no regimes.
LEAST_REGIME_RECORDS, LEAST_REGIME_SHARE, MAX_REGIMES = 300, 0.005, 16
# From 51 channels on there are fewer, the commonest: their trees together have at most this many
# nodes, because an edge's table takes 0.2 MB where it scores and the trees of five folds are in
# hand at once. 16 trees of 500 channels took 16 GB.
MAX_REGIME_NODES = 800


@dataclass(frozen=True)
class Fitted:
    """One tree on given bins.

    weights: (n_nodes, n_nodes) nats. correlations: of all pairs' normal scores, NaN where
    one is a state. n_records: learned from.
    """

    nodes: list[NodeBins]
    tree: Tree
    choice: Choice
    weights: Floats
    n_records: int
    correlations: Floats

    @property
    def edges(self) -> list[tuple[int, int]]:
        """The tree's edges as pairs of nodes."""
        return [(int(a), int(b)) for a, b in self.tree.edges]


@dataclass(frozen=True)
class SharedTree:
    """A structure that sources agree on. correlations: (n_edges,), NaN beside a state."""

    edges: list[tuple[int, int]]
    correlations: Floats


# For the plain tree under (), for each regime under its key.
Shared = dict[tuple[int, ...], SharedTree]


@dataclass(frozen=True)
class Density:
    """What one fit learned.

    fine: the fine bins of every node. plain: one tree over all records. regime: nodes of
    the state channels that choose a tree; regimes: a tree for each combination of their
    bins that is not rare.
    """

    fine: list[NodeBins]
    plain: Fitted
    regime: tuple[int, ...] = ()
    regimes: dict[tuple[int, ...], Fitted] = field(default_factory=dict)

    @property
    def bins(self) -> tuple[Bins, ...]:
        """The chosen bins of every node."""
        return tuple(node.bins for node in self.plain.nodes)

    @property
    def parts(self) -> tuple[Part, ...]:
        """The parts of a member with this density: regimes, then the rest."""
        if not self.regimes:
            return (Part(self.plain.tree),)
        n_all = self.plain.n_records + 0.5 * (len(self.regimes) + 1)
        named = sum(f.n_records for f in self.regimes.values())
        parts = [
            Part(fitted.tree, key, math.log((fitted.n_records + 0.5) / n_all))
            for key, fitted in self.regimes.items()
        ]
        rest = math.log((max(self.plain.n_records - named, 0) + 0.5) / n_all)
        return (*parts, Part(self.plain.tree, None, rest - self._log_unnamed()))

    def _log_unnamed(self) -> float:
        """Return ln of the plain tree's probability of the combinations not named."""
        keys = np.array(list(self.regimes), dtype=np.uint8)
        rows = np.full((len(keys), len(self.fine)), MISSING, dtype=np.uint8)
        rows[:, list(self.regime)] = keys
        named = float(np.exp(evidence_rows(self.plain.tree.arrays, rows)).sum())
        return math.log(max(1.0 - named, 1e-12))


def agreed(trees: list[Fitted], table: ChannelTable) -> SharedTree:
    """Return the forest and correlations that several sources' trees agree on.

    Weights and correlations are averaged by records.
    """
    share = np.array([tree.n_records for tree in trees], dtype=np.float64)
    weights = np.average([tree.weights for tree in trees], axis=0, weights=share)
    correlations = np.average([tree.correlations for tree in trees], axis=0, weights=share)
    required, forbidden = _site_says(table)
    edges = spanning_forest(weights, required, forbidden)
    return SharedTree(edges, np.array([correlations[a, b] for a, b in edges]))


def fit(
    rows: Rows,
    folds: tuple[int, ...] = tuple(range(N_FOLDS)),
    like: Density | None = None,
    shared: Shared | None = None,
) -> Density:
    """Learn the density of some rows from the given folds, one tree over all records.

    like: a density whose structure and choices are taken over. shared: structures and
    correlations to take over; bins, marginals and counts stay the rows' own.
    """
    sample, blocks = rows.sample(folds)
    fine = []
    for k, channel in enumerate(rows.table.nodes):
        there = ~np.isnan(sample[:, k])
        readings = sample[there, k]
        ends = unseen_ends(readings, blocks[there])
        fine.append(choose_bins(readings, channel, ends=ends))
    reader = PairReader(rows, folds, BinTable.of(tuple(node.bins for node in fine)))
    settled = shared[()] if shared else None
    if like is not None:
        unions = _unions(fine, like.plain.choice.n_bins)
        (plain,) = _like(reader, [_Plan.of(unions, like.plain, settled)])
    else:
        plain = _fit_tree(reader, fine, partial(_unions, fine), shared=settled)
    return Density(fine, plain)


def fit_regimes(
    rows: Rows,
    density: Density,
    regime: tuple[int, ...],
    folds: tuple[int, ...] = tuple(range(N_FOLDS)),
    like: Density | None = None,
    shared: Shared | None = None,
) -> Density:
    """Add a tree for each combination of the regime's channels that is not rare.

    regime: nodes of state channels. density: the plain one of the same rows and folds.
    like: a density whose regimes, structures and choices are taken over.
    """
    sample, blocks = rows.sample(folds)
    codes = sample[:, list(regime)]
    n_bins = density.plain.choice.n_bins
    into = _unions(density.fine, n_bins)[1]
    reader = PairReader(rows, folds, BinTable.of(tuple(n.bins for n in density.fine)), regime)
    n_most = min(MAX_REGIMES, MAX_REGIME_NODES // len(density.fine))
    keys = list(like.regimes) if like else _common(codes, n_most)
    fine = {}
    for key in keys:
        holds = (codes == np.array(key)).all(axis=1)
        fine[key] = _within(
            density.fine, sample[holds], blocks[holds], rows.table.nodes, regime, key
        )
    unions = {
        key: ([merge_bins(n, i) for n, i in zip(fine[key], into, strict=True)], into)
        for key in keys
    }
    given = {key: shared.get(key) if shared else None for key in keys}
    if like:
        plans = [_Plan.of(unions[key], like.regimes[key], given[key], key) for key in keys]
        trees = _like(reader, plans)
        return Density(density.fine, density.plain, regime, dict(zip(keys, trees, strict=True)))
    regimes = {
        key: _fit_tree(reader, fine[key], partial(_same, unions[key]), (n_bins,), given[key], key)
        for key in keys
    }
    return Density(density.fine, density.plain, regime, regimes)


def _unions(fine: list[NodeBins], n_bins: int) -> Unions:
    found = [coarsen(node, n_bins) for node in fine]
    return [node for node, _ in found], [into for _, into in found]


def _same(unions: Unions, n_bins: int) -> Unions:  # noqa: ARG001 - the number is settled
    return unions


def _common(codes: Floats, n_most: int) -> list[tuple[int, ...]]:
    """Return the combinations of regime channels that are not rare, most records first.

    n_most: no more than so many.
    """
    codes = codes[~np.isnan(codes).any(axis=1)]
    found, counts = np.unique(codes, axis=0, return_counts=True)
    least = max(LEAST_REGIME_RECORDS, LEAST_REGIME_SHARE * len(codes))
    order = np.argsort(-counts, kind="stable")[:n_most]
    return [tuple(int(x) for x in found[k]) for k in order if counts[k] >= least]


def _within(
    fine: list[NodeBins],
    sample: Floats,
    blocks: Ints,
    channels: tuple[Channel, ...],
    regime: tuple[int, ...],
    key: tuple[int, ...],
) -> list[NodeBins]:
    """Return the fine bins with scores and marginals of one regime's records."""
    nodes = []
    for k, (node, channel) in enumerate(zip(fine, channels, strict=True)):
        there = ~np.isnan(sample[:, k])
        readings = sample[there, k]
        nodes.append(within(node, readings, channel, unseen_ends(readings, blocks[there])))
        if k in regime:
            # In its own regime the channel has one value, whatever else was smoothed.
            only = np.full(node.n_bins, 1e-300)
            only[key[regime.index(k)]] = 1.0
            nodes[-1] = replace(nodes[-1], marginal=only)
    return nodes


@dataclass(frozen=True)
class _Plan:
    """A tree whose edges and choices are settled: only its counts are missing.

    key: of the regime it is for. correlations: (n_edges,), NaN for the counts' own.
    """

    unions: Unions
    edges: list[tuple[int, int]]
    choice: Choice
    correlations: Floats
    key: tuple[int, ...]

    @classmethod
    def of(
        cls, unions: Unions, like: Fitted, shared: SharedTree | None, key: tuple[int, ...] = ()
    ) -> _Plan:
        """Return the plan to take over another tree's choices and its, or the fleet's, edges."""
        if shared is not None:
            return cls(unions, shared.edges, like.choice, shared.correlations, key)
        return cls(unions, like.edges, like.choice, np.full(len(like.edges), np.nan), key)

    def wanted(self) -> Wanted:
        """Return the counts it needs, on the bins it will have."""
        nodes, into = self.unions
        return Wanted(into, *_ends(self.edges), max(node.n_bins for node in nodes), self.key)


def _ends(edges: list[tuple[int, int]]) -> tuple[Ints, Ints]:
    both = np.array(edges, dtype=np.int64).reshape(-1, 2)
    return np.ascontiguousarray(both[:, 0]), np.ascontiguousarray(both[:, 1])


def _like(reader: PairReader, plans: list[_Plan]) -> list[Fitted]:
    """Return trees whose edges and choices are settled; records are read once for all of them."""
    found = []
    counted = reader.count([plan.wanted() for plan in plans], by_fold=False)
    for plan, (counts, n_records) in zip(plans, counted, strict=True):
        nodes = plan.unions[0]
        cells = counts[0].astype(np.float64)
        tree = build_tree(nodes, cells, plan.edges, plan.choice, plan.correlations)
        nothing = np.zeros((len(nodes), len(nodes)))
        found.append(Fitted(nodes, tree, plan.choice, nothing, n_records, nothing))
    return found


def _fit_tree(
    reader: PairReader,
    fine: list[NodeBins],
    unions: Callable[[int], Unions],
    n_bins_tried: tuple[int, ...] = N_BINS,
    shared: SharedTree | None = None,
    key: tuple[int, ...] = (),
) -> Fitted:
    """Weigh pairs, choose edges, bins, masses and share, and make the tables of one tree.

    key: of the regime whose records are counted.
    """
    weights = correlations = np.zeros((len(fine), len(fine)))
    if shared is not None:
        edges, given = shared.edges, shared.correlations
    else:
        weights, correlations, edges = _structure(reader, fine, key)
        given = np.full(len(edges), np.nan)
    left, right = _ends(edges)
    same = [np.arange(node.n_bins, dtype=np.uint8) for node in fine]
    width = max(node.n_bins for node in fine)
    ((counts, n_records),) = reader.count([Wanted(same, left, right, width, key)])
    choice = choose(counts, left, right, unions, n_bins_tried, given)
    nodes, into = unions(choice.n_bins)
    width = max(node.n_bins for node in nodes)
    merged = merge_counts(counts.sum(axis=0)[None], into, left, right, width)[0]
    tree = build_tree(nodes, merged, edges, choice, given)
    return Fitted(nodes, tree, choice, weights, n_records, correlations)


def build_tree(
    nodes: list[NodeBins],
    counts: Floats,
    edges: list[tuple[int, int]],
    choice: Choice,
    given: Floats | None = None,
) -> Tree:
    """Return the tree with shaped, raked tables.

    counts: (n_edges, width, width). given: (n_edges,) correlations, NaN for the counts' own.
    """
    tables, nats = [], []
    for e, (a, b) in enumerate(edges):
        p, q = nodes[a].marginal, nodes[b].marginal
        cells = np.ascontiguousarray(counts[e, : len(p), : len(q)])
        settled = np.nan if given is None else float(given[e])
        shape = pair_shape(cells, p, q, nodes[a].scores, nodes[b].scores, settled)
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
    reader: PairReader, fine: list[NodeBins], key: tuple[int, ...]
) -> tuple[Floats, Floats, list[tuple[int, int]]]:
    """Weigh pairs on coarse bins; return weights, correlations and the forest's edges."""
    left, right = np.triu_indices(len(fine), 1)
    wanted = WEIGHING_BINS_FEW if len(left) <= FEW_PAIRS else WEIGHING_BINS_MANY
    merged = [by_mass(node, wanted) for node in fine]
    nodes = [node for node, _ in merged]
    width = max(len(node.marginal) for node in nodes)
    ((counts, _),) = reader.count([Wanted([into for _, into in merged], left, right, width, key)])
    correlations = correlations_of(counts, left, right, nodes)
    required, forbidden = _site_says(reader.rows.table)
    if len(left) > FEW_PAIRS:
        weights, edges = heaviest_forest(counts, left, right, nodes, required, forbidden)
        return weights, correlations, edges
    weights, doubt = edge_weights(counts, left, right, nodes)
    paying = np.where(weights > LEAST_ERRORS * doubt, weights, -1.0)
    return weights, correlations, spanning_forest(paying, required, forbidden)


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
