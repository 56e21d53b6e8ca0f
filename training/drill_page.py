"""A drill as a page: the table, how small and how sure, and what nothing watches."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Final

import numpy as np
from matplotlib.figure import Figure

from training.drill_words import HEADING, channel_cells, names_of, size_text, what_line
from training.drilled import Result
from training.planting import OFFSET, SIZED, STUCK, SWAP
from training.report.figures import RUST, TEAL, draw
from training.report.page import (
    Section,
    bullets,
    html_page,
    paragraph,
    table,
    warning,
)

_DETAIL: Final = ("fault", "half of trials", "nine in ten", "caught", "right suspect", "delay")


def drill_page(
    results: Sequence[Result],
    ranges: Mapping[str, float],
    unwatched: Mapping[str, str],
    within: int,
    step_s: float,
    made_by: str,
) -> str:
    """Return the whole page. ranges: the normal range of each channel, in its unit."""
    names = names_of(results)
    n_watched = len(names) - len(unwatched)
    lead = f"{what_line(results, step_s, within).capitalize()}. "
    lead += f"{n_watched} of {len(names)} channels are watched by the others."
    rows = [channel_cells(name, results, step_s) for name in names]
    sections = [
        Section(
            "Smallest fault that is caught",
            (
                table(HEADING, rows),
                paragraph(
                    "Every trial plants one fault into normal records and runs the online path. "
                    "Scaling is in per cent of the reading, noise a standard deviation, drift what "
                    "it reaches in that time. Stuck: the time after which nine in ten were caught.",
                    quiet=True,
                ),
            ),
        ),
        Section("Offsets against what is normal", (_offsets(results, ranges),)),
        _unwatched(unwatched),
        *[_channel(name, results, step_s) for name in names],
    ]
    return html_page("Which faults would be caught", lead, sections, made_by)


def _offsets(results: Sequence[Result], ranges: Mapping[str, float]) -> str:
    """Draw the offset that half, and nine in ten, of the trials catch, in normal ranges."""
    found = [one for one in results if one.kind == OFFSET]

    def paint(figure: Figure) -> None:
        axes = figure.subplots()
        for row, one in enumerate(found):
            scale = 100.0 / ranges[one.channel]
            half, size = (x * scale if x is not None else None for x in (one.half, one.size))
            if half is not None and size is not None:
                axes.plot([half, size], [row, row], color=TEAL, lw=2)
            if half is not None:
                axes.plot([half], [row], "o", color=TEAL, mfc="none")
            if size is not None:
                axes.plot([size], [row], "o", color=TEAL)
            else:
                axes.plot([1.0], [row], "x", color=RUST, transform=axes.get_yaxis_transform())
        axes.set_yticks(range(len(found)), [one.channel for one in found])
        axes.set_ylim(len(found) - 0.5, -0.5)
        axes.set_xscale("log")
        axes.set_xlabel("offset, % of the channel's normal range")

    return draw(
        paint,
        name="offsets",
        alt="; ".join(f"{one.channel} {size_text(one, 1.0)}" for one in found),
        caption="Open dot: caught in half of the trials. Full dot: in nine of ten. Cross: never so "
        "often. Normal range: from the 1 % to the 99 % point of the records.",
        height_in=1.0 + 0.28 * len(found),
    )


def _unwatched(unwatched: Mapping[str, str]) -> Section:
    if not unwatched:
        return Section("What nothing watches", (paragraph("Every channel is watched."),))
    lines = [f"{name}: {why}." for name, why in unwatched.items()]
    return Section(
        "What nothing watches",
        (warning("A fault of these channels would not be noticed."), bullets(lines)),
    )


def _channel(name: str, results: Sequence[Result], step_s: float) -> Section:
    own = [one for one in results if one.channel == name and one.kind != SWAP]
    rows = [
        (
            one.kind,
            _half_text(one, step_s),
            size_text(one, step_s),
            f"{one.caught} of {one.n_trials}",
            f"{one.right} of {one.caught}",
            "-" if one.delay_records is None else f"{one.delay_records:.0f} records",
        )
        for one in sorted(own, key=lambda one: (*SIZED, STUCK).index(one.kind))
    ]
    swaps = [one for one in results if one.kind == SWAP and name in (one.channel, one.partner)]
    missed = [
        one.partner if one.channel == name else one.channel for one in swaps if not one.is_caught
    ]
    said = f"Swapped with any of {len(swaps)} other channels it is caught"
    said += f", but not with {', '.join(missed)}." if missed else "."
    pieces = [table(_DETAIL, rows)]
    if swaps:
        pieces.append(paragraph(said))
    return Section(name, tuple(pieces))


def _half_text(one: Result, step_s: float) -> str:
    return size_text(replace(one, size=one.half), step_s)


def normal_ranges(
    names: Sequence[str], rows: np.ndarray[tuple[int, int], np.dtype[np.float64]]
) -> dict[str, float]:
    """Return each channel's range from its 1 % to its 99 % point, 1 where it never moved."""
    found = {}
    for name, column in zip(names, rows.T, strict=True):
        there = column[~np.isnan(column)]
        low, high = np.quantile(there, [0.01, 0.99]) if len(there) else (0.0, 0.0)
        found[name] = float(high - low) or 1.0
    return found
