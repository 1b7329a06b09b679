"""How the plots look, and how a matplotlib figure becomes vector text inside the page.

Colours are those of Okabe and Ito (2008), told apart by people with any colour vision; every one comes with a mark or
a dash of its own, so grey print loses nothing. Text stays text. A mark whose group is called ``turn-<key>`` can be
chosen.
"""

from __future__ import annotations

import io
import re
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

INK, GREY, PALE, HAIR = "#1b1b1b", "#5f5f5f", "#e9e7e1", "#c9c6bd"
BLUE, VERMILION, GREEN, ORANGE, PURPLE, SKY = "#0072b2", "#d55e00", "#009e73", "#e69f00", "#cc79a7", "#56b4e9"

SIDE_COLOUR = {1.0: BLUE, -1.0: VERMILION}
SIDE_MARK = {1.0: "o", -1.0: "s"}
SUBJECT_LOOK = ((BLUE, "o"), (VERMILION, "s"), (GREEN, "D"), (PURPLE, "^"), (ORANGE, "v"), (SKY, "P"))

WIDE_IN, HALF_IN = 7.4, 3.6
"""Widths of a plot across the page and of one beside another."""

_STYLE: Any = {
    "font.family": "DejaVu Sans",
    "font.size": 8.0,
    "text.color": INK,
    "text.parse_math": False,
    "axes.edgecolor": GREY,
    "axes.labelcolor": INK,
    "axes.labelsize": 8.0,
    "axes.linewidth": 0.6,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.unicode_minus": True,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 7.5,
    "ytick.labelsize": 7.5,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.size": 3.0,
    "ytick.major.size": 3.0,
    "lines.linewidth": 1.0,
    "lines.markersize": 4.5,
    "legend.frameon": False,
    "legend.fontsize": 7.5,
    "legend.handlelength": 1.8,
    "figure.facecolor": "none",
    "axes.facecolor": "none",
    "savefig.facecolor": "none",
    "svg.fonttype": "none",
    "path.simplify": True,
    "path.simplify_threshold": 0.3,
}


@contextmanager
def drawing(
    width_in: float, height_in: float, *, rows: int = 1, columns: int = 1, **layout: Any
) -> Iterator[tuple[Figure, Any]]:
    """Yield a figure and its axes in the page's look; nothing outside this block is changed.

    Parameters
    ----------
    width_in, height_in : float
    rows, columns : int
    **layout
        Handed to ``Figure.subplots``.
    """
    import matplotlib as mpl
    from matplotlib.backends.backend_svg import FigureCanvasSVG
    from matplotlib.figure import Figure

    with mpl.rc_context(_STYLE):
        figure = Figure(figsize=(width_in, height_in), layout="constrained")
        FigureCanvasSVG(figure)
        yield figure, figure.subplots(rows, columns, **layout)


def svg_of(figure: Figure, name: str, alt: str) -> str:
    """Return a figure as an ``svg`` element for the page.

    Parameters
    ----------
    figure : Figure
    name : str
        Short and unlike all others of the page; keeps the ids of the figures apart.
    alt : str
        What the picture shows, in words.
    """
    import matplotlib as mpl

    engine = figure.get_layout_engine()
    if engine is not None:  # laid out once here: saving would draw everything twice for it
        engine.execute(figure)
        figure.set_layout_engine(None)
    buffer = io.StringIO()
    with mpl.rc_context({"svg.hashsalt": name}):
        figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None, "Format": None, "Type": None})
    text = buffer.getvalue()
    text = text[text.index("<svg") :].rstrip()
    text = re.sub(r"<metadata>.*?</metadata>\s*", "", text, flags=re.DOTALL)
    text = re.sub(r"<!--.*?-->\s*", "", text, flags=re.DOTALL)
    text = re.sub(r'<g id="turn-([\w-]+?)(?:-n\d+)?"', r'<g class="mark" data-turn="\1"', text)
    text = re.sub(r'\bid="([^"]+)"', rf'id="{name}-\1"', text)
    text = re.sub(r'(href="#|url\(#)', rf"\1{name}-", text)
    return text.replace("<svg ", f'<svg role="img" aria-label="{_attribute(alt)}" ', 1)


def _attribute(text: str) -> str:
    return text.replace("&", "&amp;").replace('"', "&quot;").replace("<", "&lt;").replace(">", "&gt;")


def pad(axes: Axes, *, x: float = 0.0, y: float = 0.0) -> None:
    """Widen the limits of axes by a share of their span; a span of nothing becomes a small one."""
    for share, get, put in ((x, axes.get_xlim, axes.set_xlim), (y, axes.get_ylim, axes.set_ylim)):
        if share:
            low, high = get()
            more = share * ((high - low) or 1.0)
            put(low - more, high + more)
