"""Drawn incidents: sizes, kinds, rates, and no two at once."""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np
import pytest

from training.plant.asked import duty_at
from training.plant.draw import IncidentRates, draw_incidents
from training.plant.incidents import KINDS, PUMP_KINDS, Incident
from training.plant.utility import BadPlant, build_stations

HOUR_NS = 3_600_000_000_000
ORIGIN_NS = 20_000 * 24 * HOUR_NS
STATIONS = build_stations(9, 6)


def draw(per_day: float = 1.0, n_days: int = 200, seed: int = 9) -> list[Incident]:
    rates, days = IncidentRates(per_day), range(n_days)
    return [i for s in STATIONS for i in draw_incidents(rates, seed, s, ORIGIN_NS, days)]


def test_half_of_the_sizes_lie_below_three_and_all_within_the_range() -> None:
    sizes = np.array([i.size for i in draw() if i.size is not None])
    assert len(sizes) > 900
    assert 0.75 <= sizes.min() < 1.0
    assert 11.0 < sizes.max() <= 12.0
    assert (sizes < 3.0).mean() == pytest.approx(0.5, abs=0.05)
    # Log-uniform: a quarter below the square root of 0.75 * 3.
    assert (sizes < 1.5).mean() == pytest.approx(0.25, abs=0.05)


def test_every_kind_is_drawn_about_equally_often() -> None:
    kinds = [i.kind for i in draw()]
    for kind in KINDS:
        assert kinds.count(kind) / len(kinds) == pytest.approx(1 / len(KINDS), rel=0.35)


@pytest.mark.parametrize("per_day", [0.2, 1.0, 2.5])
def test_the_rate_is_kept_and_incidents_of_a_station_never_overlap(per_day: float) -> None:
    incidents = draw(per_day)
    assert len(incidents) / (200 * 6) == pytest.approx(per_day, rel=0.15)
    for station in STATIONS:
        own = [i for i in incidents if i.source == station.name]
        gaps_h = [(b.start_ns - a.end_ns) / HOUR_NS for a, b in itertools.pairwise(own)]
        assert min(gaps_h) > 1.0


def test_durations_lie_within_the_stated_hours() -> None:
    hours = np.array([(i.end_ns - i.start_ns) / HOUR_NS for i in draw()])
    assert hours.min() >= 2.0 - 1e-3
    assert hours.max() <= 10.0


def test_a_days_incidents_do_not_depend_on_the_days_drawn_with_it() -> None:
    rates = IncidentRates(1.0)
    whole = draw_incidents(rates, 9, STATIONS[0], ORIGIN_NS, range(30))
    part = draw_incidents(rates, 9, STATIONS[0], ORIGIN_NS, range(10, 20))
    start, end = ORIGIN_NS + 240 * HOUR_NS, ORIGIN_NS + 480 * HOUR_NS
    assert part == tuple(i for i in whole if start <= i.start_ns < end)


def test_the_same_seed_draws_the_same_and_another_seed_does_not() -> None:
    assert draw(n_days=20) == draw(n_days=20)
    assert draw(n_days=20) != draw(n_days=20, seed=10)


def test_pump_faults_are_drawn_where_they_show() -> None:
    for incident in draw():
        if incident.kind in PUMP_KINDS:
            station = next(s for s in STATIONS if s.name == incident.source)
            middle_s = np.array([(incident.start_ns + incident.end_ns) / 2e9])
            duty = duty_at(station, ORIGIN_NS / 1e9, middle_s)[0][0] + 1
            stands = incident.kind == "recirculating_check_valve"
            assert (incident.pump != duty) == stands


def test_no_rate_means_no_incident() -> None:
    assert draw(0.0) == []


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        ({"per_station_day": -1.0}, "per_station_day = -1.0 is outside 0 to 24"),
        ({"sizes": (3.0, 1.0)}, r"sizes = \(3.0, 1.0\) must be above 0 and rise"),
        ({"hours": (0.0, 1.0)}, r"hours = \(0.0, 1.0\) must be above 0 and rise"),
        ({"kinds": ("gremlin",)}, "kinds = .* must be some of offset"),
    ],
)
def test_rates_that_make_no_sense_are_refused(change: dict[str, Any], sentence: str) -> None:
    with pytest.raises(BadPlant, match=sentence):
        IncidentRates(**change)
