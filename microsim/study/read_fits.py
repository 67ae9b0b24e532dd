"""[fits] and their episode files -> Fit: coefficient names for formulas, and the arrays to be fitted.

The names are declared first, so that formulas can use them; the data are read when states are known.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

from microsim.hazards.core import PARAMETERS
from microsim.study.context import Context
from microsim.study.dimensions import PLAIN, factor_between
from microsim.study.expression import Node, evaluate
from microsim.study.fit_task import FitTask, sealed
from microsim.study.formula import FormulaError, Scope, Symbol, name_problem, nearest, parse
from microsim.study.parts import Fit
from microsim.study.schema import FitTable
from microsim.study.tables import EPISODE_COLUMNS, Episodes, categories, number, parse_csv, read_episodes

F = npt.NDArray[np.float64]
_NOT_COVARIATES = (*EPISODE_COLUMNS, "observed_from")


def declare_coefficients(ctx: Context, fits: Mapping[str, FitTable]) -> None:
    """Make the coefficients' names known to formulas; a name may stand for one thing only."""
    for name, fit in fits.items():
        for c in fit.covariates:
            key = f"fits.{name}.covariates.{c}"
            problem = name_problem(c)
            if problem:
                ctx.fault(key, f"the coefficient {c!r} {problem}", "Choose another name.")
            elif c in ctx.symbols:
                ctx.fault(key, f"the name {c} is already an input or a coefficient of another fit", "Rename one.")
            else:
                ctx.symbols[c] = Symbol("input", PLAIN)


def parse_fits(ctx: Context, tables: Mapping[str, FitTable]) -> tuple[Fit, ...]:
    """All fits with their data; a file is read and checked once."""
    files: dict[str, Episodes | None] = {}
    out = []
    for name, table in tables.items():
        if table.data not in files:
            files[table.data] = _episodes(ctx, table.data, key=f"fits.{name}.data")
        out.append(_fit(ctx, name, table=table, episodes=files[table.data]))
    return tuple(out)


def _episodes(ctx: Context, file: str, *, key: str) -> Episodes | None:
    text = ctx.read(file, key)
    table = parse_csv(text, file=file, required=EPISODE_COLUMNS, faults=ctx.faults) if text is not None else None
    return None if table is None else read_episodes(table, states=ctx.states, faults=ctx.faults)


def _fit(ctx: Context, name: str, *, table: FitTable, episodes: Episodes | None) -> Fit:
    key = f"fits.{name}"
    known = True
    if table.family not in PARAMETERS:
        ctx.fault(f"{key}.family", f"unknown family {table.family!r}", nearest(table.family, PARAMETERS))
        known = False
    for field, state in (("from", table.from_), ("to", table.to)):
        if state not in ctx.states:
            ctx.fault(f"{key}.{field}", f"unknown state {state!r}", nearest(state, ctx.states))
            known = False
    for field, value in (("unit", table.unit or ctx.study_unit), ("time", table.time)):
        if field not in table.model_fields_set:
            ctx.default(f"{key}.{field}", value)
    task = _task(ctx, name, table=table, episodes=episodes) if known and episodes is not None else None
    return Fit(name, table.family, table.from_, table.to, table.time, tuple(table.covariates), task)


def _task(ctx: Context, name: str, *, table: FitTable, episodes: Episodes) -> FitTask | None:
    rows = [i for i, s in enumerate(episodes.source) if s == table.from_]
    start = np.array([episodes.entry[i] for i in rows])
    stop = np.array([episodes.exit[i] for i in rows])
    seen = np.array([episodes.observed_from[i] for i in rows])
    # Time at risk is from observed_from to exit; a row without any says nothing about the hazard.
    kept = stop > seen
    events = np.array([episodes.target[i] == table.to for i in rows], dtype=bool)[kept]
    if not events.any():
        remedy = "Check from, to and the data, or give the hazard by published parameters."
        ctx.fault(f"fits.{name}", f"no transition from {table.from_} to {table.to} in {table.data}", remedy)
        return None
    origin = start[kept] if table.time == "sojourn" else np.zeros(int(kept.sum()))
    at_risk = [i for i, k in zip(rows, kept, strict=True) if k]
    covariates = _covariates(ctx, f"fits.{name}.covariates", table=table, episodes=episodes, rows=at_risk)
    if covariates is None:
        return None
    unit = table.unit or ctx.study_unit
    dropped = int((~kept).sum())
    note = f"{dropped} of {len(rows)} rows have no time at risk and are left out" if dropped else ""
    if note:
        ctx.warnings.append(f"fits.{name}: {note}")
    return sealed(FitTask(
        name=name, family=table.family, source=table.from_, target=table.to, unit=unit, time=table.time,
        times=stop[kept] - origin, events=events, entry=seen[kept] - origin, covariates=covariates,
        coefficient_names=tuple(table.covariates), n_dropped_note=note,
        to_study_unit=factor_between(unit, ctx.study_unit),
    ))  # fmt: skip


def _covariates(ctx: Context, key: str, *, table: FitTable, episodes: Episodes, rows: list[int]) -> F | None:
    """float64[n, p], or None after a fault."""
    cells = {c: v for c, v in episodes.table.cells.items() if c not in _NOT_COVARIATES and name_problem(c) == ""}
    symbols = {c: Symbol("attribute", PLAIN, categories(v)) for c, v in cells.items()}
    out = np.empty((len(rows), len(table.covariates)))
    good = True
    for j, (name, text) in enumerate(table.covariates.items()):
        try:
            formula = parse(text, Scope(symbols))
        except FormulaError as e:
            at = f" (column {e.position})" if e.position else ""
            ctx.fault(f"{key}.{name}", e.problem + at, f"{e.remedy} Columns of {table.data} can be used.", value=text)
            good = False
            continue
        used = {
            n.name: _column(cells[n.name], symbols[n.name].levels) for n in formula.node.walk() if n.op == "attribute"
        }
        values = np.broadcast_to(evaluate(formula.node, functools.partial(_of_leaf, used)), len(episodes.source))[rows]
        blank = np.isnan(np.array([c[rows] for c in used.values()]).reshape(-1, len(rows))).any(axis=0)
        bad = np.flatnonzero(blank | ~np.isfinite(values))
        if bad.size:
            row = episodes.table.rows[rows[int(bad[0])]]
            found = ", ".join(f"{c} = {cells[c][rows[int(bad[0])]] or 'blank'}" for c in used)
            problem = f"{name} is not a finite number in {bad.size} rows, first in row {row}"
            ctx.faults.add(
                table.data, " ".join(used) or name, problem, "Fill the cells.", value=found, where=f"row {row}"
            )
            good = False
        elif np.ptp(values) == 0.0:
            ctx.fault(f"{key}.{name}", "the covariate has one value only", "Remove it.", value=f"{values[0]:g}")
            good = False
        out[:, j] = values
    return out if good else None


def _of_leaf(used: Mapping[str, F], leaf: Node) -> F:
    return used[leaf.name]


def _column(texts: tuple[str, ...], levels: tuple[str, ...]) -> F:
    if levels:
        code = {level: float(i) if level else math.nan for i, level in enumerate(levels)}
        return np.array([code[t] for t in texts])
    return np.array([math.nan if (v := number(t)) is None else v for t in texts])
