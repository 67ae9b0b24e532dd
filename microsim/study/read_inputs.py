"""inputs.csv -> Inputs in order of dependence, and their values once some are replaced.

Knows units and formulas; not what the inputs are used for.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from graphlib import CycleError, TopologicalSorter

from microsim.study.context import Context
from microsim.study.dimensions import PLAIN, Dim, UnknownUnit, describe
from microsim.study.expression import Node, const, fold
from microsim.study.formula import FormulaError, Symbol, name_problem, nearest, parse
from microsim.study.parts import Input
from microsim.study.tables import Csv, RowFaults, number, parse_csv

LAWS = ("fixed", "beta", "gamma", "lognormal", "normal", "uniform")
REQUIRED = ("name", "value", "unit", "source")
OPTIONAL = ("low", "high", "law", "label")
UNITS = ("year", "month", "week", "day", "-", "ratio", "probability", "utility", "QALY", "count")


def declare_inputs(ctx: Context, file: str | None) -> Csv | None:
    """Read the file and make its names known to formulas, so that they may refer to each other in any order."""
    name = file or "inputs.csv"
    if file is None and not (ctx.root / name).is_file():
        return None
    if file is None:
        ctx.default("inputs", name)
    text = ctx.read(name, "inputs")
    table = parse_csv(text, file=name, required=REQUIRED, faults=ctx.faults) if text is not None else None
    if table is None:
        return None
    for extra in (c for c in table.cells if c not in (*REQUIRED, *OPTIONAL)):
        ctx.warnings.append(f"{name}: column {extra!r} is not read. {nearest(extra, OPTIONAL)}")
    out = RowFaults(name, ctx.faults)
    first_rows: dict[str, int] = {}
    for row, key, unit in zip(table.rows, table.cells["name"], table.cells["unit"], strict=True):
        problem = name_problem(key)
        if problem:
            out.add("name", f"{key!r} {problem}", "Choose another name.", row=row)
        elif key in first_rows:
            out.add("name", f"{key} is defined twice", f"Remove it here or in row {first_rows[key]}.", row=row)
        else:
            first_rows[key] = row
            ctx.symbols[key] = Symbol("input", _unit(ctx, unit, row=row, out=out)[1])
    out.finish()
    return table


def _unit(ctx: Context, unit: str, *, row: int, out: RowFaults | None = None) -> tuple[float, Dim]:
    try:
        return ctx.unit(unit)
    except UnknownUnit as e:
        if out is not None:
            problem = f"unknown unit {e.word!r}"
            remedy = nearest(e.word, (*UNITS, ctx.money)) + " Units are joined with * and /."
            if e.word == "probability":
                problem = "a probability has no other unit beside it"
                remedy = "Give the unit probability, and its time as per = {...} in the hazard."
            out.add("unit", problem, remedy, row=row, value=unit)
        return 1.0, PLAIN


def parse_inputs(ctx: Context, table: Csv | None) -> tuple[Input, ...]:
    """All inputs, each after those it depends on. Faulty values become nan."""
    if table is None:
        return ()
    out = RowFaults(table.file, ctx.faults)
    found: dict[str, Input] = {}
    for i, row in enumerate(table.rows):
        cells = {c: table.cells[c][i] if c in table.cells else "" for c in (*REQUIRED, *OPTIONAL)}
        if cells["name"] in ctx.symbols and cells["name"] not in found:
            found[cells["name"]] = _parse_row(ctx, cells, row=row, out=out)
    out.finish()
    return _in_order(ctx, found, file=table.file)


def _parse_row(ctx: Context, cells: Mapping[str, str], *, row: int, out: RowFaults) -> Input:
    factor, dim = _unit(ctx, cells["unit"], row=row)
    node = _value(ctx, cells, unit=(factor, dim), row=row, out=out)
    law = cells["law"] or "fixed"
    if law not in LAWS:
        out.add("law", f"unknown law {law!r}", nearest(law, LAWS), row=row)
        law = "fixed"
    if not cells["source"]:
        out.add("source", f"{cells['name']} has no source", "Say where the number comes from.", row=row)
    bounds = []
    for column in ("low", "high"):
        bound = number(cells[column]) if cells[column] else None
        if cells[column] and bound is None:
            out.add(column, "not a finite number", "Write a number with a decimal point.", row=row, value=cells[column])
        bounds.append(None if bound is None else bound * factor)
    made = Input(
        cells["name"], cells["value"], node, cells["unit"], dim, factor, bounds[0], bounds[1], law, cells["source"],
        cells["label"], row,
    )  # fmt: skip
    for column, problem, remedy in _interval_problems(made):
        out.add(column, problem, remedy, row=row, value=cells[column])
    return made


def _value(ctx: Context, cells: Mapping[str, str], *, unit: tuple[float, Dim], row: int, out: RowFaults) -> Node:
    """The value as a tree in study units: bare numbers are converted, formulas over inputs already are in them."""
    text, (factor, dim) = cells["value"], unit
    plain = number(text)
    if plain is not None:
        return const(plain * factor)
    if text.casefold().lstrip("+-") in ("nan", "inf", "infinity"):
        out.add("value", "not a finite number", "Write a finite number.", row=row, value=text)
        return const(math.nan)
    try:
        formula = parse(text, ctx.scope(memory=False))
    except FormulaError as e:
        at = f" (column {e.position} of the value)" if e.position else ""
        out.add("value", e.problem + at, e.remedy, row=row, value=text or "blank")
        return const(math.nan)
    if formula.dim is None:
        return formula.node if factor == 1.0 else Node("mul", (formula.node, const(factor)))
    if formula.dim != dim:
        problem = f"the formula gives {describe(formula.dim)}, the unit says {dim}"
        out.add("value", problem, "Correct the unit or the formula.", row=row, value=text)
    return formula.node


def _interval_problems(made: Input) -> Iterator[tuple[str, str, str]]:
    """(column, problem, remedy) about law, low and high."""
    if made.law != "fixed" and not made.node.is_const:
        yield "law", "a formula follows its inputs and has no law of its own", "Leave law, low and high blank."
        return
    low, high = made.low, made.high
    if made.law != "fixed" and (low is None or high is None):
        yield "law", f"a {made.law} law needs low and high", "Fill both or leave the law blank."
    if low is None or high is None:
        return
    if low > high or (low == high and made.law != "fixed"):
        yield "low", "low is not below high", "Swap or correct them."
    elif made.node.is_const and not low <= made.node.value <= high and not math.isnan(made.node.value):
        yield "value", "the value lies outside its interval low to high", "Correct one of the three."
    elif made.law == "beta" and (low < 0 or high > 1):
        yield "low", "a beta law lives between 0 and 1", "Correct the interval or choose another law."
    elif made.law in ("gamma", "lognormal") and low <= 0:
        yield "low", f"a {made.law} law lives above 0", "Correct the interval or choose another law."


def _in_order(ctx: Context, found: Mapping[str, Input], *, file: str) -> tuple[Input, ...]:
    graph = {name: [n.name for n in i.node.walk() if n.op == "input" and n.name in found] for name, i in found.items()}
    try:
        return tuple(found[n] for n in TopologicalSorter(graph).static_order())
    except CycleError as e:
        circle: list[str] = e.args[1]
        row = found[circle[0]].row
        ctx.faults.add(file, "value", f"the inputs {' -> '.join(circle[::-1])} depend on each other in a circle",
                       "Give one of them a number.", where=f"row {row}", value=found[circle[0]].text)  # fmt: skip
        return tuple(i for n, i in found.items() if n not in circle)


def resolve(inputs: tuple[Input, ...], given: Mapping[str, float]) -> dict[str, float]:
    """Value of every input in study units; ``given`` replaces inputs and brings coefficients.

    Inputs that depend on a name without a value are left out.
    """
    values = dict(given)
    for i in inputs:
        if i.name in given:
            continue
        if i.node.is_const:
            values[i.name] = i.node.value
            continue
        try:
            values[i.name] = fold(i.node, values).value
        except KeyError:
            continue
    return values
