"""Held-out records in pictures: surprise over time, what was tried, how intervals held."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.dates import AutoDateLocator, ConciseDateFormatter
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, MaxNLocator
from numpy.typing import NDArray

from scoring.expected import EXPECTED_SHARE
from training.blocks import Blocks
from training.choices import MASSES, SHARES, Choice
from training.intervals import wilson
from training.report.figures import RUST, SERIES, SLATE, TEAL, draw
from training.report.treepicture import shortened

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# With more sources than this only those that stand out have a colour and a name.
_MOST_NAMED: Final = 6
_N_OUTSTANDING: Final = 3
# Lines beyond this would only make the page heavy.
MOST_LINES: Final = 30
_DOT_ROW_IN: Final = 0.23


@dataclass(frozen=True)
class Covered:
    """How one channel's expected intervals held, over all sources.

    n, n_inside: held-out readings, and those in their interval. width: of the intervals,
    over that of the channel's usual range; NaN where unknown.
    """

    name: str
    n: int
    n_inside: int
    n_open: int
    width: float

    @property
    def share(self) -> float:
        """The share of readings inside."""
        return self.n_inside / max(self.n, 1)


def draw_blocks(held: Mapping[str, tuple[Blocks, Floats]], name: str) -> str:
    """Return mean held-out surprise over time.

    held: for each source its blocks and (n_blocks, 2) sum of surprise and number of records.
    """
    lines = {source: _line(blocks, by_block) for source, (blocks, by_block) in held.items()}
    named = set(lines) if len(lines) <= _MOST_NAMED else set(outstanding(lines))
    grey = [source for source in lines if source not in named]
    shown = [*grey[:: -(-len(grey) // MOST_LINES) or 1], *(s for s in lines if s in named)]

    def paint(figure: Figure) -> None:
        axes = figure.subplots()
        colours = iter(SERIES)
        for source in shown:
            times, mean = lines[source]
            if source in named:
                axes.plot(times, mean, ".-", color=next(colours), lw=1.4, ms=4, label=source)
            else:
                axes.plot(times, mean, color="#808080", lw=0.7, alpha=0.5)
        locator = AutoDateLocator(minticks=3, maxticks=6)  # type: ignore[no-untyped-call]
        axes.xaxis.set_major_locator(locator)
        written = ConciseDateFormatter(locator)  # type: ignore[no-untyped-call]
        axes.xaxis.set_major_formatter(written)
        axes.set_ylabel("nats a record", fontsize=9.5)
        axes.tick_params(labelsize=9)
        axes.xaxis.get_offset_text().set_fontsize(9)
        if len(lines) > 1:
            figure.legend(loc="outside upper left", ncols=3, fontsize=9, handlelength=1.2)

    alt = "mean held-out surprise by block of time: " + "; ".join(
        f"{source} {np.nanmin(lines[source][1]):.1f} to {np.nanmax(lines[source][1]):.1f} nats"
        for source in shown
        if source in named
    )
    return draw(paint, name=name, alt=alt, height_in=2.6)


def _line(blocks: Blocks, by_block: Floats) -> tuple[NDArray[np.datetime64], Floats]:
    """Return the middle of each block with records, and their mean surprise."""
    there = by_block[:, 1] > 0
    number = np.flatnonzero(there)
    middle_ns = blocks.start_ns + number * blocks.length_ns + blocks.length_ns // 2
    return middle_ns.astype("datetime64[ns]"), by_block[there, 0] / by_block[there, 1]


def outstanding(lines: Mapping[str, tuple[NDArray[np.datetime64], Floats]]) -> list[str]:
    """Return the sources whose worst block lies furthest over their middle one."""
    rise = {
        source: float(mean.max() - np.median(mean)) if len(mean) else 0.0
        for source, (_, mean) in lines.items()
    }
    return sorted(rise, key=lambda source: -rise[source])[:_N_OUTSTANDING]


def draw_choice(choice: Choice, name: str) -> str:
    """Return what was tried: bins, mass and share against held-out gain."""
    curves = choice_curves(choice)

    def paint(figure: Figure) -> None:
        grid = figure.subplots(3, 1)
        for axes, curve in zip(grid, curves, strict=True):
            _paint_curve(axes, curve)
        figure.supylabel("gain over independent channels, nats a record", fontsize=9.5)

    alt = "held-out gain over what was tried; " + "; ".join(
        f"{c.label}: best at {c.tried[int(np.argmax(c.gain))]:g}" for c in curves
    )
    return draw(paint, name=name, alt=alt, height_in=4.8)


@dataclass(frozen=True)
class ChoiceCurve:
    """One choice: what was tried, (n,), and the gain of each, nats a record.

    chosen: None where every edge has its own; then `own` is the gain with that.
    """

    label: str
    tried: Floats
    gain: Floats
    chosen: float | None
    own: float | None = None


def choice_curves(choice: Choice) -> list[ChoiceCurve]:
    """Return the curves over bins, mass and share; the last two with the chosen bins."""
    best = next(one for one in choice.tried if one.n_bins == choice.n_bins)
    bins = np.array([one.n_bins for one in choice.tried], dtype=np.float64)
    gain = np.array([one.by_share.sum(axis=0).max() for one in choice.tried])
    own = float(best.by_mass.max(axis=1).sum())
    return [
        ChoiceCurve("bins inside the range", bins, gain, float(choice.n_bins)),
        ChoiceCurve(
            "mass of the shape, records", np.array(MASSES), best.by_mass.sum(axis=0), None, own
        ),
        ChoiceCurve("independent share", np.array(SHARES), best.by_share.sum(axis=0), choice.share),
    ]


def _paint_curve(axes: Axes, curve: ChoiceCurve) -> None:
    axes.plot(curve.tried, curve.gain, "o-", color=TEAL, ms=4.5)
    if curve.chosen is not None:
        at = int(np.argmin(np.abs(curve.tried - curve.chosen)))
        axes.plot([curve.tried[at]], [curve.gain[at]], "o", color=RUST, ms=8, label="chosen")
    if curve.own is not None:
        axes.axhline(curve.own, color=RUST, lw=1.4, ls="--", label="each edge its own")
    axes.set_xscale("log")
    axes.set_xticks(curve.tried, [f"{x:g}" for x in curve.tried], minor=False)
    axes.set_xticks([], minor=True)
    axes.set_xlabel(curve.label, fontsize=9.5)
    axes.tick_params(labelsize=8.5)
    axes.yaxis.set_major_locator(MaxNLocator(4))
    axes.margins(y=0.15)
    axes.legend(fontsize=8.5, loc="best")


def draw_coverage(covered: Sequence[Covered], name: str) -> str:
    """Return the share of readings inside their interval, a row for each channel."""

    def paint(figure: Figure) -> None:
        axes = figure.subplots()
        rows = np.arange(len(covered))
        share = np.array([c.share for c in covered])
        limits = np.array([wilson(c.n_inside, c.n) for c in covered])
        axes.hlines(rows, limits[:, 0], limits[:, 1], color=SLATE, lw=2.0, alpha=0.7)
        axes.plot(share, rows, "o", color=TEAL, ms=5.5)
        axes.axvline(EXPECTED_SHARE, color=RUST, lw=1.4, ls="--")
        axes.set_yticks(rows, [shortened(c.name, 22) for c in covered])
        axes.set(ylim=(len(covered) - 0.4, -0.6), xlim=(min(0.85, limits.min() - 0.02), 1.005))
        axes.xaxis.set_major_formatter(FuncFormatter(lambda x, _: f"{x:.0%}"))
        axes.tick_params(labelsize=9)
        axes.tick_params(axis="y", length=0)
        axes.grid(visible=False, axis="y")

    told = ", ".join(f"{c.name} {c.share:.1%}" for c in covered)
    alt = f"share of held-out readings inside their 95 % interval: {told}"
    return draw(paint, name=name, alt=alt, height_in=0.5 + _DOT_ROW_IN * len(covered))
