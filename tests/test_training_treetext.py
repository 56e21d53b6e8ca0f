"""The forest as text: hung on the channel with most neighbours, heaviest first."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from tests.spools import measurements
from tests.trees import random_tree
from training.treetext import tree_lines


def test_a_forest_is_hung_on_its_busiest_channels() -> None:
    tree = random_tree(1, [2] * 8, edges=[(0, 1), (1, 2), (1, 3), (3, 4), (5, 6)])
    tree = replace(tree, nats=np.array([0.1, 0.25, 1.5, 0.031, 2.0]))
    assert tree_lines(measurements(8), tree) == [
        "c1",
        "  c3  1.500",
        "    c4  0.031",
        "  c2  0.250",
        "  c0  0.100",
        "c5",
        "  c6  2.000",
        "without an edge: c7",
    ]


def test_no_edge_at_all_is_said_on_one_line() -> None:
    assert tree_lines(measurements(2), random_tree(1, [2, 2], edges=[])) == [
        "without an edge: c0, c1",
    ]
