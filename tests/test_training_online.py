"""A replay is the online path: record by record gives what batches give."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from scoring.alert_standing import AlertStanding
from scoring.alerts import Alert
from scoring.delays import Delays
from scoring.episodes import Episodes
from scoring.scorer import Scorer
from scoring.standing import Standing
from tests.pump import N_LEARNED, SOURCES, Floats, Ints, pump_model, pump_times, pump_values
from training.online import Online

N = 1500


def live(source: str = SOURCES[0]) -> tuple[Ints, Floats]:
    """Return records after the learned ones, with three faults and a silence of two hours."""
    times_ns, values = pump_times(N, N_LEARNED), pump_values(source, N, N_LEARNED)
    values[200:320, 1] += 25.0
    values[600, 2] += 40.0
    values[900:1000, 3] = values[899, 3]
    keep = np.r_[0:1100, 1220:N]
    return times_ns[keep], values[keep]


def one_by_one(source: str, times_ns: Ints, values: Floats) -> list[Alert]:
    """Return all alerts as a service would raise them: record by record, with its clock."""
    scorer = Scorer(pump_model())
    episodes = Episodes(scorer)
    standing: Standing | None = None
    alerts: AlertStanding | None = None
    found = []
    last_ns = -1
    for r in range(len(times_ns)):
        now_ns = last_ns
        # The service looks at its clock every minute while nothing comes.
        while alerts is not None and now_ns + 60 * 10**9 < times_ns[r]:
            now_ns += 60 * 10**9
            alerts, events = episodes.tick(source, alerts, now_ns)
            found += [e.alert for e in events if e.what == "cleared" and e.alert]
        rows = slice(r, r + 1)
        scores, standing = scorer.score(source, times_ns[rows], values[rows], standing)
        alerts, events = episodes.step(source, times_ns[rows], values[rows], scores, alerts)
        found += [e.alert for e in events if e.what == "cleared" and e.alert]
        last_ns = int(times_ns[r])
    assert alerts is not None
    return sorted([*found, *alerts.open], key=lambda a: (a.raised_ns, a.kind))


def replayed(folder: Path, cuts: list[int]) -> Online:
    online = Online(pump_model(), folder)
    times_ns, values = live()
    for start, stop in zip([0, *cuts], [*cuts, len(times_ns)], strict=True):
        online.add(SOURCES[0], times_ns[start:stop], values[start:stop])
    online.finish()
    return online


def facts(alert: Alert) -> tuple[object, ...]:
    suspects = tuple(s.channel for s in alert.suspects)
    return alert.kind, alert.raised_ns, alert.cleared_ns, alert.level, suspects, alert.worst_ns


def test_batches_raise_what_single_records_raise(tmp_path: Path) -> None:
    expected = one_by_one(SOURCES[0], *live())
    found = replayed(tmp_path, [333, 334, 1000]).alerts
    assert {a.kind for a in found} >= {"scored", "silent"}
    assert [facts(a) for a in found] == [facts(a) for a in expected]


def test_batches_of_any_length_raise_the_same(tmp_path: Path) -> None:
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    whole, pieces = replayed(tmp_path / "a", []), replayed(tmp_path / "b", [1, 2, 250, 601])
    assert [facts(a) for a in whole.alerts] == [facts(a) for a in pieces.alerts]
    assert whole.at_first == pieces.at_first


def test_a_large_offset_is_caught_and_named(tmp_path: Path) -> None:
    calls = replayed(tmp_path, []).calls()
    times_ns, _ = live()
    first = next(call for call in calls if call.raised_ns >= times_ns[200])
    assert first.raised_ns <= times_ns[210]
    assert first.at_first == first.suspects[0] == "flow"


def test_one_glitch_of_any_size_raises_at_most_a_record_alert(tmp_path: Path) -> None:
    times_ns, values = pump_times(800, N_LEARNED), pump_values(SOURCES[0], 800, N_LEARNED)
    quiet = Online(pump_model(), tmp_path)
    quiet.add(SOURCES[0], times_ns, values)
    quiet.finish()
    before = {(a.raised_ns, a.level) for a in quiet.alerts}
    for size in (30.0, 80.0):
        glitched = values.copy()
        glitched[400, 2] = size
        online = Online(pump_model(), tmp_path)
        online.add(SOURCES[0], times_ns, glitched)
        online.finish()
        new = [a for a in online.alerts if (a.raised_ns, a.level) not in before]
        assert all(a.level == "record" for a in new if a.in_budget)


def test_kinds_apart_from_the_budget_are_kept_apart(tmp_path: Path) -> None:
    online = replayed(tmp_path, [])
    kinds = {call.kind for call in online.calls(in_budget=False)}
    assert "silent" in kinds
    assert {call.kind for call in online.calls()} == {"scored"}


def test_the_excess_is_kept_for_the_sweep_without_late_records(tmp_path: Path) -> None:
    times_ns, values = pump_times(50, N_LEARNED), pump_values(SOURCES[0], 50, N_LEARNED)
    online = Online(pump_model(), tmp_path)
    online.add(SOURCES[0], times_ns, values)
    online.add(SOURCES[0], times_ns[10:20], values[10:20])
    online.add(SOURCES[0], times_ns[:0], values[:0])
    online.finish()
    (kept,) = online.excess
    assert kept.n_records == 50
    assert online.sources[SOURCES[0]].n_late == 10
    assert online.sources[SOURCES[0]].n_records == 60


@pytest.mark.parametrize("run", [1, 3])
def test_delays_of_the_model_are_used(tmp_path: Path, run: int) -> None:
    times_ns, values = pump_times(300, N_LEARNED), pump_values(SOURCES[0], 300, N_LEARNED)
    values[150:152, 2] += 40.0
    model = pump_model()
    model = replace(model, levels=replace(model.levels, delays=Delays(record_run=run)))
    online = Online(model, tmp_path)
    online.add(SOURCES[0], times_ns, values)
    online.finish()
    raised = [a for a in online.alerts if times_ns[150] <= a.raised_ns <= times_ns[151]]
    assert bool([a for a in raised if a.level == "record"]) == (run == 1)
