"""Chow-Liu trees of exactly known joints, by the code's own weights, forest and kernels."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scoring.kernels import evidence_rows
from scoring.tree import Tree
from tests.published.networks import pair, single
from tests.trees import joint_states
from training.structure import spanning_forest
from training.tables import mutual_information

Floats = NDArray[np.float64]


def weights_of(joint: Floats) -> Floats:
    """Return every pair's mutual information, nats."""
    n = joint.ndim
    weights = np.zeros((n, n))
    for a in range(n):
        for b in range(a + 1, n):
            table = np.ascontiguousarray(pair(joint, a, b))
            weights[a, b] = mutual_information(table, single(joint, a), single(joint, b))
            weights[b, a] = weights[a, b]
    return weights


def exact_tree(joint: Floats, edges: list[tuple[int, int]]) -> Tree:
    """Return the tree with the joint's own pair tables, unsmoothed: ln 0 is -inf."""
    weights = weights_of(joint)
    marginals = [single(joint, a) for a in range(joint.ndim)]
    with np.errstate(divide="ignore"):
        ratios = [
            np.log(pair(joint, a, b)) - np.log(np.outer(marginals[a], marginals[b]))
            for a, b in edges
        ]
        logs = tuple(np.log(p) for p in marginals)
    nats = np.array([weights[a, b] for a, b in edges])
    return Tree(np.array(edges, dtype=np.int64).reshape(-1, 2), nats, logs, tuple(ratios))


def chow_liu(joint: Floats, least: float = 1e-12) -> Tree:
    """Return the best tree of an exact joint."""
    return exact_tree(joint, spanning_forest(weights_of(joint), least=least))


def probabilities(tree: Tree, joint: Floats) -> Floats:
    """Return the tree's probability of every joint state, in the joint's shape."""
    with np.errstate(invalid="ignore"):
        logs = evidence_rows(tree.arrays, joint_states(list(joint.shape)))
    # Two impossible tables of one state add up to -inf, never to a number.
    return np.asarray(np.exp(np.where(np.isnan(logs), -np.inf, logs)).reshape(joint.shape))


def expected_surprise(tree: Tree, joint: Floats) -> float:
    """Return the mean surprise of records from the joint, nats."""
    q = probabilities(tree, joint)[joint > 0]
    return float(-(joint[joint > 0] * np.log(q)).sum())


def divergence(tree: Tree, joint: Floats) -> float:
    """Return D(joint || tree), nats."""
    p = joint[joint > 0]
    return float((p * np.log(p)).sum()) + expected_surprise(tree, joint)
