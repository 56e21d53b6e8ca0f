"""A report is one file that loads nothing, runs nothing and says that it is advice."""

from __future__ import annotations

import re
from html import escape
from html.parser import HTMLParser
from pathlib import Path

import pytest

from training.report.page import (
    ADVICE,
    BadReport,
    Section,
    bullets,
    facts,
    html_page,
    paragraph,
    table,
    warning,
    write_text,
)

SPITEFUL = '<script>alert("x")</script>'


class Balance(HTMLParser):
    """Counts open elements; those without an end tag are left out."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.seen: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.seen.append(tag)
        if tag not in ("meta", "br", "use"):
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag, f"</{tag}> closes something else"


def a_page() -> str:
    pieces = (
        facts({"alerts a day": "1.2", SPITEFUL: SPITEFUL}),
        paragraph(SPITEFUL),
        paragraph("how", quiet=True),
        warning(SPITEFUL),
        bullets([SPITEFUL]),
        table(["channel", "n"], [[SPITEFUL, "3"]], caption=SPITEFUL),
    )
    return html_page(SPITEFUL, SPITEFUL, [Section(SPITEFUL, pieces)], SPITEFUL)


def test_every_element_is_closed_and_no_text_becomes_markup() -> None:
    balance = Balance()
    balance.feed(a_page())
    assert balance.open == []
    assert "script" not in balance.seen
    assert a_page().count("&lt;script&gt;") == 12


def test_the_advice_stands_on_top_and_at_the_end() -> None:
    page = a_page()
    assert page.count(ADVICE) == 2
    assert page.index(ADVICE) < page.index("<main>") < page.rindex(ADVICE)


def test_nothing_is_loaded_and_nothing_may_be() -> None:
    page = a_page()
    assert not re.search(r"https?:|src=|href=\"[^#]|@import|url\(", page)
    assert "default-src 'none'" in page


def test_numbers_are_flushed_right_and_words_are_not() -> None:
    cells = re.findall(
        r"<td([^>]*)>([^<]*)", table(["a", "b", "c"], [["x", "1", "y"]], words=(0, 2))
    )
    assert cells == [("", "x"), (' class="number"', "1"), ("", "y")]


def test_words_that_must_not_be_broken_stay_on_one_line() -> None:
    made = table(["a", "b", "n"], [["x", "y", "1"]], words=(0, 1), whole=(1,), wide=True)
    assert re.findall(r"<td([^>]*)>", made) == ["", ' class="whole"', ' class="number"']
    assert '<div class="scroll wide">' in made


def test_a_long_page_begins_with_a_list_of_its_parts() -> None:
    titles = ["one", "two", "three", "four", SPITEFUL]
    page = html_page("t", "l", [Section(title, ()) for title in titles], "m")
    found = re.findall(r'<a href="#([^"]+)">([^<]*)</a>', page)
    assert [words for _, words in found] == [*titles[:4], escape(SPITEFUL)]
    for target, words in found:
        assert f'<h2 id="{target}">{words}</h2>' in page
    assert "<nav" not in html_page("t", "l", [Section("one", ())], "m")


def test_no_lines_make_no_list() -> None:
    assert bullets([]) == ""


def test_a_row_of_another_length_is_our_slip() -> None:
    with pytest.raises(ValueError, match="shorter"):
        table(["a", "b"], [["x"]])


def test_a_place_that_cannot_be_written_is_refused(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(BadReport, match="cannot be written"):
        write_text(tmp_path / "file" / "report.html", "x")


def test_a_report_makes_its_folder(tmp_path: Path) -> None:
    write_text(tmp_path / "new" / "report.html", "x")
    assert (tmp_path / "new" / "report.html").read_text() == "x"
