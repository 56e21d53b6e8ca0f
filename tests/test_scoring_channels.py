"""The channel table: what a site may say, and every refusal by name and place."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from scoring.channels import CHANNELS_FORMAT, ChannelTable, load_channels, parse_channels
from scoring.errors import BadChannelTable

FLOW = {"name": "flow", "unit": "m3/h", "span": [0, 400], "resolution": 0.5}
POWER = {"name": "power", "unit": "kW"}
PUMP = {"name": "pump", "kind": "state", "words": ["running", "stopped"]}
SPARE = {"name": "spare", "leave_out": True}

TABLE = """
format = 1
step_s = 10.0
regime = ["pump"]

[[channel]]
name = "flow"
unit = "m3/h"
span = [0.0, 400.0]

[[channel]]
name = "pump"
kind = "state"
words = ["running", "stopped"]

[[channel]]
name = "spare"
leave_out = true

[[derived]]
name = "flow before"
operation = "previous"
of = ["flow"]

[edges]
require = [["flow", "pump"]]
"""


def a_table(*channels: dict[str, Any], **more: Any) -> ChannelTable:
    """Return a table of these channels, or of flow, power and pump."""
    return parse_channels({"channel": list(channels) or [FLOW, POWER, PUMP], **more}, "site.toml")


def test_a_table_is_read_from_a_file(tmp_path: Path) -> None:
    path = tmp_path / "channels.toml"
    path.write_text(TABLE, encoding="utf-8")
    table = load_channels(path)
    assert [c.name for c in table.instruments] == ["flow", "pump"]
    assert table.names == ("flow", "pump", "flow before")
    assert table.instruments[0].span == (0.0, 400.0)
    assert (table.step_s, table.regime) == (10.0, ("pump",))
    assert table.edges.require == (("flow", "pump"),)


def test_a_table_survives_json() -> None:
    table = a_table(FLOW, POWER, PUMP, SPARE, derived=[{"name": "h", "operation": "hour"}])
    assert parse_channels(table.model_dump(mode="json"), "again") == table


def test_nodes_are_the_instruments_and_then_what_is_derived() -> None:
    table = a_table(
        FLOW,
        POWER,
        PUMP,
        SPARE,
        derived=[
            {"name": "per flow", "operation": "ratio", "of": ["power", "flow"], "unit": "kWh/m3"},
            {"name": "hour", "operation": "hour"},
        ],
    )
    assert [n.name for n in table.nodes] == ["flow", "power", "pump", "per flow", "hour"]
    assert table.nodes[3].unit == "kWh/m3"
    assert table.nodes[4].words == tuple(f"{h:02d}" for h in range(24))
    assert [n.is_state for n in table.nodes] == [False, False, True, False, True]


REFUSED = [
    ([{"name": "p", "kind": "state"}], {}, r"channel 'p': a state needs its words"),
    ([{"name": "p", "words": ["a"]}], {}, r"channel 'p': words belong to a state"),
    ([{**PUMP, "words": ["a", "a"]}], {}, r"a word stands twice"),
    ([{**PUMP, "words": [str(k) for k in range(201)]}], {}, r"201 words are too many.*200"),
    ([{**FLOW, "span": [5, 5]}], {}, r"channel 'flow': span \[5\.0, 5\.0\] must rise"),
    ([{**FLOW, "bins": [1, 1]}], {}, r"bins must be finite and strictly rising"),
    ([{**FLOW, "bins": [1, float("inf")]}], {}, r"bins must be finite"),
    ([{**FLOW, "resolution": 0}], {}, r"channel 'flow', resolution: Input should be greater"),
    ([{**FLOW, "colour": "red"}], {}, r"channel 'flow', colour: not known; known are name, unit"),
    ([{**FLOW, "units": "m3/h"}], {}, r"channel 'flow', units: not known; is unit meant\?"),
    ([{"unit": "bar"}], {}, r"channel 'number 1', name: Field required"),
    ([FLOW, FLOW], {}, r"channel 'flow' stands twice"),
    ([SPARE], {}, r"no channel is left to watch"),
    ([FLOW], {"format": 2}, r"format 2 is not known; this version reads 1"),
    ([FLOW], {"step_s": -1}, r"step_s: Input should be greater than 0"),
    ([FLOW, PUMP], {"regime": ["flow"]}, r"regime: 'flow' is not a state"),
    ([FLOW], {"regime": ["pomp"]}, r"regime names 'pomp', which is not a watched channel"),
]  # fmt: skip


@pytest.mark.parametrize(("channels", "more", "says"), REFUSED)
def test_a_table_that_makes_no_sense_is_refused_by_name(
    channels: list[dict[str, Any]], more: dict[str, Any], says: str
) -> None:
    with pytest.raises(BadChannelTable, match=rf"^site\.toml: .*{says}"):
        a_table(*channels, **more)


DERIVED_REFUSED = [
    ({"name": "d", "operation": "difference", "of": ["flow"]}, r"takes 2 channels, 1 given"),
    ({"name": "d", "operation": "previous", "of": ["floe"]}, r"'d' names 'floe'"),
    ({"name": "d", "operation": "previous", "of": ["spare"]}, r"'d' names 'spare'"),
    ({"name": "d", "operation": "step", "of": ["pump"]}, r"'pump' is a state and has no number"),
    ({"name": "flow", "operation": "hour"}, r"channel 'flow' stands twice"),
    ({"name": "d", "operation": "product", "of": ["flow", "power"]}, r"derived 'd', operation"),
]


@pytest.mark.parametrize(("derived", "says"), DERIVED_REFUSED)
def test_a_derived_channel_that_makes_no_sense_is_refused(
    derived: dict[str, Any], says: str
) -> None:
    with pytest.raises(BadChannelTable, match=says):
        a_table(FLOW, POWER, PUMP, SPARE, derived=[derived])


EDGES_REFUSED = [
    ({"forbid": [["flow", "pomp"]]}, r"edges\.forbid names 'pomp'"),
    ({"require": [["flow", "flow"]]}, r"edges\.require: 'flow' is paired with itself"),
    (
        {"require": [["flow", "pump"]], "forbid": [["pump", "flow"]]},
        r"'flow' - 'pump' is both required and forbidden",
    ),
    (
        {"require": [["flow", "power"], ["power", "pump"], ["pump", "flow"]]},
        r"edges\.require: 'pump' - 'flow' closes a cycle",
    ),
]


@pytest.mark.parametrize(("edges", "says"), EDGES_REFUSED)
def test_a_say_on_edges_that_no_tree_can_follow_is_refused_by_name(
    edges: dict[str, Any], says: str
) -> None:
    with pytest.raises(BadChannelTable, match=says):
        a_table(edges=edges)


def test_a_missing_file_says_how_to_get_one(tmp_path: Path) -> None:
    with pytest.raises(BadChannelTable, match="no such file; `oddbranch survey` proposes"):
        load_channels(tmp_path / "channels.toml")


def test_a_file_that_is_not_toml_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "channels.toml"
    path.write_bytes(b"\xff\xfe")
    with pytest.raises(BadChannelTable, match="channels.toml: cannot be read as TOML"):
        load_channels(path)


def test_the_format_of_a_new_table_is_the_one_that_is_read() -> None:
    assert a_table().format == CHANNELS_FORMAT
