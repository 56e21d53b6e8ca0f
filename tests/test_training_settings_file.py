"""A settings file of any kind is refused by file, key, value and range."""

from __future__ import annotations

from pathlib import Path

import pytest
from pydantic import Field

from training.settings import LearnSettings
from training.settings_file import BadSettings, Section, lines_in_force, load_settings
from training.settings_shown import learn_lines, nightly_lines


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


class NightlySettings(Section):
    """Named as the real one, for its variables."""

    history: Inner = Inner()


def test_the_environment_wins_over_the_file_and_the_file_over_the_default(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "x.toml"
    path.write_text("[history]\ndays = 2\n", encoding="utf-8")
    monkeypatch.setenv("ODDBRANCH_NIGHTLY__HISTORY__DAYS", "3.5")
    assert load_settings(path, NightlySettings).history.days == 3.5
    assert load_settings(None, NightlySettings).history.days == 3.5
    # Another file's variables are another's.
    assert load_settings(path, Whole).history.days == 2.0


@pytest.mark.parametrize("text", ["0", "many", '"4"x', "[1]"])
def test_a_variable_that_cannot_be_used_is_named_as_one(
    monkeypatch: pytest.MonkeyPatch, text: str
) -> None:
    monkeypatch.setenv("ODDBRANCH_NIGHTLY__HISTORY__DAYS", text)
    says = r"environment, ODDBRANCH_NIGHTLY__HISTORY__DAYS: history\.days = "
    with pytest.raises(BadSettings, match=says):
        load_settings(None, NightlySettings)


def test_a_misspelt_variable_is_refused_by_whoever_reads_settings(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv("ODDBRANCH_SERVER__PROT", "1")
    with pytest.raises(BadSettings, match="is ODDBRANCH_SERVER__PORT meant"):
        load_settings(None, Whole)


def test_what_is_in_force_is_shown_with_its_origin(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "nightly.toml"
    path.write_text("[models]\nkeep = 5\n[history]\ndays = 9\n", encoding="utf-8")
    monkeypatch.setenv("ODDBRANCH_NIGHTLY__HISTORY__DAYS", "3.5")
    monkeypatch.setenv("ODDBRANCH_NIGHTLY__LEARN__EXCLUDE", "postgresql://me:hush@db/odd")
    shown = "\n".join(nightly_lines(path))
    assert "models.keep = 5  (file; How many models are kept" in shown
    assert "history.days = 3.5  (environment; How many days" in shown
    assert 'models.folder = "models"  (default; Folder of the kept models)' in shown
    assert "hush" not in shown


def test_every_key_of_learning_is_shown() -> None:
    shown = list(learn_lines(None))
    assert shown[0].startswith("budget.alerts_per_day = 2.0  (default; How many alerts a day")
    assert list(lines_in_force("learn.toml", None, LearnSettings)) == shown
