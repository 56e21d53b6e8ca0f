"""Members: own where history is enough, regimes where held-out records say so."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from scoring.channels import ChannelTable, parse_channels
from tests.each_alone import ByPost
from tests.spools import measurements, spool_of, times
from training.members import (
    MAX_REGIME_STATES,
    Learned,
    learn_fleet,
    learn_member,
    regimes_to_try,
    with_enough,
)
from training.rows import Rows

Floats = NDArray[np.float64]

PUMPS = [{"name": f"p{k}", "kind": "state", "words": ["on", "off"]} for k in range(5)]
FLOW = {"name": "flow"}


def a_table(n_pumps: int, regime: list[str] | None = None) -> ChannelTable:
    """Return flow, power and some pumps."""
    channels = [FLOW, {"name": "power"}, *PUMPS[:n_pumps]]
    return parse_channels({"step_s": 60.0, "channel": channels, "regime": regime}, "test")


@pytest.mark.parametrize(
    ("n_pumps", "regime", "tried"),
    [
        (0, None, []),
        (2, None, [(2, 3)]),
        (2, ["p1"], [(3,)]),
        (2, [], []),
        (MAX_REGIME_STATES + 1, None, []),
        (MAX_REGIME_STATES + 1, ["p0", "p4"], [(2, 6)]),
    ],
)
def test_what_may_choose_a_regime(
    n_pumps: int, regime: list[str] | None, tried: list[tuple[int, ...]]
) -> None:
    assert regimes_to_try(a_table(n_pumps, regime)) == tried


def learned(values: Floats, table: ChannelTable, folder: Path) -> Learned:
    """Return one source's member."""
    with spool_of({"a": values}) as spool:
        return learn_member(Rows(spool, table, ("a",), 60.0), "a", folder)


def two_pumps(turns: bool) -> Floats:
    """Return flow, power and a pump that, if `turns`, turns their relation round."""
    rng = np.random.default_rng(2)
    on = np.arange(1400) // 40 % 2
    flow = rng.normal(size=1400)
    sign = np.where(on == 1, -1.0, 1.0) if turns else 1.0
    return np.column_stack([flow, 0.95 * sign * flow + 0.3 * rng.normal(size=1400), on])


def test_a_state_that_turns_a_relation_round_gets_trees_of_its_own(tmp_path: Path) -> None:
    found = learned(two_pumps(turns=True), a_table(1), tmp_path)
    assert found.member.regime == (2,)
    assert [part.key for part in found.member.parts] in ([(0,), (1,), None], [(1,), (0,), None])
    plain = learned(two_pumps(turns=True), a_table(1, regime=[]), tmp_path)
    assert plain.member.regime == ()
    assert found.held_out.density < plain.held_out.density - 0.5


def test_a_state_that_changes_nothing_gets_none(tmp_path: Path) -> None:
    found = learned(two_pumps(turns=False), a_table(1), tmp_path)
    assert found.member.regime == ()
    assert len(found.member.parts) == 1


def test_the_only_source_lends_its_member_to_the_fleet(tmp_path: Path) -> None:
    values = two_pumps(turns=False)[:600, :2]
    with spool_of({"a": values}) as spool:
        rows = Rows(spool, measurements(2), ("a",), 60.0)
        only = learn_member(rows, "a", tmp_path)
        fleet = learn_fleet(rows, only)
    assert fleet.parts is only.member.parts
    assert (fleet.source, fleet.tables) == ("", "shared")


def test_the_fleets_member_is_learned_from_all_sources() -> None:
    rng = np.random.default_rng(3)
    sources = {name: rng.normal(middle, 1, (300, 2)) for name, middle in (("a", 0), ("b", 50))}
    with spool_of(sources) as spool:
        fleet = learn_fleet(Rows(spool, measurements(2), ("a", "b"), 60.0), None)
    for node in range(2):
        number = fleet.bin_table.rows(np.array([[0.0, 0.0], [25.0, 25.0], [50.0, 50.0]]))[:, node]
        p = np.exp(fleet.parts[0].tree.log_marginals[node])
        # Both places are usual, the gap between them is not.
        assert p[number[1]] < 0.2 * min(p[number[0]], p[number[2]])
    assert len(fleet.usual.rows) == 600
    assert fleet.usual.high > fleet.usual.median > 0


def test_stretches_in_alert_are_left_out_of_tables_and_still_scored(tmp_path: Path) -> None:
    rng = np.random.default_rng(4)
    flow = rng.normal(size=1400)
    values = np.column_stack([flow, 0.95 * flow + 0.3 * rng.normal(size=1400)])
    values[300:500, 1] += 6.0
    at = times(1400)
    in_alert = np.array([[at[300], at[499]]])
    with spool_of({"a": values}) as spool:
        rows = Rows(spool, measurements(2), ("a",), 60.0, {"a": in_alert})
        one = learn_member(rows, "a", tmp_path)
        taught = learn_member(replace(rows, left_out={}), "a", tmp_path)
    assert one.unused.tolist() == in_alert.tolist()
    assert one.left_out == []
    assert one.density.plain.n_records == 1200
    scored = one.held_out.surprise(300, 500)
    assert np.nanmedian(scored) > one.member.usual.high
    assert np.nanmedian(taught.held_out.surprise(300, 500)) < np.nanmedian(scored) - 3.0


def test_a_source_in_alert_for_nearly_all_its_time_has_too_little_left() -> None:
    at = times(1000)
    with spool_of({"a": np.zeros((1000, 1))}) as spool:
        rows = Rows(spool, measurements(1), ("a",), 60.0)
        assert with_enough(rows) == ["a"]

        def without(last: int) -> list[str]:
            return with_enough(replace(rows, left_out={"a": np.array([[at[0], at[last]]])}))

        assert without(599) == ["a"]
        # What is left is all in one fold: without it there is nothing.
        assert without(898) == without(850) == []


def test_others_look_at_sources_in_alert_alone() -> None:
    at = times(1000)
    sources = {"a": np.zeros((199, 1)), "b": np.zeros((200, 1)), "c": np.zeros((1000, 1))}
    left_out = {"c": np.array([[at[0], at[599]]]), "a": np.array([[at[0], at[1]]])}
    posted = ByPost([])
    with spool_of(sources) as spool:
        rows = Rows(spool, measurements(1), spool.sources, 60.0, left_out, posted)
        assert with_enough(rows) == ["b", "c"]
    assert len(posted.n_bytes) == 1
