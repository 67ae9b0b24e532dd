"""A result into its named figures, and the figures into a folder as SVG, on request also as PNG.

The names are those of the report's sections; the drawing itself lives beside this in the figure_* modules.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from matplotlib.figure import Figure

from microsim.report.figure_evidence import fit_figure, rates_figure, varying_arcs
from microsim.report.figure_gap import bridge_figure, bridge_rows, tolerance_figure
from microsim.report.figure_occupancy import occupancy_figure
from microsim.report.figure_pathway import pathway_figure
from microsim.report.frames import USES, label, ordered, stated_rule, verdict_use
from microsim.report.inputs import ResultLike, table
from microsim.report.style import png_bytes, svg_bytes

__all__ = [
    "Drawing",
    "all_figures",
    "bridge_figure",
    "fit_figure",
    "occupancy_figure",
    "pathway_figure",
    "rates_figure",
    "save_figures",
    "tolerance_figure",
]


@dataclass(frozen=True, slots=True)
class Drawing:
    """section: where in the report; name: file stem, unique in a result; caption: what the reader sees; svg: the figure
    as a stand-alone document, made once for the page and the file (empty until asked for by ``all_figures``)."""

    section: str
    name: str
    caption: str
    figure: Figure
    svg: bytes = b""


def slug(text: str) -> str:
    return re.sub(r"[^a-z0-9]+", "-", text.lower()).strip("-") or "x"


def all_figures(result: ResultLike) -> list[Drawing]:
    """Every figure the result has data for, in report order, under distinct names."""
    drawings = [*_gap(result), *_occupancy(result), *_pathway(result), *_fits(result), *_rates(result)]
    taken: dict[str, int] = {}
    distinct = []
    for drawing in drawings:
        count = taken[drawing.name] = taken.get(drawing.name, 0) + 1
        name = drawing.name if count == 1 else f"{drawing.name}-{count}"
        svg = svg_bytes(drawing.figure, name, transparent=True)
        distinct.append(replace(drawing, name=name, svg=svg))
    return distinct


def save_figures(drawings: Sequence[Drawing], folder: Path, *, png: bool = False) -> list[Path]:
    """Write every figure as <name>.svg, on request also as <name>.png, into the folder, made if absent."""
    folder.mkdir(parents=True, exist_ok=True)
    paths = []
    for drawing in drawings:
        contents = {".svg": drawing.svg, **({".png": png_bytes(drawing.figure)} if png else {})}
        for suffix, content in contents.items():
            path = folder / (drawing.name + suffix)
            path.write_bytes(content)
            paths.append(path)
    return paths


def _gap(result: ResultLike) -> list[Drawing]:
    drawings = []
    if not table(result, "verdict").empty:
        caption = (
            "Gap in incremental net benefit between the individual-level model and the cohort the verdict is about: "
            "estimate, interval of the equivalence test, and the tolerance the study declares (shaded)."
        )
        drawings.append(Drawing("verdict", "tolerance", caption, tolerance_figure(result)))
    rule, use = stated_rule(result), verdict_use(result)
    for strategy in ordered(table(result, "gap")["strategy"]):
        if bridge_rows(result, strategy=strategy, use=use, rule=rule).empty:
            continue
        caption = (
            f"{label(result, 'strategies', strategy)}: from the cohort with {USES.get(use, use)} to the "
            "individual-level model, term by term. Whiskers: two standard errors of the term."
        )
        figure = bridge_figure(result, strategy=strategy, use=use, rule=rule)
        drawings.append(Drawing("gap", f"bridge-{slug(str(strategy))}", caption, figure))
    return drawings


def _occupancy(result: ResultLike) -> list[Drawing]:
    return [
        Drawing(
            "occupancy",
            f"occupancy-{slug(str(strategy))}",
            f"{label(result, 'strategies', strategy)}: probability of being in each state, and beneath it the cohort's "
            "minus the individual-level model's. Difference panels of one strategy share their scale.",
            occupancy_figure(result, strategy),
        )
        for strategy in ordered(table(result, "occupancy")["strategy"])
    ]


def _pathway(result: ResultLike) -> list[Drawing]:
    if result.pathway is None or not result.pathway.nodes:
        return []
    caption = (
        "The pathway. Each arrow is one clock, with the time that drives its hazard in italics; dashed arrows are "
        "background clocks, which every cohort keeps on time."
    )
    return [Drawing("pathway", "pathway", caption, pathway_figure(result.pathway))]


def _fits(result: ResultLike) -> list[Drawing]:
    return [
        Drawing(
            "fits",
            f"fit-{slug(name)}",
            f"{fitted.label or name}: {label(result, 'states', fitted.source)} to "
            f"{label(result, 'states', fitted.target)}, {fitted.fit.n:,} stays, {fitted.fit.n_events:,} events.",
            fit_figure(fitted),
        )
        for name, fitted in result.fits.items()
    ]


def _rates(result: ResultLike) -> list[Drawing]:
    arcs = varying_arcs(result)
    if not arcs:
        return []
    caption = "Rates handed to the cohort that vary with time since model start, by transition."
    return [Drawing("rates", "rates", caption, rates_figure(result, arcs))]
