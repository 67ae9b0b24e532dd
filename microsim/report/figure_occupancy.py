"""State occupancy of the individual-level and cohort models, and what separates them, as one figure a strategy."""

from __future__ import annotations

import pandas as pd
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from microsim.report.frames import label, model_label, ordered
from microsim.report.inputs import ResultLike, table
from microsim.report.style import COHORTS, FULL, WIDTH, new_figure, styled, zero_line

_COLUMNS = 3


@styled
def occupancy_figure(result: ResultLike, strategy: str) -> Figure:
    """Top panels: probability of being in the state; below each: cohort minus individual-level, with its zero line."""
    rows = table(result, "occupancy")
    rows = rows[rows["strategy"] == strategy]
    states = ordered(rows["state"])
    columns = min(_COLUMNS, len(states))
    bands = -(-len(states) // columns)
    figure = new_figure(WIDTH, 0.35 + 2.75 * bands + 0.2 * (bands - 1))
    heights = ([1.5, 1.0, 0.14] * bands)[:-1]  # the third row of a band only keeps it clear of the next
    grid = figure.add_gridspec(len(heights), columns, height_ratios=heights)
    reach = _largest_difference(rows)
    handles: dict[str, Artist] = {}
    for index, state in enumerate(states):
        row, column = 3 * (index // columns), index % columns
        top = figure.add_subplot(grid[row, column])
        below = figure.add_subplot(grid[row + 1, column], sharex=top)
        handles |= _draw_state(top, below, rows[rows["state"] == state])
        top.set_title(label(result, "states", state))
        below.set_ylim(-reach, reach)
        if column == 0:
            top.set_ylabel("Probability")
            below.set_ylabel("Difference")
        below.set_xlabel(f"Time ({result.summary.get('time_unit', '')})")
    figure.legend(
        list(handles.values()), list(handles), loc="outside lower left", ncols=min(2, len(handles)), borderaxespad=0.2
    )
    return figure


def _wide(rows: pd.DataFrame) -> pd.DataFrame:
    return rows.pivot_table(index="time", columns="model", values="probability", sort=True)


def _cohorts(rows: pd.DataFrame) -> list[str]:
    return [model for model in ordered(rows["model"]) if model != "individual"]


def _largest_difference(rows: pd.DataFrame) -> float:
    """Half-height of the difference panels, common to a strategy's states so that they can be compared."""
    reach = 0.0
    for state in ordered(rows["state"]):
        wide = _wide(rows[rows["state"] == state])
        if "individual" in wide:
            for model in _cohorts(rows):
                if model in wide:
                    reach = max(reach, float((wide[model] - wide["individual"]).abs().max()))
    return 1.15 * reach if reach > 1e-9 else 0.01


def _draw_state(top: Axes, below: Axes, rows: pd.DataFrame) -> dict[str, Artist]:
    wide = _wide(rows)
    handles: dict[str, Artist] = {}
    zero_line(below)
    if "individual" in wide:
        line = top.plot(wide.index, wide["individual"], color=FULL, linewidth=1.7, zorder=3)[0]
        handles[model_label("individual")] = line
    for model, (colour, dash) in zip(_cohorts(rows), COHORTS, strict=False):
        line = top.plot(wide.index, wide[model], color=colour, linestyle=dash, zorder=4)[0]
        handles[model_label(model)] = line
        if "individual" in wide:
            below.plot(wide.index, wide[model] - wide["individual"], color=colour, linestyle=dash, zorder=4)
    # A state that never holds a quarter of the patients would be a line along the axis on the full scale.
    highest = float(wide.max().max())
    top.set_ylim(0, 1.02 if highest > 0.25 else max(1.12 * highest, 1e-6))
    top.tick_params(labelbottom=False)
    for axes in (top, below):
        axes.set_xlim(float(wide.index.min()), float(wide.index.max()))
        axes.margins(x=0)
    return handles
