"""Study + fits + overrides -> BoundStudy: every formula folded, every hazard in study time units.

Cheap: the study was parsed once, here numbers are put in. Impossible numbers are refused together as InputError.
"""

from __future__ import annotations

import functools
import itertools
import math
from collections.abc import Mapping
from typing import Protocol

from microsim.errors import FaultList
from microsim.hazards.core import Hazard
from microsim.study.bind_people import bind_population
from microsim.study.bound import BoundArm, BoundClock, BoundState, BoundStudy
from microsim.study.context import STUDY_FILE
from microsim.study.expression import Node, const, evaluate
from microsim.study.formula import Formula, nearest
from microsim.study.numbers import Numbers
from microsim.study.parts import Clock, Difference, Input, State, Strategy, Study
from microsim.study.read_inputs import resolve


class FittedHazard(Protocol):
    """What a fit gives: hazard in study time units, coefficients by name."""

    @property
    def hazard(self) -> Hazard: ...
    @property
    def coefficients(self) -> Mapping[str, float]: ...


def bind(
    study: Study, fits: Mapping[str, FittedHazard] | None = None, *, overrides: Mapping[str, float] | None = None
) -> BoundStudy:
    """Put numbers into a study.

    fits: fit name -> hazard (already in study time units) and coefficients; all fits of the study are needed.
    overrides: input or coefficient name -> value in study units. Raises InputError with every impossible number.
    """
    faults = FaultList()
    hazards, given = _from_fits(study, fits or {}, faults=faults)
    known = {*study.input_names, *(c for f in study.fits for c in f.coefficients)}
    for name, value in (overrides or {}).items():
        if name not in known:
            faults.add(study.inputs_file, name, f"unknown input {name!r}", nearest(name, known))
        given[name] = float(value)
    for name, value in given.items():
        if not math.isfinite(value):
            faults.add(study.inputs_file, name, "the value is not a finite number", "Correct it.", value=value)
    faults.raise_if_any()
    bound = assemble(study, given, hazards=hazards, faults=faults, partial=False)
    faults.raise_if_any()
    return bound


def _from_fits(
    study: Study, fits: Mapping[str, FittedHazard], *, faults: FaultList
) -> tuple[dict[str, Hazard], dict[str, float]]:
    """Hazards by fit, and values of all coefficients."""
    hazards: dict[str, Hazard] = {}
    given: dict[str, float] = {}
    for f in study.fits:
        key, fit = f"fits.{f.name}", fits.get(f.name)
        missing = [c for c in f.coefficients if fit is not None and c not in fit.coefficients]
        if fit is None or missing:
            problem = "the fit has not been made" if fit is None else f"the fit lacks {', '.join(missing)}"
            faults.add(STUDY_FILE, key, problem, "Fit the data before binding.", where=study.lines.where(key))
            continue
        hazards[f.name] = fit.hazard
        given.update({c: float(fit.coefficients[c]) for c in f.coefficients})
    return hazards, given


def check_numbers(study: Study, faults: FaultList) -> BoundStudy:
    """Everything that can be computed before fits exist; faults are added, the result only serves further checks."""
    return assemble(study, {}, hazards={}, faults=faults, partial=True)


def assemble(
    study: Study, given: Mapping[str, float], *, hazards: Mapping[str, Hazard], faults: FaultList, partial: bool
) -> BoundStudy:
    """Fold everything. given: replaced inputs and coefficients; hazards: by fit."""
    values = resolve(study.inputs, given)
    check_input_values(study.inputs, values, file=study.inputs_file, faults=faults)
    base = Numbers(values, faults, study.lines, partial)
    starts = {s.name: base.number(s.start, f"states.{s.name}.start") for s in study.states}
    _check_starts(base, starts)
    return BoundStudy(
        title=study.title, invented=study.text.invented, time_unit=study.time_unit, years_per_unit=study.years_per_unit,
        horizon=study.horizon, currency=study.text.currency, categories=study.categories,
        population=bind_population(study, base),
        arms=tuple(_arm(study, s, base=base, given=given, hazards=hazards, starts=starts) for s in study.strategies),
        discounting=study.discounting, decision=study.decision, cohort=study.cohort, inputs=values,
    )  # fmt: skip


def check_input_values(
    inputs: tuple[Input, ...], values: Mapping[str, float], *, file: str, faults: FaultList, under: str = ""
) -> None:
    """Values must be finite and within what their unit allows. A fault in the text itself has been told already."""
    for i in inputs:
        if i.name not in values or (i.node.is_const and math.isnan(i.node.value)):
            continue
        v = values[i.name]
        problem = ""
        if not math.isfinite(v):
            inherited = any(n.op == "input" and not math.isfinite(values[n.name]) for n in i.node.walk())
            problem = "" if inherited else "the value is not a finite number"
        elif i.unit == "probability" and not 0 <= v <= 1:
            problem = "a probability lies in [0, 1]"
        elif i.unit == "utility" and v > 1:
            problem = "a utility is at most 1"
        if problem:
            faults.add(
                file, i.name, problem + under, "Correct the value or its unit.", value=f"{v:g}", where=f"row {i.row}"
            )


def _check_starts(base: Numbers, starts: Mapping[str, float]) -> None:
    for name, p in starts.items():
        if not 0 <= p <= 1 and not math.isnan(p):
            base.fault(f"states.{name}.start", "a start probability lies in [0, 1]", "Correct it.", value=f"{p:g}")
    total = math.fsum(starts.values())
    if starts and total != 0 and abs(total - 1) > 1e-9:
        found = ", ".join(f"{n} {p:g}" for n, p in starts.items() if p)
        base.fault("states", f"start probabilities sum to {total:g}, not 1", "Correct them.", value=found)


def _arm(
    study: Study,
    strategy: Strategy,
    *,
    base: Numbers,
    given: Mapping[str, float],
    hazards: Mapping[str, Hazard],
    starts: Mapping[str, float],
) -> BoundArm:
    key = f"strategies.{strategy.name}"
    arm = base
    if strategy.inputs:
        own = {n: base.number(f, f"{key}.inputs.{n}") for n, f in strategy.inputs.items()}
        known = {n: v for n, v in own.items() if not math.isnan(v)}
        unknown = set(own) - set(known)
        inputs = tuple(i for i in study.inputs if i.name not in unknown)
        arm = Numbers(resolve(inputs, {**given, **known}), base.faults, study.lines, base.partial)
        changed = tuple(i for i in inputs if arm.values.get(i.name) != base.values.get(i.name))
        under = f" (under strategy {strategy.name})"
        check_input_values(changed, arm.values, file=study.inputs_file, faults=base.faults, under=under)
    changes = {d.path: d for d in strategy.differences}
    changer = _Changer(arm, key, changes)
    levels = {a.name: len(a.levels) for a in study.attributes}
    return BoundArm(
        strategy.name, strategy.label,
        tuple(_state(s, changer, start=starts[s.name], levels=levels) for s in study.states),
        tuple(_clock(k, strategy, changer=changer, hazards=hazards) for k in study.clocks),
        {c: arm.number(f, f"{key}.once.cost.{c}") for c, f in strategy.once.items()},
    )  # fmt: skip


class _Changer:
    """Applies a strategy's differences to base formulas and folds the result."""

    def __init__(self, numbers: Numbers, key: str, changes: Mapping[tuple[str, ...], Difference]) -> None:
        self.numbers, self.key, self.changes = numbers, key, changes

    def key_of(self, path: tuple[str, ...]) -> str:
        return ".".join((self.key, *path) if path in self.changes else path)

    def formula(self, path: tuple[str, ...], base: Formula | None) -> Node:
        change = self.changes.get(path)
        if change is None:
            assert base is not None
            return self.numbers.folded(base.node, ".".join(path), text=base.text)
        node, text = change.formula.node, change.formula.text
        if change.how != "set":
            op, sign = ("mul", "*") if change.how == "times" else ("add", "+")
            node = Node(op, (const(0.0) if base is None else base.node, node))
            text = f"({base.text if base else 0}) {sign} ({text})" if text and (base is None or base.text) else ""
        return self.numbers.folded(node, self.key_of(path), text=text)

    def costs(self, path: tuple[str, ...], base: Mapping[str, Formula]) -> dict[str, Node]:
        added = [p[-1] for p in self.changes if p[:-1] == path and p[-1] not in base]
        return {c: self.formula((*path, c), base.get(c)) for c in (*base, *added)}


def _state(s: State, changer: _Changer, *, start: float, levels: Mapping[str, int]) -> BoundState:
    here = ("states", s.name)
    utility = changer.formula((*here, "utility"), s.utility)
    for value in values_at_first_entry(utility, state=s.name, levels=levels):
        if value > 1:
            key = changer.key_of((*here, "utility"))
            changer.numbers.fault(
                key, "a utility is at most 1", "Correct the formula or its inputs.", value=f"{value:g}"
            )
    return BoundState(
        name=s.name, start=start, absorbing=s.absorbing, dead=s.dead, utility=utility,
        costs=changer.costs((*here, "cost"), s.costs),
        entry_costs=changer.costs((*here, "entry", "cost"), s.entry_costs),
        entry_qaly=changer.formula((*here, "entry", "qaly"), s.entry_qaly), label=s.label,
    )  # fmt: skip


def _clock(k: Clock, strategy: Strategy, *, changer: _Changer, hazards: Mapping[str, Hazard]) -> BoundClock:
    path = ("clocks", k.name, "ratio")
    ratio = changer.formula(path, k.ratio)
    if ratio.is_const and ratio.value < 0:
        changer.numbers.fault(
            changer.key_of(path), "a ratio cannot be negative", "Correct it.", value=f"{ratio.value:g}"
        )
    own = strategy.hazards.get(k.name)
    key = f"clocks.{k.name}.hazard" if own is None else f"strategies.{strategy.name}.clocks.{k.name}.hazard"
    hazard = changer.numbers.hazard(own or k.hazard, key, fits=hazards)
    return BoundClock(k.name, k.sources, k.target, k.scale, hazard, ratio, k.background, k.label)


def values_at_first_entry(node: Node, *, state: str, levels: Mapping[str, int]) -> list[float]:
    """Values of a formula for a patient who starts in the state, one per combination of categories.

    Empty where the formula reads something else that differs between patients, or an unknown input.
    """
    if node.is_const:
        return [node.value] if math.isfinite(node.value) else []
    leaves = [n for n in node.walk() if n.op in ("attribute", "memory", "input")]
    numeric = any(n.op == "attribute" and not levels.get(n.name) for n in leaves)
    if numeric or any(n.op == "input" or (n.of == "age" and n.name == "at_entry") for n in leaves):
        return []
    names = sorted({n.name for n in leaves if n.op == "attribute"})
    combinations = itertools.islice(itertools.product(*(range(levels[n]) for n in names)), 64)
    out = []
    for codes in combinations:
        code = dict(zip(names, codes, strict=True))
        out.append(float(evaluate(node, functools.partial(_at_first_entry, state=state, code=code))))
    return out


def _at_first_entry(node: Node, *, state: str, code: Mapping[str, int]) -> float:
    """Attribute code, or memory of a patient who has just started in ``state``."""
    if node.op == "attribute":
        return float(code[node.name])
    if node.name == "visits":
        return float(node.of == state)
    if node.name in ("since_entry", "since_exit"):
        return 0.0 if node.name == "since_entry" and node.of == state else math.inf
    return 0.0
