"""The defaults are those that the trade's figures and the levels' own counting ask for."""

from __future__ import annotations

from scoring.alert_settings import OFF_DELAY_STEPS, AlertSettings


def test_the_flood_figures_are_those_of_the_standard() -> None:
    # From memory, ISA-18.2: ten or more annunciations in ten minutes start a flood, fewer
    # than five in ten minutes end it; three set/clear cycles in a minute are chattering
    # (the starting criterion of a trade engineering page).
    settings = AlertSettings()
    assert (settings.flood_start_n, settings.flood_end_n, settings.flood_window_s) == (10, 5, 600)
    assert (settings.chatter_cycles, settings.chatter_window_s) == (3, 60)
    # An alarm that stands for more than about a day is stale (from memory, ISA-18.2).
    assert settings.realarm_s == 24 * 3600


def test_levels_and_alerts_hold_an_episode_for_the_same_time() -> None:
    assert AlertSettings().off_delay_steps == OFF_DELAY_STEPS
