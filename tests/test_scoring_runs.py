"""Several sources in one pass: the same as each by itself, whatever kind its member is."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from scoring.runs import Bench
from scoring.scorer import Scorer, Scores
from scoring.standing import Standing
from tests.models import a_model, a_regime_model, some_records
from tests.strategies import SEEDS

PLAIN, WITH_PARTS = a_model(), a_regime_model()
# Members of one part and of several under one model, beside the fleet's for a source never seen.
MIXED = replace(
    PLAIN,
    members={
        "a": PLAIN.members["a"],
        "b": replace(PLAIN.fleet, source="b"),
        "c": replace(WITH_PARTS.members["a"], source="c"),
    },
)
SOURCES = ("a", "never seen", "c", "b")


@given(SEEDS, st.lists(st.integers(1, 7), min_size=1, max_size=4), st.booleans())
@settings(max_examples=40)
def test_sources_together_get_what_each_gets_alone(seed: int, sizes: list[int], old: bool) -> None:
    scorer, alone = Scorer(MIXED), Scorer(MIXED)
    start = np.cumsum([0, *sizes])
    times_ns, values = some_records(seed, int(start[-1]), gaps=0.2)
    # One batch may be late for one source, and one standing is of a model of before.
    times_ns[start[-2] :] -= 10**12
    before: list[Standing | None] = [None] * len(sizes)
    before[-1] = Standing("of before" if old else MIXED.name, int(times_ns[-1]) + 1, 3.5)
    sources = SOURCES[: len(sizes)]
    scores, standings = scorer.score_runs(sources, start, times_ns, values, before)
    for k, source in enumerate(sources):
        use = slice(start[k], start[k + 1])
        wanted, standing = alone.score(source, times_ns[use], values[use], before[k])
        part = scores.part(use)
        for name in Scores._fields:
            np.testing.assert_array_equal(getattr(part, name), getattr(wanted, name), err_msg=name)
        assert standings[k].to_bytes() == standing.to_bytes()


def test_a_member_has_one_place_in_every_thread_that_asks() -> None:
    bench = Bench(MIXED.derived_groups[0])

    def places(names: list[str]) -> tuple[list[int], int]:
        found = [bench.place(MIXED.members[name]) for name in names]
        return found, len(bench.parts)

    with ThreadPoolExecutor(1) as other:
        assert places(["a", "b", "a"]) == ([0, 1, 0], 2)
        # c has two parts, one after the other.
        assert other.submit(places, ["b", "c", "a", "c"]).result() == ([0, 1, 3, 1], 4)
