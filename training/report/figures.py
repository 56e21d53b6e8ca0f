"""Pictures for reports: matplotlib's SVG, cut to what a page needs.

Text stays text in the page's own font and ink, so that a picture can be searched, read
aloud and read in the dark; nothing depends on the time or place of drawing.
"""

from __future__ import annotations

import io
import re
from collections.abc import Callable
from html import escape
from typing import Any, Final

import matplotlib as mpl
from matplotlib import rcsetup
from matplotlib.figure import Figure

# Our colours, told apart also in grey: normal, trouble, then further series.
TEAL: Final = "#3f918e"
RUST: Final = "#c05a3e"
OCHRE: Final = "#b98a2f"
SLATE: Final = "#6b7ea8"
PLUM: Final = "#94608d"
MOSS: Final = "#7d9a45"
SERIES: Final = (TEAL, RUST, OCHRE, SLATE, PLUM, MOSS)

# Drawn in this ink, which the page then replaces by its own.
_INK: Final = "#010203"
# Narrow on purpose: on a telephone the picture shrinks to three quarters, not to a third.
WIDTH_IN: Final = 5.2

_STYLE: Final[dict[str, Any]] = {
    "svg.fonttype": "none",
    "font.family": "sans-serif",
    "font.size": 11.0,
    "axes.titlesize": 11.0,
    "axes.titlelocation": "left",
    "text.color": _INK,
    "axes.labelcolor": _INK,
    "axes.edgecolor": _INK,
    "xtick.color": _INK,
    "ytick.color": _INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.linewidth": 0.8,
    "axes.grid": True,
    "grid.color": "#808080",
    "grid.alpha": 0.25,
    "lines.linewidth": 1.8,
    "axes.prop_cycle": rcsetup.cycler("color", list(SERIES)),
    "legend.frameon": False,
    "figure.constrained_layout.use": True,
}
_UNUSED_ID = re.compile(
    r' id="(?:figure|axes|patch|line2d|text|xtick|ytick|matplotlib\.axis|legend|'
    r"PathCollection|LineCollection|QuadMesh|PolyCollection|FillBetweenPolyCollection|"
    r'AxesImage|image|table)[_\w.]*"'
)


def draw(
    paint: Callable[[Figure], None],
    *,
    name: str,
    alt: str,
    caption: str = "",
    height_in: float = 3.0,
) -> str:
    """Return a picture as a piece of a page.

    paint: fills an empty figure of WIDTH_IN by height_in inches. name: unlike that of any
    other picture on the page. alt: the picture in words, for whoever cannot see it.
    """
    style: Any = {**_STYLE, "svg.hashsalt": name}
    with mpl.rc_context(style):
        figure = Figure(figsize=(WIDTH_IN, height_in))
        paint(figure)
        drawn = io.StringIO()
        figure.savefig(drawn, format="svg", transparent=True, metadata={"Date": None})
    below = f"<figcaption>{escape(caption)}</figcaption>" if caption else ""
    return f"<figure>{_inline(drawn.getvalue(), alt)}{below}</figure>\n"


def _inline(svg: str, alt: str) -> str:
    """Return an SVG file as an element of a page, without what belongs to files alone."""
    svg = svg[svg.index("<svg") :]
    svg = re.sub(r"<metadata>.*?</metadata>", "", svg, flags=re.DOTALL)
    # Its style would hold for the whole page.
    svg = re.sub(r"<defs>\s*<style.*?</style>\s*</defs>", "", svg, flags=re.DOTALL)
    svg = _UNUSED_ID.sub("", svg).replace(_INK, "currentColor")
    # Text is in the page's own font, and most of it is not turned.
    svg = re.sub(r'font-family: [^;"]*;? ?', "", svg)
    svg = re.sub(r' transform="rotate\(-0 [^"]*"', "", svg)
    box = re.search(r'viewBox="[^"]*"', svg)
    assert box is not None
    label = escape(alt, quote=True)
    svg = re.sub(
        r"<svg[^>]*>",
        lambda _: f'<svg {box.group()} role="img" aria-label="{label}" stroke-linejoin="round">',
        svg,
        count=1,
    )
    return re.sub(r"\n+", "\n", svg.replace("xlink:href", "href")).strip()
