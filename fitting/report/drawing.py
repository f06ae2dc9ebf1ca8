"""Figures as SVG text for the page: text stays text, output depends on the result alone."""

from __future__ import annotations

import re
from collections.abc import Iterator
from contextlib import contextmanager
from io import StringIO
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from matplotlib.figure import Figure

# One colour and one shape a wavelength: dark enough for print in black and white, apart for colour-blind eyes. Filled
# is TE, open is TM.
COLOURS = ("#10405f", "#c4570a", "#3f7f5f", "#7b3f87")
MARKS = ("o", "s", "^", "D")
_WIDTH_IN = 7.2
_STYLE = {
    "svg.fonttype": "none",
    "svg.hashsalt": "layerlot",
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": 7.5,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.linewidth": 0.6,
    "axes.titlesize": 8,
    "axes.titlelocation": "left",
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "legend.frameon": False,
    "legend.fontsize": 7,
    "lines.linewidth": 0.8,
}


@contextmanager
def figure_of(height_in: float) -> Iterator[Figure]:
    """An empty figure of the page's width in the house style."""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    with rc_context(_STYLE):  # type: ignore[arg-type]
        yield Figure(figsize=(_WIDTH_IN, height_in))


def svg(figure: Figure) -> str:
    """The figure as an element of a page: no prolog, link, metadata, nor names that another figure may repeat."""
    from matplotlib.backends.backend_svg import FigureCanvasSVG

    FigureCanvasSVG(figure)
    out = StringIO()
    figure.savefig(out, format="svg", metadata={"Date": None, "Creator": None, "Format": None, "Type": None})
    text = out.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>|<style.*?</style>|<!--.*?-->", "", text, flags=re.DOTALL)
    text = re.sub(r' (?:xmlns(?::xlink)?|version|width|height)="[^"]*"', "", text, count=5)
    text = re.sub(r'<g id="[^"]*"', "<g", text)
    # Coordinates to a hundredth of a point, in attributes only: what the reader sees keeps its digits.
    text = re.sub(r'(="-?\d+\.\d\d)\d+"', r'\1"', text)
    text = re.sub(r' d="[^"]*"', lambda path: re.sub(r"(\d\.\d\d)\d+", r"\1", path[0]), text)
    text = re.sub(r"\s*\n\s*", "\n", text)
    return text.replace("xlink:href", "href").replace("<svg", '<svg aria-hidden="true"', 1)
