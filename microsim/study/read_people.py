"""[attributes] and [population] -> laws with parsed parameters, rows to resample, and the copula matrix.

Laws take formulas over inputs; their numbers are known only when the study is bound.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from fractions import Fraction

import numpy as np

from microsim.study.context import Context
from microsim.study.dimensions import PLAIN, TIME, Dim
from microsim.study.formula import Formula, Symbol, nearest
from microsim.study.parts import Attribute, LawSpec
from microsim.study.schema import AttributeTable, Expression, PopulationTable
from microsim.study.tables import Csv, parse_csv, read_population

# Law -> the sets of parameters it may be given by.
LAW_FORMS: Mapping[str, tuple[tuple[str, ...], ...]] = {
    "normal": (("mean", "sd"),),
    "lognormal": (("meanlog", "sdlog"), ("mean", "sd")),
    "gamma": (("shape", "rate"), ("mean", "sd")),
    "beta": (("a", "b"), ("mean", "sd")),
    "uniform": (("low", "high"),),
}
_POWER = {"mean": 1, "sd": 1, "low": 1, "high": 1, "value": 1, "rate": -1}


def parse_attributes(
    ctx: Context, tables: Mapping[str, AttributeTable], *, columns: frozenset[str]
) -> tuple[Attribute, ...]:
    """Attributes in order; each becomes a name for formulas. columns: those of the population file, if any."""
    out = []
    for name, table in tables.items():
        attribute = _attribute(ctx, name, table=table, columns=columns)
        out.append(attribute)
        ctx.symbols.setdefault(name, Symbol("attribute", attribute.dim, attribute.levels))
    return tuple(out)


def _attribute(ctx: Context, name: str, *, table: AttributeTable, columns: frozenset[str]) -> Attribute:
    key = f"attributes.{name}"
    laws = [k for k in (*LAW_FORMS, "choice", "value") if getattr(table, k) is not None]
    if len(laws) > 1:
        ctx.fault(key, f"has {len(laws)} laws: {', '.join(laws)}", "Keep one.")
    if laws and name in columns:
        ctx.fault(key, "has a law and a column in the population file", "Remove the law or rename the attribute.")
    if not laws and name not in columns:
        ctx.fault(key, "has no law and no column in a population file", "Add a law such as normal, choice or value.")
    levels = tuple(table.choice) if table.choice is not None else tuple(table.levels or ())
    if laws and table.levels is not None:
        ctx.fault(f"{key}.levels", "levels are for columns of a population file", "List the levels in choice.")
    if len(set(levels)) < len(levels):
        ctx.fault(f"{key}.levels", "a level is named twice", "Remove one.", value=levels)
    within = _within(ctx, f"{key}.within", table=table, categorical=bool(levels) or "value" in laws)
    if not laws:
        return Attribute(name, table.label, None, levels, PLAIN)
    kind = laws[0]
    raw: Mapping[str, Expression] = {"value": table.value or 0} if kind == "value" else getattr(table, kind)
    if kind == "choice":
        params = {n: ctx.formula(e, f"{key}.choice.{n}", memory=False) for n, e in raw.items()}
        if not params:
            ctx.fault(f"{key}.choice", "no level is given", "Write for example { female = 0.5, male = 0.5 }.")
        return Attribute(name, table.label, LawSpec("choice", params, {}, None), levels, PLAIN)
    _check_parameters(ctx, f"{key}.{kind}", kind=kind, raw=raw)
    path = key if kind == "value" else f"{key}.{kind}"
    params = {n: ctx.formula(e, f"{path}.{n}", dim=None, memory=False) for n, e in raw.items()}
    dim, scales = _dimension(ctx, path, params=params, is_age=name == "age")
    return Attribute(
        name, table.label, LawSpec("constant" if kind == "value" else kind, params, scales, within), (), dim
    )


def _within(ctx: Context, key: str, *, table: AttributeTable, categorical: bool) -> tuple[float, float] | None:
    if table.within is None:
        return None
    if categorical:
        ctx.fault(key, "within is for continuous attributes", "Remove it.")
    elif len(table.within) != 2 or not table.within[0] < table.within[1]:
        ctx.fault(key, "within is a pair [low, high] with low below high", "Correct it.", value=table.within)
    else:
        return float(table.within[0]), float(table.within[1])
    return None


def _check_parameters(ctx: Context, key: str, *, kind: str, raw: Mapping[str, Expression]) -> None:
    forms = LAW_FORMS.get(kind)
    if forms and not any(set(raw) == set(f) for f in forms):
        wanted = " or ".join("{" + ", ".join(f) + "}" for f in forms)
        ctx.fault(key, f"a {kind} law is given by {wanted}", "Give exactly these.", value=", ".join(raw) or "nothing")


def _dimension(ctx: Context, key: str, *, params: Mapping[str, Formula], is_age: bool) -> tuple[Dim, dict[str, float]]:
    """Dimension of what is drawn, and for age the factors that turn study time units into years."""
    dim: Dim | None = None
    scales: dict[str, float] = {}
    for name, formula in params.items():
        power = _POWER.get(name, 0)
        if formula.dim is None:
            continue
        own = formula.dim.power(Fraction(power)) if power else None
        if own is None:
            ctx.check_dimension(formula, f"{key}.{name}", dim=PLAIN)
        elif dim is not None and own != dim:
            ctx.fault(
                f"{key}.{name}", f"its unit does not agree with the other parameter's ({dim})", "Check the units."
            )
        else:
            dim = own
            if is_age and own == TIME:
                scales[name] = ctx.years_per_unit**power
    if is_age:
        if dim not in (None, PLAIN, TIME):
            ctx.fault(key, f"age must be a time or a number of years, not {dim}", "Check the units.")
        return PLAIN, scales
    return dim or PLAIN, {}


def read_rows(ctx: Context, file: str | None) -> Csv | None:
    """The population file, unchecked, or None."""
    if file is None:
        return None
    text = ctx.read(file, "population.from")
    return None if text is None else parse_csv(text, file=file, required=(), faults=ctx.faults)


def check_rows(
    ctx: Context, table: Csv | None, *, attributes: tuple[Attribute, ...], tables: Mapping[str, AttributeTable]
) -> dict[str, tuple[float, ...]] | None:
    """Checked columns of the attributes without a law."""
    if table is None:
        return None
    wanted = {a.name: a.levels for a in attributes if a.law is None and a.name in table.cells}
    within = {n: (t.within[0], t.within[1]) for n, t in tables.items() if t.within is not None and len(t.within) == 2}
    return read_population(table, levels=wanted, within=within, faults=ctx.faults)


def correlation_matrix(
    ctx: Context, population: PopulationTable, *, attributes: tuple[Attribute, ...]
) -> tuple[tuple[float, ...], ...] | None:
    """Gaussian-copula matrix in the order of the attributes, or None if no correlation is stated."""
    if not population.correlation:
        return None
    names = [a.name for a in attributes]
    matrix = np.eye(len(names))
    for i, c in enumerate(population.correlation):
        key = f"population.correlation.{i}"
        if len(c.between) != 2 or c.between[0] == c.between[1]:
            ctx.fault(key, "a correlation is between two different attributes", "Name two.", value=c.between)
            continue
        unknown = [b for b in c.between if b not in names]
        for b in unknown:
            ctx.fault(key, f"unknown attribute {b!r}", nearest(b, names))
        from_rows = [a.name for a in attributes if a.name in c.between and a.law is None]
        if from_rows:
            ctx.fault(
                key, f"{from_rows[0]} is read from the population file, which fixes its correlation", "Remove it."
            )
        if not -1 < c.value < 1:
            ctx.fault(key, "a correlation lies strictly between -1 and 1", "Correct it.", value=c.value)
        elif not unknown:
            row, column = (names.index(n) for n in c.between)
            if matrix[row, column] != 0.0 and not math.isclose(matrix[row, column], c.value):
                ctx.fault(key, "this pair has two correlations", "Keep one.", value=c.between)
            matrix[row, column] = matrix[column, row] = c.value
    if np.linalg.eigvalsh(matrix).min() <= 1e-10:
        ctx.fault("population.correlation", "the correlation matrix is not positive definite",
                  "Make the correlations weaker or consistent with each other.")  # fmt: skip
    return tuple(tuple(float(x) for x in line) for line in matrix)
