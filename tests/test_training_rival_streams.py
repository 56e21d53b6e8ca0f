"""Operating limits and PCA get levels as ours do, and are asked for no more than ours."""

from __future__ import annotations

from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pytest

from scoring.alert_settings import AlertSettings
from scoring.model import Levels
from tests.pump import N_LEARNED, SOURCES, pump_spool, pump_times, pump_values
from training.calls import calls_by_pair
from training.judging import Call, Judge
from training.replayed import same_rate
from training.rival_streams import LIMITS, PCA, Rival, fit_rivals

LEVELS = Levels(1e9, 1e9, 1e9, 900.0, 60.0, 1)
SETTINGS = AlertSettings()


@cache
def fitted(alerts_per_day: float = 2.0) -> tuple[Rival, ...]:
    with TemporaryDirectory() as folder, pump_spool() as spool:
        return tuple(fit_rivals(spool, LEVELS, alerts_per_day, SETTINGS, Path(folder)))


def test_both_are_fitted_for_every_source() -> None:
    assert [rival.name for rival in fitted()] == [LIMITS, PCA]
    for rival in fitted():
        assert set(rival.methods) == set(SOURCES)
        assert rival.curve.n_sources == 2


def test_their_levels_keep_the_budget_on_their_history() -> None:
    for rival in fitted():
        curve = rival.curve
        assert curve.seen[curve.chosen] <= curve.allowed
        pairs = rival.pairs(LEVELS)
        assert np.array_equal(pairs.record, curve.record)
        assert np.isfinite(pairs.cap).all()


def test_what_comes_is_scored_and_a_strange_source_left_out(tmp_path: Path) -> None:
    values = pump_values(SOURCES[0], 300, N_LEARNED)
    values[100:200, 1] += 25.0
    for rival in fitted():
        rival.files.clear()
        rival.add(SOURCES[0], pump_times(300, N_LEARNED), values, tmp_path)
        rival.add("stranger", pump_times(300, N_LEARNED), values, tmp_path)
        (stream,) = rival.streams
        assert stream.n_records == 300
        pairs = rival.pairs(LEVELS)
        calls, _ = calls_by_pair([stream], pairs, LEVELS, SETTINGS)
        at = pump_times(300, N_LEARNED)
        raised = [c for c in calls[rival.curve.chosen] if at[100] <= c.raised_ns < at[200]]
        # 25 m3/h is far outside what PCA knows, but inside the limits of a wandering flow.
        assert bool(raised) == (rival.name == PCA)


@pytest.mark.parametrize(("rate", "place"), [(0.0, 0), (1.0, 1), (2.5, 2), (99.0, 3)])
def test_the_loosest_place_with_no_more_false_alerts_is_taken(rate: float, place: int) -> None:
    day = 86_400_000_000_000
    judge = Judge((), 0, {"a": (0, day - 1)}, 1)
    verdicts = [judge.verdict([Call("a", k, k + 1) for k in range(n)]) for n in (0, 1, 2, 5)]
    assert same_rate(verdicts, rate) == place
