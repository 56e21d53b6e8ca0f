"""The frame of every report, and the pieces that stand in it.

A piece is a string of HTML whose text is already escaped; only the functions here and in
`figures` make pieces. The page is one column, reads on a telephone, follows the reader's
light or dark setting, and says on top and at the end that it is advice.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from html import escape
from pathlib import Path

from scoring.errors import OddbranchError

ADVICE = (
    "This is advice. It is no protective function and replaces no alarm, trip or interlock; "
    "local codes and licensed practice decide."
)

# A page of this many sections or more begins with a list of them.
_MANY_SECTIONS = 5

# Nothing may be loaded and nothing run, also if a name in the records were markup.
_POLICY = "default-src 'none'; style-src 'unsafe-inline'"

_STYLE = """
:root { color-scheme: light dark; --ink: #1d2a30; --paper: #fbfaf6; --band: #e3ece9;
  --rule: #1d2a3033; --teal: #2f7472; --rust: #b4462f; }
@media (prefers-color-scheme: dark) { :root { --ink: #e6e4da; --paper: #161b1d;
  --band: #22302f; --rule: #e6e4da33; --teal: #6fb7b2; --rust: #e08a6c; } }
* { box-sizing: border-box; }
body { margin: 0; color: var(--ink); background: var(--paper);
  font: 1rem/1.5 system-ui, sans-serif; }
header { background: var(--band); border-bottom: .3rem solid var(--teal); }
header > div, main, footer { max-width: 44rem; margin: 0 auto; padding: 1rem; }
h1 { font-size: 1.45rem; line-height: 1.2; margin: 0 0 .4rem; }
h2 { font-size: 1.12rem; margin: 2.2rem 0 .4rem; padding-top: .5rem;
  border-top: 1px solid var(--rule); }
p { margin: .5rem 0; }
h1, h2, p, li { overflow-wrap: anywhere; }
.advice { border-left: .3rem solid var(--rust); padding-left: .6rem; }
.quiet, figcaption { opacity: .8; font-size: .9rem; }
.warning { border-left: .3rem solid var(--rust); padding-left: .6rem; font-weight: 600; }
dl { display: grid; grid-template-columns: repeat(auto-fit, minmax(9.5rem, 1fr)); gap: .6rem;
  margin: .8rem 0; }
dl div { border-top: 2px solid var(--teal); padding-top: .25rem; }
dt { font-size: .85rem; opacity: .8; }
dd { margin: 0; font-size: 1.2rem; font-variant-numeric: tabular-nums; overflow-wrap: anywhere; }
figure { margin: 1rem 0; }
figure svg { width: 100%; height: auto; max-width: 40rem; display: block; }
nav ul { padding: 0; list-style: none; display: flex; flex-wrap: wrap; gap: .1rem 1.1rem; }
a { color: var(--teal); }
.scroll { overflow-x: auto; }
.pair { display: grid; grid-template-columns: repeat(auto-fit, minmax(min(19rem, 100%), 1fr));
  gap: 0 1.5rem; }
@media (min-width: 79rem) { .pair { margin-right: -17rem; } }
@media (min-width: 79rem) { .wide { margin-right: -17rem; } }
.wide td:not(.number, .whole) { min-width: 11rem; }
.wide table { font-size: .88rem; }
table { border-collapse: collapse; font-size: .92rem; min-width: 60%; }
caption { text-align: left; opacity: .8; padding-bottom: .3rem; }
th, td { text-align: left; padding: .25rem .8rem .25rem 0; border-bottom: 1px solid var(--rule);
  vertical-align: top; }
th { font-weight: 600; }
.number { text-align: right; font-variant-numeric: tabular-nums; }
.number, .whole { white-space: nowrap; }
ul { padding-left: 1.1rem; }
footer { border-top: 1px solid var(--rule); font-size: .9rem; }
@media print { header { background: none; } nav { display: none; } h2 { break-after: avoid; }
  figure { break-inside: avoid; } }
"""


class BadReport(OddbranchError):
    """A report cannot be written; `place` is the file or folder."""

    def __init__(self, place: str, what: str) -> None:
        self.place, self.what = place, what
        super().__init__(f"{place}: {what}")


@dataclass(frozen=True, slots=True)
class Section:
    """A heading with the pieces below it."""

    title: str
    pieces: tuple[str, ...]


def html_page(title: str, lead: str, sections: Iterable[Section], made_by: str) -> str:
    """Return a whole page.

    lead: one or two sentences that say the result. made_by: the last line: which model,
    which records, when.
    """
    sections = list(sections)
    body = "\n".join(_section(k, section) for k, section in enumerate(sections))
    return f"""<!doctype html>
<html lang="en"><head><meta charset="utf-8"><title>{escape(title)}</title>
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta http-equiv="Content-Security-Policy" content="{_POLICY}">
<style>{_STYLE}</style></head><body>
<header><div><h1>{escape(title)}</h1><p>{escape(lead)}</p>
<p class="advice">{escape(ADVICE)}</p></div></header>
<main>
{_contents(sections)}{body}
</main>
<footer><p>{escape(made_by)}</p><p class="advice">{escape(ADVICE)}</p></footer>
</body></html>
"""


def _section(k: int, section: Section) -> str:
    title = f'<h2 id="part-{k}">{escape(section.title)}</h2>'
    return f"<section>{title}\n{''.join(section.pieces)}</section>"


def _contents(sections: Sequence[Section]) -> str:
    if len(sections) < _MANY_SECTIONS:
        return ""
    items = "".join(
        f'<li><a href="#part-{k}">{escape(section.title)}</a></li>'
        for k, section in enumerate(sections)
    )
    return f'<nav aria-label="contents"><ul>{items}</ul></nav>\n'


def paragraph(text: str, *, quiet: bool = False) -> str:
    """Return a paragraph; quiet: smaller, for how a figure was made."""
    kind = ' class="quiet"' if quiet else ""
    return f"<p{kind}>{escape(text)}</p>\n"


def warning(text: str) -> str:
    """Return a paragraph that a reader must not miss."""
    return f'<p class="warning">{escape(text)}</p>\n'


def bullets(lines: Iterable[str]) -> str:
    """Return a list of sentences, nothing for none."""
    items = "".join(f"<li>{escape(line)}</li>" for line in lines)
    return f"<ul>{items}</ul>\n" if items else ""


def facts(named: Mapping[str, str]) -> str:
    """Return a strip of the figures that matter most: name above value."""
    pairs = "".join(
        f"<div><dt>{escape(name)}</dt><dd>{escape(value)}</dd></div>"
        for name, value in named.items()
    )
    return f"<dl>{pairs}</dl>\n"


def table(
    heading: Sequence[str],
    rows: Iterable[Sequence[str]],
    *,
    words: Sequence[int] = (0,),
    whole: Sequence[int] = (),
    caption: str = "",
    wide: bool = False,
) -> str:
    """Return a table that scrolls sideways by itself on a narrow screen.

    words: the columns that hold words; all others are numbers, flushed right. whole: those
    of them whose cells stay on one line. wide: may reach beyond the text on a wide screen.
    """
    kinds = [_kind(k in words, k in whole) for k in range(len(heading))]
    head = "".join(f"<th{k}>{escape(h)}</th>" for k, h in zip(kinds, heading, strict=True))
    body = "".join(
        "<tr>"
        + "".join(f"<td{k}>{escape(cell)}</td>" for k, cell in zip(kinds, row, strict=True))
        + "</tr>\n"
        for row in rows
    )
    title = f"<caption>{escape(caption)}</caption>" if caption else ""
    return (
        f'<div class="scroll{" wide" if wide else ""}"><table>{title}'
        f"<thead><tr>{head}</tr></thead>\n"
        f"<tbody>{body}</tbody></table></div>\n"
    )


def side_by_side(titled: Iterable[tuple[str, str]]) -> str:
    """Return pieces beside each other, below each other on a narrow screen.

    titled: a title and a piece for each.
    """
    parts = "".join(f"<div>{paragraph(title)}{piece}</div>" for title, piece in titled)
    return f'<div class="pair">{parts}</div>\n'


def _kind(is_words: bool, is_whole: bool) -> str:
    if not is_words:
        return ' class="number"'
    return ' class="whole"' if is_whole else ""


def write_text(path: Path, text: str) -> None:
    """Write a file of a report; raises BadReport for a place that cannot be written."""
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, encoding="utf-8")
    except OSError as error:
        raise BadReport(str(path), f"cannot be written: {error.strerror}") from None
