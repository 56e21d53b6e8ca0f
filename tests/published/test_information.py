"""Information, G, penalty and pseudo-counts against published values and other libraries."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.stats import chi2_contingency
from sklearn.metrics import mutual_info_score

from scoring.channels import Channel
from tests.published.exact import exact_tree, expected_surprise, weights_of
from tests.published.networks import entropy, labelled_trees, pair, single
from training.binning import choose_bins
from training.structure import spanning_forest, suzuki_weight
from training.tables import mutual_information, shaped_joint

Floats = NDArray[np.float64]
BIT = math.log(2)


def information(counts: Floats) -> float:
    """Return the mutual information of a table of counts or probabilities, nats."""
    p = counts / counts.sum()
    return float(mutual_information(np.ascontiguousarray(p), p.sum(axis=1), p.sum(axis=0)))


@pytest.mark.parametrize("seed", range(5))
def test_information_is_that_of_scikit_learn(seed: int) -> None:
    rng = np.random.default_rng(seed)
    x = rng.integers(0, 5, 3000)
    y = np.where(rng.random(3000) < 0.4, x % 3, rng.integers(0, 4, 3000))
    counts = np.zeros((5, 4))
    np.add.at(counts, (x, y), 1)
    assert information(counts) == pytest.approx(mutual_info_score(x, y), rel=1e-10)


# Dunning, Computational Linguistics 19(1), 1993 prints 270.72 for the first; the others were
# computed beforehand from the definition.
G_VALUES = [
    ([[110, 2442], [111, 29114]], 270.721877),
    ([[13, 1000], [1000, 100000]], 0.803755),
    ([[10, 0], [0, 10000]], 158.165102),
    ([[1, 0], [0, 10000]], 20.420781),
    ([[100, 1000], [1000, 100000]], 265.013064),
    # The 3 x 2 table of the manual page Gstat of the R package entropy 1.3.2.
    ([[4, 2], [5, 4], [1, 4]], 2.718385),
]


@pytest.mark.parametrize(("counts", "g"), G_VALUES)
def test_g_is_twice_the_records_times_information(counts: list[list[int]], g: float) -> None:
    table = np.array(counts, dtype=float)
    ours = 2 * table.sum() * information(table)
    assert ours == pytest.approx(g, abs=1e-6)
    wanted = chi2_contingency(table, correction=False, lambda_="log-likelihood").statistic
    assert ours == pytest.approx(wanted, rel=1e-9)


@pytest.mark.parametrize(("counts", "g"), G_VALUES[:5])
def test_the_penalty_of_two_by_two_states_is_a_g_of_ln_n(counts: list[list[int]], g: float) -> None:
    # Suzuki 1993: for two binary states an edge pays if G > ln n.
    table = np.array(counts)
    n = table.sum()
    assert suzuki_weight(table) == pytest.approx((g - math.log(n)) / (2 * n), rel=1e-4, abs=1e-9)
    assert (suzuki_weight(table) > 0) == (g > math.log(n))


def test_the_penalty_changes_the_tree_of_suzukis_slides() -> None:
    # J. Suzuki, talk at AIGM 2014: information 12, 10, 8, 6, 4, 2. The continuation with
    # 5, 2, 3, 4 words and a penalty of (a - 1)(b - 1) is from memory, its sums computed.
    plain = {(0, 1): 12, (0, 2): 10, (0, 3): 8, (1, 2): 6, (1, 3): 4, (2, 3): 2}
    words = [5, 2, 3, 4]
    weights, paying = np.zeros((4, 4)), np.zeros((4, 4))
    for (a, b), x in plain.items():
        weights[a, b] = weights[b, a] = x
        paying[a, b] = paying[b, a] = x - (words[a] - 1) * (words[b] - 1)
    assert spanning_forest(weights) == [(0, 1), (0, 2), (0, 3)]
    assert spanning_forest(paying) == [(0, 1), (1, 2), (1, 3)]


def test_the_examples_of_the_r_package_entropy() -> None:
    # Inputs from the manual pages of entropy 1.3.2; values computed beforehand.
    joint = np.array([[0.2, 0.1, 0.15], [0.1, 0.2, 0.25]])
    assert information(joint) == pytest.approx(0.0416050, abs=5e-8)
    assert information(joint) / BIT == pytest.approx(0.0600234, abs=5e-8)
    counts = np.array([[1.0, 2.0, 3.0], [6.0, 5.0, 4.0]])
    even = np.full((2, 3), 1 / 6)
    smoothed = (counts + even) / 22
    left, right = smoothed.sum(axis=1), smoothed.sum(axis=0)
    table = shaped_joint(counts, even, 1.0, 0.0, left, right)
    np.testing.assert_allclose(table, smoothed, rtol=1e-12)
    assert mutual_information(table, left, right) == pytest.approx(0.0306491, abs=5e-8)


COVER_THOMAS = np.array([[4, 2, 1, 1], [2, 4, 1, 1], [2, 2, 2, 2], [8, 0, 0, 0]]) / 32


def test_the_example_of_cover_and_thomas() -> None:
    # Elements of Information Theory, example 2.2.1 (from memory): H(X, Y) = 27/8 bits,
    # H(X) = 7/4, H(Y) = 2, I = 3/8. Rows are Y, columns X.
    assert information(COVER_THOMAS) / BIT == pytest.approx(3 / 8, abs=1e-12)
    tree = exact_tree(COVER_THOMAS, [(0, 1)])
    assert expected_surprise(tree, COVER_THOMAS) / BIT == pytest.approx(27 / 8, abs=1e-12)
    apart = exact_tree(COVER_THOMAS, [])
    assert expected_surprise(apart, COVER_THOMAS) / BIT == pytest.approx(7 / 4 + 2, abs=1e-12)


@pytest.mark.parametrize(("flip", "nats"), [(0.05, 0.494632), (0.1, 0.368064), (0.25, 0.130812)])
def test_a_binary_symmetric_pair(flip: float, nats: float) -> None:
    # I = ln 2 - h(flip); values computed beforehand.
    table = np.array([[1 - flip, flip], [flip, 1 - flip]]) / 2
    assert information(table) == pytest.approx(nats, abs=5e-7)


def test_information_is_symmetric_and_conditional_entropy_is_not() -> None:
    there, back = information(COVER_THOMAS), information(COVER_THOMAS.T.copy())
    assert there == pytest.approx(back, rel=1e-12)
    both = entropy(COVER_THOMAS)
    y_given_x = both - entropy(single(COVER_THOMAS, 1))
    x_given_y = both - entropy(single(COVER_THOMAS, 0))
    assert y_given_x / BIT == pytest.approx(13 / 8, abs=1e-12)
    assert x_given_y / BIT == pytest.approx(11 / 8, abs=1e-12)


@pytest.mark.parametrize(
    ("words", "probability"), [("0001", 0.0390625), ("1000", 0.0390625), ("00000", 0.24609375)]
)
def test_a_states_words_have_the_chances_of_krichevsky_and_trofimov(
    words: str, probability: float
) -> None:
    # Krichevsky & Trofimov 1981: half a record a symbol. With one word and the bin for words
    # never seen there are two symbols; chances of a sequence, one word after the other.
    channel = Channel(name="s", kind="state", words=("0",))
    chance = 1.0
    for k, word in enumerate(words):
        seen = np.array([float(w) for w in words[:k]])
        chance *= choose_bins(seen, channel).marginal[int(word)]
    assert chance == pytest.approx(probability, rel=1e-12)


@pytest.mark.parametrize("n", range(2, 7))
def test_no_labelled_tree_is_better(n: int) -> None:
    # Cayley: n^(n - 2) trees. Chow & Liu 1968: most mutual information is least sum of
    # conditional entropies, whatever the root.
    rng = np.random.default_rng(n)
    joint = rng.dirichlet(np.full(2**n, 0.3)).reshape((2,) * n)
    weights = weights_of(joint)
    trees = labelled_trees(n)
    assert len({tuple(t) for t in trees}) == len(trees) == max(1, n ** (n - 2))
    ours = spanning_forest(weights)
    most = max(trees, key=lambda tree: sum(weights[a, b] for a, b in tree))
    least = min(trees, key=lambda tree: conditional_entropies(joint, tree))
    assert ours == most == least


def conditional_entropies(joint: Floats, tree: list[tuple[int, int]]) -> float:
    """Return the sum over channels of H(channel | its parent), the tree hung on channel 0."""
    total, placed, waiting = entropy(single(joint, 0)), {0}, list(tree)
    while waiting:
        for a, b in list(waiting):
            if a in placed or b in placed:
                parent = a if a in placed else b
                total += entropy(pair(joint, a, b)) - entropy(single(joint, parent))
                placed |= {a, b}
                waiting.remove((a, b))
    return total
