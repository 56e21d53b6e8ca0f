"""Small random forests built the way the learning builds them, and slow twins of the kernels.

The twins are plain Python over every joint state: obvious, and far too slow to use.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows, Bins
from scoring.model import Member, Part, Usual
from scoring.tree import Tree
from training.tables import log_ratio, mutual_information, shaped_joint

Floats = NDArray[np.float64]
Edges = list[tuple[int, int]]


def random_edges(rng: np.random.Generator, n_nodes: int, cut: float = 0.2) -> Edges:
    """Return a random forest over n_nodes; each edge of a tree is left out with chance `cut`."""
    order = rng.permutation(n_nodes)
    edges = []
    for k in range(1, n_nodes):
        if rng.random() >= cut:
            a, b = int(order[k]), int(order[rng.integers(k)])
            edges.append((min(a, b), max(a, b)))
    return sorted(edges)


def random_marginal(rng: np.random.Generator, n_bins: int, rare: float = 0.0) -> Floats:
    """Return n_bins probabilities; with `rare` > 0 the outer two are about that small."""
    p = rng.dirichlet(np.ones(n_bins)) + 0.01
    if rare > 0 and n_bins > 2:
        p[[0, -1]] = rare
    return np.asarray(p / p.sum())


def tree_of(marginals: Sequence[Floats], edges: Edges, joints: Sequence[Floats]) -> Tree:
    """Return the tree of joint tables that agree with the marginals."""
    pairs = list(zip(edges, joints, strict=True))
    return Tree(
        np.array(edges, dtype=np.int64).reshape(-1, 2),
        np.array([mutual_information(j, marginals[a], marginals[b]) for (a, b), j in pairs]),
        tuple(np.log(p) for p in marginals),
        tuple(log_ratio(j, marginals[a], marginals[b]) for (a, b), j in pairs),
    )


def random_tree(
    seed: int, sizes: Sequence[int], edges: Edges | None = None, rare: float = 0.0
) -> Tree:
    """Return a forest with random raked tables.

    sizes: bins of each node. rare: see random_marginal; such bins go together strongly.
    """
    rng = np.random.default_rng(seed)
    edges = random_edges(rng, len(sizes)) if edges is None else edges
    marginals = [random_marginal(rng, n, rare) for n in sizes]
    joints = []
    for a, b in edges:
        counts = rng.poisson(30 * rng.dirichlet(np.ones(sizes[a] * sizes[b]))).astype(float)
        counts = counts.reshape(sizes[a], sizes[b])
        shape = rng.random((sizes[a], sizes[b])) ** 4 + 1e-9
        mass, share = 10.0 ** rng.uniform(-1, 2), 10.0 ** rng.uniform(-6, -1)
        shape /= shape.sum()
        joints.append(shaped_joint(counts, shape, mass, share, marginals[a], marginals[b]))
    return tree_of(marginals, edges, joints)


def joint_states(sizes: Sequence[int]) -> BinRows:
    """Return every joint state, (prod(sizes), n_nodes)."""
    return np.array(list(itertools.product(*(range(n) for n in sizes))), dtype=np.uint8)


def sizes_of(tree: Tree) -> list[int]:
    """Return the number of bins of each node."""
    return [len(p) for p in tree.log_marginals]


def slow_log_p(tree: Tree, row: Sequence[int]) -> float:
    """Return ln p of a row without gaps: the definition, term by term."""
    total = sum(float(p[b]) for p, b in zip(tree.log_marginals, row, strict=True))
    for (a, b), table in zip(tree.edges.tolist(), tree.log_ratios, strict=True):
        total += float(table[row[a], row[b]])
    return total


def completions(row: Sequence[int], sizes: Sequence[int]) -> Iterator[list[int]]:
    """Yield every full row that agrees with what is read in `row`."""
    choices = [range(n) if b == MISSING else [int(b)] for b, n in zip(row, sizes, strict=True)]
    yield from (list(full) for full in itertools.product(*choices))


def log_sum(logs: Sequence[float]) -> float:
    """Return ln of the sum of exponentials."""
    high = max(logs)
    return high + math.log(math.fsum(math.exp(x - high) for x in logs))


def slow_evidence(tree: Tree, row: Sequence[int]) -> float:
    """Return ln p(what is read), by summing over everything that is missing."""
    return log_sum([slow_log_p(tree, full) for full in completions(row, sizes_of(tree))])


def hidden(row: BinRows, *nodes: int) -> BinRows:
    """Return a copy of one row with some nodes missing."""
    out = row.copy()
    out[list(nodes)] = MISSING
    return out


def with_gaps(rng: np.random.Generator, rows: BinRows, share: float = 0.3) -> BinRows:
    """Return a copy of rows with a share of the bins missing."""
    out = rows.copy()
    out[rng.random(rows.shape) < share] = MISSING
    return out


def random_rows(rng: np.random.Generator, sizes: Sequence[int], n: int) -> BinRows:
    """Return n rows of even random bins without gaps."""
    return np.column_stack([rng.integers(0, s, n) for s in sizes]).astype(np.uint8)


def rooted_log_p(tree: Tree, row: Sequence[int], root: int) -> float:
    """Return ln p(what is read) by conditional tables handed down from `root`.

    Parents come before children, as in Chow & Liu 1968; other trees of the forest hang on
    their lowest node. Missing nodes are summed out on the way up.
    """
    sizes = sizes_of(tree)
    joint = {}
    for (a, b), table in zip(tree.edges.tolist(), tree.log_ratios, strict=True):
        full = table + tree.log_marginals[a][:, None] + tree.log_marginals[b][None, :]
        joint[a, b], joint[b, a] = full, full.T
    seen: set[int] = set()

    def up(node: int, parent: int | None) -> list[float]:
        """Return for each bin of the parent ln p(all read below and at `node` | it)."""
        seen.add(node)
        below = [up(n, node) for n in tree.neighbours(node) if n != parent]
        bins = range(sizes[node]) if row[node] == MISSING else [int(row[node])]
        if parent is None:
            own = tree.log_marginals[node]
            return [log_sum([own[b] + sum(m[b] for m in below) for b in bins])]
        out = []
        for p in range(sizes[parent]):
            conditional = joint[parent, node][p] - tree.log_marginals[parent][p]
            out.append(log_sum([conditional[b] + sum(m[b] for m in below) for b in bins]))
        return out

    total = 0.0
    for node in [root, *range(tree.n_nodes)]:
        if node not in seen:
            total += up(node, None)[0]
    return total


def bins_of(sizes: Sequence[int], states: Sequence[int] = ()) -> tuple[Bins, ...]:
    """Return bins with unit steps; nodes in `states` are states of one word less than bins."""
    return tuple(
        Bins(np.zeros(0), n - 1) if k in states else Bins(np.arange(1.0, n))
        for k, n in enumerate(sizes)
    )


def plain_usual(n_instruments: int, rows: BinRows) -> Usual:
    """Return a Usual that shifts nothing."""
    return Usual(0.0, 1.0, 0.0, np.zeros(n_instruments), np.ones(n_instruments), rows)


def random_member(
    seed: int,
    sizes: Sequence[int],
    regime: tuple[int, ...] = (),
    keys: Sequence[tuple[int, ...]] = (),
    states: Sequence[int] = (),
) -> Member:
    """Return a member with a tree for each key and one for the rest, summing to 1."""
    rng = np.random.default_rng(seed)
    shares = rng.dirichlet(np.ones(len(keys) + 1)) * 0.9 + 0.1 / (len(keys) + 1)
    parts = []
    covered = set(itertools.product(*(range(sizes[r]) for r in regime))) - set(keys)
    for k, key in enumerate([*keys, None]):
        tree = random_tree(seed + 1000 * (k + 1), sizes)
        if not regime:
            parts.append(Part(tree))
            continue
        own = [key] if key is not None else sorted(covered)
        row = np.full(len(sizes), MISSING, dtype=np.uint8)
        inside = []
        for combination in own:
            row[list(regime)] = combination
            inside.append(slow_evidence(tree, row.tolist()))
        parts.append(Part(tree, key, math.log(shares[k]) - log_sum(inside)))
    everything = np.full((0, len(sizes)), 0, dtype=np.uint8)
    return Member(
        "a", bins_of(sizes, states), tuple(parts), plain_usual(len(sizes), everything), regime
    )


def slow_member_log_p(member: Member, row: Sequence[int]) -> float:
    """Return ln p of a row without gaps under whichever part holds."""
    code = tuple(int(row[r]) for r in member.regime)
    for part in member.parts:
        if part.key == code and member.regime:
            return slow_log_p(part.tree, row) + part.log_share
    last = member.parts[-1]
    return slow_log_p(last.tree, row) + last.log_share


def slow_member_evidence(member: Member, row: Sequence[int]) -> float:
    """Return ln p(what is read) under a member, over every completion."""
    sizes = [b.n_bins for b in member.bins]
    return log_sum([slow_member_log_p(member, full) for full in completions(row, sizes)])


def sample_rows(rng: np.random.Generator, tree: Tree, n: int) -> BinRows:
    """Return n rows drawn from a forest, node by node along its edges."""
    rows = np.full((n, tree.n_nodes), MISSING, dtype=np.uint8)
    tables = {}
    for (a, b), table in zip(tree.edges.tolist(), tree.log_ratios, strict=True):
        tables[a, b], tables[b, a] = table, table.T
    for first in range(tree.n_nodes):
        waiting: list[tuple[int | None, int]] = [(None, first)]
        while waiting:
            parent, node = waiting.pop()
            if not np.all(rows[:, node] == MISSING):
                continue
            logs = np.tile(tree.log_marginals[node], (n, 1))
            if parent is not None:
                logs += tables[parent, node][rows[:, parent]]
            below = np.cumsum(np.exp(logs), axis=1)
            draw = rng.random((n, 1)) * below[:, -1:]
            rows[:, node] = (draw > below).sum(axis=1)
            waiting += [(node, k) for k in tree.neighbours(node)]
    return rows
