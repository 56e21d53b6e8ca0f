"""`oddbranch survey`: the channel table it proposes, and what it says."""

from __future__ import annotations

import random
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from scoring.channels import ChannelTable, load_channels
from scoring.errors import OddbranchError
from tests.histories import DATA, write
from training.history.options import BadHistory
from training.survey import Survey, round_span, survey_command, unit_in


def survey(out: Path, *words: str | Path) -> Result:
    """Run the command; what it refuses is raised."""
    line = [str(word) for word in words] + ["--out", str(out)]
    result = CliRunner().invoke(survey_command, line, standalone_mode=False)
    if isinstance(result.exception, OddbranchError):
        raise result.exception
    assert result.exit_code == 0, result.exception
    return result


def an_export(n: int = 200) -> str:
    """Return a wide export of two sources with every kind of column."""
    rng = random.Random(7)
    heading = "time,source,Flow [m3/h],power (kW),pump,gate,row,remark,never,busy,noise\n"
    lines = []
    for i in range(n):
        for source in ("a", "b"):
            stamp = f"2026-12-01T{i // 360:02d}:{i // 6 % 60:02d}:{i % 6 * 10:02d}Z"
            flow = round(rng.gauss(100, 5) * 2) / 2
            power = "" if i % 10 == 0 else f"{rng.gauss(30, 1):.4f}"
            pump = "running" if i % 100 < 60 else "stopped"
            lines.append(
                f"{stamp},{source},{flow},{power},{pump},{int(i % 80 < 40)},{i},"
                f"remark {i},,{int(rng.random() < 0.5)},{rng.random()}\n"
            )
    return heading + "".join(lines)


@pytest.fixture
def proposed(tmp_path: Path) -> tuple[ChannelTable, str, str]:
    """Return the table, its text and the output for the export."""
    out = tmp_path / "channels.toml"
    result = survey(out, write(tmp_path, an_export()))
    return load_channels(out), out.read_text(encoding="utf-8"), result.output


def test_the_proposal_is_a_channel_table_that_loads(
    proposed: tuple[ChannelTable, str, str],
) -> None:
    table, _, _ = proposed
    assert [c.name for c in table.instruments] == [
        *("Flow [m3/h]", "power (kW)", "pump", "gate", "busy", "noise"),
    ]
    assert table.step_s == 10.0
    assert not table.derived


def test_units_resolutions_and_words_are_found(proposed: tuple[ChannelTable, str, str]) -> None:
    by_name = {c.name: c for c in proposed[0].instruments}
    assert (by_name["Flow [m3/h]"].unit, by_name["Flow [m3/h]"].resolution) == ("m3/h", 0.5)
    assert (by_name["power (kW)"].unit, by_name["power (kW)"].resolution) == ("kW", None)
    assert by_name["pump"].words == ("running", "stopped")
    assert by_name["gate"].words == ("0", "1")
    assert by_name["busy"].kind == "measurement"
    assert all(c.span is None for c in by_name.values())


def test_columns_that_cannot_be_watched_are_left_out_with_the_reason(
    proposed: tuple[ChannelTable, str, str],
) -> None:
    table, text, _ = proposed
    assert [c.name for c in table.channel if c.leave_out] == ["row", "remark", "never"]
    assert "# left out: counts rows" in text
    assert "# left out: text, more than 20 different ones\n" in text
    assert "# left out: never filled\n" in text


def test_comments_say_what_was_seen(proposed: tuple[ChannelTable, str, str]) -> None:
    text = proposed[1]
    power = text.split('name = "power (kW)"')[0].rsplit("[[channel]]", 1)[1]
    assert "10 % missing" in power
    assert "different values" in power
    assert "# span = [" in text


def test_what_a_person_wants_to_know_is_printed(proposed: tuple[ChannelTable, str, str]) -> None:
    lines = proposed[2].splitlines()
    assert lines[:4] == [
        "records     400",
        "sources     2: a, b",
        "time        2026-12-01T00:00:00Z to 2026-12-01T00:33:10Z",
        "step        10 s",
    ]
    assert any(line.startswith("Flow [m3/h]  measurement  m3/h") for line in lines)
    assert "with 6 channels, in " in lines[-1]


def test_long_exports_are_surveyed_by_channel(tmp_path: Path) -> None:
    out = tmp_path / "channels.toml"
    names = "--time when --source station --channel-column tag --value-column reading"
    result = survey(out, DATA / "long_quality.csv", *names.split(), "--quality-column", "status")
    table = load_channels(out)
    assert {c.name: c.kind for c in table.instruments} == {
        "flow": "measurement",
        "level": "measurement",
        "pump": "state",
    }
    assert table.step_s == 30.0
    assert result.output.startswith("readings    56\n")


def test_an_export_with_decimal_commas_and_local_times_is_surveyed(tmp_path: Path) -> None:
    out = tmp_path / "channels.toml"
    words = ("--time", "Zeitpunkt", "--source", "Station", "--zone", "Europe/Vienna")
    survey(out, DATA / "semicolon_comma_local.csv", *words)
    table = load_channels(out)
    assert [(c.name, c.unit, c.words) for c in table.instruments] == [
        ("Durchfluss [m3/h]", "m3/h", ()),
        ("Vordruck (bar)", "bar", ()),
        ("Pumpe 1", "", ("läuft", "steht")),
    ]
    assert table.step_s == 600.0
    assert "# left out: text in 3.1 % of the rows, remarks rather" in out.read_text("utf-8")


def test_text_in_a_measurement_is_said_and_does_not_make_it_a_state(tmp_path: Path) -> None:
    out = tmp_path / "channels.toml"
    result = survey(out, DATA / "bad_rows.csv")
    assert "not used  1 for 'broken time'; the first: " in result.output
    text = out.read_text(encoding="utf-8")
    assert "# 1 readings are text ('service'); such rows are not used" in text
    assert load_channels(out).instruments[0].kind == "measurement"


def test_sources_mixed_up_are_suspected(tmp_path: Path) -> None:
    text = an_export().replace("time,source", "time,station")
    result = survey(tmp_path / "c.toml", write(tmp_path, text))
    assert "200 records have the time of the one before them: is there a column" in result.output


def test_a_table_that_was_there_is_kept(tmp_path: Path) -> None:
    out, history = tmp_path / "c.toml", write(tmp_path, an_export())
    survey(out, history)
    assert "kept the table" not in survey(out, history).output
    out.write_text("# mine\n", encoding="utf-8")
    assert f"kept the table that was there as {out}.old" in survey(out, history).output
    assert (tmp_path / "c.toml.old").read_text() == "# mine\n"


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("time,flow\n", "has a heading and no rows"),
        ("time,flow\n" + "never,1\n" * 3, "3 of 3 rows cannot be used"),
        ("time,flow\n2026-12-01T04:00:00Z,\n", "no column holds numbers or states"),
        ("time,flow\n2026-12-01 04:00:00,1\n", "the times have no offset from UTC"),
        ("when,flow\n2026-12-01T04:00:00Z,1\n", "say --time when"),
    ],
)
def test_what_is_no_history_is_refused(tmp_path: Path, text: str, sentence: str) -> None:
    with pytest.raises(BadHistory, match=sentence):
        survey(tmp_path / "c.toml", write(tmp_path, text))
    assert not (tmp_path / "c.toml").exists()


@pytest.mark.parametrize(
    ("name", "unit"),
    [
        ("Flow [m3/h]", "m3/h"),
        ("Flow (bar)", "bar"),
        ("Load [%]", "%"),
        ("Temp (°C)", "°C"),
        ("Pump (1)", ""),
        ("flow", ""),
        ("Flow (net) rate", ""),
        ("x [mm/s] ", "mm/s"),
    ],
)
def test_a_unit_is_what_stands_in_brackets_at_the_end(name: str, unit: str) -> None:
    assert unit_in(name) == unit


@pytest.mark.parametrize(
    ("low", "high", "span"),
    [(74.2, 79.9, (71, 83)), (0.5, 3.5, (0, 5)), (-1, 1, (-2, 2)), (5, 5, None)],
)
def test_a_span_has_room_on_both_sides(
    low: float, high: float, span: tuple[float, float] | None
) -> None:
    assert round_span(low, high) == span


def test_a_survey_of_one_record_has_no_step() -> None:
    assert Survey().step_s is None
