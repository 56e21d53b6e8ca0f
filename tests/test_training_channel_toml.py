"""A channel table written as TOML is read back as it was meant."""

from __future__ import annotations

import tomllib
from pathlib import Path

from hypothesis import given
from hypothesis import strategies as st

from scoring.channels import load_channels
from training.channel_toml import (
    ProposedChannel,
    text_table,
    toml_number,
    toml_text,
    write_channels,
)


def test_every_kind_of_entry_is_read_back(tmp_path: Path) -> None:
    path = tmp_path / "channels.toml"
    text = write_channels(
        [
            ProposedChannel("Flow [m3/h]", ("seen",), "m3/h", resolution=0.1, maybe_span=(0, 300)),
            ProposedChannel('pump "1"', words=("läuft", "steht")),
            ProposedChannel("remarks", ("left out: text",), leave_out=True),
        ],
        10.0,
    )
    path.write_text(text, encoding="utf-8")
    table = load_channels(path)
    flow, pump = table.instruments
    assert (flow.name, flow.unit, flow.resolution, flow.span) == ("Flow [m3/h]", "m3/h", 0.1, None)
    assert (pump.name, pump.kind, pump.words) == ('pump "1"', "state", ("läuft", "steht"))
    assert [c.name for c in table.channel if c.leave_out] == ["remarks"]
    assert table.step_s == 10.0
    assert "# span = [0, 300]\n" in text
    assert "# left out: text\n" in text


@given(st.text(min_size=1))
def test_any_text_survives(text: str) -> None:
    if any(0xD800 <= ord(sign) <= 0xDFFF for sign in text):
        return  # half a sign, which no file in UTF-8 can hold
    assert tomllib.loads(f"x = {toml_text(text)}")["x"] == text


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_any_number_survives(number: float) -> None:
    assert float(tomllib.loads(f"x = {toml_number(number)}")["x"]) == number


def test_a_comment_stays_on_its_line(tmp_path: Path) -> None:
    path = tmp_path / "channels.toml"
    path.write_text(write_channels([ProposedChannel("a", ("one\nname = 2\x85",))], None))
    assert load_channels(path).names == ("a",)


def test_columns_of_a_table_line_up() -> None:
    assert text_table(["name", "n"], [["a", "10"], ["long name", "9"]]) == (
        "name        n\n---------  --\na          10\nlong name   9"
    )
