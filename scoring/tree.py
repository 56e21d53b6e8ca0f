"""A dependency forest over discretised channels, with its tables laid out for the kernels.

The density is prod_i p(b_i) * prod_edges r(b_i, b_j), r = p(b_i, b_j) / (p(b_i) p(b_j)):
Chow & Liu 1968, IEEE Trans. Inf. Theory 14(3), 462-467, written without a root. Joint
tables agree with the marginals (the learning rakes them), so no root is ever chosen.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Rows of the tables are padded to a multiple of this, so that inner loops fill vectors.
PAD = 8


class TreeArrays(NamedTuple):
    """What the kernels read. Nodes 0..n-1, width = padded number of bins.

    start: (n_nodes + 1,) where each node's slots begin; a slot is one end of an edge.
    neighbour, edge, is_left: (n_slots,) the node across, the edge's number, and whether
        this slot's own node is the edge's left one.
    n_bins: (n_nodes,).
    marginal, log_marginal: (n_nodes, width), 0 and -inf in the padding.
    ratio: (n_slots, width, width), r indexed by the bin across, then the own bin.
    log_ratio: (n_edges, width, width), ln r by left bin, then right bin.
    left, right: (n_edges,) the edges' nodes.
    lowest: (n_nodes,) nats, no product of a node's marginal and ratios is below its exp.
    flat_blanket: ratio in one dimension, each node's first slot times its marginal, so that
        the product over a node's slots is its joint with its neighbours.
    flat_log_ratio: log_ratio's memory in one dimension, because a slice in a tight loop
        costs a reference count.
    alone: nodes without an edge. flat_folded: log_ratio in one dimension with every other
        node's log_marginal added to the first of its edges, so that a record without gaps
        costs one look an edge.
    """

    start: Ints
    neighbour: Ints
    edge: Ints
    is_left: NDArray[np.bool_]
    n_bins: Ints
    marginal: Floats
    log_marginal: Floats
    ratio: Floats
    log_ratio: Floats
    left: Ints
    right: Ints
    lowest: Floats
    flat_blanket: Floats
    flat_log_ratio: Floats
    alone: Ints
    flat_folded: Floats


@dataclass(frozen=True)
class Tree:
    """The forest of one part of one member.

    edges: (n_edges, 2) node numbers, left < right.
    nats: (n_edges,) mutual information of each edge's table.
    log_marginals: one (n_bins,) array a node, natural logs.
    log_ratios: one (n_bins_left, n_bins_right) array an edge, ln r.
    """

    edges: Ints
    nats: Floats
    log_marginals: tuple[Floats, ...]
    log_ratios: tuple[Floats, ...]

    @property
    def n_nodes(self) -> int:
        """Number of channels, derived ones included."""
        return len(self.log_marginals)

    def neighbours(self, node: int) -> list[int]:
        """Return the nodes that share an edge with `node`, in rising order."""
        return sorted(int(b if a == node else a) for a, b in self.edges.tolist() if node in (a, b))

    def __getstate__(self) -> dict[str, object]:
        """Return what goes to another process: the kernels' layout, seven times as large, does not.

        It is made again there on first use, by the same steps.
        """
        return {name: value for name, value in self.__dict__.items() if name != "arrays"}

    @cached_property
    def arrays(self) -> TreeArrays:
        """The same forest laid out for the kernels (made on first use, then kept)."""
        width = PAD * -(-max(len(m) for m in self.log_marginals) // PAD)
        slots: list[list[tuple[int, int, bool]]] = [[] for _ in range(self.n_nodes)]
        for number, (left, right) in enumerate(self.edges.tolist()):
            slots[left].append((right, number, True))
            slots[right].append((left, number, False))
        flat = [slot for node in slots for slot in node]
        log_marginal = np.full((self.n_nodes, width), -np.inf)
        for node, marginal in enumerate(self.log_marginals):
            log_marginal[node, : len(marginal)] = marginal
        log_ratio = np.zeros((len(self.edges), width, width))
        for number, table in enumerate(self.log_ratios):
            log_ratio[number, : table.shape[0], : table.shape[1]] = table
        ratio = np.empty((len(flat), width, width))
        for slot, (_, number, is_left) in enumerate(flat):
            table = np.exp(log_ratio[number])
            ratio[slot] = table.T if is_left else table
        marginal = np.exp(log_marginal)
        blanket = ratio.copy()
        for node, own in enumerate(slots):
            if own:
                blanket[sum(map(len, slots[:node]))] *= marginal[node]
        edges = self.edges.reshape(-1, 2)
        folded = log_ratio.copy()
        for node, own in enumerate(slots):
            if own:
                _, number, is_left = own[0]
                nats = log_marginal[node]
                folded[number] += nats[:, None] if is_left else nats[None, :]
        lowest = [
            float(m.min()) + sum(min(0.0, float(self.log_ratios[slot[1]].min())) for slot in node)
            for m, node in zip(self.log_marginals, slots, strict=True)
        ]
        return TreeArrays(
            start=np.cumsum([0] + [len(node) for node in slots], dtype=np.int64),
            neighbour=np.array([slot[0] for slot in flat], dtype=np.int64),
            edge=np.array([slot[1] for slot in flat], dtype=np.int64),
            is_left=np.array([slot[2] for slot in flat], dtype=np.bool_),
            n_bins=np.array([len(m) for m in self.log_marginals], dtype=np.int64),
            marginal=marginal,
            log_marginal=log_marginal,
            ratio=ratio,
            log_ratio=log_ratio,
            left=np.ascontiguousarray(edges[:, 0]),
            right=np.ascontiguousarray(edges[:, 1]),
            lowest=np.array(lowest),
            flat_blanket=blanket.reshape(-1),
            flat_log_ratio=log_ratio.reshape(-1),
            alone=np.array([node for node, own in enumerate(slots) if not own], dtype=np.int64),
            flat_folded=folded.reshape(-1),
        )
