"""Public Bayesian networks: their exact trees, and the same trees learned from samples.

Networks as bundled in the pgmpy 1.1 wheel. The joints are exact, so nothing here is
sampling noise where it says exact; the six-digit values were computed from the same files
beforehand, independently of this code.
"""

from __future__ import annotations

import networkx as nx
import numpy as np
import pytest

from scoring.channels import ChannelTable
from tests.published.exact import chow_liu, divergence, exact_tree, expected_surprise, weights_of
from tests.published.networks import entropy, load, pair, single
from tests.spools import spool_of, states
from training.fit import fit
from training.history.spool import Spool
from training.learn import learn_model
from training.rows import Rows
from training.settings import LearnSettings
from training.structure import spanning_forest, suzuki_weight

# name: H(joint), sum of H, tree weight, D(P || tree), D(P || independent), E[surprise], nats.
EXACT = {
    "cancer": (2.099781, 2.125068, 0.024174, 0.001114, 0.025288, 2.100894),
    "earthquake": (0.441396, 0.575928, 0.127631, 0.006900, 0.134531, 0.448296),
    "asia": (2.237029, 2.980198, 0.689463, 0.053706, 0.743169, 2.290735),
    "survey": (3.950149, 3.988504, 0.035602, 0.002753, 0.038355, 3.952902),
    "sachs": (7.174573, 9.369603, 1.712381, 0.482649, 2.195030, 7.657222),
}

EDGES = {
    "cancer": {
        ("Cancer", "Xray"): 0.013120,
        ("Cancer", "Smoker"): 0.006988,
        ("Cancer", "Dyspnoea"): 0.002984,
        ("Cancer", "Pollution"): 0.001083,
    },
    "earthquake": {
        ("Alarm", "Burglary"): 0.040031,
        ("Alarm", "MaryCalls"): 0.037419,
        ("Alarm", "JohnCalls"): 0.036466,
        ("Alarm", "Earthquake"): 0.013715,
    },
    "asia": {
        ("bronc", "dysp"): 0.250615,
        ("either", "lung"): 0.185399,
        ("either", "xray"): 0.155120,
        ("bronc", "smoke"): 0.046201,
        ("either", "tub"): 0.029283,
        ("lung", "smoke"): 0.022440,
        ("asia", "tub"): 0.000405,
    },
    "sachs": {
        ("Mek", "Raf"): 0.241695,
        ("Akt", "Erk"): 0.241584,
        ("Mek", "PKA"): 0.234866,
        ("PIP2", "Plcg"): 0.212443,
        ("Akt", "Mek"): 0.192650,
        ("PKA", "PKC"): 0.188094,
        ("P38", "PKA"): 0.182126,
        ("Jnk", "PKA"): 0.179208,
        ("PIP3", "Plcg"): 0.039715,
    },
}


def named(name: str, edges: np.ndarray | list[tuple[int, int]]) -> set[tuple[str, str]]:
    """Return edges as sorted pairs of names."""
    names = load(name).names
    return {(min(names[a], names[b]), max(names[a], names[b])) for a, b in np.array(edges).tolist()}


@pytest.mark.parametrize("name", EXACT)
def test_entropies_and_divergences_of_the_exact_tree(name: str) -> None:
    joint = load(name).joint()
    assert joint.sum() == pytest.approx(1.0, abs=1e-9)
    h, sum_h, weight, near, far, surprise = EXACT[name]
    tree = chow_liu(joint)
    assert entropy(joint) == pytest.approx(h, abs=1e-6)
    assert sum(entropy(single(joint, k)) for k in range(joint.ndim)) == pytest.approx(
        sum_h, abs=1e-6
    )
    assert tree.nats.sum() == pytest.approx(weight, abs=1e-6)
    assert divergence(tree, joint) == pytest.approx(near, abs=1e-6)
    assert divergence(exact_tree(joint, []), joint) == pytest.approx(far, abs=1e-6)
    assert expected_surprise(tree, joint) == pytest.approx(surprise, abs=1e-6)


@pytest.mark.parametrize("name", EDGES)
def test_edges_and_nats_of_the_exact_tree(name: str) -> None:
    tree = chow_liu(load(name).joint())
    names = load(name).names
    found = {
        (min(names[a], names[b]), max(names[a], names[b])): float(x)
        for (a, b), x in zip(tree.edges.tolist(), tree.nats, strict=True)
    }
    assert found == pytest.approx(EDGES[name], abs=1e-6)


@pytest.mark.parametrize("name", EXACT)
def test_no_spanning_tree_of_networkx_is_heavier(name: str) -> None:
    weights = weights_of(load(name).joint())
    graph = nx.from_numpy_array(weights)
    wanted = nx.maximum_spanning_tree(graph).size(weight="weight")
    assert chow_liu(load(name).joint()).nats.sum() == pytest.approx(wanted, abs=1e-12)


def test_sachs_is_two_blocks_of_nine_edges_under_the_penalty() -> None:
    # Expected counts of ten million records: the pairs across the blocks are independent.
    joint = load("sachs").joint()
    n = joint.ndim
    weights = np.zeros((n, n))
    for a in range(n):
        for b in range(a + 1, n):
            counts = np.rint(pair(joint, a, b) * 1e7).astype(np.int64)
            weights[a, b] = weights[b, a] = suzuki_weight(counts)
    edges = spanning_forest(weights)
    assert named("sachs", edges) == set(EDGES["sachs"])
    graph = nx.Graph(edges)
    assert nx.number_connected_components(graph) == 2
    assert len(edges) == 9


def sampled(name: str, n: int, seed: int) -> tuple[Spool, ChannelTable]:
    """Return n records of a network as a history of states."""
    network = load(name)
    values = network.sample(np.random.default_rng(seed), n)
    return spool_of({name: values}), states(*network.sizes)


@pytest.mark.parametrize("name", ["asia", "cancer", "earthquake"])
def test_two_hundred_thousand_records_give_the_exact_tree_back(name: str) -> None:
    spool, table = sampled(name, 200_000, seed=1968)
    with spool:
        density = fit(Rows(spool, table, spool.sources, 60.0))
    assert named(name, density.parts[-1].tree.edges) == set(EDGES[name])


def test_a_whole_learning_keeps_the_blocks_of_sachs_apart() -> None:
    spool, table = sampled("sachs", 20_000, seed=7)
    with spool:
        model = learn_model(spool, table, LearnSettings()).model
    assert named("sachs", model.members["sachs"].parts[-1].tree.edges) == set(EDGES["sachs"])
