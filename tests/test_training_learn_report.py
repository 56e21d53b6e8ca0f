"""The report on learning is one small file that says what was learned and what to expect."""

from __future__ import annotations

import re
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

from tests.learned import SPITEFUL, fleet_table, pump_records, small_fleet
from tests.spools import spool_of, times
from training.learn import learn_command, learn_model
from training.learn_report import MOST_SOURCES, learn_page
from training.promise_words import main_lines
from training.report.page import ADVICE
from training.settings import LearnSettings


@pytest.fixture(scope="module")
def page() -> str:
    result, sources, history = small_fleet()
    model = replace(result.model, name="0123456789abcdef")
    return learn_page(model, result.learned, result.curve, result.promise, sources, history, 12.3)


class Tables(HTMLParser):
    """Collects the cells of all tables' bodies, row by row."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.rows: list[list[str]] = []
        self._in_cell = False
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        if tag == "tr":
            self.rows.append([])
        if tag == "td":
            self.rows[-1].append("")
            self._in_cell = True

    def handle_endtag(self, tag: str) -> None:
        self._in_cell = self._in_cell and tag != "td"

    def handle_data(self, data: str) -> None:
        if self._in_cell:
            self.rows[-1][-1] += data


def row(page: str, first: str, n_cells: int) -> list[str]:
    """Return the row of a table of so many columns that begins with a cell."""
    return next(r for r in Tables(page).rows if r and r[0] == first and len(r) == n_cells)


def test_it_is_one_file_that_loads_and_runs_nothing(page: str) -> None:
    assert page.startswith("<!doctype html>")
    assert not re.search(r'https?:|src=|href="[^#]|@import|url\((?!#)|<script', page)
    assert page.count(ADVICE) == 2
    assert len(page) < 200_000


def test_it_begins_with_what_to_expect(page: str) -> None:
    result = small_fleet()[0]
    assert result.promise is not None
    assert "What was learned: model 0123456789abcdef" in page
    assert "1,260 records of 3 sources, 2026-01-01 to 2026-01-01" in page
    assert f"Expect {result.promise.per_day():.2f} alerts a day" in page
    for line in main_lines(result.promise):
        assert line in page


def test_every_budget_has_a_row(page: str) -> None:
    result = small_fleet()[0]
    assert result.promise is not None
    for one in result.promise.budgets:
        found = row(page, f"{one.alerts_per_day:.3g}", 6)
        assert found[1:3] == [f"{one.record:.1f}", f"{one.sustained:.1f}"]


def test_every_member_has_a_row_with_its_held_out_figures(page: str) -> None:
    result = small_fleet()[0]
    for source, one in result.learned.items():
        found = row(page, source, 11)
        assert found[1:3] == [one.member.tables, str(one.density.plain.n_records)]
        assert found[8:10] == [str(one.held_out.n_scored), f"{one.held_out.density:.2f}"]
        assert re.fullmatch(r"\d+\.\d %", found[10])


def test_a_source_without_a_member_is_named_with_the_reason(page: str) -> None:
    assert "fewer than 200 records: west." in page


def test_what_came_of_reading_the_history_stands_in_it(page: str) -> None:
    assert all(line in page for line in small_fleet()[2])
    assert "1260 records kept of 3 sources" in page


def test_names_in_the_records_cannot_become_markup(page: str) -> None:
    assert SPITEFUL not in page
    assert "&lt;b&gt;flow&lt;/b&gt;" in page


def test_the_same_model_gives_the_same_page(page: str) -> None:
    result, sources, history = small_fleet()
    model = replace(result.model, name="0123456789abcdef")
    assert (
        learn_page(model, result.learned, result.curve, result.promise, sources, history, 12.3)
        == page
    )


def test_history_too_short_for_levels_is_said_and_the_fleets_tree_shown() -> None:
    with spool_of({"west": pump_records(60, 3)}) as spool:
        result = learn_model(spool, fleet_table(), LearnSettings())
        page = learn_page(
            result.model, result.learned, result.curve, result.promise, spool.sources, [], 1.0
        )
    assert "No source has 200 records, so no level could be set." in page
    assert "no alert will be raised" in page
    assert "Tree of the fleet for all records:" in page


def test_a_large_fleet_stays_a_small_page_and_says_what_is_shown() -> None:
    result, _, history = small_fleet()
    learned = {f"s{k}": result.learned["east"] for k in range(MOST_SOURCES + 40)}
    members = dict.fromkeys(learned, result.model.members["east"])
    model = replace(result.model, members=members)
    sources = [*learned, *(f"short_{k}" for k in range(100))]
    page = learn_page(model, learned, result.curve, result.promise, sources, history, 1.0)
    assert len(page) < 400_000
    assert f"Shown are the {MOST_SOURCES} of {MOST_SOURCES + 40} sources" in page
    assert len([r for r in Tables(page).rows if len(r) == 11]) == MOST_SOURCES
    assert "short_19 and 80 more" in page


def write_history(path: Path) -> None:
    """Write a small history as CSV."""
    words = np.array(["running", "stopped"])
    values = pump_records(400, 1)
    stamps = np.datetime_as_string(times(400).astype("datetime64[ns]"), unit="s")
    lines = ["time,speed,head,pump"]
    lines += [
        f"{stamp}Z,{v[0]},{v[2]},{words[int(v[4])]}"
        for stamp, v in zip(stamps, values, strict=True)
    ]
    path.write_text("\n".join(lines) + "\n")


CHANNELS = """
format = 1
step_s = 60.0
regime = []
[[channel]]
name = "speed"
[[channel]]
name = "head"
[[channel]]
name = "pump"
kind = "state"
words = ["running", "stopped"]
"""


def test_the_command_writes_the_report_where_it_is_told(tmp_path: Path) -> None:
    write_history(tmp_path / "history.csv")
    (tmp_path / "channels.toml").write_text(CHANNELS)
    words = [
        str(tmp_path / "history.csv"),
        *("--channels", str(tmp_path / "channels.toml")),
        *("--out", str(tmp_path / "model"), "--report", str(tmp_path / "new" / "report.html")),
    ]
    found = CliRunner().invoke(learn_command, words, catch_exceptions=False)
    assert found.exit_code == 0
    assert f"report written to {tmp_path / 'new' / 'report.html'}" in found.output
    page = (tmp_path / "new" / "report.html").read_text()
    name = re.search(r"model ([0-9a-f]{16}) written", found.output)
    assert name is not None
    assert f"What was learned: model {name.group(1)}" in page
