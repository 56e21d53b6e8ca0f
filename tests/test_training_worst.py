"""The worst held-out record of each block, with the suspect and interval that scoring gives."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scoring.density import removal_of
from scoring.derived import derive, groups
from scoring.excess import ExcessScale
from scoring.scorer import Scorer
from tests.models import a_channel_table, a_model, some_records
from training.blocks import N_FOLDS
from training.worst import N_WORST, Worst

TABLE = a_channel_table()
MODEL = a_model()
MEMBER = MODEL.members["a"]


def some(n: int) -> tuple[np.ndarray, np.ndarray, tuple[np.ndarray, np.ndarray]]:
    times_ns, values = some_records(4, n)
    times_ns = np.sort(times_ns)
    values[:, 0] = np.where(values[:, 0] > 50, np.nan, values[:, 0])
    nodes, _ = derive(TABLE, times_ns, values, None)
    return times_ns, nodes, removal_of(MEMBER, MEMBER.bin_table.rows(nodes), *groups(TABLE))


def filled(n_blocks: int, n: int = 200) -> Worst:
    times_ns, nodes, (surprise, own) = some(n)
    worst = Worst(TABLE, n_blocks)
    block = np.arange(n) * n_blocks // n
    for part in (slice(0, 37), slice(37, 120), slice(120, n)):
        scores = (surprise[part], own[part])
        worst.add(block[part], times_ns[part], block[part] % N_FOLDS, nodes[part], scores)
    return worst


def test_each_block_gives_its_most_surprising_record_and_the_worst_come_first() -> None:
    times_ns, nodes, (surprise, _) = some(200)
    found = filled(5).records([MEMBER] * N_FOLDS, MEMBER, MEMBER.usual)
    best = [int(np.argmax(surprise[k * 40 : k * 40 + 40])) + k * 40 for k in range(5)]
    best.sort(key=lambda r: -surprise[r])
    assert [w.time_ns for w in found] == times_ns[best].tolist()
    assert [w.surprise for w in found] == pytest.approx(surprise[best])
    np.testing.assert_array_equal(found[0].values, nodes[best[0]])
    scale = ExcessScale(MEMBER)
    excess = scale.excess(MEMBER.bin_table.rows(nodes[best]), surprise[best])
    assert [w.excess for w in found] == pytest.approx(excess)


def test_suspect_and_expected_are_those_of_scoring() -> None:
    for worst in filled(5).records([MEMBER] * N_FOLDS, MEMBER, MEMBER.usual):
        row = MEMBER.bin_table.rows(worst.values[None, :])
        _, own = removal_of(MEMBER, row, *groups(TABLE))
        beyond = own[0] - MEMBER.usual.channel_median
        assert worst.suspect == int(np.nanargmax(beyond))
        assert worst.suspect_surprise == pytest.approx(own[0, worst.suspect])
        wanted = Scorer(MODEL).expected("a", row[0], worst.suspect)
        np.testing.assert_equal(worst.expected, wanted)


def test_the_member_that_did_not_see_the_record_says_what_was_expected() -> None:
    moved = replace(MEMBER, bins=tuple(replace(b, borders=b.borders + 1000) for b in MEMBER.bins))
    one = filled(1).records([MEMBER] * N_FOLDS, MEMBER, MEMBER.usual)[0]
    other = filled(1).records([moved, *[MEMBER] * 4], MEMBER, MEMBER.usual)[0]
    assert one.suspect == other.suspect
    assert one.expected.best != other.expected.best


def test_the_list_is_bounded_and_blocks_without_records_are_not_in_it() -> None:
    assert len(filled(40).records([MEMBER] * N_FOLDS, MEMBER, MEMBER.usual)) == N_WORST
    worst = Worst(TABLE, 30)
    assert worst.records([MEMBER] * N_FOLDS, MEMBER, MEMBER.usual) == []


def test_a_record_without_a_reading_has_no_suspect() -> None:
    worst = Worst(TABLE, 1)
    nothing = np.full((1, 6), np.nan)
    one = np.ones(1, dtype=np.int64)
    worst.add(0 * one, one, 0 * one, nothing, (np.zeros(1), np.full((1, 4), np.nan)))
    found = worst.records([MEMBER] * N_FOLDS, MEMBER, MEMBER.usual)
    assert [(w.suspect, w.surprise) for w in found] == [(-1, 0.0)]
