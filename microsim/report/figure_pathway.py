"""A laid-out pathway onto paper: states as rounded cards, transitions as curves with their clock written on them."""

from __future__ import annotations

from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import FancyArrowPatch, FancyBboxPatch
from matplotlib.path import Path
from matplotlib.textpath import TextPath

from microsim.report.frames import SCALES
from microsim.report.inputs import EdgeLike, GraphLike, NodeLike
from microsim.report.pathway_layout import Arrow, Rect, place
from microsim.report.style import FULL, GREY, INK, PALE, styled


class _Worded:
    """An edge whose time scale is spelt out, as the reader sees it."""

    def __init__(self, edge: EdgeLike) -> None:
        self.clock, self.source, self.target = edge.clock, edge.source, edge.target
        self.label, self.background = edge.label or edge.clock, edge.background
        self.scale = SCALES.get(edge.scale, edge.scale)


class _WordedGraph:
    def __init__(self, graph: GraphLike) -> None:
        self.nodes = list(graph.nodes)
        self.edges = [_Worded(edge) for edge in graph.edges]


def text_width(text: str, size: float) -> float:
    """Width in points of one line of text at a font size."""
    return float(TextPath((0, 0), text, size=size).get_extents().width) if text.strip() else 0.0


@styled
def pathway_figure(graph: GraphLike) -> Figure:
    """Boxes for states, curved arrows for transitions; dashed arrows are background clocks."""
    placed = place(_WordedGraph(graph), measure=text_width)
    left, bottom, right, top = placed.bounds
    figure = Figure(figsize=((right - left) / 72, (top - bottom) / 72))
    axes = figure.add_axes((0, 0, 1, 1))
    axes.set_axis_off()
    axes.set_xlim(left, right)
    axes.set_ylim(bottom, top)
    for arrow in placed.arrows:
        _draw_arrow(axes, arrow)
    for arrow in placed.arrows:
        _draw_label(axes, arrow)
    for node, box in placed.boxes:
        _draw_state(axes, node, box)
    return figure


def _draw_arrow(axes: Axes, arrow: Arrow) -> None:
    codes = [Path.MOVETO, *[Path.CURVE4] * (len(arrow.curve) - 1)]
    background = arrow.edge.background
    axes.add_patch(
        FancyArrowPatch(
            path=Path(arrow.curve, codes),
            arrowstyle="->,head_length=4,head_width=2.2",
            color=GREY if background else INK,
            linewidth=0.9 if background else 1.2,
            linestyle=(0, (4, 2.4)) if background else "solid",
            capstyle="round",
            shrinkA=0,
            shrinkB=0,
            zorder=2,
        )
    )


def _draw_label(axes: Axes, arrow: Arrow) -> None:
    spot = arrow.label
    axes.add_patch(
        FancyBboxPatch(
            (spot.x - spot.width / 2 + 1, spot.y - spot.height / 2 + 1), spot.width - 2, spot.height - 2,
            boxstyle="round,pad=0,rounding_size=3", facecolor="white", edgecolor="none", zorder=3,
        )
    )  # fmt: skip
    colour = GREY if arrow.edge.background else INK
    axes.text(spot.x, spot.y + 4.4, arrow.edge.label, ha="center", va="center", fontsize=7.5, color=colour, zorder=4)
    axes.text(spot.x, spot.y - 5.0, arrow.edge.scale, ha="center", va="center", fontsize=6.3, color=GREY, zorder=4,
              style="italic")  # fmt: skip


def _draw_state(axes: Axes, node: NodeLike, box: Rect) -> None:
    axes.add_patch(
        FancyBboxPatch(
            (box.x - box.width / 2, box.y - box.height / 2), box.width, box.height,
            boxstyle="round,pad=0,rounding_size=9", facecolor=PALE if node.absorbing else "white",
            edgecolor=GREY if node.absorbing else FULL, linewidth=1.3, zorder=5,
        )
    )  # fmt: skip
    note = _note(node)
    shift = 5.5 if note else 0.0
    axes.text(box.x, box.y + shift, node.label or node.name, ha="center", va="center", fontsize=9.0, zorder=6)
    if note:
        axes.text(box.x, box.y - 7.0, note, ha="center", va="center", fontsize=6.5, color=GREY, zorder=6)


def _note(node: NodeLike) -> str:
    if node.absorbing:
        return "no exit"
    if not node.start:
        return ""
    share = float(node.start)
    return "start" if share == 1.0 else f"start, {100 * share:.3g} %"
