"""What a site can say about learning: the alarm budget and how sustained is formed."""

from __future__ import annotations

import difflib
import tomllib
from pathlib import Path

from pydantic import BaseModel, ConfigDict, Field, ValidationError

from scoring.errors import OddbranchError


class BadSettings(OddbranchError):
    """A settings file that cannot be used; `place` is the file, `what` names key and range."""

    def __init__(self, place: str, what: str) -> None:
        self.place, self.what = place, what
        super().__init__(f"{place}: {what}")


class _Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class AlarmBudget(_Section):
    """How many alerts a day the crew can follow up, over the whole fleet."""

    alerts_per_day: float = Field(default=2.0, gt=0, le=1000)


class Sustained(_Section):
    """time_constant_steps: how many usual intervals sustained looks back."""

    time_constant_steps: float = Field(default=15.0, ge=1, le=10_000)


class Judging(_Section):
    """least_share: with a smaller share of readings a record is not judged."""

    least_share: float = Field(default=0.5, ge=0, le=1)


class LearnSettings(_Section):
    """All of config/learn.toml."""

    budget: AlarmBudget = AlarmBudget()
    sustained: Sustained = Sustained()
    judging: Judging = Judging()


def load_learn_settings(path: Path | None) -> LearnSettings:
    """Return the settings in a file, or the defaults; raises BadSettings."""
    if path is None:
        return LearnSettings()
    try:
        data = tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise BadSettings(str(path), "no such file") from None
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise BadSettings(str(path), f"cannot be read as TOML: {error}") from None
    try:
        return LearnSettings.model_validate(data)
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(part) for part in first["loc"])
        if first["type"] == "extra_forbidden":
            raise BadSettings(str(path), f"unknown key {key}{_nearest(key)}") from None
        raise BadSettings(
            str(path), f"{key} = {first.get('input')!r}: {str(first['msg']).lower()}"
        ) from None


def _nearest(key: str) -> str:
    known = [
        f"{name}.{inner}"
        for name, section in LearnSettings.model_fields.items()
        for inner in section.annotation.model_fields  # type: ignore[union-attr]
    ] + list(LearnSettings.model_fields)
    near = difflib.get_close_matches(key, known, n=1)
    return f"; the nearest known key is {near[0]}" if near else f"; known are {', '.join(known)}"
