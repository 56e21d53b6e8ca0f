"""Excess: a record's surprise against what is usual under the same gaps."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace

import numpy as np
import pytest

from scoring import excess as excess_module
from scoring.bins import MISSING, BinRows
from scoring.density import surprise_of
from scoring.excess import ENOUGH_TRUE_ROWS, ExcessScale
from scoring.model import Member, Part, Usual
from tests.trees import bins_of, plain_usual, random_tree, sample_rows

SIZES = [6, 5, 4, 6, 5]


def a_member(rows: BinRows, shift: float = 0.0) -> Member:
    """Return a member whose held-out records are `rows`, scored `shift` nats higher."""
    tree = random_tree(11, SIZES, edges=[(0, 1), (1, 2), (1, 3), (3, 4)])
    member = Member("a", bins_of(SIZES), (Part(tree),), plain_usual(5, rows))
    surprise = surprise_of(member, rows[~(rows == MISSING).any(axis=1)])
    usual = Usual(
        float(np.median(surprise)) + shift,
        float(np.quantile(surprise, 0.99)) + shift,
        *(0.0, np.zeros(5), np.ones(5), rows),
    )
    return replace(member, usual=usual)


@pytest.fixture(scope="module")
def rows() -> BinRows:
    """Return 3000 records without gaps."""
    tree = random_tree(11, SIZES, edges=[(0, 1), (1, 2), (1, 3), (3, 4)])
    return sample_rows(np.random.default_rng(3), tree, 3000)


def masked(rows: BinRows, *nodes: int) -> BinRows:
    """Return rows with some nodes missing."""
    out = rows.copy()
    out[:, list(nodes)] = MISSING
    return out


def test_a_full_record_is_compared_with_the_median(rows: BinRows) -> None:
    member = a_member(rows)
    surprise = surprise_of(member, rows)
    excess = ExcessScale(member).excess(rows, surprise)
    np.testing.assert_allclose(excess, surprise - np.median(surprise), atol=1e-12)


@pytest.mark.parametrize("nodes", [(0,), (1,), (0, 4), (1, 2, 3)])
def test_under_gaps_the_middle_is_nought_and_the_high_point_that_of_full_records(
    rows: BinRows, nodes: tuple[int, ...]
) -> None:
    member = a_member(rows)
    scale = ExcessScale(member)
    full = scale.excess(rows, surprise_of(member, rows))
    gaps = masked(rows, *nodes)
    excess = scale.excess(gaps, surprise_of(member, gaps))
    assert np.median(excess) == pytest.approx(0.0, abs=1e-9)
    assert np.quantile(excess, 0.99) == pytest.approx(np.quantile(full, 0.99), rel=1e-9)


@pytest.mark.parametrize("nodes", [(0,), (1,), (2,), (0, 4), (0, 1), (2, 3, 4), (0, 2, 4)])
@pytest.mark.parametrize("gappy", [False, True])
def test_kept_records_under_a_mask_are_scored_as_anything_else(
    rows: BinRows, nodes: tuple[int, ...], gappy: bool
) -> None:
    some = rows[:400].copy()
    if gappy:
        some[np.random.default_rng(5).random(some.shape) < 0.2] = MISSING
    member = a_member(some)
    mask = np.isin(np.arange(5), nodes)
    wanted = surprise_of(member, masked(some, *nodes))
    np.testing.assert_allclose(ExcessScale(member)._under(mask), wanted, rtol=0, atol=1e-10)


@pytest.mark.parametrize("nodes", [(0,), (1,), (2,), (4,), (2, 4), (1, 3)])
def test_so_they_are_where_a_state_chooses_the_tree(rows: BinRows, nodes: tuple[int, ...]) -> None:
    some = rows[:400].copy()
    some[np.random.default_rng(6).random(some.shape) < 0.1] = MISSING
    other = random_tree(12, SIZES, edges=[(0, 2), (1, 2), (3, 4)])
    plain = a_member(some)
    parts = (Part(other, (3,), np.log(0.2)), replace(plain.parts[0], log_share=np.log(0.8)))
    member = replace(plain, parts=parts, regime=(0,))
    mask = np.isin(np.arange(5), nodes)
    wanted = surprise_of(member, masked(some, *nodes))
    np.testing.assert_allclose(ExcessScale(member)._under(mask), wanted, rtol=0, atol=1e-10)


def test_the_two_points_are_those_of_numpy() -> None:
    rng = np.random.default_rng(7)
    for n in (1, 2, 3, 100, 101, 2999):
        values = rng.normal(size=n)
        middle, high = excess_module._middle_and_high(values)
        assert middle == pytest.approx(np.median(values), abs=1e-12)
        assert high == pytest.approx(np.quantile(values, 0.99), abs=1e-12)


def test_records_that_truly_had_the_gap_are_preferred(rows: BinRows) -> None:
    # The gap comes when channel 0 is in its upper bins, as when a pump stands.
    with_gap = rows.copy()
    gone = with_gap[:, 0] >= 3
    with_gap[gone, 4] = MISSING
    assert gone.sum() >= ENOUGH_TRUE_ROWS
    member = a_member(with_gap)
    true = with_gap[gone]
    excess = ExcessScale(member).excess(true, surprise_of(member, true))
    assert np.median(excess) == pytest.approx(0.0, abs=1e-9)


def test_what_unseen_records_have_more_is_taken_along(rows: BinRows) -> None:
    gaps = masked(rows, 2)
    plain, shifted = a_member(rows), a_member(rows, shift=1.0)
    surprise = surprise_of(plain, gaps)
    less = ExcessScale(plain).excess(gaps, surprise) - ExcessScale(shifted).excess(gaps, surprise)
    assert np.all((less > 0.3) & (less < 3.0))


def test_rows_keep_their_place_whatever_is_missing(rows: BinRows) -> None:
    member = a_member(rows)
    mixed = rows[:60].copy()
    for r in range(60):
        mixed[r, : r % 4] = MISSING
    scale = ExcessScale(member)
    surprise = surprise_of(member, mixed)
    together = scale.excess(mixed, surprise)
    single = [
        ExcessScale(member).excess(mixed[r : r + 1], surprise[r : r + 1])[0] for r in range(60)
    ]
    np.testing.assert_array_equal(together, single)


def test_the_cache_of_gaps_is_bounded(rows: BinRows, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(excess_module, "MAX_MASKS", 3)
    member = a_member(rows[:300])
    scale = ExcessScale(member)
    first = [scale.excess(masked(rows[:1], k), np.array([9.0]))[0] for k in range(5)]
    assert len(scale._known) == 3
    again = [scale.excess(masked(rows[:1], k), np.array([9.0]))[0] for k in range(5)]
    assert first == again


def test_threads_see_the_same_figures(rows: BinRows) -> None:
    member = a_member(rows[:500])
    scale = ExcessScale(member)
    jobs = [masked(rows[k : k + 20], k % 5) for k in range(40)]
    with ThreadPoolExecutor(4) as pool:
        found = list(pool.map(lambda job: scale.excess(job, surprise_of(member, job)), jobs))
    for job, excess in zip(jobs, found, strict=True):
        wanted = ExcessScale(member).excess(job, surprise_of(member, job))
        np.testing.assert_array_equal(excess, wanted)


def test_a_member_without_held_out_records_still_answers(rows: BinRows) -> None:
    member = a_member(rows[:300])
    member = replace(member, usual=plain_usual(5, rows[:0]))
    gaps = masked(rows[:4], 0)
    excess = ExcessScale(member).excess(gaps, surprise_of(member, gaps))
    assert np.all(np.isfinite(excess))
