"""A TOML file of settings and the variables over it, checked against their description.

An environment variable wins over the file given with --config, that over the default. What
cannot be used is refused by place, key, value and range; what is not known, with the
nearest known name. `XSettings` reads the variables ODDBRANCH_X__SECTION__KEY.
"""

from __future__ import annotations

import difflib
import os
import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ConfigDict, ValidationError

from config import known
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
Tables = dict[str, Any]


def load_settings(path: Path | None, kind: type[S]) -> S:
    """Return the settings in force; raises BadSettings."""
    wrong = known.misspelt(os.environ)
    if wrong is not None:
        raise BadSettings(*wrong.split(": ", 1))
    file = _read(path)
    found = _over(file, _variables(kind))
    try:
        return kind.model_validate(found)
    except ValidationError as error:
        first = error.errors()[0]
        if not first["loc"]:
            # Keys that do not go together; the sentence names them and their values.
            where = "settings" if path is None else str(path)
            raise BadSettings(where, str(first["msg"]).removeprefix("Value error, ")) from None
        key = ".".join(str(part) for part in first["loc"])
        place = _place(path, kind, first["loc"])
        if first["type"] == "extra_forbidden":
            raise BadSettings(place, f"unknown key {key}{_nearest(key, kind)}") from None
        shown = known.masked(repr(first.get("input")))
        raise BadSettings(place, f"{key} = {shown}: {str(first['msg']).lower()}") from None


def lines_in_force(name: str, path: Path | None, kind: type[S]) -> Iterator[str]:
    """Yield every setting in force, where it comes from and what it is; raises BadSettings.

    name: of the shipped file, whose comments say what a key is.
    """
    settings, file, variables = load_settings(path, kind), _read(path), _variables(kind)
    for (section, key), comment in known.comments_of(name).items():
        value = getattr(getattr(settings, section), key)
        origin = "default"
        if key in variables.get(section, {}):
            origin = "environment"
        elif key in file.get(section, {}):
            origin = "file"
        what = comment.split(". ")[0].rstrip(".")
        yield f"{section}.{key} = {_shown(value)}  ({origin}; {what})"


def _read(path: Path | None) -> Tables:
    if path is None:
        return {}
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise BadSettings(str(path), "no such file") from None
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise BadSettings(str(path), f"cannot be read as TOML: {error}") from None


def _sections(kind: type[Section]) -> Iterator[tuple[str, type[Section]]]:
    for name, field in kind.model_fields.items():
        assert isinstance(field.annotation, type)
        yield name, field.annotation


def _variable(kind: type[Section], section: str, key: str) -> str:
    owner = kind.__name__.removesuffix("Settings")
    return f"{known.PREFIX}{owner}__{section}__{key}".upper()


def _variables(kind: type[Section]) -> dict[str, Tables]:
    given = {name.upper(): value for name, value in os.environ.items()}
    found: dict[str, Tables] = {}
    for section, table in _sections(kind):
        for key, field in table.model_fields.items():
            text = given.get(_variable(kind, section, key))
            if text is not None:
                is_text = field.annotation in (str, Path)
                found.setdefault(section, {})[key] = text if is_text else _value(text)
    return found


def _value(text: str) -> object:
    """Return a number, a switch or a list as TOML writes it; anything else as it stands."""
    try:
        return tomllib.loads(f"value = {text}")["value"]
    except tomllib.TOMLDecodeError:
        return text


def _over(file: Tables, variables: Mapping[str, Tables]) -> Tables:
    found = dict(file)
    for section, keys in variables.items():
        table = found.get(section, {})
        # What is no table is refused as it stands.
        found[section] = {**table, **keys} if isinstance(table, dict) else table
    return found


def _place(path: Path | None, kind: type[Section], loc: tuple[int | str, ...]) -> str:
    if len(loc) >= 2 and str(loc[1]) in _variables(kind).get(str(loc[0]), {}):
        return f"environment, {_variable(kind, str(loc[0]), str(loc[1]))}"
    return "settings" if path is None else str(path)


def _nearest(key: str, kind: type[Section]) -> str:
    names = [f"{name}.{inner}" for name, table in _sections(kind) for inner in table.model_fields]
    names += list(kind.model_fields)
    other = known.file_with(*key.split(".", 1)) if "." in key else None
    if other is not None:
        return f"; it belongs in {other}"
    near = difflib.get_close_matches(key, names, n=1)
    return f"; the nearest known key is {near[0]}" if near else f"; known are {', '.join(names)}"


def _shown(value: object) -> str:
    if isinstance(value, tuple):
        return str(list(value))
    if isinstance(value, str | Path):
        return f'"{known.masked(str(value))}"'
    return str(value).lower()
