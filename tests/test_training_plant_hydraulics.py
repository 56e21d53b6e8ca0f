"""Pump and system curves against textbook laws and two examples worked by hand."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from training.plant import hydraulics as hy

SHUTOFF_M, FALL = 44.0, 1e-4
BEST_FLOW, BEST = 290.0, 0.79


@pytest.mark.parametrize(("faster", "flow", "head", "power"), [(1.10, 1.10, 1.21, 1.331)])
def test_ten_percent_more_speed_follows_the_affinity_laws(
    faster: float, flow: float, head: float, power: float
) -> None:
    # Affinity laws, common practice: 10 % more speed gives +10 % flow, +21 % head and
    # +33.1 % power at the corresponding point of the curve.
    q, n = 250.0, 0.9
    h = hy.pump_head_m(q, n, SHUTOFF_M, FALL)
    h_fast = hy.pump_head_m(q * flow, n * faster, SHUTOFF_M, FALL)
    assert h_fast / h == pytest.approx(head, rel=1e-12)
    shaft = hy.hydraulic_kw(q, h) / hy.efficiency(q, n, BEST_FLOW, BEST)
    eta_fast = hy.efficiency(q * flow, n * faster, BEST_FLOW, BEST)
    assert hy.hydraulic_kw(q * flow, h_fast) / eta_fast / shaft == pytest.approx(power, rel=1e-12)


@pytest.mark.parametrize(
    ("flow", "head", "eta", "eta_motor", "expected"),
    [
        (100.0, 40.0, 0.75, 0.93, (10.877, 14.502, 15.594, 3.916, 26.2, 0.031)),
        (360.0, 32.0, 0.80, 0.95, (31.325, 39.156, 41.217, 3.132, 69.2, 0.019)),
    ],
)
def test_two_worked_examples_come_out_as_computed_by_hand(
    flow: float, head: float, eta: float, eta_motor: float, expected: tuple[float, ...]
) -> None:
    # Computed from first principles, apart from this code: density 998.2 kg/m3,
    # g 9.80665 m/s2, 400 V, cos phi 0.86.
    water_kw, shaft_kw, input_kw, bar, ampere, kelvin = expected
    assert hy.hydraulic_kw(flow, head) == pytest.approx(water_kw, abs=5e-4)
    assert hy.hydraulic_kw(flow, head) / eta == pytest.approx(shaft_kw, abs=1e-3)
    assert hy.hydraulic_kw(flow, head) / eta / eta_motor == pytest.approx(input_kw, abs=1e-3)
    assert head * hy.BAR_PER_M == pytest.approx(bar, abs=5e-4)
    assert hy.current_a(input_kw, 400.0, 0.86) == pytest.approx(ampere, abs=0.05)
    assert hy.heating_k(head, eta) == pytest.approx(kelvin, abs=5e-4)


def test_a_bar_is_about_ten_metres_of_water() -> None:
    # Common practice: 10.2 m of water per bar.
    assert pytest.approx(10.2, abs=0.05) == 1.0 / hy.BAR_PER_M


@given(flow=st.floats(10.0, 400.0), head=st.floats(5.0, 60.0))
def test_the_speed_for_a_point_puts_that_point_on_the_curve(flow: float, head: float) -> None:
    speed = hy.speed_for(flow, head, SHUTOFF_M, FALL)
    assert hy.pump_head_m(flow, speed, SHUTOFF_M, FALL) == pytest.approx(head, rel=1e-12)


@given(
    flow=st.floats(150.0, 400.0),
    head=st.floats(15.0, 45.0),
    second=st.floats(0.97, 1.03),
    fall=st.floats(0.9, 1.1),
)
def test_two_pumps_at_one_speed_share_the_flow_at_one_head(
    flow: float, head: float, second: float, fall: float
) -> None:
    share = hy.first_share_m3h(flow, head, SHUTOFF_M, FALL, second * SHUTOFF_M, fall * FALL)
    assert 0.0 <= share <= flow
    if 0.0 < share < flow:
        first = hy.speed_for(share, head, SHUTOFF_M, FALL)
        other = hy.speed_for(flow - share, head, second * SHUTOFF_M, fall * FALL)
        assert first == pytest.approx(other, rel=1e-9)


def test_like_pumps_share_the_flow_in_halves() -> None:
    assert hy.first_share_m3h(300.0, 30.0, 44.0, 1e-4, 44.0, 1e-4) == pytest.approx(150.0)


def test_a_pump_too_weak_for_the_head_gives_nothing() -> None:
    assert hy.first_share_m3h(100.0, 40.0, 30.0, 1e-4, 44.0, 1e-4) == 0.0
    assert hy.first_share_m3h(100.0, 40.0, 44.0, 1e-4, 30.0, 1e-4) == 100.0


def test_efficiency_is_best_at_the_best_point_and_never_vanishes() -> None:
    assert hy.efficiency(BEST_FLOW * 0.9, 0.9, BEST_FLOW, BEST) == pytest.approx(BEST)
    assert hy.efficiency(0.5 * BEST_FLOW, 0.9, BEST_FLOW, BEST) < BEST
    assert hy.efficiency(9.0 * BEST_FLOW, 0.9, BEST_FLOW, BEST) == pytest.approx(0.2 * BEST)
    assert hy.efficiency(100.0, 0.0, BEST_FLOW, BEST) == pytest.approx(0.2 * BEST)


def test_a_loaded_motor_has_the_power_factor_of_its_size() -> None:
    # Common practice for a 45 kW motor: cos phi 0.84 to 0.88 from half load upwards.
    assert all(0.84 <= hy.power_factor(load) <= 0.88 for load in (0.5, 0.75, 1.0))
    assert 0.92 <= hy.motor_efficiency(0.5) < hy.motor_efficiency(1.0) <= 0.95


def test_a_lag_reaches_63_percent_in_one_time_constant_whatever_the_step() -> None:
    once = hy.toward(0.0, 1.0, 60.0, 60.0)
    assert once == pytest.approx(1.0 - math.exp(-1.0))
    value = 0.0
    for _ in range(6):
        value = hy.toward(value, 1.0, 10.0, 60.0)
    assert value == pytest.approx(once, rel=1e-12)


def test_the_system_asks_for_static_head_plus_friction() -> None:
    assert hy.system_head_m(200.0, 25.0, 1e-4) == pytest.approx(29.0)
