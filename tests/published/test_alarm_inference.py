"""Missing readings summed out: our forest's tables, and inference by pgmpy on the same tables.

The forest is learned from samples of the alarm network (37 variables; Beinlich et al. 1989;
file as bundled in the pgmpy 1.1 wheel) by the same way as from a plant's history. Its tables
are loaded into pgmpy as a Bayesian network; pgmpy eliminates variables by its own code.
"""

from __future__ import annotations

import math
import warnings
from functools import cache
from typing import Any

import numpy as np
import pytest

from scoring.bins import MISSING, BinRows
from scoring.density import belief_of, removal_of
from scoring.model import Member
from tests.published.networks import load
from tests.spools import spool_of, states
from tests.trees import random_rows, sizes_of, with_gaps
from training.learn import learn_model
from training.settings import LearnSettings

with warnings.catch_warnings():
    # pgmpy announces its own renamings when it is imported.
    warnings.simplefilter("ignore")
    from pgmpy.factors.discrete import TabularCPD
    from pgmpy.inference import VariableElimination
    from pgmpy.models import DiscreteBayesianNetwork


@cache
def learned() -> Member:
    """Return the member learned from 5,000 sampled records."""
    network = load("alarm")
    values = network.sample(np.random.default_rng(1989), 5000)
    with spool_of({"alarm": values}) as spool:
        model = learn_model(spool, states(*network.sizes), LearnSettings()).model
    return model.members["alarm"]


@cache
def eliminator() -> Any:
    """Return pgmpy's inference on the forest, every tree hung on its first channel."""
    tree = learned().parts[-1].tree
    marginals = [np.exp(p) for p in tree.log_marginals]
    ratios = {}
    for (a, b), table in zip(tree.edges.tolist(), tree.log_ratios, strict=True):
        ratios[a, b], ratios[b, a] = np.exp(table), np.exp(table.T)
    network = DiscreteBayesianNetwork()
    network.add_nodes_from([str(k) for k in range(tree.n_nodes)])
    seen: set[int] = set()
    for first in range(tree.n_nodes):
        waiting: list[tuple[int | None, int]] = [(None, first)] if first not in seen else []
        while waiting:
            parent, node = waiting.pop()
            seen.add(node)
            own = len(marginals[node])
            if parent is None:
                cpd = TabularCPD(str(node), own, marginals[node][:, None])
            else:
                network.add_edge(str(parent), str(node))
                given = ratios[node, parent] * marginals[node][:, None]
                # pgmpy wants columns that sum to one; raking left them within 1e-12.
                np.testing.assert_allclose(given.sum(axis=0), 1.0, atol=1e-10)
                cpd = TabularCPD(
                    str(node), own, given, evidence=[str(parent)], evidence_card=[given.shape[1]]
                )
            network.add_cpds(cpd)
            waiting += [(node, k) for k in tree.neighbours(node) if k not in seen]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        assert network.check_model()
        return VariableElimination(network)


def theirs(row: BinRows, node: int) -> np.ndarray:
    """Return p(bins of node | what is read elsewhere) by pgmpy."""
    evidence = {str(k): int(b) for k, b in enumerate(row) if b != MISSING and k != node}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        found = eliminator().query([str(node)], evidence=evidence, show_progress=False)
    values: np.ndarray = found.values
    return values


@pytest.fixture(scope="module")
def rows() -> BinRows:
    """Return records of even random words, which the network hardly ever shows, with gaps."""
    rng = np.random.default_rng(3)
    sizes = [n - 1 for n in sizes_of(learned().parts[-1].tree)]
    return with_gaps(rng, random_rows(rng, sizes, 12), 0.4)


def test_the_forest_connects_most_of_the_network() -> None:
    assert len(learned().parts[-1].tree.edges) >= 30


def test_beliefs_are_those_of_pgmpy(rows: BinRows) -> None:
    rng = np.random.default_rng(4)
    for row in rows:
        for node in rng.choice(len(row), 3, replace=False).tolist():
            ours = belief_of(learned(), row, node)
            np.testing.assert_allclose(ours, theirs(row, node), atol=1e-9, rtol=1e-9)


def test_a_channels_own_surprise_is_that_of_pgmpy(rows: BinRows) -> None:
    n = rows.shape[1]
    none = np.zeros(n + 1, dtype=np.int64), np.zeros(0, dtype=np.int64)
    _, own = removal_of(learned(), rows, *none)
    for row, surprises in zip(rows[:6], own, strict=False):
        for node in np.flatnonzero(row != MISSING)[::6].tolist():
            wanted = -math.log(theirs(row, node)[row[node]])
            assert surprises[node] == pytest.approx(wanted, abs=1e-9, rel=1e-9)


def test_the_surprise_of_a_record_with_gaps_is_the_chain_of_pgmpys_answers(rows: BinRows) -> None:
    n = rows.shape[1]
    none = np.zeros(n + 1, dtype=np.int64), np.zeros(0, dtype=np.int64)
    surprise, _ = removal_of(learned(), rows, *none)
    for r in (0, 7):
        seen = np.full(n, MISSING, dtype=np.uint8)
        total = 0.0
        for node in np.flatnonzero(rows[r] != MISSING).tolist():
            total -= math.log(theirs(seen, node)[rows[r, node]])
            seen[node] = rows[r, node]
        assert surprise[r] == pytest.approx(total, abs=1e-9, rel=1e-9)
