"""Settings of learning: the shipped file, ranges by key, keys that nearly exist."""

from __future__ import annotations

from pathlib import Path

import pytest

from config import read_shipped
from training.settings import BadSettings, LearnSettings, load_learn_settings


def write(folder: Path, text: str) -> Path:
    """Return a settings file."""
    path = folder / "learn.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_without_a_file_the_defaults_hold() -> None:
    assert load_learn_settings(None) == LearnSettings()


def test_the_shipped_file_says_the_defaults_and_leaves_no_key_out(tmp_path: Path) -> None:
    text = read_shipped("learn.toml")
    assert load_learn_settings(write(tmp_path, text)) == LearnSettings()
    for name, section in LearnSettings().model_dump().items():
        assert f"[{name}]" in text
        for key in section:
            assert f"\n{key} = " in text


def test_a_file_may_say_only_what_it_changes(tmp_path: Path) -> None:
    found = load_learn_settings(write(tmp_path, "[budget]\nalerts_per_day = 0.5\n"))
    assert found.budget.alerts_per_day == 0.5
    assert found.sustained == LearnSettings().sustained


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("[budget]\nalerts_per_day = 0\n", r"budget\.alerts_per_day = 0: .*greater than 0"),
        ("[budget]\nalerts_per_day = 2000\n", r"budget\.alerts_per_day = 2000: .*1000"),
        ("[judging]\nleast_share = 'half'\n", r"judging\.least_share = 'half': .*valid number"),
        ("[budget]\nalert_per_day = 1\n", r"unknown key budget\.alert_per_day; the nearest"),
        ("[alerts]\ndeadband = 1\n", r"alerts\.deadband = 1: .*less than or equal to 0\.99"),
        ("[alerts]\nrepeat_n = 1\n", r"unknown key alerts\.repeat_n; it belongs in service\.toml"),
        ("[budgett]\n", "unknown key budgett; the nearest known key is budget"),
        ("[qqqqq]\n", "unknown key qqqqq; known are budget"),
        ("[budget\n", "cannot be read as TOML"),
    ],
)
def test_a_setting_out_of_place_or_range_is_refused_by_name(
    tmp_path: Path, text: str, says: str
) -> None:
    with pytest.raises(BadSettings, match=rf"learn\.toml: .*{says}"):
        load_learn_settings(write(tmp_path, text))


def test_a_missing_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(BadSettings, match="learn.toml: no such file"):
        load_learn_settings(tmp_path / "learn.toml")
