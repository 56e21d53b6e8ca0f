"""`oddbranch drill`: a table, a page and data, the same again for the same seed."""

from __future__ import annotations

import csv
import json
import re
from collections.abc import Iterator
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import pytest
from click.testing import CliRunner, Result

from scoring.errors import OddbranchError
from tests.pump import (
    N_LEARNED,
    NAMES,
    SOURCES,
    pump_times,
    pump_values,
    write_csv,
    write_pump_model,
)
from training.drill import drill_command
from training.report.page import ADVICE

N = 2000


# Removed when the tests of this file are over.
KEPT = TemporaryDirectory(prefix="oddbranch-test-")


@pytest.fixture(scope="module", autouse=True)
def _clean_up() -> Iterator[None]:
    yield
    KEPT.cleanup()


@cache
def a_site() -> Path:
    folder = Path(KEPT.name)
    write_pump_model(folder)
    for name, start in (("records.csv", N_LEARNED), ("known.csv", N_LEARNED - N)):
        times = pump_times(N, start)
        write_csv(folder / name, {s: (times, pump_values(s, N, start)) for s in SOURCES})
    return folder


def run(records: str, out: Path, *more: str) -> Result:
    site = a_site()
    options = ["--within", "30", "--stuck-within", "120", "--trials", "12", *more]
    arguments = [site / records, "--model", site / "model", "--out", out, *options]
    return CliRunner().invoke(drill_command, [str(a) for a in arguments])


@cache
def done() -> tuple[str, Path]:
    out = Path(KEPT.name) / "out"
    result = run("records.csv", out)
    assert result.exit_code == 0, result.output
    return result.output, out


def data(folder: Path) -> dict[str, object]:
    found: dict[str, object] = json.loads((folder / "drill.json").read_text())
    return found


def test_every_channel_has_a_line_with_its_own_unit() -> None:
    output, _ = done()
    lines = {line.split()[0]: line for line in output.splitlines() if line.startswith("  ")}
    assert set(NAMES) <= set(lines)
    assert re.search(r"flow +[\d.]+ m3/h +[\d.]+ m3/h", lines["flow"])
    assert "kW" in lines["power"]
    assert "nothing watches room" in output


def test_the_data_hold_every_kind_of_every_channel_and_every_swap() -> None:
    results = data(done()[1])["results"]
    assert isinstance(results, list)
    kinds = [one["kind"] for one in results]
    assert {kind: kinds.count(kind) for kind in set(kinds)} == {
        "offset": 5, "drift": 5, "noise": 5, "scaling": 5, "stuck": 5, "swap": 10,
    }  # fmt: skip
    with (done()[1] / "drill.csv").open(newline="") as file:
        assert len(list(csv.DictReader(file))) == len(results)


def test_a_seed_gives_the_same_data_again_and_another_does_not(tmp_path: Path) -> None:
    assert run("records.csv", tmp_path / "a").exit_code == 0
    assert data(tmp_path / "a") == data(done()[1])
    assert run("records.csv", tmp_path / "b", "--seed", "2").exit_code == 0
    assert data(tmp_path / "b")["results"] != data(done()[1])["results"]


def test_the_page_stands_alone_and_names_what_nothing_watches() -> None:
    page = (done()[1] / "drill.html").read_text()
    assert not re.search(r"https?:|src=|<script", page)
    assert page.count(ADVICE) == 2
    assert page.count("<svg") == 1
    assert "A fault of these channels would not be noticed" in page
    assert "nan" not in re.sub(r"<svg.*?</svg>", "", page, flags=re.DOTALL)


def test_records_that_the_model_knows_are_said_to_be(tmp_path: Path) -> None:
    result = run("known.csv", tmp_path)
    assert "overlap the time that the model was learned from" in result.output
    assert "overlap the time" not in done()[0]


def test_too_few_records_are_refused_in_one_sentence(tmp_path: Path) -> None:
    result = run("records.csv", tmp_path, "--stuck-within", "1990")
    assert isinstance(result.exception, OddbranchError)
    assert re.search("only 0 quiet stretches .* give more normal records", str(result.exception))


def test_a_folder_that_cannot_be_written_is_refused(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    result = run("records.csv", tmp_path / "file")
    assert isinstance(result.exception, OddbranchError)
    with pytest.raises(OddbranchError, match="cannot be written"):
        raise result.exception
