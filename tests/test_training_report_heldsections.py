"""Tables of held-out records hold the figures that hold-out found, channel names escaped."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pytest

from tests.learned import SPITEFUL, fleet_table, small_fleet
from tests.spools import NS_PER_S
from training.members import Learned
from training.report.heldpictures import Covered
from training.report.heldsections import (
    MOST_COVERED,
    MOST_RECORDS,
    MOST_STRETCHES,
    beside_text,
    block_section,
    coverage_section,
    covered_channels,
    least_covered,
    trouble_section,
    worst_section,
)
from training.trouble import Stretch

TABLE = fleet_table()


def cells(piece: str) -> list[list[str]]:
    """Return the body of a piece's table."""
    rows = re.findall(r"<tr>(.*?)</tr>", piece, flags=re.DOTALL)
    return [re.findall(r"<td[^>]*>([^<]*)", row) for row in rows if "<td" in row]


def test_the_worst_records_come_worst_first_with_suspect_and_interval() -> None:
    learned = small_fleet()[0].learned
    rows = cells("".join(worst_section(TABLE, learned).pieces))
    assert 1 < len(rows) <= MOST_RECORDS
    excess = [float(row[4]) for row in rows]
    assert excess == sorted(excess, reverse=True)
    best = max((w for one in learned.values() for w in one.held_out.worst), key=lambda w: w.excess)
    assert excess[0] == pytest.approx(best.excess, abs=0.06)
    assert {row[5] for row in rows} <= {"east", "north"}


def test_the_planted_trouble_is_found_and_its_flow_suspected() -> None:
    # Five records whose flow is 60 m3/h too high, in each source.
    rows = cells("".join(worst_section(TABLE, small_fleet()[0].learned).pieces))
    assert [row[1] for row in rows[:2]] == ["&lt;b&gt;flow&lt;/b&gt;"] * 2
    assert all("m3/h" in row[2] and "m3/h" in row[3] for row in rows[:2])
    assert all("speed" in row[6] for row in rows[:2])


def without_trouble() -> dict[str, Learned]:
    """Return what was learned as if nothing had been left out."""
    return {s: replace(one, left_out=[]) for s, one in small_fleet()[0].learned.items()}


def with_trouble() -> dict[str, Learned]:
    """Return what was learned as if the planted trouble of `east` had been left out."""
    learned = without_trouble()
    worst = next(w for w in learned["east"].held_out.worst if w.suspect == 1)
    stretches = [
        Stretch("east", worst.time_ns - 60 * NS_PER_S, worst.time_ns + 60 * NS_PER_S, 3, 31.4),
        *(Stretch("east", k, k + 1, 2, 1.0) for k in range(MOST_STRETCHES)),
    ]
    learned["east"] = replace(learned["east"], left_out=stretches)
    return learned


def test_stretches_left_out_are_listed_with_both_rates_the_most_surprising_first() -> None:
    curve = small_fleet()[0].curve
    assert curve is not None
    pieces = "".join(trouble_section(with_trouble(), curve, 60.0).pieces)
    rows = cells(pieces)
    assert len(rows) == MOST_STRETCHES
    assert rows[0][0] == "east"
    assert rows[0][3:] == ["3", "31"]
    assert f"{MOST_STRETCHES + 1} stretches" in pieces
    assert "alerts a day with them" in pieces
    assert f"Shown are the {MOST_STRETCHES} that are most surprising" in pieces


def test_nothing_left_out_is_said() -> None:
    curve = small_fleet()[0].curve
    assert "None: no stretch" in trouble_section(without_trouble(), curve, 60.0).pieces[0]


def test_a_record_in_a_stretch_that_was_left_out_is_marked() -> None:
    plain = "".join(worst_section(TABLE, without_trouble()).pieces)
    marked = "".join(worst_section(TABLE, with_trouble()).pieces)
    assert "* marks records" in marked
    assert "* marks records" not in plain
    assert sum(row[0].endswith(" *") for row in cells(marked)) == 1


def test_names_that_are_markup_stay_text() -> None:
    learned = small_fleet()[0].learned
    for section in (worst_section(TABLE, learned), coverage_section(TABLE, learned)):
        assert section is not None
        assert SPITEFUL not in "".join(section.pieces)


def test_what_stands_beside_a_suspect_are_its_neighbours_strongest_first() -> None:
    one = small_fleet()[0].learned["east"]
    tree = one.density.plain.tree
    worst = next(w for w in one.held_out.worst if w.suspect == 1)
    weights = {
        int(b if a == 1 else a): nats
        for (a, b), nats in zip(tree.edges, tree.nats, strict=True)
        if 1 in (a, b)
    }
    nearest = sorted(weights, key=lambda n: -weights[n])
    text = beside_text(TABLE, one.member, worst)
    assert [part.split()[0] for part in text.split(", ")] == [TABLE.names[n] for n in nearest[:2]]


def test_coverage_adds_up_over_sources() -> None:
    learned = small_fleet()[0].learned
    both = covered_channels(TABLE, learned)
    assert [c.name for c in both] == ["speed", SPITEFUL, "head", "room"]
    for k, c in enumerate(both):
        assert c.n == sum(int(one.held_out.coverage.n[k]) for one in learned.values())
    rows = cells("".join(coverage_section(TABLE, learned).pieces))  # type: ignore[union-attr]
    assert [row[1] for row in rows] == [str(c.n) for c in both]


def test_held_out_readings_lie_where_they_are_expected() -> None:
    speed, flow, head, _ = covered_channels(TABLE, small_fleet()[0].learned)
    for c in (speed, flow, head):
        assert 0.90 < c.share <= 1.0
        assert c.width < 0.8


def test_of_many_channels_those_covered_least_are_shown_in_their_order() -> None:
    covered = [Covered(f"c{k}", 100, 100 - k, 0, np.nan) for k in range(60)]
    shown = least_covered(covered)
    assert [c.name for c in shown] == [f"c{k}" for k in range(60 - MOST_COVERED, 60)]
    assert least_covered(covered[:5]) == covered[:5]


def test_nothing_covered_is_no_section() -> None:
    assert coverage_section(TABLE, {}) is None


def test_blocks_say_how_long_they_are() -> None:
    learned = small_fleet()[0].learned
    pieces = "".join(block_section(learned).pieces)
    assert "A block is 1.17 h long" in pieces
    assert "<svg" in pieces
