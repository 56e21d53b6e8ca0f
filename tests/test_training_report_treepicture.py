"""A drawn tree shows its names and nats, edges as wide as these, and says what is not on it."""

from __future__ import annotations

import re

import numpy as np
import pytest

from scoring.channels import ChannelTable, parse_channels
from scoring.tree import Tree
from training.report.treepicture import LEAST_NATS, MOST_DRAWN, Drawn, draw_tree, shortened

FOUR = [(0, 1), (1, 2), (1, 3)]


def table_of(n: int, name: str = "c{}") -> ChannelTable:
    channels = [{"name": name.format(k)} for k in range(n)]
    return parse_channels({"channel": channels}, "test")


def tree_of(n: int, edges: list[tuple[int, int]], nats: list[float]) -> Tree:
    marginals = tuple(np.log([0.5, 0.5]) for _ in range(n))
    ratios = tuple(np.zeros((2, 2)) for _ in edges)
    return Tree(np.array(edges, dtype=np.int64).reshape(-1, 2), np.array(nats), marginals, ratios)


def drawn(n: int, edges: list[tuple[int, int]], nats: list[float], name: str = "c{}") -> Drawn:
    return draw_tree(table_of(n, name), tree_of(n, edges, nats), "tree")


def labels(piece: str) -> list[str]:
    return re.findall(r"<text[^>]*>([^<]*)</text>", piece)


def widths(piece: str) -> list[float]:
    """Return the widths of the edges, the only curves."""
    curves = [p for p in re.findall(r"<path[^>]*>", piece) if "opacity: 0.6" in p]
    return [float(re.findall(r"stroke-width: ([\d.]+)", c)[0]) for c in curves]


def test_names_stand_with_the_nats_of_the_edge_they_hang_on() -> None:
    piece = drawn(4, FOUR, [0.5, 1.25, 0.333]).piece
    assert sorted(labels(piece)) == ["c0 · 0.50", "c1", "c2 · 1.25", "c3 · 0.33"]


def test_an_edge_is_as_wide_as_its_nats() -> None:
    found = sorted(widths(drawn(4, FOUR, [1.0, 2.0, 4.0]).piece))
    assert len(found) == 3
    steps = np.diff(found)
    assert steps[1] == pytest.approx(2 * steps[0], rel=1e-3)


def test_edges_that_say_nothing_are_not_drawn_and_their_channels_named() -> None:
    found = drawn(5, [*FOUR, (0, 4)], [1.0, 0.5, -1e-17, LEAST_NATS / 2])
    assert len(widths(found.piece)) == 2
    assert found.alone == ("c3", "c4")
    assert found.n_left_out == 0


def test_a_forest_without_a_paying_edge_has_no_picture() -> None:
    found = drawn(4, FOUR, [0.0, 0.0, 0.0])
    assert found.piece == ""
    assert found.alone == ("c0", "c1", "c2", "c3")


def test_of_very_many_channels_those_on_the_strongest_edges_are_drawn() -> None:
    n = 300
    edges = [(k, k + 1) for k in range(n - 1)]
    found = drawn(n, edges, [0.01 + k / 100 for k in range(n - 1)])
    shown = {label.split(" · ")[0] for label in labels(found.piece)}
    assert shown == {f"c{k}" for k in range(n - MOST_DRAWN, n)}
    assert found.n_left_out == n - MOST_DRAWN


def test_labels_keep_to_the_picture_and_to_rows_of_their_own() -> None:
    rng = np.random.default_rng(3)
    n = 50
    edges = [(max(0, k - 1 - int(rng.integers(0, 3))), k) for k in range(1, n)]
    name = "station_4_winding_temperature_{}"
    piece = drawn(n, edges, rng.exponential(0.5, n - 1).tolist(), name).piece
    box = re.search(r'viewBox="0 0 ([\d.]+) ([\d.]+)"', piece)
    assert box is not None
    places = re.findall(r'x="([\d.]+)" y="([\d.]+)">([^<]*)</text>', piece)
    assert len(places) == n
    rows = sorted(float(y) for _, y, _ in places)
    assert np.diff(rows).min() > 12
    assert max(float(x) + 0.5 * 10.5 * len(label) for x, _, label in places) < float(box.group(1))


def test_kinds_of_channels_look_different() -> None:
    table = parse_channels(
        {
            "channel": [
                {"name": "flow"},
                {"name": "pump", "kind": "state", "words": ["running", "stopped"]},
            ],
            "derived": [{"name": "flow before", "operation": "previous", "of": ["flow"]}],
        },
        "test",
    )
    piece = draw_tree(table, tree_of(3, [(0, 1), (0, 2)], [1.0, 2.0]), "tree").piece
    colours = set(re.findall(r"fill: (#[0-9a-f]{6})", piece))
    assert len(colours) == 3
    assert "flow and flow before (2.00 nats), flow and pump (1.00 nats)" in piece


def test_a_long_name_is_cut_in_its_middle() -> None:
    assert shortened("winding_temperature_2", 21) == "winding_temperature_2"
    assert shortened("winding_temperature_2", 9) == "wind…re_2"
    assert len(shortened("winding_temperature_2", 12)) == 12
