"""Stored records come out as the CSV that learning takes."""

from __future__ import annotations

from pathlib import Path

import pytest
from click.testing import CliRunner

from service.export import BadExport, export_command
from tests.service_fakes import write_fake
from tests.service_http import record, running


def export(tmp_path: Path, *words: str) -> str:
    out = tmp_path / "out.csv"
    result = CliRunner().invoke(
        export_command,
        ["--data", str(tmp_path / "data"), "--out", str(out), *words],
        catch_exceptions=False,
    )
    assert result.exit_code == 0, result.output
    return out.read_text(encoding="utf-8")


def test_records_come_out_wide_in_order_while_the_service_runs(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        api.post([record(1, "b", flow=0.1), record(0, "b", pump="creeping"), record(5, "a")])
        api.post(record(2, "b", flow={"value": 3, "quality": "bad"}, power=None, valve=4))
        text = export(tmp_path)
    assert text == (
        "time,source,flow,power,pump,speed\n"
        "2025-12-01T04:00:00Z,b,120.0,31.5,creeping,1450.0\n"
        "2025-12-01T04:01:00Z,b,0.1,31.5,running,1450.0\n"
        "2025-12-01T04:02:00Z,b,,,running,1450.0\n"
        "2025-12-01T04:05:00Z,a,120.0,31.5,running,1450.0\n"
    )


def test_source_and_times_choose(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        api.post([record(i, source) for i in range(4) for source in ("a", "b")])
    words = ("--source", "b", "--from", "2025-12-01T04:01:00Z", "--to", "2025-12-01T04:03:00Z")
    lines = export(tmp_path, *words).splitlines()[1:]
    assert [line.split(",")[:2] for line in lines] == [
        ["2025-12-01T04:01:00Z", "b"], ["2025-12-01T04:02:00Z", "b"],
    ]  # fmt: skip


def test_channels_of_several_models_stand_side_by_side(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        api.post(record(0))
        write_fake(tmp_path / "model", "another wide")
        api.call(api.service.models.look())
        api.post(record(1))
    head, first, second = export(tmp_path).splitlines()
    assert head.startswith("time,source,flow,power,pump,speed,channel_00,")
    assert first.count(",") == second.count(",") == head.count(",")
    # What the second model did not know was kept all the same.
    assert second.split(",")[2] == "120.0"


def test_a_time_that_is_none_gets_a_sentence(tmp_path: Path) -> None:
    with pytest.raises(BadExport, match="--from 'yesterday' is not an RFC 3339 time"):
        export(tmp_path, "--from", "yesterday")
