"""Expected intervals on held-out records are those of scoring, and are counted as they fall."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scoring.bins import MISSING
from scoring.derived import derive
from scoring.expected import shortest_interval
from scoring.model import Model
from scoring.scorer import Scorer
from tests.models import a_channel_table, a_model, a_regime_model, some_records
from training.blocks import N_FOLDS
from training.coverage import (
    MAX_RECORDS,
    MIN_RECORDS,
    CoverageSample,
    held_out_intervals,
    trees_that_hold,
    usual_widths,
)

TABLE = a_channel_table()


def records(seed: int, n: int) -> tuple[np.ndarray, np.ndarray]:
    times_ns, values = some_records(seed, n)
    times_ns = np.sort(times_ns)
    values[:, 0] = np.where(values[:, 0] > 50, np.nan, values[:, 0])
    return times_ns, derive(TABLE, times_ns, values, None)[0]


@pytest.mark.parametrize("model", [a_model(), a_regime_model()], ids=["plain", "regimes"])
def test_intervals_are_those_that_scoring_shows(model: Model) -> None:
    _, values = records(3, 60)
    member = model.members["a"]
    low, high = held_out_intervals(member, model.table, values)
    scorer, rows = Scorer(model), member.bin_table.rows(values)
    n_tried = 0
    for r in range(len(values)):
        for i, channel in enumerate(model.table.instruments):
            unread = member.regime and (rows[r, list(member.regime)] == MISSING).any()
            if channel.is_state or np.isnan(values[r, i]) or unread:
                assert np.isnan(low[r, i])
                continue
            wanted = scorer.expected("a", rows[r], i)
            assert (low[r, i], high[r, i]) == pytest.approx((wanted.low, wanted.high))
            n_tried += 1
    assert n_tried > 80
    assert np.isnan(low[:, len(model.table.instruments) :]).all()


def test_each_row_has_the_tree_of_its_regime_and_rows_without_one_have_none() -> None:
    member = a_regime_model().members["a"]
    rows = np.zeros((4, 6), dtype=np.uint8)
    rows[:, 3] = [0, 1, MISSING, 0]
    found = [(tree is member.parts[k].tree, where.tolist())
             for k, (tree, where) in enumerate(trees_that_hold(member, rows))]  # fmt: skip
    assert found == [(True, [0, 3]), (True, [1])]


def test_readings_inside_and_outside_are_counted_by_channel() -> None:
    member = a_model().members["a"]
    times_ns, values = records(5, 80)
    sample = CoverageSample(TABLE, 80)
    sample.add(times_ns[:50], np.zeros(50, np.int64), values[:50])
    sample.add(times_ns[50:], np.ones(30, np.int64), values[50:])
    found = sample.coverage([member] * N_FOLDS)
    low, high = held_out_intervals(member, TABLE, values)
    inside = ((values >= low) & (values <= high)).sum(axis=0)[:4]
    assert found.inside.tolist() == inside.tolist()
    assert 0 < found.inside[0] < found.n[0]
    assert found.n.tolist() == [*(~np.isnan(values[:, :3])).sum(axis=0), 0]
    assert np.isnan(found.width[3])


def test_the_member_that_did_not_see_a_fold_makes_its_intervals() -> None:
    member = a_model().members["a"]
    moved = replace(member, bins=tuple(replace(b, borders=b.borders + 1000) for b in member.bins))
    times_ns, values = records(5, 80)
    sample = CoverageSample(TABLE, 80)
    sample.add(times_ns, np.full(80, 2), values)
    unmoved = sample.coverage([member] * N_FOLDS)
    by_fold = sample.coverage([moved, moved, member, moved, moved])
    assert by_fold.inside.tolist() == unmoved.inside.tolist()
    assert sample.coverage([moved] * N_FOLDS).inside[1] < unmoved.inside[1]


def test_a_sample_of_many_records_is_bounded_and_spread_over_all_of_them() -> None:
    n = 200_000
    times_ns = np.arange(n) * 60_000_000_000
    sample = CoverageSample(TABLE, n)
    values = np.full((n, 6), np.nan)
    values[:, 1] = np.arange(n)
    for start in range(0, n, 10_000):
        part = slice(start, start + 10_000)
        sample.add(times_ns[part], np.zeros(10_000, np.int64), values[part])
    kept = np.concatenate(sample._values)[:, 1]
    assert MIN_RECORDS < len(kept) < 1.3 * MAX_RECORDS
    quarters = np.bincount((kept * 4 // n).astype(int), minlength=4) / len(kept)
    assert quarters == pytest.approx(0.25, abs=0.08)


def test_nothing_held_out_is_nothing_covered() -> None:
    found = CoverageSample(TABLE, 0).coverage([a_model().fleet] * N_FOLDS)
    assert found.n.tolist() == [0, 0, 0, 0]
    assert np.isnan(found.width).all()


def test_the_usual_range_is_of_the_channel_by_itself() -> None:
    member = a_model().members["a"]
    widths = usual_widths(member, TABLE)
    logs = member.parts[0].tree.log_marginals[1]
    low, high, _ = shortest_interval(np.exp(logs), member.bins[1].borders, 0.0)
    assert widths[1] == pytest.approx(high - low)
    assert np.isnan(widths[3:]).all()
