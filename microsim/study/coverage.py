"""Study -> faults where a life table does not cover all patients, and warnings where a fit serves another clock.

Checks across parts of a study that each part alone cannot make.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

from microsim.study.bound import BoundPopulation
from microsim.study.context import Context
from microsim.study.parts import Clock, HazardSpec, Study


def hazards_in_use(study: Study) -> Iterator[tuple[str, Clock, HazardSpec]]:
    """(key, clock, hazard) of the base and of every strategy that replaces it."""
    for k in study.clocks:
        yield f"clocks.{k.name}.hazard", k, k.hazard
        for s in study.strategies:
            if k.name in s.hazards:
                yield f"strategies.{s.name}.clocks.{k.name}.hazard", k, s.hazards[k.name]


def possible_range(population: BoundPopulation, name: str) -> tuple[float, float]:
    """Lowest and highest value an attribute can take; infinite where nothing bounds it, nan where not known yet."""
    attribute = next(a for a in population.attributes if a.name == name)
    law = attribute.law
    if law is None:
        column = (population.rows or {}).get(name, ())
        return (min(column), max(column)) if column else (math.nan, math.nan)
    support = {
        "constant": (law.params.get("value", math.nan),) * 2,
        "uniform": (law.params.get("low", math.nan), law.params.get("high", math.nan)),
        "beta": (0.0, 1.0), "normal": (-math.inf, math.inf), "choice": (0.0, float(len(attribute.levels) - 1)),
    }  # fmt: skip
    low, high = support.get(law.kind, (0.0, math.inf))
    if law.within is not None:
        low, high = max(low, law.within[0]), min(high, law.within[1])
    return low, high


def check_tables(ctx: Context, study: Study, *, population: BoundPopulation) -> None:
    """Each table must cover every age (or time) a patient can live through within the horizon."""
    years = study.years_per_unit
    for key, clock, spec in hazards_in_use(study):
        if spec.kind != "table":
            continue
        low, high = 0.0, 0.0
        if clock.scale == "age":
            if not any(a.name == "age" for a in study.attributes):
                continue
            low, high = possible_range(population, "age")
            if math.isinf(high) and not spec.beyond:
                ctx.fault("attributes.age", "nothing bounds age, so no life table can cover it",
                          'Add within = [low, high], or beyond = "hold" to the hazard.')  # fmt: skip
                continue
        first, last = spec.edges[0] * years, spec.edges[-1] * years
        if low < first - 1e-9:
            found = f"{spec.file} starts at {first:g}, the youngest patient is {low:g}"
            remedy = "Add rows, or bound age with within." if clock.scale == "age" else "Start the table at 0."
            ctx.fault(f"{key}.table", "the table starts too late", remedy, value=found)
        if not spec.beyond and last < high + study.horizon * years - 1e-9:
            found = f"{spec.file} ends at {last:g} years, {high + study.horizon * years:g} can be reached"
            ctx.fault(
                f"{key}.table", "the table stops before the horizon", 'Add rows or set beyond = "hold".', value=found
            )


def names_in_formulas(study: Study) -> set[str]:
    """Inputs and coefficients that any formula or input reads."""
    formulas = [f for s in study.states for f in (s.start, s.utility, s.entry_qaly)]
    formulas += [f for s in study.states for f in (*s.costs.values(), *s.entry_costs.values())]
    formulas += [k.ratio for k in study.clocks]
    formulas += [f for _, _, h in hazards_in_use(study) for f in (h.params or {}).values()]
    formulas += [f for a in study.attributes if a.law for f in a.law.params.values()]
    for s in study.strategies:
        formulas += [*s.inputs.values(), *(d.formula for d in s.differences), *s.once.values()]
    nodes = [f.node for f in formulas] + [i.node for i in study.inputs]
    return {n.name for node in nodes for n in node.walk() if n.op == "input"}


def check_use_of_fits(ctx: Context, study: Study) -> None:
    """A fit used for another transition than its own is possible, but worth a warning; so is one nobody uses."""
    fits = {f.name: f for f in study.fits}
    used = set()
    for key, clock, spec in hazards_in_use(study):
        fit = fits.get(spec.fit)
        if fit is None:
            continue
        used.add(fit.name)
        if fit.source not in clock.sources or fit.target != clock.target:
            ctx.warnings.append(
                f"{key}: the fit {fit.name} is of {fit.source} to {fit.target}, "
                f"the clock leads from {', '.join(clock.sources)} to {clock.target}"
            )
    read = names_in_formulas(study)
    for f in study.fits:
        for c in f.coefficients:
            if c not in read:
                where = f"fits.{f.name}.covariates.{c}"
                ctx.warnings.append(
                    f"{where}: no formula uses {c}, so its covariate counts as 0 wherever the fit is used"
                )
    for name in fits:
        if name not in used:
            ctx.warnings.append(f"fits.{name}: no clock uses this fit as its hazard")
