"""Every node has a row of its own, and no edge passes another edge or a label."""

from __future__ import annotations

import networkx as nx
import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from training.report.treelayout import Place, lay_out

Edges = list[tuple[int, int]]


@st.composite
def forests(draw: st.DrawFn) -> tuple[int, Edges, list[float]]:
    """Draw a number of nodes, the edges of a forest over them, and their nats."""
    n = draw(st.integers(1, 40))
    names = draw(st.permutations(range(n)))
    edges = []
    for k in range(1, n):
        parent = draw(st.integers(-1, k - 1))
        if parent >= 0:
            edges.append((min(names[parent], names[k]), max(names[parent], names[k])))
    nats = draw(st.lists(st.floats(0.0, 5.0), min_size=len(edges), max_size=len(edges)))
    return n, edges, nats


def below(places: list[Place], node: int) -> set[int]:
    """Return a node with all that hangs on it."""
    found = {node}
    for place in sorted(places, key=lambda p: p.depth):
        if place.parent in found:
            found.add(place.node)
    return found


@given(forests())
def test_every_node_with_an_edge_stands_once_and_hangs_by_its_edges(
    forest: tuple[int, Edges, list[float]],
) -> None:
    n, edges, nats = forest
    places = lay_out(n, edges, nats)
    assert [p.row for p in places] == list(range(len(places)))
    assert {p.node for p in places} == {node for edge in edges for node in edge}
    hung = {(min(p.node, p.parent), max(p.node, p.parent)) for p in places if p.parent >= 0}
    assert hung == set(edges)
    depth = {p.node: p.depth for p in places}
    assert all(p.depth == (depth[p.parent] + 1 if p.parent >= 0 else 0) for p in places)


@given(forests())
def test_what_hangs_on_a_node_fills_rows_of_its_own_on_either_side_of_it(
    forest: tuple[int, Edges, list[float]],
) -> None:
    # An edge runs down beside its parent's rows and then right: if the rows of a subtree
    # are a stretch that no other node stands in, it meets neither edge nor label.
    places = lay_out(*forest)
    row = {p.node: p.row for p in places}
    for place in places:
        rows = sorted(row[n] for n in below(places, place.node))
        assert rows == list(range(rows[0], rows[0] + len(rows)))
        assert all(row[n] != place.row for n in below(places, place.node) - {place.node})


@given(forests())
def test_a_tree_hangs_on_its_centre(forest: tuple[int, Edges, list[float]]) -> None:
    n, edges, nats = forest
    graph = nx.Graph(edges)
    places = lay_out(n, edges, nats)
    for component in nx.connected_components(graph):
        root = next(p.node for p in places if p.node in component and p.parent < 0)
        assert root in nx.center(graph.subgraph(component))


def test_the_larger_tree_comes_first_and_strong_edges_are_near() -> None:
    edges = [(0, 1), (2, 3), (2, 4), (2, 5), (2, 6)]
    nats = {3: 0.1, 4: 3.0, 5: 0.2, 6: 2.0}
    places = lay_out(7, edges, [9.0, *nats.values()])
    order = [p.node for p in places]
    assert set(order[:5]) == {2, 3, 4, 5, 6}
    above, under = order[:2][::-1], order[3:5]
    assert order[2] == 2
    assert all(nats[near] > nats[far] for near, far in (above, under))


def test_a_long_chain_is_laid_out() -> None:
    n = 5000
    places = lay_out(n, [(k, k + 1) for k in range(n - 1)], [1.0] * (n - 1))
    assert len(places) == n
    assert max(p.depth for p in places) == n // 2


def test_the_order_of_edges_does_not_matter() -> None:
    rng = np.random.default_rng(1)
    edges = [(int(rng.integers(0, k)), k) for k in range(1, 30)]
    nats = rng.random(29).tolist()
    turned = rng.permutation(29).tolist()
    again = lay_out(30, [edges[e] for e in turned], [nats[e] for e in turned])
    assert again == lay_out(30, edges, nats)


def test_nothing_has_no_places() -> None:
    assert lay_out(3, [], []) == []
