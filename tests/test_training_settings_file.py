"""A settings file of any kind is refused by file, key, value and range."""

from __future__ import annotations

from pathlib import Path

import pytest
from pydantic import Field

from training.settings_file import BadSettings, Section, load_settings


class Inner(Section):
    """One key with a range."""

    days: float = Field(default=28.0, ge=0.1, le=400)


class Whole(Section):
    """One table."""

    history: Inner = Inner()


def test_no_file_gives_the_defaults_and_a_file_what_it_says(tmp_path: Path) -> None:
    path = tmp_path / "x.toml"
    path.write_text("[history]\ndays = 2\n", encoding="utf-8")
    assert load_settings(None, Whole).history.days == 28.0
    assert load_settings(path, Whole).history.days == 2.0


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("[history]\ndays = 0\n", r"x.toml: history.days = 0: .*greater than or equal to 0.1"),
        ("[history]\nday = 1\n", "unknown key history.day; the nearest known key is history.days"),
        ("hist = 1\n", "unknown key hist; the nearest known key is history"),
        ("qqqqqqq = 1\n", "unknown key qqqqqqq; known are history.days, history"),
        ("[", "cannot be read as TOML"),
    ],
)
def test_what_is_wrong_is_named(tmp_path: Path, text: str, says: str) -> None:
    path = tmp_path / "x.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(BadSettings, match=says):
        load_settings(path, Whole)
