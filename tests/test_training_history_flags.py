"""The flags about history files, as one value."""

from __future__ import annotations

from zoneinfo import ZoneInfo

import click
import pytest
from click.testing import CliRunner

from training.history.flags import history_flags, history_options
from training.history.options import BadHistory, HistoryOptions


def options_of(*words: str) -> HistoryOptions:
    """Return what a command with the flags makes of some words."""
    found: list[HistoryOptions] = []

    @click.command()
    @history_flags
    def command(**flags: object) -> None:
        found.append(history_options(**flags))  # type: ignore[arg-type]

    result = CliRunner().invoke(command, words, standalone_mode=False)
    if result.exception is not None:
        raise result.exception
    return found[0]


def test_nothing_said_is_the_default() -> None:
    assert options_of() == HistoryOptions()


def test_every_flag_ends_in_its_option() -> None:
    words = (
        "--time t --source s --zone Europe/Lisbon --time-format %Y --separator tab --decimal , "
        "--channel-column c --value-column v --quality-column q --age 60 --step 10"
    )
    assert options_of(*words.split()) == HistoryOptions(
        time="t",
        source="s",
        channel="c",
        value="v",
        quality="q",
        zone=ZoneInfo("Europe/Lisbon"),
        time_format="%Y",
        separator="\t",
        decimal=",",
        step_s=10,
        age_s=60,
    )


def test_an_unknown_zone_names_the_nearest() -> None:
    with pytest.raises(
        BadHistory, match="--zone: no zone 'Europe/Lisbonn'; the nearest is 'Europe/Li"
    ):
        options_of("--zone", "Europe/Lisbonn")
    with pytest.raises(BadHistory, match=r"no zone 'xyz'; there are 'Africa/.* and \d+ more$"):
        options_of("--zone", "xyz")


@pytest.mark.parametrize("sign", [";", "semicolon"])
def test_a_separator_is_a_sign_or_its_name(sign: str) -> None:
    assert options_of("--separator", sign).separator == ";"


def test_another_separator_is_refused() -> None:
    with pytest.raises(BadHistory, match="--separator: 'x' is none of"):
        options_of("--separator", "x")


@pytest.mark.parametrize("flag", ["--age", "--step"])
def test_seconds_are_more_than_none(flag: str) -> None:
    with pytest.raises(click.UsageError, match="0.0 is not in the range x>0"):
        options_of(flag, "0")
