"""The gap in pictures: a bridge from a cohort's incremental net benefit to the full one, and the gap against tolerance.

Steps, errors and flags come from the comparison; only their places on paper are decided here.
"""

from __future__ import annotations

from typing import Any

import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from microsim.report.frames import (
    BY_CONSTRUCTION,
    USES,
    VERDICT_MARKS,
    by_construction,
    label,
    money,
    rows_of,
    with_error,
)
from microsim.report.inputs import ResultLike, table
from microsim.report.style import FULL, GREY, INK, TERMS, WIDTH, new_figure, space_out, styled, zero_line

_NARROW = 0.25
TERM_LABELS = {"cycle": "+ cycle arithmetic", "carrying": "+ carrying of rates", "memory": "+ memory"}


def bridge_rows(result: ResultLike, *, strategy: str, use: str, rule: str) -> pd.DataFrame:
    """Rows of the split that concern net benefit, one a threshold."""
    rows = table(result, "gap")
    chosen = (rows["strategy"] == strategy) & (rows["use"] == use) & (rows["cycle_rule"] == rule)
    return rows[chosen & rows["threshold"].notna()]


@styled
def bridge_figure(result: ResultLike, *, strategy: str, use: str, rule: str) -> Figure:
    """Cohort value, the three terms, full value: one panel a threshold. Whiskers are two standard errors."""
    rows = rows_of(bridge_rows(result, strategy=strategy, use=use, rule=rule))
    figure = new_figure(WIDTH, 0.25 + 1.85 * len(rows))
    panels = figure.subplots(len(rows), 1, squeeze=False)[:, 0]
    currency = str(result.summary.get("currency", ""))
    for axes, row in zip(panels, rows, strict=True):
        zoomed = _draw_bridge(axes, row, use)
        title = f"{money(row.threshold)} {currency} per QALY"
        axes.set_title(title + (" (axis does not start at zero)" if zoomed else ""))
    space_out(figure, rows=0.16)
    panels[-1].set_xlabel(f"Incremental net benefit ({currency})")
    return figure


def _levels(row: Any) -> list[float]:
    """Ends of all steps and whiskers."""
    levels = [float(row.cohort), float(row.full)]
    level = levels[0]
    for term in TERM_LABELS:
        if not by_construction(row, term):
            level += float(getattr(row, term))
            error = 2 * float(getattr(row, f"{term}_se"))
            levels += [level - error, level + error]
    return levels


def _draw_ends(axes: Axes, row: Any) -> bool:
    """Cohort and full value as bars from zero, or as points on a narrow axis where bars would dwarf every step."""
    levels = _levels(row)
    low, high = min(levels), max(levels)
    zoomed = high - low < _NARROW * max(abs(low), abs(high)) and high > low
    if zoomed:
        margin = 0.12 * (high - low)
        axes.set_xlim(low - margin, high + margin)
        axes.plot([row.cohort], [0], marker="D", markersize=6, color="white", markeredgecolor=INK, zorder=4)
        axes.plot([row.full], [4], marker="D", markersize=6, color=FULL, zorder=4)
    else:
        axes.barh(0, row.cohort, color="white", edgecolor=INK, linewidth=1.1, height=0.62, zorder=3)
        axes.barh(4, row.full, color=FULL, edgecolor=FULL, height=0.62, zorder=3)
        axes.margins(x=0.04)
        zero_line(axes, vertical=True)
    return zoomed


def _draw_bridge(axes: Axes, row: Any, use: str) -> bool:
    names = [f"Cohort, {USES.get(use, use)}", *TERM_LABELS.values(), "Individual-level"]
    zoomed = _draw_ends(axes, row)
    notes = [money(row.cohort)]
    level = float(row.cohort)
    for position, term in enumerate(TERM_LABELS, start=1):
        size, error = float(getattr(row, term)), float(getattr(row, f"{term}_se"))
        axes.plot([level, level], [position - 1.31, position + 0.31], color=GREY, linewidth=0.7, zorder=2)
        if by_construction(row, term):
            axes.plot([level], [position], marker="|", markersize=11, color=INK, zorder=4)
            notes.append(BY_CONSTRUCTION)
            continue
        colour, hatch = TERMS[term]
        axes.barh(position, size, left=level, color=colour, edgecolor=INK, hatch=hatch, linewidth=0.7, height=0.62,
                  zorder=3)  # fmt: skip
        level += size
        axes.errorbar(level, position, xerr=2 * error, color=INK, elinewidth=1.0, capsize=2.5, capthick=1.0, zorder=5)
        notes.append(with_error(size, error, signed=True))
    axes.plot([level, level], [2.69, 4.31], color=GREY, linewidth=0.7, zorder=2)
    notes.append(money(row.full))
    axes.set_yticks(range(5), names)
    axes.set_ylim(4.6, -0.6)
    axes.tick_params(axis="y", length=0)
    axes.xaxis.set_major_formatter(lambda value, _: money(value) if value else "0")
    for position, note in enumerate(notes):
        axes.annotate(note, (1.0, position), xycoords=("axes fraction", "data"), xytext=(6, 0), fontsize=7.5,
                      textcoords="offset points", va="center", ha="left", annotation_clip=False)  # fmt: skip
    return zoomed


@styled
def tolerance_figure(result: ResultLike) -> Figure:
    """Gap in incremental net benefit with its interval, against the tolerance the study declares, row by row."""
    rows = rows_of(table(result, "verdict"))
    figure = new_figure(WIDTH, 0.75 + 0.36 * len(rows))
    axes = figure.subplots()
    currency = str(result.summary.get("currency", ""))
    for position, row in enumerate(rows):
        axes.add_patch(Rectangle((-row.tolerance, position - 0.34), 2 * row.tolerance, 0.68, facecolor="#dfe7eb",
                                 edgecolor=GREY, linewidth=0.6, zorder=1))  # fmt: skip
        axes.plot([row.lower, row.upper], [position, position], color=FULL, linewidth=2.2, zorder=3,
                  solid_capstyle="butt")  # fmt: skip
        axes.plot([row.gap], [position], marker="o", markersize=5.5, color="white", markeredgecolor=FULL,
                  markeredgewidth=1.6, zorder=4)  # fmt: skip
        mark = VERDICT_MARKS.get(str(row.verdict), "")
        axes.annotate(f"{mark} {row.verdict}", (1.0, position), xycoords=("axes fraction", "data"), xytext=(6, 0),
                      textcoords="offset points", va="center", fontsize=7.5, annotation_clip=False)  # fmt: skip
    zero_line(axes, vertical=True)
    names = [f"{label(result, 'strategies', row.strategy)}, {money(row.threshold)}" for row in rows]
    axes.set_yticks(range(len(rows)), names)
    axes.set_ylim(len(rows) - 0.4, -0.6)
    axes.tick_params(axis="y", length=0)
    axes.margins(x=0.06)
    axes.xaxis.set_major_formatter(lambda value, _: money(value) if value else "0")
    axes.set_xlabel(f"Individual-level minus cohort, incremental net benefit ({currency}); shaded: tolerated")
    return figure
