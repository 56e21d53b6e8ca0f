"""The nightly job's settings: the shipped file says the defaults."""

from __future__ import annotations

from pathlib import Path

import pytest

from config import read_shipped
from training.nightly_settings import NightlySettings, load_nightly_settings
from training.settings_file import BadSettings


def test_the_shipped_file_says_the_defaults_and_leaves_no_key_out(tmp_path: Path) -> None:
    text = read_shipped("nightly.toml")
    path = tmp_path / "nightly.toml"
    path.write_text(text, encoding="utf-8")
    assert load_nightly_settings(path) == NightlySettings()
    for name, section in NightlySettings().model_dump().items():
        assert f"[{name}]" in text
        for key in section:
            assert f"\n{key} = " in text


@pytest.mark.parametrize("days", [1.5, 2.0])
def test_days_of_history_that_the_judge_takes_altogether_are_refused(
    tmp_path: Path, days: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "nightly.toml"
    path.write_text(f"[history]\ndays = {days}\n", encoding="utf-8")
    says = rf"nightly.toml: history.days = {days:g} is not more than judge.days = 2: .* longer, or"
    with pytest.raises(BadSettings, match=says):
        load_nightly_settings(path)
    # Files may be all that is learned from; and an hour of the judge's leaves the rest.
    path.write_text(f'[history]\ndays = {days}\n[files]\npaths = ["a.csv"]\n', encoding="utf-8")
    assert load_nightly_settings(path).history.days == days
    path.write_text(f"[history]\ndays = {days}\n[judge]\ndays = 1.0\n", encoding="utf-8")
    assert load_nightly_settings(path).judge.days == 1.0
    monkeypatch.setenv("ODDBRANCH_NIGHTLY__JUDGE__DAYS", "5")
    with pytest.raises(BadSettings, match="judge.days = 5"):
        load_nightly_settings(path)


def test_fewer_than_two_kept_models_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "nightly.toml"
    path.write_text("[models]\nkeep = 1\n", encoding="utf-8")
    with pytest.raises(BadSettings, match=r"models.keep = 1: .*greater than or equal to 2"):
        load_nightly_settings(path)
