"""A dependency tree as a picture: edges as wide as their nats, every label on its own row."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import PathPatch
from matplotlib.path import Path as Curve

from scoring.channels import ChannelTable
from scoring.tree import Tree
from training.report.figures import OCHRE, SLATE, TEAL, WIDTH_IN, draw
from training.report.treelayout import Place, lay_out

# All in points, 72 an inch.
_WIDTH: Final = 72.0 * WIDTH_IN
_ROW: Final = 16.5
_MARGIN: Final = 8.0
_LABEL_GAP: Final = 6.5
_FONT: Final = 10.5
# Nobody knows the reader's font; this is wider than common ones are on average, in shares
# of the font's height a letter.
_LETTER: Final = 0.55
# From one depth to the next: never further than reads well, never so near that edges blur.
_MOST_STEP, _LEAST_STEP = 44.0, 9.0
# A name is cut in its middle to no fewer letters than this.
_LEAST_LETTERS: Final = 9
# Edges: the thinnest that is still seen, the widest that leaves room between rows.
_THINNEST, _WIDEST = 0.5, 6.5
# Edges below this are not drawn: a channel that has one value in its regime, and the like.
LEAST_NATS: Final = 0.005
# More channels than this are not drawn; those on the strongest edges are.
MOST_DRAWN: Final = 60


@dataclass(frozen=True)
class Drawn:
    """A picture of a tree, "" for nothing to draw, with what is not on it.

    alone: names without an edge of LEAST_NATS. n_left_out: channels with one that are not
    drawn.
    """

    piece: str
    alone: tuple[str, ...]
    n_left_out: int


def draw_tree(table: ChannelTable, tree: Tree, name: str) -> Drawn:
    """Return the picture of a tree. name: unlike that of any other picture on the page."""
    paying = np.flatnonzero(tree.nats >= LEAST_NATS)
    edges = [(int(a), int(b)) for a, b in tree.edges[paying]]
    nats = tree.nats[paying].tolist()
    joined = {node for edge in edges for node in edge}
    alone = tuple(n for k, n in enumerate(table.names) if k not in joined)
    if not edges:
        return Drawn("", alone, 0)
    kept = _strongest(edges, nats)
    places = lay_out(tree.n_nodes, [edges[e] for e in kept], [nats[e] for e in kept])
    weight = {frozenset(edges[e]): nats[e] for e in kept}
    picture = _Picture(table, places, weight)
    height_in = picture.height / 72.0
    piece = draw(picture.paint, name=name, alt=picture.in_words(), height_in=height_in)
    return Drawn(piece, alone, len(joined) - len(places))


def _strongest(edges: Sequence[tuple[int, int]], nats: Sequence[float]) -> list[int]:
    """Return the strongest edges that touch at most MOST_DRAWN nodes, in their order."""
    kept: list[int] = []
    nodes: set[int] = set()
    for e in sorted(range(len(edges)), key=lambda e: (-nats[e], edges[e])):
        if len(nodes | set(edges[e])) <= MOST_DRAWN:
            nodes |= set(edges[e])
            kept.append(e)
    return sorted(kept)


class _Picture:
    def __init__(
        self, table: ChannelTable, places: list[Place], weight: dict[frozenset[int], float]
    ) -> None:
        self._table, self._places, self._weight = table, places, weight
        self._at = {place.node: place for place in places}
        self._most = max(weight.values())
        self._notes = {place.node: self._note(place) for place in places}
        self._step = self._step_that_fits()
        self.height = _ROW * len(places) + 2 * _MARGIN

    def _nats(self, place: Place) -> float:
        return self._weight[frozenset((place.node, place.parent))]

    def _note(self, place: Place) -> str:
        return f" · {self._nats(place):.2f}" if place.parent >= 0 else ""

    def _room(self, place: Place, step: float) -> int:
        """Return how many letters fit to the right of a node."""
        left = _MARGIN + place.depth * step + _LABEL_GAP
        return int((_WIDTH - left) / (_LETTER * _FONT) + 1e-6)

    def _step_that_fits(self) -> float:
        step = _MOST_STEP
        for place in self._places:
            letters = len(self._table.names[place.node]) + len(self._notes[place.node])
            room = _WIDTH - _MARGIN - _LABEL_GAP - letters * _LETTER * _FONT
            if place.depth:
                step = min(step, room / place.depth)
        deepest = max(place.depth for place in self._places)
        widest = (_WIDTH - _MARGIN - _LABEL_GAP) / 2 / max(deepest, 1)
        return max(step, min(_LEAST_STEP, widest))

    def label(self, place: Place) -> str:
        """Return name and nats, the name cut in its middle where there is no room."""
        name, note = self._table.names[place.node], self._notes[place.node]
        return (
            shortened(name, max(self._room(place, self._step) - len(note), _LEAST_LETTERS)) + note
        )

    def place_of(self, place: Place) -> tuple[float, float]:
        """Return x and y in points."""
        return _MARGIN + place.depth * self._step, _MARGIN + (place.row + 0.5) * _ROW

    def paint(self, figure: Figure) -> None:
        """Fill the figure."""
        figure.set_layout_engine("none")
        axes: Axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
        axes.set(xlim=(0.0, _WIDTH), ylim=(self.height, 0.0))
        axes.set_axis_off()
        for place in self._places:
            if place.parent >= 0:
                self._paint_edge(axes, place)
        for place in self._places:
            x, y = self.place_of(place)
            marker, colour = self._look(place.node)
            axes.plot([x], [y], marker, color=colour, markersize=6.5)
            axes.text(x + _LABEL_GAP, y, self.label(place), fontsize=_FONT, va="center_baseline")

    def _paint_edge(self, axes: Axes, place: Place) -> None:
        """Draw a curve that leaves the parent up- or downwards and comes in from the left."""
        (x, y), (x_parent, y_parent) = self.place_of(place), self.place_of(self._at[place.parent])
        bend = (x_parent + 0.25 * (x - x_parent), y)
        curve = Curve(
            [(x_parent, y_parent), (x_parent, y_parent + 0.9 * (y - y_parent)), bend, (x, y)],
            [Curve.MOVETO, Curve.CURVE4, Curve.CURVE4, Curve.CURVE4],
        )
        width = _THINNEST + (_WIDEST - _THINNEST) * self._nats(place) / self._most
        axes.add_patch(PathPatch(curve, fill=False, edgecolor=TEAL, alpha=0.6, linewidth=width))

    def _look(self, node: int) -> tuple[str, str]:
        if node >= len(self._table.instruments):
            return "D", SLATE
        return ("s", OCHRE) if self._table.instruments[node].is_state else ("o", TEAL)

    def in_words(self) -> str:
        """Return the strongest edges for whoever cannot see the picture."""
        names = self._table.names
        pairs = [(self._nats(p), names[p.parent], names[p.node]) for p in self._places if p.depth]
        pairs.sort(key=lambda pair: -pair[0])
        told = ", ".join(f"{a} and {b} ({x:.2f} nats)" for x, a, b in pairs[:5])
        return f"dependency tree of {len(self._places)} channels; strongest edges: {told}"


def shortened(name: str, n_letters: int) -> str:
    """Return a name of at most so many letters, cut in its middle."""
    if len(name) <= n_letters:
        return name
    tail = (n_letters - 1) // 2
    return f"{name[: n_letters - 1 - tail]}…{name[len(name) - tail :]}"
