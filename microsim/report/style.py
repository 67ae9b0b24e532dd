"""One look for all figures, and figures into bytes: SVG for a page, SVG and PNG for a folder.

Every call works inside a matplotlib context of its own and no pyplot state is touched. Text stays text and identifiers
are salted by the figure's name, so the same figure always gives the same bytes.
"""

from __future__ import annotations

import functools
import io
import re
from collections.abc import Callable
from html import escape
from typing import Any, ParamSpec, TypeVar

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine

P = ParamSpec("P")
R = TypeVar("R")

INK = "#1d2a33"
GREY = "#66727b"
RULE = "#c9d0d4"
PALE = "#eef1f3"
FULL = "#14506b"
# Order of use for cohorts: each line differs from its neighbours in dash as well as in colour and lightness.
COHORTS = (("#b3560f", (0, (5, 2))), ("#7a3b7d", (0, (1.2, 1.6))), ("#3f7d4e", (0, (7, 2, 1.2, 2))))
LOOKS: tuple[tuple[str, Any], ...] = ((FULL, "solid"), *COHORTS)
TERMS = {"cycle": ("#8fa3ad", "...."), "carrying": ("#dca262", "////"), "memory": ("#4d8fac", "")}
WIDTH = 6.6

_RC: dict[Any, Any] = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans", "Helvetica", "Arial"],
    "font.size": 8.0,
    "axes.titlesize": 8.5,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.labelsize": 8.0,
    "axes.labelcolor": INK,
    "axes.edgecolor": GREY,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.unicode_minus": True,
    "xtick.color": GREY,
    "ytick.color": GREY,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": 7.5,
    "ytick.labelsize": 7.5,
    "xtick.major.width": 0.7,
    "ytick.major.width": 0.7,
    "text.color": INK,
    "legend.frameon": False,
    "legend.fontsize": 7.5,
    "legend.handlelength": 2.6,
    "lines.linewidth": 1.4,
    "hatch.linewidth": 0.5,
    "text.parse_math": False,
    "svg.fonttype": "none",
    "figure.facecolor": "white",
    "savefig.facecolor": "white",
}


def styled(function: Callable[P, R]) -> Callable[P, R]:
    """Run a drawing function under the common style."""

    @functools.wraps(function)
    def inside(*args: P.args, **kwargs: P.kwargs) -> R:
        with mpl.rc_context(_RC):
            return function(*args, **kwargs)

    return inside


def new_figure(width: float, height: float) -> Figure:
    """An empty figure of that size in inches, laid out by constraints."""
    return Figure(figsize=(width, height), layout="constrained")


def line_look(index: int) -> tuple[str, Any]:
    """Colour and dash of the index-th line; neighbours differ in both and sixteen lines never share the pair."""
    count = len(LOOKS)
    return LOOKS[index % count][0], LOOKS[(index + index // count) % count][1]


def space_out(figure: Figure, *, rows: float = 0.06, columns: float = 0.06) -> None:
    """Room between panels, as shares of a panel's height and width."""
    engine = figure.get_layout_engine()
    if isinstance(engine, ConstrainedLayoutEngine):
        engine.set(hspace=rows, wspace=columns)


def zero_line(axes: Axes, *, vertical: bool = False) -> None:
    draw = axes.axvline if vertical else axes.axhline
    draw(0.0, color=GREY, linewidth=0.8, zorder=1)


def svg_bytes(figure: Figure, name: str, *, transparent: bool = False) -> bytes:
    """A stand-alone SVG document, without a date."""
    buffer = io.BytesIO()
    with mpl.rc_context({**_RC, "svg.hashsalt": name}):
        figure.savefig(buffer, format="svg", transparent=transparent, metadata={"Date": None, "Creator": None})
    return buffer.getvalue()


def png_bytes(figure: Figure, *, dots_per_inch: int = 200) -> bytes:
    buffer = io.BytesIO()
    with mpl.rc_context(_RC):
        figure.savefig(buffer, format="png", dpi=dots_per_inch, metadata={"Software": None})
    return buffer.getvalue()


def inline_svg(document: bytes, name: str, *, description: str) -> str:
    """The <svg> element of a document alone, fit to stand in a page beside others.

    Prologue, metadata, embedded style and namespace addresses are dropped (HTML needs none of them), identifiers get
    the figure's name as a prefix so that two figures of one page never share one.
    """
    text = document.decode("utf-8")
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = re.sub(r"<style[^>]*>.*?</style>", "", text, count=1, flags=re.DOTALL)
    text = re.sub(r"<!--.*?-->", "", text, flags=re.DOTALL)
    text = re.sub(r'\sxmlns(:xlink)?="[^"]*"', "", text)
    text = text.replace("xlink:href=", "href=")
    text = re.sub(r'\bid="', f'id="{name}-', text)
    text = re.sub(r'href="#', f'href="#{name}-', text)
    text = re.sub(r"url\(#", f"url(#{name}-", text)
    head, _, body = text.partition(">")
    head = re.sub(r'\s(width|height|version)="[^"]*"', "", head)
    return f'{head} role="img" aria-label="{escape(description)}"><title>{escape(description)}</title>{body.strip()}'
