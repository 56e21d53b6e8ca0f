"""A panel a channel: its readings as one outline, its bins as a strip below."""

from __future__ import annotations

import re

import numpy as np

from scoring.bins import Bins
from scoring.channels import Channel
from training.histograms import N_CELLS, Histogram
from training.report.binpictures import Panel, _strip, draw_bins, in_words


def flow(name: str = "flow") -> Panel:
    counts = np.arange(N_CELLS, dtype=np.int64)
    channel = Channel(name=name, unit="m3/h")
    bins = Bins(np.array([-50.0, 10.0, 20.0, 40.0, 900.0]))
    return Panel(channel, bins, Histogram(0.0, 100.0, counts))


def state(*counts: int) -> Panel:
    words = tuple(f"w{k}" for k in range(len(counts) - 1))
    channel = Channel(name="mode", kind="state", words=words)
    histogram = Histogram(0.0, float(len(words)), np.array(counts))
    return Panel(channel, Bins(np.zeros(0), len(words)), histogram)


def labels(piece: str) -> list[str]:
    return re.findall(r"<text[^>]*>([^<]*)</text>", piece)


def test_every_second_bin_is_a_box_cut_at_the_ends_of_the_picture() -> None:
    panel = flow()
    corners = _strip(panel.bins, panel.histogram).get_path().vertices
    boxes = np.asarray(corners).reshape(-1, 5, 2)
    assert [(b[0, 0], b[2, 0]) for b in boxes] == [(10.0, 20.0), (40.0, 100.0)]


def test_titles_have_names_and_units_and_words_stand_below_their_bars() -> None:
    found = labels(draw_bins([flow(), state(5, 3, 0)], "bins"))
    assert {"flow, m3/h", "mode", "w0", "w1"} <= set(found)
    assert "never seen" not in found


def test_words_never_seen_have_a_bar_only_if_there_are_some() -> None:
    assert "never seen" in labels(draw_bins([state(5, 3, 1)], "bins"))


def test_of_many_words_some_are_written() -> None:
    found = labels(draw_bins([state(*[1] * 24, 0)], "bins"))
    assert found.count("mode") == 1
    assert 3 <= len([w for w in found if w.startswith("w")]) <= 5


def test_many_channels_go_into_several_pictures_that_share_no_names() -> None:
    pieces = draw_bins([flow(f"flow_{k}") for k in range(19)], "bins")
    assert pieces.count("<figure>") == 3
    names = re.findall(r' id="([^"]+)"', pieces)
    assert len(names) == len(set(names))
    assert [label for label in labels(pieces) if label.startswith("flow")] == [
        f"flow_{k}, m3/h" for k in range(19)
    ]


def test_a_panel_is_told_in_words() -> None:
    assert in_words(flow()) == "flow: 6 bins, shown from 0 to 100 m3/h"
    assert in_words(state(1, 1, 0)) == "mode: a state of 2 words"


def test_a_channel_without_a_reading_has_an_empty_panel() -> None:
    empty = Panel(flow().channel, flow().bins, Histogram(0.0, 1.0, np.zeros(N_CELLS, np.int64)))
    assert "flow, m3/h" in labels(draw_bins([empty], "bins"))
