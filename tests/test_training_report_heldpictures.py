"""Pictures of held-out records show every source or say by their colours which stand out."""

from __future__ import annotations

import re

import numpy as np
import pytest

from training.blocks import Blocks
from training.choices import MASSES, SHARES, Choice, Tried
from training.report.heldpictures import (
    MOST_LINES,
    Covered,
    choice_curves,
    draw_blocks,
    draw_choice,
    draw_coverage,
    outstanding,
)

HOUR_NS = 3_600_000_000_000
START_NS = 1_767_225_600_000_000_000
Floats = np.ndarray


def held(n: int, *means: float) -> tuple[Blocks, Floats]:
    """Return n blocks of an hour with 10 records each, of the given mean surprise in turn."""
    mean = np.resize(np.array(means), n)
    by_block = np.column_stack([mean * 10, np.full(n, 10.0)])
    return Blocks(START_NS, HOUR_NS, 0, n), by_block


def labels(piece: str) -> list[str]:
    return re.findall(r"<text[^>]*>([^<]*)</text>", piece)


def n_lines(piece: str) -> int:
    """Return how many lines over time there are; legends and ticks are shorter."""
    return sum(p.count("\nL ") >= 5 for p in re.findall(r'<path d="[^"]*"[^>]*fill: none', piece))


def test_few_sources_have_a_line_and_a_name_each() -> None:
    piece = draw_blocks({"a": held(8, 5.0, 6.0), "b": held(8, 9.0)}, "blocks")
    assert {"a", "b", "nats a record"} <= set(labels(piece))
    assert n_lines(piece) == 2
    assert "a 5.0 to 6.0 nats; b 9.0 to 9.0 nats" in piece


def test_of_many_sources_those_that_stand_out_are_named_and_lines_are_bounded() -> None:
    sources = {f"quiet_{k}": held(8, 5.0) for k in range(70)}
    sources |= {f"odd_{k}": held(8, 5.0, 5.0, 9.0 + k) for k in range(3)}
    piece = draw_blocks(sources, "blocks")
    named = {label for label in labels(piece) if "_" in label}
    assert named == {"odd_0", "odd_1", "odd_2"}
    assert 3 < n_lines(piece) <= MOST_LINES + 3


def test_what_stands_out_is_a_rise_over_the_usual_and_not_a_high_usual() -> None:
    times = np.zeros(3, dtype="datetime64[ns]")
    lines = {
        "high": (times, np.array([50.0, 50.0, 51.0])),
        "rise": (times, np.array([5.0, 5.0, 11.0])),
        "none": (times[:0], np.zeros(0)),
    }
    assert outstanding(lines)[0] == "rise"


def test_a_block_without_a_record_has_no_point() -> None:
    blocks, by_block = held(8, 5.0)
    by_block[3] = 0.0
    assert "nan" not in draw_blocks({"a": (blocks, by_block)}, "blocks")


def a_choice() -> Choice:
    rng = np.random.default_rng(1)
    tried = [
        Tried(n, rng.random((3, len(MASSES))), rng.random((3, len(SHARES)))) for n in (12, 24, 48)
    ]
    return Choice(24, np.array([10.0, 50.0, 50.0]), SHARES[1], tried)


def test_curves_are_sums_over_the_edges_with_the_chosen_bins() -> None:
    choice = a_choice()
    bins, mass, share = choice_curves(choice)
    assert bins.tried.tolist() == [12, 24, 48]
    assert bins.gain[2] == pytest.approx(choice.tried[2].by_share.sum(axis=0).max())
    assert mass.gain == pytest.approx(choice.tried[1].by_mass.sum(axis=0))
    assert mass.own == pytest.approx(choice.tried[1].by_mass.max(axis=1).sum())
    assert mass.own is not None
    assert mass.own >= mass.gain.max()
    assert share.gain == pytest.approx(choice.tried[1].by_share.sum(axis=0))
    assert (bins.chosen, mass.chosen, share.chosen) == (24.0, None, SHARES[1])


def test_what_was_tried_and_chosen_is_drawn() -> None:
    piece = draw_choice(a_choice(), "choice")
    assert {"12", "24", "48", "chosen", "each edge its own", f"{SHARES[-1]:g}"} <= set(
        labels(piece)
    )


def test_every_channel_has_a_row_of_coverage() -> None:
    covered = [Covered("flow", 500, 470, 0, 0.1), Covered("x" * 40, 500, 300, 3, np.nan)]
    piece = draw_coverage(covered, "coverage")
    assert "flow" in labels(piece)
    assert any(label.startswith("xxx") and "…" in label for label in labels(piece))
    assert "flow 94.0%" in piece
    assert covered[1].share == pytest.approx(0.6)
