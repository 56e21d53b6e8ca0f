"""Held-out scores: each fold by the member that did not see it, and what is usual."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from scoring.bins import MISSING
from scoring.density import removal_of, surprise_of
from scoring.excess import ExcessScale
from scoring.model import Levels
from scoring.sustained import sustain
from tests.spools import gaussian_tree, measurements, spool_of, times
from training.blocks import N_FOLDS
from training.crossfit import (
    MAX_USUAL_ROWS,
    _Sampled,
    follow,
    hold_out,
    member_of,
    score_values,
    usual_of,
)
from training.fit import fit
from training.rows import Rows

LEVELS = Levels(record=9.0, sustained=2.0, cap=20.0, tau_s=900.0, step_s=60.0, least_readings=2)


def test_each_fold_is_scored_by_the_member_that_did_not_see_it(tmp_path: Path) -> None:
    rng = np.random.default_rng(1)
    values = gaussian_tree(rng, 900, [(0, 1), (1, 2)], 0.8)
    values[::97, 1] = np.nan
    values[5::97, :2] = np.nan
    with spool_of({"a": values}) as spool:
        rows = Rows(spool, measurements(3), ("a",), 60.0)
        density = fit(rows)
        # Members that differ, so that it shows which of them scored a record.
        members = [
            member_of("a", fit(rows, tuple(f for f in range(N_FOLDS) if f != fold), density))
            for fold in range(N_FOLDS)
        ]
        final = member_of("a", density)
        held_out = hold_out(rows, "a", members, final, tmp_path)
        (chunk,) = rows.chunks()
        found = held_out.surprise(0, 900)
        for fold, member in enumerate(members):
            at = (chunk.fold == fold) & chunk.clear
            wanted = surprise_of(member, member.bin_table.rows(values[at]))
            np.testing.assert_allclose(found[at], wanted, rtol=1e-12)
        np.testing.assert_array_equal(np.isnan(found), ~chunk.clear)
        np.testing.assert_array_equal(held_out.surprise(100, 140), found[100:140])
        assert held_out.n_records == 900
        assert held_out.n_scored == chunk.clear.sum()
        assert held_out.density == pytest.approx(np.nanmean(found), rel=1e-12)
        assert held_out.by_block.sum(axis=0).tolist() == pytest.approx(
            [np.nansum(found), chunk.clear.sum()]
        )
        whole = chunk.clear & ~np.isnan(values).any(axis=1)
        assert held_out.usual.median == pytest.approx(np.median(found[whole]))
        assert held_out.usual.high == pytest.approx(np.quantile(found[whole], 0.99))
        # Excess and sustained as the live way would have them, in time order.
        (part,) = follow(rows, final, held_out, LEVELS)
    bins = final.bin_table.rows(values)
    excess = ExcessScale(final).excess(bins, found)
    excess[(~np.isnan(values)).sum(axis=1) < LEVELS.least_readings] = np.nan
    np.testing.assert_allclose(part.excess, excess, rtol=1e-12)
    live, _, _, _ = sustain(
        *(times(900), excess, -1, 0.0, final.usual.sustained),
        *(LEVELS.tau_s, LEVELS.step_s, LEVELS.cap),
    )
    np.testing.assert_allclose(part.sustained, live, rtol=1e-12)


def test_what_was_not_seen_is_more_surprising_than_what_was(tmp_path: Path) -> None:
    rng = np.random.default_rng(2)
    values = gaussian_tree(rng, 500, [(0, 1), (1, 2)], 0.8)
    with spool_of({"a": values}) as spool:
        rows = Rows(spool, measurements(3), ("a",), 60.0)
        density = fit(rows)
        members = [
            member_of("a", fit(rows, tuple(f for f in range(N_FOLDS) if f != fold)))
            for fold in range(N_FOLDS)
        ]
        final = member_of("a", density)
        held_out = hold_out(rows, "a", members, final, tmp_path)
        seen, _ = score_values(final, rows, values)
    assert held_out.density > seen.mean()


def test_usual_takes_whole_records_where_they_are_enough() -> None:
    rng = np.random.default_rng(3)
    surprise = rng.gamma(9.0, size=1000)
    own = rng.gamma(2.0, size=(1000, 2))
    bins = np.zeros((1000, 2), dtype=np.uint8)
    bins[:400, 0], own[:400, 0] = MISSING, np.nan
    usual = usual_of(surprise, own, bins)
    assert usual.median == np.median(surprise[400:])
    assert usual.high == np.quantile(surprise[400:], 0.99)
    assert usual.channel_median.tolist() == [np.median(own[400:, 0]), np.median(own[:, 1])]
    few = usual_of(surprise[:500], own[:500], bins[:500])
    assert few.median == np.median(surprise[:500])


def test_usual_keeps_a_bounded_sample_from_start_to_end() -> None:
    n = MAX_USUAL_ROWS + 500
    bins = (np.arange(n)[:, None] % 200).astype(np.uint8)
    usual = usual_of(np.arange(n, dtype=float), np.ones((n, 1)), bins)
    assert len(usual.rows) == MAX_USUAL_ROWS
    assert (usual.rows[0, 0], usual.rows[-1, 0]) == (bins[0, 0], bins[-1, 0])


def test_a_channel_never_read_and_no_record_at_all_have_figures_too() -> None:
    own = np.full((300, 1), np.nan)
    usual = usual_of(np.ones(300), own, np.full((300, 1), MISSING, dtype=np.uint8))
    assert (usual.channel_median[0], usual.channel_spread[0]) == (0.0, 1.0)
    empty = usual_of(np.zeros(0), np.zeros((0, 1)), np.zeros((0, 1), dtype=np.uint8))
    assert (empty.median, empty.high) == (0.0, 1.0)


def test_scoring_values_is_the_removal_of_their_bins() -> None:
    values = gaussian_tree(np.random.default_rng(4), 300, [(0, 1)], 0.5)
    with spool_of({"a": values}) as spool:
        rows = Rows(spool, measurements(2), ("a",), 60.0)
        member = member_of("a", fit(rows))
        surprise, own = score_values(member, rows, values[:20])
    none = np.zeros(3, dtype=np.int64), np.zeros(0, dtype=np.int64)
    wanted = removal_of(member, member.bin_table.rows(values[:20]), *none)
    np.testing.assert_array_equal(surprise, wanted[0])
    np.testing.assert_array_equal(own, wanted[1])


def test_of_wide_records_fewer_are_kept_for_what_is_usual(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("training.crossfit.MAX_MEASURED_READINGS", 300)
    surprise, own = np.arange(100.0), np.zeros((100, 6))
    sampled = _Sampled(100, 6)
    for first in range(0, 100, 25):
        part = slice(first, first + 25)
        sampled.add(surprise[part], own[part], np.zeros((25, 6), dtype=np.uint8))
    usual = sampled.usual()
    assert len(usual.rows) == 50
    assert usual.median == np.median(surprise[::2])
