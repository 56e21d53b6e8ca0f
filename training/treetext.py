"""A forest as indented text, for the terminal."""

from __future__ import annotations

from scoring.channels import ChannelTable
from scoring.tree import Tree


def tree_lines(table: ChannelTable, tree: Tree) -> list[str]:
    """Return the forest as lines, each tree hung on its channel with most neighbours.

    Channels without an edge come last, on one line.
    """
    names = table.names
    nats = {(int(a), int(b)): float(x) for (a, b), x in zip(tree.edges, tree.nats, strict=True)}
    neighbours = [tree.neighbours(node) for node in range(tree.n_nodes)]
    seen: set[int] = set()
    lines: list[str] = []

    def hang(node: int, depth: int, weight: str) -> None:
        seen.add(node)
        lines.append(f"{'  ' * depth}{names[node]}{weight}")
        below = [n for n in neighbours[node] if n not in seen]
        weights = {n: nats[min(node, n), max(node, n)] for n in below}
        for n in sorted(below, key=lambda n: -weights[n]):
            hang(n, depth + 1, f"  {weights[n]:.3f}")

    for node in sorted(range(tree.n_nodes), key=lambda n: (-len(neighbours[n]), n)):
        if node not in seen and neighbours[node]:
            hang(node, 0, "")
    alone = [names[n] for n in range(tree.n_nodes) if not neighbours[n]]
    if alone:
        lines.append("without an edge: " + ", ".join(alone))
    return lines
