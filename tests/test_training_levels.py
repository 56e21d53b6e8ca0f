"""Levels keep to the budget, all higher ones too, and say when they are guesses."""

from __future__ import annotations

import tracemalloc
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from scoring.alert_settings import AlertSettings
from tests.streams import NEVER, held, noise, times_of
from training.heldexcess import HeldExcess, keep_excess
from training.levels import MAX_TIME_SHARE, Curve, curve_of, levels_at
from training.scale import LEAST_COUNT
from training.sweep import Pairs, Sweep

SETTINGS = AlertSettings()


def a_curve(
    folder: Path, alerts_per_day: float = 1.5, **more: float
) -> tuple[Curve, list[HeldExcess]]:
    kept = held(folder, **more)  # type: ignore[arg-type]
    curve = curve_of(kept, NEVER, alerts_per_day, SETTINGS)
    assert curve is not None
    return curve, kept


def count(curve: Curve, place: int, kept: list[HeldExcess]) -> tuple[int, float]:
    """Return episodes and the share of time in alert, followed anew at one place."""
    levels = levels_at(replace(curve, chosen=place), NEVER, max(one.usual for one in kept))
    pairs = Pairs(*(np.array([x]) for x in (levels.record, levels.sustained, levels.cap)))
    sweep = Sweep(pairs, NEVER, SETTINGS)
    n = 0
    for one in kept:
        for times_ns, excess in one.chunks():
            n += int(sweep.add(one.source, one.usual, times_ns, excess).raised.sum())
    return n, float(sweep.n_over[0] / sweep.n_judged)


def test_the_chosen_levels_keep_to_the_budget_and_so_do_all_higher_ones(tmp_path: Path) -> None:
    curve, kept = a_curve(tmp_path)
    # Three sources for ten days, 1.5 a day over all three.
    assert curve.allowed == pytest.approx(15.0)
    for place in range(0, curve.chosen + 1, 5):
        n, share = count(curve, place, kept)
        assert n <= curve.allowed
        assert share <= MAX_TIME_SHARE
    n, share = count(curve, curve.chosen, kept)
    assert n == curve.seen[curve.chosen] >= 0.6 * curve.allowed
    assert share == pytest.approx(curve.time_share[curve.chosen])


def test_the_next_lower_levels_do_not_keep_to_it(tmp_path: Path) -> None:
    curve, kept = a_curve(tmp_path)
    n, share = count(curve, curve.chosen + 1, kept)
    assert (
        n > curve.allowed
        or share > MAX_TIME_SHARE
        or curve.expected[curve.chosen + 1] > (curve.allowed)
    )


def test_levels_fall_and_counts_rise_from_strict_to_loose(tmp_path: Path) -> None:
    curve, _ = a_curve(tmp_path)
    assert (np.diff(curve.record) <= 0).all()
    assert (np.diff(curve.sustained) <= 0).all()
    assert (curve.sustained <= curve.record).all()
    # Together about as often as sustained alone, at most as both; levels are tried in steps.
    counted = curve.alone > curve.scales[1].n_tail
    assert (curve.seen[counted] >= 0.6 * curve.alone[counted]).all()
    assert (curve.seen <= 4 / 3 * np.maximum(curve.alone, 1) + 1).all()


def test_a_budget_beyond_the_data_follows_the_tail_and_no_further_than_ten_spans(
    tmp_path: Path,
) -> None:
    curve, _ = a_curve(tmp_path, alerts_per_day=0.02)
    assert curve.allowed == pytest.approx(0.2)
    assert curve.seen[curve.chosen] == 0
    assert curve.record[curve.chosen] > curve.scales[0].highest
    stricter, _ = a_curve(tmp_path, alerts_per_day=1e-6)
    assert stricter.alone[stricter.chosen] == LEAST_COUNT


def test_days_add_up_and_cover_the_held_out_time(tmp_path: Path) -> None:
    curve, _ = a_curve(tmp_path)
    assert curve.by_day.shape == (len(curve.alone), 10)
    assert np.array_equal(curve.by_day.sum(axis=1), curve.seen)
    assert curve.source_days == pytest.approx(30.0)


def test_time_in_alert_can_decide_instead_of_the_budget(tmp_path: Path) -> None:
    # One long plateau in ten days: one alert, but 2 % of the time.
    excess = noise(14_400, 0, bursts_per_day=0.0)
    excess[5000:5300] += 60.0
    kept = [keep_excess("a", 14_400, [(times_of(14_400), excess)], tmp_path / "a")]
    curve = curve_of(kept, NEVER, 1.0, SETTINGS)
    assert curve is not None
    n, share = count(curve, curve.chosen, kept)
    assert share <= MAX_TIME_SHARE
    # No level that sees the plateau is low enough for noise to use up the budget.
    assert n <= 2 < curve.allowed


def test_without_a_judged_record_nothing_is_set(tmp_path: Path) -> None:
    never = [keep_excess("a", 3, [(times_of(3), np.full(3, np.nan))], tmp_path / "a")]
    assert curve_of(never, NEVER, 1.0, SETTINGS) is None
    assert curve_of([], NEVER, 1.0, SETTINGS) is None
    assert levels_at(None, NEVER, 0.0) is NEVER


def test_constant_excess_raises_nothing_at_its_levels(tmp_path: Path) -> None:
    kept = [keep_excess("a", 500, [(times_of(500), np.full(500, 2.0))], tmp_path / "a")]
    curve = curve_of(kept, NEVER, 1.0, SETTINGS)
    assert curve is not None
    assert curve.record[curve.chosen] >= 2.0
    assert count(curve, curve.chosen, kept) == (0, 0.0)


def test_where_sustained_rests_is_the_mean_of_excess_without_its_outliers(tmp_path: Path) -> None:
    excess = np.full(5000, 1.0)
    excess[100] = 1e6
    kept = [keep_excess("a", 5000, [(times_of(5000), excess)], tmp_path / "a")]
    curve_of(kept, NEVER, 1.0, SETTINGS)
    assert kept[0].usual == pytest.approx(1.0, abs=0.5)


def test_ten_times_the_time_needs_no_more_memory(tmp_path: Path) -> None:
    def peak_of(n: int) -> int:
        parts = ((times_of(n)[i : i + 20_000], noise(20_000, i)) for i in range(0, n, 20_000))
        kept = keep_excess("a", n, parts, tmp_path / f"{n}")
        tracemalloc.start()
        curve_of([kept], NEVER, 1.0, SETTINGS)
        _, peak = tracemalloc.get_traced_memory()
        tracemalloc.stop()
        return peak

    peak_of(20_000)
    assert peak_of(200_000) <= 1.2 * peak_of(20_000)


def test_time_left_out_of_the_tables_lends_the_rest_no_time_in_alert(tmp_path: Path) -> None:
    # Were it so, false alerts that nobody labels would lower the levels night after night.
    plain, kept = a_curve(tmp_path, alerts_per_day=1000.0)
    assert plain.quiet_share is plain.time_share
    left_out = {}
    for one in kept:
        times = np.concatenate([times_ns for times_ns, _ in one.chunks()])
        left_out[one.source] = np.array([[times[0], times[len(times) // 4]]])
    curve = curve_of(kept, NEVER, 1000.0, SETTINGS, left_out)
    assert curve is not None
    assert curve.left_share == pytest.approx(0.25, abs=0.01)
    assert curve.quiet_share[curve.chosen] <= MAX_TIME_SHARE
    assert curve.record[curve.chosen] >= 0.9 * plain.record[plain.chosen]
    assert curve.seen_without <= curve.seen[curve.chosen]
