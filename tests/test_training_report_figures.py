"""Pictures stand in a page as text and lines, in the page's ink, alike on every drawing."""

from __future__ import annotations

import re

from matplotlib.figure import Figure

from training.report.figures import RUST, draw


def paint(figure: Figure) -> None:
    axes = figure.subplots()
    axes.plot([1.0, 2.0], [3.0, 5.0], label="episodes")
    axes.scatter([1.5], [4.0], color=RUST)
    axes.fill_between([1.0, 2.0], [1.0, 1.0], [2.0, 2.0])
    axes.set_xlabel("level, nats")
    axes.legend()


def a_picture(name: str = "curve") -> str:
    return draw(paint, name=name, alt='episodes "over" level', caption="a < b")


def test_text_stays_text_in_the_ink_of_the_page() -> None:
    picture = a_picture()
    assert "level, nats" in picture
    assert "currentColor" in picture
    assert "font-family" not in picture
    assert "rotate(-0" not in picture
    assert "#010203" not in picture


def test_nothing_is_loaded_and_no_style_reaches_the_page() -> None:
    picture = a_picture()
    assert "http" not in picture
    assert "<style" not in picture
    assert "<?xml" not in picture


def test_two_pictures_share_no_names() -> None:
    one, other = (set(re.findall(r' id="([^"]+)"', a_picture(name))) for name in ("a", "b"))
    assert one
    assert one.isdisjoint(other)


def test_every_reference_has_its_target() -> None:
    picture = a_picture()
    wanted = set(re.findall(r'(?:href="|url\()#([^")]+)', picture))
    assert wanted
    assert wanted <= set(re.findall(r' id="([^"]+)"', picture))


def test_drawing_again_gives_the_same_bytes() -> None:
    assert a_picture() == a_picture()


def test_words_for_those_who_cannot_see_it_and_a_caption() -> None:
    picture = a_picture()
    assert 'role="img" aria-label="episodes &quot;over&quot; level"' in picture
    assert "<figcaption>a &lt; b</figcaption>" in picture
