"""Alerts in words: one plain sentence that says where to look and why."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from scoring.alerts import INSTRUMENT, STUCK, Suspect, time_text
from scoring.channels import Channel

# Neighbours, channels and words named in one sentence; more of them help nobody.
MOST_NAMED = 3
# Digits of a reading whose instrument's resolution is not known.
UNKNOWN_DIGITS = 5
MAX_DECIMALS = 9


def number_text(value: float, resolution: float | None) -> str:
    """Return a number with the decimals that its instrument's resolution has."""
    if resolution is None:
        return f"{value:.{UNKNOWN_DIGITS}g}"
    decimals, steps = 0, resolution
    while decimals < MAX_DECIMALS and not (
        round(steps) >= 1 and math.isclose(steps, round(steps), rel_tol=1e-6)
    ):
        decimals, steps = decimals + 1, steps * 10
    return f"{value:.{decimals}f}"


def lasting_text(seconds: float) -> str:
    """Return a duration as people say it: 40 s, 12 min, 3.5 h, 2 days."""
    for unit, length_s, until_s in (("s", 1, 120), ("min", 60, 7200), ("h", 3600, 172_800)):
        if seconds < until_s:
            amount = seconds / length_s
            return (
                f"{amount:.1f}".removesuffix(".0") + f" {unit}"
                if unit == "h"
                else (f"{amount:.0f} {unit}")
            )
    return f"{seconds / 86_400:.1f}".removesuffix(".0") + " days"


def list_text(names: Sequence[str]) -> str:
    """Return names as a list in a sentence, the first few of many."""
    shown = list(names[:MOST_NAMED])
    if len(names) > MOST_NAMED:
        return f"{', '.join(shown)} and {len(names) - MOST_NAMED} more"
    return " and ".join([", ".join(shown[:-1]), shown[-1]] if len(shown) > 1 else shown)


def reads_text(suspect: Suspect, channel: Channel | None) -> str:
    """Return "reads x where y was expected" for a suspect; channel: None if unknown now."""
    resolution = channel.resolution if channel is not None else None
    unit = f" {suspect.unit}" if suspect.unit else ""
    if suspect.reading is None:
        return "is odd"
    if isinstance(suspect.reading, str):
        return f"reads {suspect.reading}{_words_text(suspect)}"
    reads = f"reads {number_text(suspect.reading, resolution)}{unit}"
    low, high = suspect.low, suspect.high
    if low is not None and suspect.reading >= low and high is not None and suspect.reading <= high:
        return f"{reads}, which is odd"
    if low is not None and high is not None:
        expected = f"{number_text(low, resolution)} to {number_text(high, resolution)}"
    elif low is not None:
        expected = f"at least {number_text(low, resolution)}"
    elif high is not None:
        expected = f"at most {number_text(high, resolution)}"
    else:
        return f"{reads}, which is odd"
    return f"{reads} where {expected} was expected"


def _words_text(suspect: Suspect) -> str:
    words = suspect.words or {}
    best = max(words, key=lambda word: words[word], default="")
    if not best or best == suspect.reading:
        return ", which is odd"
    return f" where {best} was expected"


def scored_text(
    source: str,
    likely: str,
    suspects: Sequence[Suspect],
    beside: Sequence[str],
    channels: Mapping[str, Channel],
    stuck: Sequence[str] = (),
) -> str:
    """Return the sentence of a scored alert. stuck: other channels known to stand still."""
    sentence = _scored_text(source, likely, suspects, beside, channels)
    if not stuck:
        return sentence
    verb, it = ("is", "it") if len(stuck) == 1 else ("are", "they")
    return f"{sentence} {list_text(stuck)} {verb} known to be stuck: look whether {it} can be why."


def _scored_text(
    source: str,
    likely: str,
    suspects: Sequence[Suspect],
    beside: Sequence[str],
    channels: Mapping[str, Channel],
) -> str:
    if not suspects:
        return f"records of {source} are odd, and no single channel stands out."
    first = suspects[0]
    near = f" beside {list_text(beside)}" if beside else ""
    reads = f"{first.channel} at {source} {reads_text(first, channels.get(first.channel))}{near}"
    if likely == INSTRUMENT:
        return (
            f"{reads}; the other channels agree with each other: "
            f"look at the {first.channel} instrument first."
        )
    if likely == STUCK:
        return f"{reads}, and it no longer moves: look at the {first.channel} instrument first."
    others = [one.channel for one in suspects[1:]]
    if not others:
        return f"{reads}: look at the {first.channel} instrument first, then at the machine."
    return (
        f"{reads}, and {list_text(others)} {'is' if len(others) == 1 else 'are'} odd with it: "
        "several channels moved together, so look at the machine first."
    )


def stuck_text(
    source: str,
    active: Sequence[str],
    reading: float | None,
    channel: Channel | None,
    since_ns: int,
    normal_s: float,
) -> str:
    """Return the sentence of a stuck alert.

    active: the channels concerned; "" among them stands for the whole source.
    reading: what the first of them repeats, None if it is no longer known. normal_s: its
        longest normal stillness, infinite if not known.
    """
    since = time_text(since_ns)
    if "" in active:
        return (
            f"no channel of {source} has moved since {since}: look at its logger or "
            "connection first, which may repeat old readings."
        )
    what = "one reading" if reading is None else _reading_text(reading, channel)
    normal = (
        f"; its longest normal stillness is {lasting_text(normal_s)}"
        if math.isfinite(normal_s)
        else ""
    )
    return (
        f"{active[0]} at {source} has repeated {what} since {since}{_as_well(active)}{normal}: "
        f"look at the {active[0]} instrument or its connection first."
    )


def absent_text(source: str, active: Sequence[str], since_ns: int) -> str:
    """Return the sentence of an alert for channels that stopped coming."""
    one = len(active) == 1
    return (
        f"{list_text(active)} at {source} {'has' if one else 'have'} sent no reading since "
        f"{time_text(since_ns)} while records go on: look at {'its' if one else 'their'} "
        "connection first."
    )


def span_text(
    source: str, active: Sequence[str], reading: float | None, channel: Channel | None
) -> str:
    """Return the sentence of an alert for readings outside their span."""
    reads = "is" if reading is None else f"reads {_reading_text(reading, channel)},"
    span = "its span"
    if channel is not None and channel.span is not None:
        unit = f" {channel.unit}" if channel.unit else ""
        span = f"its span of {channel.span[0]:g} to {channel.span[1]:g}{unit}"
    return (
        f"{active[0]} at {source} {reads} outside {span}{_as_well(active)}: "
        "look at its wiring and supply first."
    )


def silent_text(source: str, last_ns: int) -> str:
    """Return the sentence of an alert for a source that stopped sending."""
    return (
        f"{source} has sent nothing since its record of {time_text(last_ns)}: "
        "look at its line, logger and supply first."
    )


def clock_text(source: str, time_ns: int, should_ns: int) -> str:
    """Return the sentence of an alert for a source's clock.

    time_ns: what a record of it says; should_ns: what it should say at least.
    """
    off_s = (time_ns - should_ns) * 1e-9
    where = "ahead" if off_s > 0 else "behind"
    return (
        f"the clock of {source} is {lasting_text(abs(off_s))} {where}: set it; until then its "
        "records are scored and stored, and its alerts stand still."
    )


def _reading_text(reading: float, channel: Channel | None) -> str:
    if channel is None:
        return number_text(reading, None)
    if channel.is_state and 0 <= reading < len(channel.words):
        return channel.words[int(reading)]
    return number_text(reading, channel.resolution) + (f" {channel.unit}" if channel.unit else "")


def _as_well(active: Sequence[str]) -> str:
    return f" ({list_text(active[1:])} as well)" if len(active) > 1 else ""
