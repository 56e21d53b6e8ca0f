"""What a site can say about the nightly job: records, history, the judge's limits, reports."""

from __future__ import annotations

from pathlib import Path
from typing import Self

from pydantic import Field, model_validator

from training.history.flags import history_options
from training.history.options import HistoryOptions
from training.settings_file import Section, load_settings


class StoredRecords(Section):
    """data: the service's data folder. url: of PostgreSQL, "" for SQLite in that folder."""

    data: Path = Path("data")
    url: str = ""


class HistoryWanted(Section):
    """days: before the newest record, the judge's days among them. least_*: over all sources.

    join_alerts_h: what lies between two unlabelled alerts this close belongs to them.
    """

    days: float = Field(default=28.0, ge=0.1, le=4000)
    least_records: int = Field(default=5000, ge=1, le=1_000_000_000)
    least_hours: float = Field(default=72.0, ge=0, le=100_000)
    least_sources: int = Field(default=1, ge=1, le=100_000)
    join_alerts_h: float = Field(default=6.0, ge=0, le=1000)


class HistoryFiles(Section):
    """paths: history beside the store's, "" and [] for none; the rest as options of learn."""

    paths: tuple[str, ...] = ()
    time: str = "time"
    source: str = "source"
    zone: str = ""
    time_format: str = ""
    separator: str = ""
    decimal: str = Field(default="", pattern="^[.,]?$")
    channel_column: str = "channel"
    value_column: str = "value"
    quality_column: str = "quality"
    age_s: float = Field(default=0.0, ge=0)
    step_s: float = Field(default=0.0, ge=0)

    def options(self) -> HistoryOptions:
        """Return how the files are read; raises BadHistory for a zone that is not known."""
        return history_options(
            time=self.time,
            source=self.source,
            zone=self.zone or None,
            time_format=self.time_format or None,
            separator=self.separator or None,
            decimal=self.decimal or None,
            channel_column=self.channel_column,
            value_column=self.value_column,
            quality_column=self.quality_column,
            age=self.age_s or None,
            step=self.step_s or None,
        )


class LearningWanted(Section):
    """channels: a channel table. settings, exclude: files, "" for none."""

    channels: Path = Path("channels.toml")
    settings: str = ""
    exclude: str = ""


class JudgeLimits(Section):
    """The judge's days and limits; what each means is told in config/nightly.toml."""

    days: float = Field(default=2.0, ge=0.05, le=100)
    least_hours: float = Field(default=12.0, ge=0, le=2400)
    least_known_sources: float = Field(default=0.9, ge=0, le=1)
    least_readings: float = Field(default=0.5, ge=0, le=1)
    least_span: float = Field(default=0.5, ge=0, le=1)
    density_slack_nats: float = Field(default=0.02, ge=0, le=10)
    block_h: float = Field(default=4.0, ge=0.1, le=240)
    alert_confidence: float = Field(default=0.99, ge=0.5, lt=1)
    drill_trials: int = Field(default=20, ge=0, le=1000)
    drill_within: int = Field(default=60, ge=2, le=10_000)
    drill_factor: float = Field(default=3.0, ge=1, le=100)
    most_tree_change: float = Field(default=0.6, ge=0, le=1)
    run_away_spreads: float = Field(default=2.0, ge=0.1, le=100)
    run_away_most_tie: float = Field(default=0.5, gt=0, le=1)
    most_left_out_growth: float = Field(default=0.05, ge=0, le=1)


class ModelsKept(Section):
    """folder: of the kept models. keep: how many."""

    folder: Path = Path("models")
    keep: int = Field(default=14, ge=2, le=1000)


class ReportWanted(Section):
    """folder: of the reports, keep: of how many nights. metrics: a file for the node exporter."""

    folder: Path = Path("nightly")
    keep: int = Field(default=60, ge=1, le=10_000)
    metrics: str = Field(default="", pattern=r"^$|\.prom$")


class NightlySettings(Section):
    """All of config/nightly.toml."""

    store: StoredRecords = StoredRecords()
    history: HistoryWanted = HistoryWanted()
    files: HistoryFiles = HistoryFiles()
    learn: LearningWanted = LearningWanted()
    judge: JudgeLimits = JudgeLimits()
    models: ModelsKept = ModelsKept()
    report: ReportWanted = ReportWanted()

    @model_validator(mode="after")
    def _leaves_days_to_learn_from(self) -> Self:
        # Files beside the store are read whole, and may be all that is learned from.
        if self.history.days <= self.judge.days and not self.files.paths:
            raise ValueError(
                f"history.days = {self.history.days:g} is not more than judge.days = "
                f"{self.judge.days:g}: the judge's days are the newest of history.days and never "
                "learned from, so nothing would be left to learn; make history.days longer, or "
                "judge.days shorter"
            )
        return self


def load_nightly_settings(path: Path | None) -> NightlySettings:
    """Return the settings in a file, or the defaults; raises BadSettings."""
    return load_settings(path, NightlySettings)
