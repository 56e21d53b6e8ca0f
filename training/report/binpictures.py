"""A small picture for each channel: how often what was read, and where the bins lie."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import PathPatch
from matplotlib.path import Path as Outline
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from scoring.bins import Bins
from scoring.channels import Channel
from training.histograms import Histogram
from training.report.figures import OCHRE, TEAL, draw
from training.report.treepicture import shortened

Floats = NDArray[np.float64]

# Panels side by side, and in one picture.
_COLUMNS, _PANELS = 2, 8
_ROW_IN: Final = 1.2
# Of a row: room for the title above and for the numbers below, in inches.
_ABOVE_IN, _BELOW_IN = 0.22, 0.28
# The strip of bins below a histogram, in shares of its height.
_STRIP: Final = (-0.26, -0.08)
# Letters of a title over half the page; words of a state that have room below their bars.
_TITLE_LETTERS, _MOST_WORDS = 30, 4


@dataclass(frozen=True)
class Panel:
    """One channel with its bins and its readings."""

    channel: Channel
    bins: Bins
    histogram: Histogram


def draw_bins(panels: Sequence[Panel], name: str) -> str:
    """Return the pictures of some channels. name: begins the name of each picture."""
    pieces = []
    for first in range(0, len(panels), _PANELS):
        some = panels[first : first + _PANELS]
        n_rows = -(-len(some) // _COLUMNS)
        pieces.append(
            draw(
                partial(_paint, panels=some, n_rows=n_rows),
                name=f"{name}-{first}",
                alt="; ".join(in_words(panel) for panel in some),
                height_in=_ROW_IN * n_rows,
            )
        )
    return "".join(pieces)


def in_words(panel: Panel) -> str:
    """Return one panel for whoever cannot see it."""
    channel, n_bins = panel.channel, panel.bins.n_bins
    if channel.is_state:
        return f"{channel.name}: a state of {len(channel.words)} words"
    unit = f" {channel.unit}" if channel.unit else ""
    low, high = panel.histogram.low, panel.histogram.high
    return f"{channel.name}: {n_bins} bins, shown from {low:.4g} to {high:.4g}{unit}"


def _paint(figure: Figure, panels: Sequence[Panel], n_rows: int) -> None:
    # Laid out by hand: all panels are alike, and measuring every text takes long.
    figure.set_layout_engine("none")
    room_in, height_in = _ABOVE_IN + _BELOW_IN, _ROW_IN * n_rows
    places = {
        "left": 0.01,
        "right": 0.99,
        "wspace": 0.07,
        "top": 1.0 - _ABOVE_IN / height_in,
        "bottom": _BELOW_IN / height_in,
        "hspace": room_in / (_ROW_IN - room_in),
    }
    grid = figure.subplots(n_rows, _COLUMNS, squeeze=False, gridspec_kw=places).reshape(-1)
    for axes, panel in zip(grid, panels, strict=False):
        unit = f", {panel.channel.unit}" if panel.channel.unit else ""
        letters = max(_TITLE_LETTERS - len(unit), 8)
        axes.set_title(shortened(panel.channel.name, letters) + unit, fontsize=10, pad=3)
        axes.set(yticks=[])
        axes.grid(visible=False)
        axes.spines[["left"]].set_visible(False)
        axes.tick_params(labelsize=9)
        if panel.channel.is_state:
            _paint_words(axes, panel)
        else:
            _paint_readings(axes, panel)
    for axes in grid[len(panels) :]:
        axes.set_axis_off()


def _paint_readings(axes: Axes, panel: Panel) -> None:
    histogram = panel.histogram
    edges = np.linspace(histogram.low, histogram.high, len(histogram.counts) + 1)
    # Square roots, so that what is read now and then is seen beside what is read always.
    heights = np.sqrt(histogram.counts / max(histogram.counts.max(), 1))
    axes.stairs(heights, edges, fill=True, color=TEAL, alpha=0.75)
    axes.add_patch(_strip(panel.bins, histogram))
    axes.set(xlim=(histogram.low, histogram.high), ylim=(_STRIP[0], 1.05))
    axes.spines["bottom"].set_position(("data", _STRIP[0]))
    axes.xaxis.set_major_locator(MaxNLocator(4, steps=[1, 2, 5, 10]))


def _strip(bins: Bins, histogram: Histogram) -> PathPatch:
    """Return every second bin as a box, all in one outline."""
    borders = np.concatenate([[-np.inf], bins.borders, [np.inf]])
    borders = np.clip(borders, histogram.low, histogram.high)
    low, high = borders[:-1][::2], borders[1:][::2]
    seen = high > low
    low, high = low[seen], high[seen]
    bottom, top = np.full_like(low, _STRIP[0]), np.full_like(low, _STRIP[1])
    corners = np.stack([low, bottom, low, top, high, top, high, bottom, low, bottom], axis=1)
    codes = np.tile([Outline.MOVETO, *[Outline.LINETO] * 3, Outline.CLOSEPOLY], len(low))
    return PathPatch(Outline(corners.reshape(-1, 2), codes), facecolor=OCHRE, edgecolor="none")


def _paint_words(axes: Axes, panel: Panel) -> None:
    words, counts = list(panel.channel.words), panel.histogram.counts
    n = len(counts) if counts[-1] else len(words)
    names = [*words, "never seen"][:n]
    axes.bar(range(n), counts[:n] / max(counts.max(), 1), width=0.7, color=TEAL, alpha=0.75)
    every = -(-n // _MOST_WORDS)
    letters = 40 // _MOST_WORDS
    axes.set_xticks(range(0, n, every), [shortened(w, letters) for w in names[::every]])
    axes.set(xlim=(-0.6, max(n, 2) - 0.4), ylim=(0.0, 1.05))
