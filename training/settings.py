"""What a site can say about learning: the alarm budget and how sustained is formed."""

from __future__ import annotations

from pathlib import Path

from pydantic import Field

from scoring.delays import DELAYS, Delays
from training.settings_file import BadSettings, Section, load_settings


class AlarmBudget(Section):
    """How many alerts a day the crew can follow up, over the whole fleet."""

    alerts_per_day: float = Field(default=2.0, gt=0, le=1000)


class Sustained(Section):
    """time_constant_steps: how many usual intervals sustained looks back."""

    time_constant_steps: float = Field(default=15.0, ge=1, le=10_000)


class Judging(Section):
    """least_share: with a smaller share of readings a record is not judged."""

    least_share: float = Field(default=0.5, ge=0, le=1)


class LearnSettings(Section):
    """All of config/learn.toml."""

    budget: AlarmBudget = AlarmBudget()
    sustained: Sustained = Sustained()
    judging: Judging = Judging()
    alerts: Delays = DELAYS


def load_learn_settings(path: Path | None) -> LearnSettings:
    """Return the settings in a file, or the defaults; raises BadSettings."""
    return load_settings(path, LearnSettings)


__all__ = ["BadSettings", "LearnSettings", "load_learn_settings"]
