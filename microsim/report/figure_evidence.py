"""Evidence in pictures: fitted curves over Kaplan-Meier estimates, and the rates a cohort is given over time."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import LogLocator, NullFormatter

from microsim.report.frames import USES, label, ordered
from microsim.report.inputs import FittedTransition, ResultLike, table
from microsim.report.style import COHORTS, GREY, INK, WIDTH, line_look, new_figure, styled

_SKEW = 12.0
_RISK_COUNTS = 6
_ARC = ["clock", "source", "target"]


def skewed(fitted: FittedTransition) -> bool:
    """Whether stays differ so much in length that a linear axis would squeeze the median against zero."""
    times, survival = np.asarray(fitted.curve.km_time), np.asarray(fitted.curve.km_survival)
    inside = times > 0
    if not inside.any():
        return False
    below = times[inside & (survival <= 0.5 * (1 + survival.min()))]
    middle = float(below.min()) if below.size else float(times.max())
    return float(times.max()) > _SKEW * middle


@styled
def fit_figure(fitted: FittedTransition, *, log_time: bool | None = None) -> Figure:
    """Kaplan-Meier estimate with its band, the fitted curve over it, numbers at risk beneath.

    log_time: None decides by how skewed the stays are.
    """
    curve = fitted.curve
    logged = skewed(fitted) if log_time is None else log_time
    figure = new_figure(3.3, 2.75)
    axes = figure.subplots()
    first, last = _time_range(fitted, logged=logged)
    axes.fill_between(curve.km_time, curve.km_lower, curve.km_upper, step="post", color="#d5dde1", linewidth=0,
                      label="95 % band")  # fmt: skip
    axes.step(curve.km_time, curve.km_survival, where="post", color=INK, linewidth=1.1, label="Kaplan-Meier")
    drawn = np.asarray(curve.fitted_time) > 0 if logged else slice(None)
    axes.plot(curve.fitted_time[drawn], curve.fitted_survival[drawn], color=COHORTS[0][0], linestyle=COHORTS[0][1],
              linewidth=1.7, label=f"Fitted {fitted.fit.family}")  # fmt: skip
    axes.set_ylim(0, 1.03)
    axes.set_ylabel("Still in state")
    if logged:
        axes.set_xscale("log")
        axes.xaxis.set_major_locator(LogLocator(numticks=6))
        axes.xaxis.set_major_formatter(lambda value, _: f"{value:,.6g}")
        axes.xaxis.set_minor_formatter(NullFormatter())
    axes.set_xlim(first, last)
    axes.legend(loc="lower left" if logged else "upper right", borderaxespad=0.3, handlelength=2.2)
    axes.set_xlabel(f"Time since entry ({fitted.unit}{', log scale' if logged else ''})")
    _at_risk(axes, fitted, first=first, last=last, logged=logged)
    return figure


def _time_range(fitted: FittedTransition, *, logged: bool) -> tuple[float, float]:
    observed = np.asarray(fitted.curve.km_time, dtype=np.float64)
    last = float(max(observed.max(), np.asarray(fitted.curve.fitted_time).max()))
    if not logged:
        return 0.0, last
    # The first stays to end reach back over decades that hold almost nobody; the axis opens where one in 100 has left.
    left = (observed > 0) & (np.asarray(fitted.curve.km_survival) <= 0.99)
    return float(observed[left].min()) * 0.8, last


def _at_risk(axes: Axes, fitted: FittedTransition, *, first: float, last: float, logged: bool) -> None:
    """Counts under the axis, thinned until they stand clear of one another."""
    times = np.asarray(fitted.curve.risk_times, dtype=np.float64)
    counts = np.asarray(fitted.curve.at_risk)
    shown = (times <= last) & (times >= first)
    where = np.log(times[shown] / first) / np.log(last / first) if logged else times[shown] / last
    axes.annotate("Number at risk", (0, 0), xycoords="axes fraction", xytext=(-4, -37), textcoords="offset points",
                  fontsize=6.5, color=GREY, ha="left", annotation_clip=False)  # fmt: skip
    for index in _spaced(where):
        axes.annotate(f"{int(counts[shown][index]):,}", (times[shown][index], 0), xycoords=("data", "axes fraction"),
                      xytext=(0, -48), textcoords="offset points", ha="center", fontsize=7,
                      annotation_clip=False)  # fmt: skip


def _spaced(where: npt.NDArray[np.float64]) -> list[int]:
    kept: list[int] = []
    for index, place in enumerate(where):
        if not kept or place - where[kept[-1]] >= 1 / (_RISK_COUNTS + 1):
            kept.append(index)
    return kept


def varying_arcs(result: ResultLike) -> list[tuple[str, str, str]]:
    """(clock, source, target) whose projected rate has more than one cell."""
    rows = table(result, "rates")
    arcs = []
    for (clock, source, target, _, _), cells in rows.groupby([*_ARC, "strategy", "use"], sort=False):
        if len(cells) > 1:
            arcs.append((str(clock), str(source), str(target)))
    return ordered(arcs)


@styled
def rates_figure(result: ResultLike, arcs: list[tuple[str, str, str]]) -> Figure:
    """Projected rates over time as steps, one panel an arc, one line a strategy and use."""
    rows = table(result, "rates")
    columns = min(2, len(arcs))
    bands = -(-len(arcs) // columns)
    figure = new_figure(WIDTH, 0.4 + 2.0 * bands)
    panels = figure.subplots(bands, columns, squeeze=False, sharex=True).ravel()
    handles: dict[str, Artist] = {}
    unit = result.summary.get("time_unit", "")
    for axes, (clock, source, target) in zip(panels, arcs, strict=False):
        chosen = rows[(rows["clock"] == clock) & (rows["source"] == source) & (rows["target"] == target)]
        handles |= _draw_rates(axes, result, chosen)
        names = [label(result, "states", name) for name in (source, target)]
        axes.set_title(f"{label(result, 'clocks', clock)}: {names[0]} to {names[1]}", fontsize=8)
        axes.set_ylabel(f"Rate per {unit}")
        axes.set_xlabel(f"Time ({unit})")
        axes.set_ylim(bottom=0)
    for axes in panels[len(arcs) :]:
        axes.set_axis_off()
    figure.legend(list(handles.values()), list(handles), loc="outside lower left", ncols=2, borderaxespad=0.2)
    return figure


def _draw_rates(axes: Axes, result: ResultLike, rows: pd.DataFrame) -> dict[str, Artist]:
    handles: dict[str, Artist] = {}
    pairs = ordered(zip(rows["strategy"], rows["use"], strict=True))
    for index, (strategy, use) in enumerate(pairs):
        part = rows[(rows["strategy"] == strategy) & (rows["use"] == use)].sort_values("time_from")
        colour, dash = line_look(index)
        edges = np.append(part["time_from"].to_numpy(float), part["time_to"].to_numpy(float)[-1])
        rates = np.append(part["rate"].to_numpy(float), part["rate"].to_numpy(float)[-1])
        line = axes.step(edges, rates, where="post", color=colour, linestyle=dash)[0]
        handles[f"{label(result, 'strategies', strategy)}, {USES.get(str(use), str(use))}"] = line
    return handles
