"""A channel table as commented TOML, the way `oddbranch survey` proposes it."""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from scoring.channels import CHANNELS_FORMAT

HEADING = """\
# Channel table of a fleet, proposed by `oddbranch survey` from its history. Edit it: what a
# site knows of its instruments is better than what a history shows.
#
# kind        measurement (a number) or state (one of `words`)
# unit        as people read it; printed beside readings, never converted
# span        lowest and highest value the instrument can report; readings outside count as
#             missing. Take it from the data sheet; the proposal is from what was seen.
# resolution  the smallest step the instrument reports
# accuracy    half-width of the instrument's accuracy band, in its unit
# leave_out   true: the column is not watched
# bins        inner borders of the bins, fixed by hand, rising; otherwise they are learned
#
# Beside the channels, with examples in the README: [[derived]] channels computed from others,
# [edges] that are required or forbidden, and `regime`, the states that may choose a tree.
"""


@dataclass(frozen=True, slots=True)
class ProposedChannel:
    """What a survey proposes for one column, with the comments that say why."""

    name: str
    comments: tuple[str, ...] = ()
    unit: str = ""
    words: tuple[str, ...] = ()
    resolution: float | None = None
    maybe_span: tuple[float, float] | None = None
    leave_out: bool = False

    @property
    def kind(self) -> str:
        """The kind of channel, from whether it has words."""
        return "state" if self.words else "measurement"


def write_channels(channels: Iterable[ProposedChannel], step_s: float | None) -> str:
    """Return the text of a channel table; load_channels reads it back."""
    lines = [HEADING, f"format = {CHANNELS_FORMAT}"]
    if step_s is not None:
        lines.append(f"step_s = {toml_number(step_s)}  # usual time between two records, seconds")
    for channel in channels:
        lines += ["", "[[channel]]", *_channel_lines(channel)]
    return "\n".join(lines) + "\n"


def _channel_lines(channel: ProposedChannel) -> list[str]:
    lines = [f"# {_one_line(comment)}" for comment in channel.comments]
    lines.append(f"name = {toml_text(channel.name)}")
    if channel.leave_out:
        return [*lines, "leave_out = true"]
    if channel.unit:
        lines.append(f"unit = {toml_text(channel.unit)}")
    if channel.words:
        lines.append('kind = "state"')
        lines.append(f"words = [{', '.join(toml_text(word) for word in channel.words)}]")
    if channel.resolution is not None:
        lines.append(f"resolution = {toml_number(channel.resolution)}")
    if channel.maybe_span is not None:
        low, high = channel.maybe_span
        lines.append(f"# span = [{toml_number(low)}, {toml_number(high)}]")
    return lines


def _one_line(comment: str) -> str:
    return "".join(c if c.isprintable() else " " for c in comment)


def toml_text(text: str) -> str:
    """Return a text as TOML writes it."""
    # JSON's escapes are TOML's, but TOML wants the delete character escaped as well.
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def toml_number(number: float) -> str:
    """Return a number as TOML writes it, whole ones without decimals."""
    return str(int(number)) if number == int(number) and abs(number) < 1e15 else repr(number)


def text_table(heading: Sequence[str], rows: Sequence[Sequence[str]], left: int = 1) -> str:
    """Return rows of cells as aligned text; the first `left` columns lean left, others right."""
    widths = [max(len(row[i]) for row in [heading, *rows]) for i in range(len(heading))]
    lines = []
    for row in [heading, ["-" * width for width in widths], *rows]:
        cells = [
            cell.ljust(width) if i < left else cell.rjust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
        ]
        lines.append("  ".join(cells).rstrip())
    return "\n".join(lines)
