"""Where the nodes of a forest stand in a picture: every node has a row of its own.

A tree hangs on its centre, which keeps it shallow, and grows to the right. A node stands
between its subtrees, half of them above and half below, so that no edge crosses another
edge or passes a label that stands to the right of its node.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Place:
    """One node: its row from the top, its depth, and the node it hangs on, -1 for a root."""

    node: int
    row: int
    depth: int
    parent: int


def lay_out(n_nodes: int, edges: Sequence[tuple[int, int]], nats: Sequence[float]) -> list[Place]:
    """Return the places of all nodes that have an edge, from the top row down.

    edges: of a forest. nats: their weights; a strong edge is drawn near its node.
    """
    weight: list[dict[int, float]] = [{} for _ in range(n_nodes)]
    for (a, b), x in zip(edges, nats, strict=True):
        weight[a][b] = weight[b][a] = float(x)
    trees = sorted(_components(weight), key=lambda tree: (-len(tree), tree[0]))
    places: list[Place] = []
    for tree in trees:
        root = _centre(weight, tree)
        for node, depth, parent in _in_order(weight, root):
            places.append(Place(node, len(places), depth, parent))
    return places


def _components(weight: list[dict[int, float]]) -> list[list[int]]:
    """Return the nodes of each tree with an edge, in rising order."""
    found, seen = [], set[int]()
    for first in range(len(weight)):
        if first not in seen and weight[first]:
            tree = list(_distances(weight, first))
            seen.update(tree)
            found.append(sorted(tree))
    return found


def _distances(weight: list[dict[int, float]], start: int) -> dict[int, int]:
    """Return how many edges away from `start` each node of its tree is, nearest first."""
    distance, waiting = {start: 0}, deque([start])
    while waiting:
        node = waiting.popleft()
        for other in weight[node]:
            if other not in distance:
                distance[other] = distance[node] + 1
                waiting.append(other)
    return distance


def _centre(weight: list[dict[int, float]], tree: list[int]) -> int:
    """Return the node from which no other is far: the middle of the longest path.

    The ends of a longest path are found by walking to a farthest node twice.
    """
    one = list(_distances(weight, tree[0]))[-1]
    from_one = _distances(weight, one)
    other = list(from_one)[-1]
    from_other = _distances(weight, other)
    most = max(from_one.values())
    middle = [n for n in tree if max(from_one[n], from_other[n]) == (most + 1) // 2]
    return max(middle, key=lambda n: (len(weight[n]), sum(weight[n].values()), -n))


def _in_order(weight: list[dict[int, float]], root: int) -> list[tuple[int, int, int]]:
    """Return (node, depth, parent) from the top row down."""
    parent, order = {root: -1}, [root]
    for node in order:
        for other in weight[node]:
            if other != parent[node]:
                parent[other] = node
                order.append(other)
    size = dict.fromkeys(order, 1)
    for node in reversed(order[1:]):
        size[parent[node]] += size[node]
    found: list[tuple[int, int, int]] = []
    # Explicit, because a chain of channels may be deeper than Python's own stack.
    waiting: list[tuple[int, int, bool]] = [(root, 0, False)]
    while waiting:
        node, depth, is_open = waiting.pop()
        if is_open:
            found.append((node, depth, parent[node]))
            continue
        children = [n for n in weight[node] if n != parent[node]]
        above, below = _sides(children, weight[node], size)
        waiting += [(n, depth + 1, False) for n in reversed(below)]
        waiting.append((node, depth, True))
        waiting += [(n, depth + 1, False) for n in above]
    return found


def _sides(
    children: list[int], weight: dict[int, float], size: dict[int, int]
) -> tuple[list[int], list[int]]:
    """Return the children above and below, each nearest first, of about equal height."""
    sides: tuple[list[int], list[int]] = ([], [])
    height = [0, 0]
    for child in sorted(children, key=lambda n: (-size[n], n)):
        k = 0 if height[0] < height[1] else 1
        sides[k].append(child)
        height[k] += size[child]
    for side in sides:
        side.sort(key=lambda n: (-weight[n], n))
    return sides
