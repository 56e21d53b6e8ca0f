"""Readings, intervals and times as a report's tables write them."""

from __future__ import annotations

import math
from typing import Final

import numpy as np

from scoring.channels import Channel
from scoring.scorer import Expected
from scoring.sentences import number_text


def time_text(time_ns: int, step_s: float = 60.0) -> str:
    """Return a time as 2026-01-31 04:10, UTC; with seconds where records come more often."""
    whole = np.datetime64(time_ns, "ns").astype("datetime64[s]")
    text = str(whole).replace("T", " ")
    return text[:-3] if step_s >= 60.0 else text


def day_text(time_ns: int) -> str:
    """Return a day as 2026-01-31, UTC."""
    return time_text(time_ns)[:10]


def percent_text(share: float, decimals: int = 1) -> str:
    """Return a share in percent."""
    return f"{100.0 * share:.{decimals}f} %"


# The likeliest word of a state is told from this probability on.
LEAST_LIKELY: Final = 0.05


def count_text(n: float) -> str:
    """Return a count with its thousands apart."""
    return f"{n:,.0f}"


def reading_text(value: float, channel: Channel) -> str:
    """Return one reading, with the channel's unit; a word for a state, "missing" for NaN."""
    if math.isnan(value):
        return "missing"
    if channel.is_state:
        number = int(value)
        return channel.words[number] if number < len(channel.words) else "a word never seen"
    unit = f" {channel.unit}" if channel.unit else ""
    return number_text(value, channel.resolution) + unit


def expected_text(expected: Expected, channel: Channel) -> str:
    """Return what a channel should have read: an interval, or a state's likeliest word."""
    if expected.words:
        word = max(expected.words, key=lambda w: expected.words[w])  # type: ignore[index]
        # What is left over is the share of a word never seen: beside these readings all known
        # ones are next to impossible.
        if expected.words[word] < LEAST_LIKELY:
            return "no known word fits"
        return f"{word} ({percent_text(expected.words[word], 0)})"
    low, high = expected.low, expected.high
    unit = f" {channel.unit}" if channel.unit else ""
    if math.isfinite(low) and math.isfinite(high):
        low_text = number_text(low, channel.resolution)
        return f"{low_text} to {number_text(high, channel.resolution)}{unit}"
    if math.isfinite(low):
        return f"at least {number_text(low, channel.resolution)}{unit}"
    if math.isfinite(high):
        return f"at most {number_text(high, channel.resolution)}{unit}"
    return "anything"
