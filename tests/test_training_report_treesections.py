"""Sections on trees and bins: whose they are, what is left away and why."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np

from scoring.model import Member
from tests.learned import SPITEFUL, fleet_table, small_fleet
from tests.models import a_model, a_regime_model
from training.fit import Density, Fitted
from training.members import Learned
from training.report.treesections import (
    MOST_TREES,
    bin_section,
    choice_section,
    commonest_part,
    masses_text,
    shown_source,
    strongest_nodes,
    tree_names,
    tree_section,
)

TABLE = fleet_table()


def learned() -> dict[str, Learned]:
    return small_fleet()[0].learned


def text_of(pieces: tuple[str, ...]) -> str:
    return "".join(pieces)


def cells(piece: str) -> list[list[str]]:
    rows = re.findall(r"<tr>(.*?)</tr>", piece, flags=re.DOTALL)
    return [re.findall(r"<td[^>]*>([^<]*)", row) for row in rows if "<td" in row]


def test_the_source_with_most_records_is_shown_and_said() -> None:
    assert shown_source(learned()) == "east"
    section = tree_section(TABLE, learned(), small_fleet()[0].model.fleet)
    assert "Shown is east, which has most records of the 2 sources" in text_of(section.pieces)


def test_a_single_source_needs_no_choice_and_has_nothing_in_common_with_others() -> None:
    one = {"east": learned()["east"]}
    text = text_of(tree_section(TABLE, one, small_fleet()[0].model.fleet).pieces)
    assert "Shown is" not in text
    assert "most sources share" not in text


def test_without_a_member_of_its_own_the_fleets_tree_is_drawn() -> None:
    model = a_regime_model()
    text = text_of(tree_section(model.table, {}, model.members["a"]).pieces)
    assert "No source has a member of its own" in text
    assert "Tree of the fleet for pump = running:" in text
    assert text.count("<svg") == len(model.members["a"].parts)


def test_a_tree_is_named_by_the_words_that_choose_it() -> None:
    model = a_regime_model()
    names = tree_names(model.table, model.members["a"])
    assert names == ["pump = running", "all records, used for other combinations"]
    assert tree_names(model.table, a_model().fleet) == ["all records"]


def test_a_word_never_seen_may_choose_a_tree() -> None:
    model = a_regime_model()
    member = model.members["a"]
    parts = (replace(member.parts[0], key=(2,)), member.parts[1])
    assert tree_names(model.table, replace(member, parts=parts))[0] == "pump never seen"


def many_regimes() -> tuple[Member, Learned]:
    """Return a member with six trees by the pump's state, and how it was learned."""
    one = learned()["east"]
    plain = one.density.plain
    regimes: dict[tuple[int, ...], Fitted] = {
        (k,): replace(plain, n_records=10 * (6 - k)) for k in range(6)
    }
    density = Density(one.density.fine, plain, (4,), regimes)
    keys = [*regimes, None]
    parts = tuple(replace(one.member.parts[0], key=key) for key in keys)
    member = replace(one.member, parts=parts, regime=(4,))
    return member, replace(one, member=member, density=density)


def test_the_commonest_regime_stands_for_a_member_and_never_what_mixes_them() -> None:
    _, one = many_regimes()
    assert one.density.plain.n_records > 60
    assert commonest_part(one) == 0
    turned = dict(reversed(one.density.regimes.items()))
    assert commonest_part(replace(one, density=replace(one.density, regimes=turned))) == 5
    assert commonest_part(learned()["east"]) == 0


def test_of_many_trees_those_with_most_records_are_drawn_and_the_rest_counted() -> None:
    member, one = many_regimes()
    text = text_of(tree_section(TABLE, {"east": one}, member).pieces)
    drawn = re.findall(r"<p>Tree of east for ([^<]*):</p>", text)
    assert len(drawn) == MOST_TREES
    assert drawn[0] == "all records, used for other combinations"
    assert drawn[1:] == ["pump = running", "pump = stopped", "pump never seen"]
    assert f"Not drawn: {7 - MOST_TREES} trees" in text
    assert len(cells(text)) == 7


def test_edges_that_sources_share_are_counted() -> None:
    section = tree_section(TABLE, learned(), small_fleet()[0].model.fleet)
    table = text_of(section.pieces).split("most sources share")[1]
    rows = cells(table)
    plain = [one.density.plain for one in learned().values()]
    shared = {e for e in plain[0].edges if e in plain[1].edges}
    assert shared
    assert len([row for row in rows if row[2] == "2 of 2"]) == len(shared)
    assert all(float(row[4]) <= float(row[3]) <= float(row[5]) for row in rows)


def test_every_channel_has_its_bins_shown_and_markup_stays_text() -> None:
    text = text_of(bin_section(TABLE, learned()).pieces)
    for name in ("speed, rpm", "head, m", "pump", "room before", "&lt;b&gt;flow"):
        assert f">{name}" in text
    assert SPITEFUL not in text
    assert "Shown are the" not in text


def test_of_many_channels_those_with_most_nats_are_kept_in_their_order() -> None:
    tree = learned()["east"].density.plain.tree
    total = np.zeros(tree.n_nodes)
    for edge, nats in zip(tree.edges, tree.nats, strict=True):
        total[edge] += nats
    kept = strongest_nodes(tree, 3)
    assert kept == sorted(kept)
    assert min(total[kept]) >= max(np.delete(total, kept))


def test_what_was_tried_is_shown_and_a_best_at_the_end_is_said() -> None:
    section = choice_section(learned())
    assert section is not None
    one = learned()["east"]
    at_end = replace(one.density.plain.choice, n_bins=12)
    density = replace(one.density, plain=replace(one.density.plain, choice=at_end))
    ends = choice_section({"east": replace(one, density=density)})
    assert ends is not None
    assert "12 bins are at the end of what was tried." in text_of(ends.pieces)


def test_where_nothing_was_tried_there_is_nothing_to_show() -> None:
    one = learned()["east"]
    choice = replace(one.density.plain.choice, tried=[])
    density = replace(one.density, plain=replace(one.density.plain, choice=choice))
    assert choice_section({"east": replace(one, density=density)}) is None


def test_masses_are_told_by_how_many_edges_chose_them() -> None:
    assert masses_text([50.0, 10.0, 50.0, 100_000.0]) == "10 (1), 50 (2), 100,000 (1)"
