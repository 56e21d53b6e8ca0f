"""The expected interval: as short as any that holds 95 %, open where it must be."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from scoring.expected import EXPECTED_SHARE, shortest_interval
from tests.strategies import SEEDS, SOME

Case = tuple[list[float], list[float]]


@st.composite
def beliefs(draw: st.DrawFn) -> Case:
    """Beliefs over 2 to 7 bins with uneven borders."""
    n = draw(st.integers(1, 6))
    steps = draw(st.lists(st.floats(0.05, 10), min_size=n, max_size=n))
    weights = draw(st.lists(st.floats(0, 1), min_size=n + 1, max_size=n + 1))
    assume(sum(weights) > 0.01)
    p = np.array(weights) ** 3
    return (p / p.sum()).tolist(), np.cumsum(steps).tolist()


def below(x: float, p: list[float], borders: list[float]) -> float:
    """Return the closed bins' mass below x."""
    return sum(
        p[b] * min(max((x - borders[b - 1]) / (borders[b] - borders[b - 1]), 0.0), 1.0)
        for b in range(1, len(borders))
    )


def held(low: float, high: float, p: list[float], borders: list[float]) -> float:
    """Return the belief between low and high; an open side takes the outermost bin along."""
    mass = below(min(high, borders[-1]), p, borders) - below(max(low, borders[0]), p, borders)
    return mass + p[0] * (low == -math.inf) + p[-1] * (high == math.inf)


@SOME
@given(beliefs())
def test_the_interval_holds_its_share(case: Case) -> None:
    p, borders = case
    low, high, best = shortest_interval(np.array(p), np.array(borders), 0.0)
    assert held(low, high, p, borders) >= EXPECTED_SHARE - 1e-9
    assert low <= best <= high


@SOME
@given(beliefs())
def test_no_closed_interval_that_holds_the_share_is_shorter(case: Case) -> None:
    p, borders = case
    low, high, _ = shortest_interval(np.array(p), np.array(borders), 0.0)
    ends = np.linspace(borders[0], borders[-1], 60)
    closed = [
        float(b - a)
        for a in ends
        for b in ends
        if b > a and held(float(a), float(b), p, borders) >= EXPECTED_SHARE
    ]
    if closed:
        assert high - low <= min(closed) + 1e-9
    if sum(p[1:-1]) < EXPECTED_SHARE - 1e-9:
        assert math.isinf(low) or math.isinf(high)


CASES = [
    # Belief over bins, then low, high, best.
    ("in one bin", [0, 0, 1, 0, 0], 1.0, 1.95, 1.5),
    ("even over two", [0, 0.5, 0.5, 0, 0], 0.0, 1.9, 1.0),
    ("light tail left out", [0, 0.04, 0.48, 0.48, 0], 1 - 0.0, 3 - 0.01 / 0.48, 1 + 46 / 48),
    ("below all that is known", [1, 0, 0, 0, 0], -math.inf, 0.0, 0.0),
    ("above all that is known", [0, 0, 0, 0, 1], 3.0, math.inf, 3.0),
    ("open below", [0.2, 0.8, 0, 0, 0], -math.inf, 0.9375, 0.375),
    ("open above", [0, 0, 0, 0.8, 0.2], 2.0625, math.inf, 2.625),
    ("open on both sides", [0.4, 0.1, 0, 0.1, 0.4], -math.inf, math.inf, 1.0),
]  # fmt: skip


@pytest.mark.parametrize(("what", "p", "low", "high", "best"), CASES)
def test_cases_worked_by_hand(
    what: str, p: list[float], low: float, high: float, best: float
) -> None:
    found = shortest_interval(np.array(p, dtype=float), np.array([0.0, 1.0, 2.0, 3.0]), 0.0)
    assert found == pytest.approx((low, high, best), abs=1e-12)


@SOME
@given(beliefs(), st.sampled_from([0.01, 0.25, 0.5, 2.0]))
def test_the_interval_is_rounded_outward_to_the_resolution(case: Case, resolution: float) -> None:
    p, borders = case
    exact = shortest_interval(np.array(p), np.array(borders), 0.0)
    low, high, best = shortest_interval(np.array(p), np.array(borders), resolution)
    hair = 2e-6 * resolution
    for side, plain in ((low, exact[0]), (high, exact[1])):
        if math.isinf(plain):
            assert side == plain
        else:
            assert abs(side / resolution - round(side / resolution)) < 1e-9
            assert abs(side - plain) < resolution + hair
    assert low <= exact[0] + hair
    assert high >= exact[1] - hair
    assert low <= best <= high


def test_a_border_that_is_a_multiple_of_the_resolution_stays() -> None:
    found = shortest_interval(np.array([0, 0, 1.0, 0]), np.array([0.0, 0.3, 0.3 + 0.1 / 0.95]), 0.1)
    assert found[:2] == pytest.approx((0.3, 0.4))


def test_a_channel_without_borders_expects_anything() -> None:
    low, high, best = shortest_interval(np.array([1.0]), np.zeros(0), 0.0)
    assert (low, high) == (-math.inf, math.inf)
    assert math.isnan(best)


@SOME
@given(SEEDS)
def test_best_is_the_median_of_what_is_believed(seed: int) -> None:
    rng = np.random.default_rng(seed)
    borders = np.cumsum(rng.random(5) + 0.1)
    p = np.concatenate([[0.0], rng.dirichlet(np.ones(4)), [0.0]])
    _, _, best = shortest_interval(p, borders, 0.0)
    assert below(best, p.tolist(), borders.tolist()) == pytest.approx(0.5, abs=1e-9)


@pytest.mark.parametrize("resolution", [0.1, 0.01, 0.05, 0.25, 0.2, 0.001, 2.5, 10.0])
def test_bounds_are_the_numbers_that_an_instrument_sends(resolution: float) -> None:
    # As from text: what a reading of so many steps becomes on its way in.
    readings = [float(f"{k * resolution:.6g}") for k in range(-40, 400)]
    for k in (0, 7, 43, 250):
        at, wide = readings[k], readings[k + 6]
        borders = np.array([at + 0.3 * resolution, wide - 0.3 * resolution])
        low, high, best = shortest_interval(np.array([0.01, 0.98, 0.01]), borders, resolution)
        assert (low, high) == (at, wide)
        assert best in readings
