"""A TOML file of settings, checked against its description: key, value and range named."""

from __future__ import annotations

import difflib
import tomllib
from pathlib import Path
from typing import TypeVar

from pydantic import BaseModel, ConfigDict, ValidationError

from scoring.errors import OddbranchError


class BadSettings(OddbranchError):
    """A settings file that cannot be used; `place` is the file, `what` names key and range."""

    def __init__(self, place: str, what: str) -> None:
        self.place, self.what = place, what
        super().__init__(f"{place}: {what}")


class Section(BaseModel):
    """One table of a settings file, or the whole of it; a key it does not know is refused."""

    model_config = ConfigDict(frozen=True, extra="forbid")


S = TypeVar("S", bound=Section)


def load_settings(path: Path | None, kind: type[S]) -> S:
    """Return the settings in a file, or the defaults without one; raises BadSettings."""
    if path is None:
        return kind()
    try:
        data = tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise BadSettings(str(path), "no such file") from None
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise BadSettings(str(path), f"cannot be read as TOML: {error}") from None
    try:
        return kind.model_validate(data)
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(part) for part in first["loc"])
        if first["type"] == "extra_forbidden":
            raise BadSettings(str(path), f"unknown key {key}{_nearest(key, kind)}") from None
        raise BadSettings(
            str(path), f"{key} = {first.get('input')!r}: {str(first['msg']).lower()}"
        ) from None


def _nearest(key: str, kind: type[Section]) -> str:
    known = [
        f"{name}.{inner}"
        for name, section in kind.model_fields.items()
        for inner in section.annotation.model_fields  # type: ignore[union-attr]
    ] + list(kind.model_fields)
    near = difflib.get_close_matches(key, known, n=1)
    return f"; the nearest known key is {near[0]}" if near else f"; known are {', '.join(known)}"
