"""How figures look, and how they become parts of the page."""

from __future__ import annotations

import io
import re
from typing import Any

import matplotlib as mpl
from markupsafe import Markup, escape
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure
from matplotlib.ticker import AutoLocator, MaxNLocator

#: Colours that the colour-blind tell apart: Okabe & Ito (2008), "Color Universal Design", in the order used here.
BLUE, ORANGE, GREEN, VERMILION, SKY, PURPLE, YELLOW, BLACK = (
    "#0072B2", "#E69F00", "#009E73", "#D55E00", "#56B4E9", "#CC79A7", "#F0E442", "#000000",
)  # fmt: skip
COLOURS = (BLUE, VERMILION, GREEN, PURPLE, ORANGE, SKY)
#: Shapes that go with the colours, so that no figure rests on colour alone.
MARKERS = ("o", "s", "^", "D", "v", "P")
GREY = "#707070"
FAINT = "#C8C8C8"

#: Points above which a series is stored as pixels.
RASTER_ABOVE = 1000

SETTINGS: Any = {
    "svg.fonttype": "none",
    "svg.hashsalt": "hwpol",
    "text.parse_math": False,
    "font.family": "sans-serif",
    "font.size": 9.0,
    "axes.titlesize": 9.0,
    "axes.labelsize": 9.0,
    "axes.linewidth": 0.7,
    "axes.edgecolor": "#404040",
    "axes.labelcolor": "#202020",
    "xtick.labelsize": 8.0,
    "ytick.labelsize": 8.0,
    "xtick.color": "#404040",
    "ytick.color": "#404040",
    "xtick.direction": "in",
    "ytick.direction": "in",
    "legend.fontsize": 8.0,
    "legend.frameon": False,
    "legend.handletextpad": 0.4,
    "legend.borderaxespad": 0.2,
    "lines.linewidth": 1.2,
    "lines.markersize": 4.0,
    "axes.formatter.useoffset": False,
    "axes.xmargin": 0.06,
    "axes.ymargin": 0.1,
    "figure.dpi": 100.0,
    "savefig.dpi": 150.0,
    "image.interpolation": "nearest",
}


def settings() -> Any:
    """Context in which figures of the page are drawn."""
    return mpl.rc_context(SETTINGS)


def new_figure(width: float = 3.9, height: float = 3.1) -> Figure:
    """A figure of its own, apart from any shown on a screen; inches."""
    figure = Figure(figsize=(width, height))
    FigureCanvasSVG(figure)
    return figure


def few_ticks(number: int = 5) -> MaxNLocator:
    """Where ticks go on a small figure: few, since every one takes room and most of the time of drawing."""
    return MaxNLocator(nbins=number, steps=(1, 2, 2.5, 5, 10))


def _few_ticks(figure: Figure) -> None:
    for axes in figure.axes:
        for axis in (axes.xaxis, axes.yaxis):
            if type(axis.get_major_locator()) is AutoLocator:
                axis.set_major_locator(few_ticks())


def inline_svg(figure: Figure, name: str, alt: str) -> Markup:
    """The figure as part of a page: no outside names, ids that start with `name`, `alt` for those who do not see it.

    The same figure gives the same text.
    """
    _few_ticks(figure)
    stream = io.StringIO()
    figure.savefig(
        stream, format="svg", transparent=True, metadata={"Date": None, "Creator": None, "Format": None, "Type": None}
    )
    text = stream.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = re.sub(r'\sxmlns(:\w+)?="[^"]*"', "", text)
    text = re.sub(r'\bid="', f'id="{name}-', text)
    text = re.sub(r"url\(#", f"url(#{name}-", text)
    text = re.sub(r'(?:xlink:)?href="#', f'href="#{name}-', text)
    text = text.replace("xlink:href=", "href=")
    text = re.sub(r"\n\s*", "\n", text)
    head = f'<svg class="plot" role="img" aria-label="{escape(alt)}" focusable="false"'
    return Markup(text.replace("<svg", head, 1).strip())
