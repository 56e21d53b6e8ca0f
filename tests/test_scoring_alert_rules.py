"""Levels, delays and limits as the kernel gets them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scoring import alert_kernel as kernel
from scoring.alert_rules import LEAST_CAP, channels_key, level_knobs, rules_of
from scoring.alert_settings import AlertSettings
from scoring.delays import Delays
from scoring.model import Levels
from tests.alert_tools import limits_of
from tests.models import a_model

LEVELS = Levels(record=10.0, sustained=4.0, cap=9.0, tau_s=150.0, step_s=10.0, least_readings=1)


def test_an_episode_is_held_down_to_the_deadband() -> None:
    knobs = level_knobs(replace(LEVELS, delays=Delays(deadband=0.25)), AlertSettings(), 2.0)
    assert knobs[kernel.RECORD_OFF] == pytest.approx(7.5)
    assert knobs[kernel.SUSTAINED_OFF] == pytest.approx(3.5)
    assert knobs[kernel.HALF] == pytest.approx(3.0)
    assert knobs[kernel.OFF_S] == 300.0


def test_a_level_below_what_is_usual_does_not_hold_above_itself() -> None:
    knobs = level_knobs(replace(LEVELS, record=-1.0), AlertSettings(), 9.0)
    assert knobs[kernel.SUSTAINED_OFF] == 4.0
    assert knobs[kernel.RECORD_OFF] == -1.0


def test_limits_are_twice_the_longest_and_never_below_the_least() -> None:
    model = a_model()
    member = replace(model.members["a"], stillness=limits_of(model, 100.0, 10.0, 50.0))
    rules = rules_of(model, member, LEVELS, AlertSettings())
    assert rules.limits[0, :, 0].tolist() == [200.0, 120.0]
    assert np.isinf(rules.limits[0, :, 3]).all()
    assert rules.longest[0, :, 0].tolist() == [100.0, 10.0]
    # 1.5 times 50 s is below thirty intervals.
    assert rules.rows[kernel.AWAY_LIMIT].tolist() == [300.0] * 4
    assert rules.silent_s == 300.0


def test_what_one_line_did_the_next_may_do_and_a_rare_channel_has_its_own_pace() -> None:
    model = a_model()
    limits = limits_of(model)
    away_s = np.array([100.0, 1000.0, 20_000.0, np.inf, 400.0])
    limits = replace(limits, away_s=away_s, present=np.array([1.0, 0.9, 0.01, 0.0]))
    member = replace(model.members["a"], stillness=limits)
    rules = rules_of(model, member, LEVELS, AlertSettings())
    # Two channels that should always come share the longer absence; the rare one is not cut
    # off at an hour; one that hardly ever comes is not missed.
    assert rules.rows[kernel.AWAY_LIMIT].tolist() == [1500.0, 1500.0, 30_000.0, np.inf]
    assert rules.silent_s == 600.0


def test_without_learned_limits_nothing_is_called_stuck() -> None:
    model = a_model()
    rules = rules_of(model, model.members["a"], LEVELS, AlertSettings())
    assert rules.limits.shape == (0, 2, 5)
    assert rules.rows[kernel.AWAY_LIMIT].tolist() == [300.0] * 4


def test_a_member_without_usual_figures_is_plain() -> None:
    model = a_model()
    usual = replace(model.fleet.usual, channel_median=np.zeros(0), channel_spread=np.zeros(0))
    rules = rules_of(model, replace(model.fleet, usual=usual), LEVELS, AlertSettings())
    assert rules.rows[kernel.MIDDLE].tolist() == [0.0] * 4
    assert rules.rows[kernel.CAP].tolist() == [LEAST_CAP] * 4


def test_one_record_counts_for_a_few_spreads_and_for_ten_nats_at_least() -> None:
    model = a_model()
    usual = replace(model.fleet.usual, channel_spread=np.array([3.0, 1.0, 0.0, 4.0]))
    rules = rules_of(model, replace(model.fleet, usual=usual), LEVELS, AlertSettings())
    assert rules.rows[kernel.CAP].tolist() == [15.0, 10.0, 10.0, 20.0]


def test_neighbours_are_named_but_for_what_is_derived_from_the_channel() -> None:
    model = a_model()
    rules = rules_of(model, model.members["a"], LEVELS, AlertSettings())
    assert rules.beside == (
        ("out",),
        ("in", "power"),
        ("out", "pump"),
        ("power",),
    )


def test_the_key_stands_for_names_in_their_order() -> None:
    assert channels_key(["a", "b"]) == channels_key(["a", "b"])
    assert len({channels_key(x) for x in (["a", "b"], ["b", "a"], ["ab"], ["a"])}) == 4
