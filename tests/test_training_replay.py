"""`oddbranch replay`: from records and incidents to a verdict, files and a page."""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pytest
from click.testing import CliRunner, Result

from scoring.errors import OddbranchError
from tests.pump import (
    N_LEARNED,
    SOURCES,
    pump_model,
    pump_times,
    pump_values,
    write_csv,
    write_pump_model,
)
from tests.spools import START_NS
from training.replay import replay_command
from training.report.page import ADVICE

N = 4000
MINUTE = 60_000_000_000
# Start and end in minutes, what is added to which column; the last is far too small to see.
FAULTS = ((300, 420, 1, 20.0), (1200, 1330, 2, 6.0), (3300, 3420, 3, 0.002))


def stamp(minute: int) -> str:
    moment = np.datetime64(START_NS + MINUTE * (N_LEARNED + minute), "ns")
    return f"{np.datetime_as_string(moment, unit='s')}Z"


# Removed when the tests of this file are over.
KEPT = TemporaryDirectory(prefix="oddbranch-test-")


@pytest.fixture(scope="module", autouse=True)
def _clean_up() -> Iterator[None]:
    yield
    KEPT.cleanup()


@cache
def a_site() -> Path:
    """Write a model, a history, records with faults at the first source, their incidents."""
    folder = Path(KEPT.name)
    write_pump_model(folder)
    write_csv(
        folder / "history.csv",
        {s: (pump_times(N_LEARNED), pump_values(s, N_LEARNED)) for s in SOURCES},
    )
    records = {s: (pump_times(N, N_LEARNED), pump_values(s, N, N_LEARNED)) for s in SOURCES}
    lines = ["source,start,end,kind,size,channels"]
    names = ("speed", "flow", "power", "pressure")
    for start, end, column, size in FAULTS:
        records[SOURCES[0]][1][start:end, column] += size
        lines.append(f"{SOURCES[0]},{stamp(start)},{stamp(end)},offset,{size},{names[column]}")
    write_csv(folder / "records.csv", records)
    (folder / "incidents.csv").write_text("\n".join(lines) + "\n")
    return folder


def run(*more: str, out: Path) -> Result:
    site = a_site()
    arguments = [site / "records.csv", "--model", site / "model", "--out", out, *more]
    return CliRunner().invoke(replay_command, [str(a) for a in arguments])


@cache
def done() -> tuple[str, Path]:
    out = Path(KEPT.name) / "out"
    site = a_site()
    result = run(
        "--incidents", str(site / "incidents.csv"), "--history", str(site / "history.csv"), out=out
    )
    assert result.exit_code == 0, result.output
    return result.output, out


def rows(name: str) -> list[dict[str, str]]:
    with (done()[1] / name).open(newline="") as file:
        return list(csv.DictReader(file))


def test_large_faults_are_caught_with_their_delay_and_suspect() -> None:
    found = rows("incidents.csv")
    assert [one["caught"] for one in found] == ["yes", "yes", "no"]
    for one, name in zip(found[:2], ("flow", "power"), strict=True):
        assert one["suspect"] == name
        assert one["right_in_first"] == "yes"
        assert 0 <= float(one["delay_s"]) <= 600
    assert found[2]["raised"] == ""


def test_the_terminal_says_the_burden_the_promise_and_the_catch() -> None:
    output, _ = done()
    assert re.search(r"\d+ alerts in 2\.8 days of 2 sources: .* a day \(95 % limits", output)
    assert re.search(r"outside incidents in 2\.\d quiet days; promised were \d+", output)
    assert "2 of 3 incidents caught (67 %, 95 % limits 21 to 94 %)" in output
    assert re.search(r"with the kinds apart from the budget .* 2 of 3 were caught", output)
    assert "false alerts:" in output
    for name in ("operating limits", "PCA, T2 and SPE"):
        assert re.search(rf"{name} +no more false alerts than ours", output)
    assert "by kind:" in output
    assert "by size:" in output


def test_the_sweep_falls_with_the_levels_and_holds_the_models_own() -> None:
    found = rows("levels.csv")
    own = [one for one in found if one["of_the_model"] == "yes"]
    assert len(own) == 1
    levels = pump_model().levels
    assert float(own[0]["record_level"]) == pytest.approx(levels.record, rel=1e-5)
    assert own[0]["caught"] == "2"
    records = [float(one["record_level"]) for one in found]
    assert records == sorted(records, reverse=True)
    rates = [float(one["alerts_per_day"]) for one in found]
    assert rates[0] < rates[-1]
    assert len(found) > 20


def test_the_sweeps_own_pair_counts_what_the_online_path_raised() -> None:
    scored = [one for one in rows("alerts.csv") if one["in_budget"] == "yes"]
    own = next(one for one in rows("levels.csv") if one["of_the_model"] == "yes")
    n_days = N / 1440
    assert float(own["alerts_per_day"]) * n_days == pytest.approx(len(scored), rel=1e-3)
    assert sum(int(one["alerts"]) for one in rows("days.csv")) <= len(scored)


def test_rivals_have_no_more_false_alerts_than_ours() -> None:
    found = rows("methods.csv")
    ours = float(found[0]["false_per_day"])
    same = [one for one in found if one["choice"] == "no more false alerts than ours"]
    assert {one["method"] for one in same} == {"operating limits", "PCA, T2 and SPE"}
    assert all(float(one["false_per_day"]) <= ours + 1e-6 for one in same)


def test_the_page_stands_alone_and_shows_it_all() -> None:
    page = (done()[1] / "replay.html").read_text()
    assert not re.search(r"https?:|src=|<script", page)
    assert page.count(ADVICE) == 2
    assert page.count("<svg") == 4
    for part in ("The burden", "What would have been caught", "Other levels", "Missed incidents"):
        assert part in page
    assert "nan" not in re.sub(r"<svg.*?</svg>", "", page, flags=re.DOTALL)


def test_alert_sentences_are_in_the_list() -> None:
    flow = [one for one in rows("alerts.csv") if one["suspect"] == "flow"]
    assert flow
    assert "flow at mill-lane reads" in flow[0]["sentence"]
    assert float(flow[0]["reading"]) > float(flow[0]["expected_high"])


def test_without_incidents_every_alert_is_one_on_records_taken_as_normal(tmp_path: Path) -> None:
    result = run(out=tmp_path)
    assert result.exit_code == 0, result.output
    assert "incidents caught" not in result.output
    assert not (tmp_path / "incidents.csv").exists()
    assert not (tmp_path / "methods.csv").exists()
    page = (tmp_path / "replay.html").read_text()
    assert "What would have been caught" not in page
    assert page.count("<svg") == 3


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("nonsense\n", "first line must read"),
        ("source,start,end,kind,size,channels\nx,{0},{1},offset,1,flow\n", "source 'x' has no rec"),
        ("source,start,end,kind,size,channels\n{s},{1},{0},offset,1,flow\n", "is not before end"),
        ("source,start,end,kind,size,channels\n{s},{0},{1},offset,1,flaw\n", "nearest is 'flow'"),
    ],
)
def test_nonsense_in_the_incidents_file_is_one_sentence_and_exit_1(
    tmp_path: Path, text: str, match: str
) -> None:
    path = tmp_path / "incidents.csv"
    path.write_text(text.format(stamp(10), stamp(20), s=SOURCES[0]))
    result = run("--incidents", str(path), out=tmp_path / "out")
    assert isinstance(result.exception, OddbranchError)
    assert result.exception.exit_code == 1
    assert re.search(match, str(result.exception))
    assert not (tmp_path / "out").exists()


def test_incidents_outside_the_records_are_left_out_and_said_so(tmp_path: Path) -> None:
    path = tmp_path / "incidents.csv"
    before = "2025-01-01T00:00:00Z,2025-01-01T01:00:00Z,offset,1,flow"
    path.write_text(
        f"source,start,end,kind,size,channels\n{SOURCES[0]},{before}\n"
        f"{SOURCES[0]},{stamp(300)},{stamp(420)},offset,,flow\n"
    )
    result = run("--incidents", str(path), out=tmp_path / "out")
    assert "1 incidents lie outside the time of the records" in result.output
    assert "1 of 1 incidents caught" in result.output


def test_a_folder_that_cannot_be_written_is_refused(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    result = run(out=tmp_path / "file")
    assert isinstance(result.exception, OddbranchError)
    assert "cannot be written" in str(result.exception)
