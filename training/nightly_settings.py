"""What a site can say about the nightly job: where records are, how far back, what is kept."""

from __future__ import annotations

from pathlib import Path

from pydantic import Field

from training.settings_file import Section, load_settings


class StoredRecords(Section):
    """data: the service's data folder."""

    data: Path = Path("data")


class HistoryWanted(Section):
    """days: before the newest record. least_records: over all sources."""

    days: float = Field(default=28.0, ge=0.1, le=4000)
    least_records: int = Field(default=5000, ge=1, le=1_000_000_000)


class LearningWanted(Section):
    """channels: a channel table. settings, exclude: files, "" for none."""

    channels: Path = Path("channels.toml")
    settings: str = ""
    exclude: str = ""


class ModelsKept(Section):
    """folder: of the kept models. keep: how many."""

    folder: Path = Path("models")
    keep: int = Field(default=14, ge=2, le=1000)


class NightlySettings(Section):
    """All of config/nightly.toml."""

    store: StoredRecords = StoredRecords()
    history: HistoryWanted = HistoryWanted()
    learn: LearningWanted = LearningWanted()
    models: ModelsKept = ModelsKept()


def load_nightly_settings(path: Path | None) -> NightlySettings:
    """Return the settings in a file, or the defaults; raises BadSettings."""
    return load_settings(path, NightlySettings)
