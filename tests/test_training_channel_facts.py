"""What a column shows: words or numbers, a grid or none, how long a state stays."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from training.channel_facts import MAX_VALUES, MAX_WORDS, ColumnFacts, find_resolution
from training.history.readings import NumberReader


def facts_of(cells: Sequence[object], sources: list[int] | None = None) -> ColumnFacts:
    """Return the facts of a column, taken in two batches."""
    facts, numbers = ColumnFacts("x"), NumberReader(".")
    codes = np.array(sources or [0] * len(cells), dtype=np.int32)
    column = pa.array(["" if c is None else str(c) for c in cells])
    half = len(cells) // 2
    for part in (slice(0, half), slice(half, None)):
        facts.add(column[part.start : part.stop], numbers, codes[part])
    return facts


def test_cells_are_counted_by_what_they_hold() -> None:
    facts = facts_of([1, 2, "", None, "text", "inf", 3, 3])
    assert (facts.n_cells, facts.n_missing, facts.n_text, facts.n_infinite) == (8, 2, 1, 1)
    assert (facts.low, facts.high, facts.n_values) == (1, 3, 3)
    assert dict(facts.words) == {"text": 1}
    assert not facts.is_text


def test_neighbours_are_counted_within_a_source() -> None:
    facts = facts_of([1, 2, 1, 2, 1, 2, 1, 2], [0, 1] * 4)
    assert facts.same_share == 1.0


def test_words_are_text_with_the_numbers_among_them() -> None:
    facts = facts_of(["auto", "auto", "manual", "2", "auto", "auto", "2", "manual"])
    assert facts.is_text
    assert set(facts.words) == {"auto", "manual", "2"}


def test_words_are_kept_up_to_a_bound() -> None:
    assert len(facts_of([f"remark {i}" for i in range(100)]).words) == MAX_WORDS + 1


def test_few_whole_numbers_that_stay_are_a_state_and_a_flickering_bit_is_not() -> None:
    assert facts_of([0] * 20 + [1] * 20).is_few_integers
    assert facts_of([0] * 20 + [1] * 20 + [2] * 20).is_few_integers
    assert not facts_of([0, 1] * 20).is_few_integers
    assert not facts_of([0] * 20 + [3] * 20).is_few_integers
    assert not facts_of([0.0] * 20 + [0.5] * 20).is_few_integers
    assert not facts_of([1] * 40).is_few_integers


def test_a_number_of_the_row_counts_rows_and_a_constant_does_not() -> None:
    assert facts_of(range(10)).counts_rows
    assert not facts_of([5] * 10).counts_rows
    assert not facts_of([1, 2, 3, 5, 6, 7, 8, 9]).counts_rows


def test_a_column_of_a_type_without_readings_says_why() -> None:
    facts = ColumnFacts("x")
    facts.add(pa.array([[1.0]]), NumberReader("."), np.zeros(1, dtype=np.int32))
    assert "list<" in facts.unreadable


@given(
    step=st.sampled_from([0.01, 0.1, 0.25, 0.32793, 0.5, 1.0, 5.0, 1e-4]),
    offset=st.floats(-100, 100),
    seed=st.integers(0, 1000),
)
def test_the_step_of_a_grid_is_found_whatever_its_offset(
    step: float, offset: float, seed: int
) -> None:
    steps = np.round(np.random.default_rng(seed).normal(0, 12, 3000))
    values = np.unique(np.round(offset + step * steps, 9))
    found = find_resolution(values, 3000)
    assert found is not None
    assert found == pytest.approx(step, rel=1e-3)


def test_a_few_odd_values_do_not_hide_the_grid() -> None:
    rng = np.random.default_rng(1)
    values = np.round(rng.normal(50, 2, 4000), 1)
    values[:1] += 0.037
    assert find_resolution(np.unique(values), 4000) == 0.1


def test_printed_decimals_of_a_converters_steps_are_a_grid() -> None:
    counts = np.round(np.random.default_rng(2).normal(2000, 30, 4000))
    values = np.round(counts * 16 / 4095, 4)
    assert find_resolution(np.unique(values), 4000) == pytest.approx(16 / 4095, rel=1e-3)


@pytest.mark.parametrize("seed", range(20))
def test_readings_without_a_grid_have_no_resolution(seed: int) -> None:
    rng = np.random.default_rng(seed)
    assert find_resolution(np.unique(rng.normal(50, 2, 500)), 500) is None
    # Repeated as a slow poll repeats them, they are still on no grid.
    assert find_resolution(np.unique(rng.normal(50, 2, 500)), 5000) is None


def test_two_values_tell_no_step() -> None:
    assert find_resolution(np.array([0.0, 7.0]), 100) is None


def test_most_sources_decide_the_resolution() -> None:
    rng = np.random.default_rng(4)
    cells = [round(x, 1) for x in rng.normal(5, 1, 600)] + list(rng.normal(5, 1, 200))
    facts = facts_of(cells, [0] * 300 + [1] * 300 + [2] * 200)
    assert facts.resolution() == 0.1


def test_distinct_values_are_kept_up_to_a_bound() -> None:
    facts = facts_of(np.random.default_rng(5).normal(0, 1, 3 * MAX_VALUES).tolist())
    assert len(facts.values[0]) <= 2 * MAX_VALUES
