"""Sections of the report on learning: what held-out records say."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

import numpy as np

from scoring.channels import ChannelTable
from scoring.expected import EXPECTED_SHARE
from scoring.model import Member
from training.coverage import trees_that_hold
from training.intervals import wilson
from training.levels import Curve
from training.members import Learned
from training.report.heldpictures import Covered, draw_blocks, draw_coverage
from training.report.page import Section, paragraph, table
from training.report.readings import (
    count_text,
    expected_text,
    percent_text,
    reading_text,
    time_text,
)
from training.trouble import MOST_LEFT_OUT
from training.trouble_words import trouble_words
from training.worst import WorstRecord

# Records in the table of the most surprising, and neighbours named with each.
MOST_RECORDS: Final = 15
MOST_NEIGHBOURS: Final = 2
LEFT_OUT_MARK: Final = "*"
# Stretches that are listed.
MOST_STRETCHES: Final = 60
# Channels whose coverage is shown.
MOST_COVERED: Final = 40


def trouble_section(learned: Mapping[str, Learned], curve: Curve | None, step_s: float) -> Section:
    """Return the stretches of time that tables did not use."""
    title = "Stretches left out of the tables"
    stretches = [stretch for one in learned.values() for stretch in one.left_out]
    n_in_alert = sum(len(one.in_alert) for one in learned.values())
    if (not stretches and not n_in_alert) or curve is None:
        text = "None: no stretch is so much more surprising than the rest of its source's history."
        return Section(title, (paragraph(text),))
    text = (
        f"{trouble_words(stretches, curve, n_in_alert)}. For its surprise at most "
        f"{percent_text(MOST_LEFT_OUT, 0)} of a source's records are left out. If a stretch was "
        "normal, it will raise alerts when it comes again; if it was trouble, name it in the file "
        "of `--exclude`, and levels leave it out too."
    )
    shown = sorted(stretches, key=lambda s: -s.peak)[:MOST_STRETCHES]
    if len(shown) < len(stretches):
        text += f" Shown are the {len(shown)} that are most surprising."
    rows = [
        (
            stretch.source,
            time_text(stretch.start_ns, step_s),
            time_text(stretch.end_ns, step_s),
            count_text(stretch.n_records),
            f"{stretch.peak:.0f}",
        )
        for stretch in shown
    ]
    heading = ("source", "from", "to", "records", "nats above the usual")
    made = table(heading, rows, words=(0, 1, 2), whole=(0, 1, 2), wide=True)
    return Section(title, (paragraph(text), made))


def worst_section(channels: ChannelTable, learned: Mapping[str, Learned]) -> Section:
    """Return the most surprising held-out records of all sources."""
    found = [(source, worst) for source, one in learned.items() for worst in one.held_out.worst]
    found.sort(key=lambda pair: -pair[1].excess)
    found = found[:MOST_RECORDS]
    rows = [_worst_row(channels, source, learned[source], worst) for source, worst in found]
    text = (
        "Of each block of time the most surprising record, and of these the first "
        f"{len(found)}. Look here for trouble that the history holds: what tables use, the model "
        "takes for normal. Times are UTC. The suspect is the channel whose removal helps "
        "most, and what it was expected to read is told by the other readings of its record, "
        "under tables that had not seen it. Excess is in nats; beside: what the suspect's "
        "neighbours read."
    )
    if any(_is_left_out(learned[source], worst) for source, worst in found):
        text += f" {LEFT_OUT_MARK} marks records in a stretch that tables do not use."
    heading = ("time", "suspect", "read", "expected", "excess", "source", "beside")
    shown = table(heading, rows, words=(0, 1, 2, 3, 5, 6), whole=(0, 1, 2, 3, 5), wide=True)
    return Section("The most surprising held-out records", (paragraph(text), shown))


def _worst_row(
    channels: ChannelTable, source: str, one: Learned, worst: WorstRecord
) -> tuple[str, ...]:
    time = time_text(worst.time_ns, channels.step_s or 1.0)
    if _is_left_out(one, worst):
        time += f" {LEFT_OUT_MARK}"
    ends = (f"{worst.excess:.1f}", source)
    if worst.suspect < 0:
        return (time, "none", "", "", *ends, "")
    channel = channels.instruments[worst.suspect]
    reading = reading_text(float(worst.values[worst.suspect]), channel)
    expected = expected_text(worst.expected, channel)
    beside = beside_text(channels, one.member, worst)
    return (time, channel.name, reading, expected, *ends, beside)


def _is_left_out(one: Learned, worst: WorstRecord) -> bool:
    return any(start <= worst.time_ns <= end for start, end in one.unused.tolist())


def beside_text(channels: ChannelTable, member: Member, worst: WorstRecord) -> str:
    """Return what the suspect's neighbours read, those with the strongest edges first."""
    rows = member.bin_table.rows(worst.values[None, :])
    for tree, where in trees_that_hold(member, rows):
        if not len(where):
            continue
        weights = {
            int(b if a == worst.suspect else a): float(nats)
            for (a, b), nats in zip(tree.edges.tolist(), tree.nats, strict=True)
            if worst.suspect in (a, b)
        }
        nearest = sorted(weights, key=lambda node: -weights[node])[:MOST_NEIGHBOURS]
        nodes = channels.nodes
        return ", ".join(
            f"{nodes[n].name} {reading_text(float(worst.values[n]), nodes[n])}" for n in nearest
        )
    return ""


def covered_channels(channels: ChannelTable, learned: Mapping[str, Learned]) -> list[Covered]:
    """Return how the expected intervals of each measurement held, all sources together."""
    held = [one.held_out.coverage for one in learned.values()]
    found = []
    for i, channel in enumerate(channels.instruments):
        n = sum(int(c.n[i]) for c in held)
        if n:
            widths = [c.width[i] for c in held if not np.isnan(c.width[i])]
            found.append(
                Covered(
                    channel.name,
                    n,
                    sum(int(c.inside[i]) for c in held),
                    sum(int(c.n_open[i]) for c in held),
                    float(np.median(widths)) if widths else np.nan,
                )
            )
    return found


def coverage_section(channels: ChannelTable, learned: Mapping[str, Learned]) -> Section | None:
    """Return how often readings lay in their expected interval; None without any."""
    covered = covered_channels(channels, learned)
    if not covered:
        return None
    n_all, n = len(covered), sum(c.n for c in covered)
    inside = sum(c.n_inside for c in covered)
    covered = least_covered(covered)
    few = (
        f" Shown are the {len(covered)} of {n_all} channels with the lowest share."
        if n_all > len(covered)
        else ""
    )
    rows = [_covered_row(c) for c in covered]
    heading = ("channel", "readings", "inside", "from", "to", "width", "open")
    pieces = (
        paragraph(
            f"The expected interval of a channel holds {percent_text(EXPECTED_SHARE, 0)} of "
            "what the other readings of a record let its tables believe. Of a sample of "
            f"{count_text(n)} held-out readings {percent_text(inside / n)} were inside. By "
            f"channel, with 95 % limits as if the records were independent (Wilson):{few}"
        ),
        draw_coverage(covered, "coverage"),
        paragraph(
            "Width: the middle width of an interval as a share of the range that holds 95 % of "
            "the channel's readings by itself; narrow means that the neighbours tell much. "
            "Open: intervals without an end on one side.",
            quiet=True,
        ),
        table(heading, rows),
    )
    return Section("Do readings lie where they are expected?", pieces)


def least_covered(covered: list[Covered]) -> list[Covered]:
    """Return at most MOST_COVERED channels, those with the lowest share, in their order."""
    order = sorted(range(len(covered)), key=lambda k: covered[k].share)
    return [covered[k] for k in sorted(order[:MOST_COVERED])]


def _covered_row(c: Covered) -> tuple[str, ...]:
    low, high = wilson(c.n_inside, c.n)
    width = "" if np.isnan(c.width) else percent_text(c.width, 0)
    shares = (percent_text(share) for share in (c.share, low, high))
    open_text = percent_text(c.n_open / c.n) if c.n_open else "none"
    return (c.name, count_text(c.n), *shares, width, open_text)


def block_section(learned: Mapping[str, Learned]) -> Section:
    """Return held-out surprise over time."""
    held = {source: (o.held_out.blocks, o.held_out.by_block) for source, o in learned.items()}
    length_h = next(iter(held.values()))[0].length_ns / 3.6e12
    text = (
        "Each point is a block of time, scored by tables and bins that never saw it. A block "
        "that stands out held trouble, or something the rest of the history does not know. "
        f"A block is {length_h:.3g} h long."
    )
    if len(held) > 1:
        text += " Sources differ in how surprising they usually are; compare each with itself."
    return Section("Held-out surprise over time", (paragraph(text), draw_blocks(held, "blocks")))
