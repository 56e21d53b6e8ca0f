"""The defaults are those that the trade's figures ask for, and nonsense is refused by name."""

from __future__ import annotations

import pytest
from pydantic import ValidationError

from scoring.alert_settings import AlertSettings


def test_the_flood_figures_are_those_of_the_standard() -> None:
    # From memory, ISA-18.2: ten or more annunciations in ten minutes start a flood, fewer
    # than five in ten minutes end it; three set/clear cycles in a minute are chattering
    # (the starting criterion of a trade engineering page).
    settings = AlertSettings()
    assert (settings.flood_start_n, settings.flood_end_n, settings.flood_window_s) == (10, 5, 600)
    assert (settings.chatter_cycles, settings.chatter_window_s) == (3, 60)
    # An alarm that stands for more than about a day is stale (from memory, ISA-18.2).
    assert settings.realarm_s == 24 * 3600


@pytest.mark.parametrize(
    "wrong",
    [
        {"away_factor": 0.5}, {"stuck_factor": 0.9}, {"chatter_cycles": 1}, {"unknown": 1},
        {"realarm_s": float("nan")}, {"repeat_n": 0}, {"silent_steps": -1}, {"shelve_most_s": 1e9},
    ],
)  # fmt: skip
def test_settings_that_make_no_sense_are_refused(wrong: dict[str, float]) -> None:
    with pytest.raises(ValidationError, match=next(iter(wrong))):
        AlertSettings(**wrong)


def test_a_flood_that_would_end_as_it_starts_is_refused() -> None:
    with pytest.raises(ValidationError, match="flood_end_n = 11 is more than flood_start_n = 10"):
        AlertSettings(flood_end_n=11)
