"""Sustained: its slow twin, gaps, late records, and the most that one glitch can do."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from scoring.sustained import sustain
from tests.strategies import SOME

S = 1_000_000_000
PLAIN = {"last_ns": -1, "before": 0.0, "usual": 0.5, "tau_s": 150.0, "step_s": 10.0, "cap": 30.0}


def run(
    seconds: list[float], excess: list[float], **more: Any
) -> tuple[NDArray[np.float64], NDArray[np.bool_], int, float]:
    """Run the kernel on times in seconds."""
    at = np.array([int(s * S) for s in seconds], dtype=np.int64)
    return sustain(at, np.array(excess, dtype=float), *{**PLAIN, **more}.values())


def slow(
    seconds: list[float], excess: list[float], last_s: float | None, before: float
) -> list[float]:
    """Return sustained after each record under PLAIN: the twin."""
    usual, tau, step, cap = (PLAIN[k] for k in ("usual", "tau_s", "step_s", "cap"))
    value = usual if last_s is None else before
    out = []
    for now, x in zip(seconds, excess, strict=True):
        if last_s is None or now > last_s:
            passed = step if last_s is None else now - last_s
            value = usual + (value - usual) * math.exp(-max(passed - step, 0.0) / tau)
            last_s = now
            if not math.isnan(x):
                weight = 1 - math.exp(-min(passed, step) / tau)
                value = (1 - weight) * value + weight * min(x, cap)
        out.append(value)
    return out


SECONDS = st.lists(st.integers(0, 400).map(float), min_size=1, max_size=15)
EXCESS = st.one_of(st.floats(-50, 1e6), st.just(math.nan))


@SOME
@given(SECONDS, st.data(), st.one_of(st.none(), st.floats(0, 100)), st.floats(-5, 30))
def test_the_kernel_equals_its_twin(
    seconds: list[float], data: st.DataObject, last_s: float | None, before: float
) -> None:
    excess = data.draw(st.lists(EXCESS, min_size=len(seconds), max_size=len(seconds)))
    last_ns = -1 if last_s is None else int(last_s * S)
    out, _, _, value = run(seconds, excess, last_ns=last_ns, before=before)
    wanted = slow(seconds, excess, None if last_s is None else last_ns / S, before)
    np.testing.assert_allclose(out, wanted, rtol=1e-9, atol=1e-9)
    assert value == out[-1]


@SOME
@given(SECONDS, st.data())
def test_a_batch_equals_one_by_one(seconds: list[float], data: st.DataObject) -> None:
    excess = data.draw(st.lists(EXCESS, min_size=len(seconds), max_size=len(seconds)))
    whole, late, last_ns, value = run(seconds, excess)
    state: tuple[int, float] = (-1, 0.0)
    for k, (now, x) in enumerate(zip(seconds, excess, strict=True)):
        one, one_late, time_ns, after = run([now], [x], last_ns=state[0], before=state[1])
        state = (time_ns, after)
        assert (one[0], one_late[0]) == (whole[k], late[k])
    assert state == (last_ns, value)


@pytest.mark.parametrize("glitch", [31.0, 1e3, 1e12, math.inf])
def test_a_glitch_of_any_size_adds_no_more_than_the_cap_allows(glitch: float) -> None:
    capped, _, _, _ = run([10, 20], [0.5, 30.0])
    out, _, _, _ = run([10, 20], [0.5, glitch])
    assert out[1] == capped[1] < 0.5 + 30.0 * 10 / 150


def test_it_starts_at_usual_and_decays_to_usual_over_a_gap() -> None:
    out, _, _, _ = run([0, 10], [math.nan, math.nan])
    assert out.tolist() == [0.5, 0.5]
    after, _, _, _ = run([10 + 15 * 150.0], [math.nan], last_ns=0, before=20.0)
    assert after[0] == pytest.approx(0.5, abs=1e-4)


def test_weight_follows_the_time_passed() -> None:
    # Two records at half the interval weigh as much as one at the whole.
    one, _, _, _ = run([10], [8.0], last_ns=0, before=0.5)
    two, _, _, _ = run([5, 10], [8.0, 8.0], last_ns=0, before=0.5)
    assert two[1] == pytest.approx(one[0], rel=1e-12)


def test_late_records_are_named_and_change_nothing() -> None:
    out, late, last_ns, value = run([10, 20, 20, 15, 30], [1.0, 2.0, 25.0, 25.0, 3.0])
    assert late.tolist() == [False, False, True, True, False]
    assert out[1] == out[2] == out[3]
    plain, _, plain_last, plain_value = run([10, 20, 30], [1.0, 2.0, 3.0])
    assert (last_ns, value) == (plain_last, plain_value)
    assert out[4] == plain[2]
