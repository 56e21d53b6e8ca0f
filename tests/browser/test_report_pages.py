"""The report on learning in a browser: nothing is loaded, nothing complains, all fits."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from scoring.channels import parse_channels
from scoring.tree import Tree
from tests.browser.chromium import Page, browser_page
from tests.learned import small_fleet
from training.learn_report import learn_page
from training.report.page import ADVICE, Section, html_page, write_text
from training.report.treepicture import draw_tree

N_CHANNELS = 50

# Rectangles of all texts of a tree that meet another one, or that leave the picture.
_OVERLAPS = """
(() => {
  const box = document.querySelector("svg").getBoundingClientRect();
  const found = [...document.querySelectorAll("svg text")].map(t => t.getBoundingClientRect());
  let n = 0;
  for (const [k, a] of found.entries()) {
    if (a.left < box.left || a.right > box.right) n++;
    for (const b of found.slice(k + 1))
      // Lines of text are higher than their letters; a pixel of that may be shared.
      if (a.left < b.right && b.left < a.right && a.top + 1 < b.bottom && b.top + 1 < a.bottom) n++;
  }
  return [found.length, n];
})()
"""


@pytest.fixture(scope="module")
def page(tmp_path_factory: pytest.TempPathFactory, report: str) -> Iterator[Page]:
    """Yield a tab that all tests share; the report is learned first, for a tab ends by itself."""
    with browser_page(tmp_path_factory.mktemp("chromium")) as found:
        yield found


@pytest.fixture(scope="module")
def report(tmp_path_factory: pytest.TempPathFactory) -> str:
    """Return the address of a report on a small fleet."""
    result, sources, history = small_fleet()
    text = learn_page(
        result.model, result.learned, result.curve, result.promise, sources, history, 1.0
    )
    path = tmp_path_factory.mktemp("report") / "learned.html"
    write_text(path, text)
    return path.as_uri()


@pytest.mark.parametrize("width", [390, 1280])
def test_the_page_loads_nothing_and_says_nothing(page: Page, report: str, width: int) -> None:
    page.said.clear()
    page.open(report, width)
    assert page.requests == [report]
    assert page.said == []
    assert page.value("performance.getEntriesByType('resource').length") == 0


@pytest.mark.parametrize("width", [390, 1280])
def test_the_page_never_scrolls_sideways(page: Page, report: str, width: int) -> None:
    page.open(report, width)
    assert page.value("innerWidth") == width
    assert page.value("document.documentElement.scrollWidth") <= width


def test_a_page_that_does_all_of_this_is_noticed(page: Page, tmp_path: Path) -> None:
    path = tmp_path / "bad.html"
    path.write_text(
        '<!doctype html><div style="width: 900px">x</div><img src="http://127.0.0.1:9/x.png">'
        '<script>console.log("hello"); throw new Error("oh")</script>'
    )
    page.said.clear()
    page.open(path.as_uri(), 390)
    assert page.requests == [path.as_uri(), "http://127.0.0.1:9/x.png"]
    assert "hello" in "".join(page.said)
    assert "Error: oh" in "".join(page.said)
    assert page.value("document.documentElement.scrollWidth") > 390
    page.said.clear()


def test_tables_that_are_wider_than_a_telephone_scroll_by_themselves(
    page: Page, report: str
) -> None:
    page.open(report, 390)
    wider = page.value("[...document.querySelectorAll('.scroll')].filter(e => e.scrollWidth > 390)"
                       ".map(e => getComputedStyle(e).overflowX)")  # fmt: skip
    assert wider
    assert set(wider) == {"auto"}


def test_every_link_leads_to_a_heading_and_the_advice_is_seen(page: Page, report: str) -> None:
    page.open(report, 1280)
    lost = page.value(
        "[...document.querySelectorAll('a')].filter(a => !document.querySelector(a.hash)).length"
    )
    assert lost == 0
    assert page.value("document.querySelectorAll('a').length") >= 5
    assert page.value("document.querySelector('header .advice').innerText") == ADVICE


@pytest.mark.parametrize("width", [390, 1280])
def test_names_of_fifty_channels_do_not_meet_in_the_tree(
    page: Page, tmp_path: Path, width: int
) -> None:
    rng = np.random.default_rng(7)
    names = [f"unit_{k}_winding_temperature_of_bearing" for k in range(N_CHANNELS)]
    table = parse_channels({"channel": [{"name": name} for name in names]}, "test")
    edges = [(max(0, k - 1 - int(rng.integers(0, 3))), k) for k in range(1, N_CHANNELS)]
    halves = tuple(np.log([0.5, 0.5]) for _ in names)
    tables = tuple(np.zeros((2, 2)) for _ in edges)
    tree = Tree(np.array(edges), rng.exponential(0.5, len(edges)) + 0.01, halves, tables)
    piece = draw_tree(table, tree, "tree").piece
    path = tmp_path / "tree.html"
    write_text(path, html_page("tree", "", [Section("tree", (piece,))], "a test"))
    page.open(path.as_uri(), width)
    assert page.value(_OVERLAPS) == [N_CHANNELS, 0]
