"""The options about history files that the commands share, as one decorator."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar
from zoneinfo import ZoneInfo, available_timezones

import click

from training.history.delimited import SEPARATORS
from training.history.options import BadHistory, HistoryOptions
from training.near import near_words

F = TypeVar("F", bound=Callable[..., Any])

NAMED_SEPARATORS = {"comma": ",", "semicolon": ";", "tab": "\t", "bar": "|"}

_FLAGS = (
    click.option(
        "--time",
        default="time",
        show_default=True,
        metavar="NAME",
        help="Column that holds the time.",
    ),
    click.option(
        "--source",
        default="source",
        show_default=True,
        metavar="NAME",
        help="Column that names the source.",
    ),
    click.option(
        "--zone",
        metavar="ZONE",
        help="Zone of times without an offset, for example Europe/Lisbon.  [default: refused]",
    ),
    click.option(
        "--time-format",
        metavar="FORMAT",
        help="How times are written, as in strptime.  [default: RFC 3339 or DD.MM.YYYY HH:MM:SS]",
    ),
    click.option(
        "--separator",
        metavar="SIGN",
        help="Between cells: one of , ; | or comma, semicolon, tab, bar.  [default: found]",
    ),
    click.option(
        "--decimal", type=click.Choice([".", ","]), help="Decimal mark.  [default: found]"
    ),
    click.option(
        "--channel-column",
        default="channel",
        show_default=True,
        metavar="NAME",
        help="Long form: column that names the channel.",
    ),
    click.option(
        "--value-column",
        default="value",
        show_default=True,
        metavar="NAME",
        help="Long form: column that holds the reading.",
    ),
    click.option(
        "--quality-column",
        default="quality",
        show_default=True,
        metavar="NAME",
        help="Long form: column that says good, uncertain or bad, if there is one.",
    ),
    click.option(
        "--age",
        type=click.FloatRange(min=0, min_open=True),
        metavar="SECONDS",
        help="Long form: how old a last value may be.  [default: 5 steps]",
    ),
    click.option(
        "--step",
        type=click.FloatRange(min=0, min_open=True),
        metavar="SECONDS",
        help="Long form: how far apart records are.  [default: the channel table's, or found]",
    ),
)


def history_flags(command: F) -> F:
    """Add the options to a click command; `history_options` makes one value of them."""
    for flag in reversed(_FLAGS):
        command = flag(command)
    return command


def history_options(
    *,
    time: str,
    source: str,
    zone: str | None,
    time_format: str | None,
    separator: str | None,
    decimal: str | None,
    channel_column: str,
    value_column: str,
    quality_column: str,
    age: float | None,
    step: float | None,
    keep_time_text: bool = False,
) -> HistoryOptions:
    """Return what the flags say; raises BadHistory for a zone or separator that is not known.

    Takes the keyword arguments that click gives a command with these flags.
    """
    return HistoryOptions(
        time=time,
        source=source,
        channel=channel_column,
        value=value_column,
        quality=quality_column,
        zone=None if zone is None else _zone(zone),
        time_format=time_format,
        separator=None if separator is None else _separator(separator),
        decimal=decimal,
        age_s=age,
        step_s=step,
        keep_time_text=keep_time_text,
    )


def _zone(name: str) -> ZoneInfo:
    names = available_timezones()
    if name not in names:
        raise BadHistory("--zone", f"no zone {name!r}{near_words(name, sorted(names))}")
    return ZoneInfo(name)


def _separator(text: str) -> str:
    sign = NAMED_SEPARATORS.get(text, "\t" if text == "\\t" else text)
    if sign not in SEPARATORS:
        listed = ", ".join(NAMED_SEPARATORS)
        raise BadHistory("--separator", f"{text!r} is none of , ; | {listed}")
    return sign
