"""Random forests, members and rows for property tests."""

from __future__ import annotations

import numpy as np
from hypothesis import settings
from hypothesis import strategies as st

from scoring.model import Member
from scoring.tree import Tree
from tests.trees import random_member, random_tree

# For tests whose slow twin costs more than what it checks.
SOME = settings(max_examples=40)

SEEDS = st.integers(0, 2**31)


@st.composite
def trees(draw: st.DrawFn, most_nodes: int = 5, most_bins: int = 4) -> Tree:
    """Forests of 1 to most_nodes nodes with 1 to most_bins bins each."""
    sizes = draw(st.lists(st.integers(1, most_bins), min_size=1, max_size=most_nodes))
    return random_tree(draw(SEEDS), sizes, rare=draw(st.sampled_from([0.0, 1e-9])))


@st.composite
def members(draw: st.DrawFn) -> Member:
    """Members of 3 or 4 nodes; none, one or two of them choose a regime."""
    sizes = draw(st.lists(st.integers(2, 3), min_size=3, max_size=4))
    n_regime = draw(st.integers(0, 2))
    regime = tuple(range(n_regime))
    combinations = (
        [()]
        if not regime
        else [tuple(int(x) for x in code) for code in np.ndindex(*(sizes[r] for r in regime))]
    )
    # At least one combination is left to the last part.
    n_keys = draw(st.integers(0, min(3, len(combinations) - 1))) if regime else 0
    keys = draw(st.permutations(combinations))[:n_keys] if n_keys else []
    return random_member(draw(SEEDS), sizes, regime, keys, states=regime)
