"""What `oddbranch settings` says of learning and of the nightly job."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from training.nightly_settings import NightlySettings
from training.settings import LearnSettings
from training.settings_file import lines_in_force


def learn_lines(config: Path | None) -> Iterator[str]:
    """Yield the settings of learning in force; raises BadSettings."""
    return lines_in_force("learn.toml", config, LearnSettings)


def nightly_lines(config: Path | None) -> Iterator[str]:
    """Yield the settings of the nightly job in force; raises BadSettings."""
    return lines_in_force("nightly.toml", config, NightlySettings)
