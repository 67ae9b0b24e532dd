"""[strategies] -> the differences of each strategy from the base, parsed and checked against what they change.

Strategies share patients, states, targets and time scales; only amounts, effects and hazards differ.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping

from microsim.study.context import Context
from microsim.study.dimensions import MONEY, MONEY_PER_TIME, PLAIN, Dim
from microsim.study.formula import Formula, nearest
from microsim.study.parts import Attribute, Clock, Difference, HazardSpec, Input, State, Strategy
from microsim.study.read_hazards import HazardReader
from microsim.study.read_pathway import FLOW_REMEDY, LUMP_REMEDY, check_name, parse_costs
from microsim.study.schema import Change, Expression, HazardTable, StateChange, StrategyTable


def parse_strategies(
    ctx: Context,
    tables: Mapping[str, StrategyTable],
    *,
    states: tuple[State, ...],
    clocks: tuple[Clock, ...],
    hazards: HazardReader,
) -> tuple[Strategy, ...]:
    """All strategies, in order."""
    if len(tables) < 2 and "strategies" not in ctx.silenced:
        ctx.fault(
            "strategies",
            "there is nothing to compare",
            "Give at least two strategies.",
            value=f"{len(tables)} strategy",
        )
    by_state, by_clock = {s.name: s for s in states}, {k.name: k for k in clocks}
    return tuple(
        _strategy(ctx, n, table=t, states=by_state, clocks=by_clock, hazards=hazards) for n, t in tables.items()
    )


def _strategy(
    ctx: Context,
    name: str,
    *,
    table: StrategyTable,
    states: Mapping[str, State],
    clocks: Mapping[str, Clock],
    hazards: HazardReader,
) -> Strategy:
    key = f"strategies.{name}"
    check_name(ctx, name, key=key, what="strategy")
    differences: list[Difference] = []
    replaced: dict[str, HazardSpec] = {}
    for state, change in table.states.items():
        if state not in states:
            ctx.fault(f"{key}.states.{state}", f"unknown state {state!r}", nearest(state, states))
        else:
            differences += _state_differences(ctx, f"{key}.states.{state}", state=states[state], change=change)
    for clock, changed in table.clocks.items():
        at = f"{key}.clocks.{clock}"
        if clock not in clocks:
            ctx.fault(at, f"unknown clock {clock!r}", nearest(clock, clocks))
            continue
        if changed.ratio is not None:
            differences += _difference(
                ctx, ("clocks", clock, "ratio"), value=changed.ratio, key=f"{at}.ratio", dim=PLAIN
            )
        if changed.hazard is not None:
            replaced[clock] = _hazard(ctx, f"{at}.hazard", clock=clocks[clock], hazards=hazards, table=changed.hazard)
    return Strategy(
        name, table.label or name, _overrides(ctx, f"{key}.inputs", inputs=table.inputs), tuple(differences), replaced,
        parse_costs(ctx, table.once.cost, key=f"{key}.once.cost", flow=False, memory=False),
    )  # fmt: skip


def _hazard(ctx: Context, key: str, *, clock: Clock, hazards: HazardReader, table: HazardTable) -> HazardSpec:
    spec = hazards.read(table, key, scale=clock.scale)
    if (spec.kind == "table") != (clock.hazard.kind == "table"):
        remedy = "Add a second clock and set the ratio of one of them to 0 in each strategy."
        ctx.fault(key, "a life table cannot be exchanged for another kind of hazard, nor the other way round", remedy)
    return spec


def _state_differences(ctx: Context, key: str, *, state: State, change: StateChange) -> Iterator[Difference]:
    base = ("states", state.name)
    if change.utility is not None:
        yield from _difference(ctx, (*base, "utility"), value=change.utility, key=f"{key}.utility", dim=PLAIN)
    if change.entry.qaly is not None:
        yield from _difference(
            ctx, (*base, "entry", "qaly"), value=change.entry.qaly, key=f"{key}.entry.qaly", dim=PLAIN
        )
    groups = (
        (("cost",), change.cost, state.costs, MONEY_PER_TIME, FLOW_REMEDY),
        (("entry", "cost"), change.entry.cost, state.entry_costs, MONEY, LUMP_REMEDY),
    )
    for where, costs, known, dim, remedy in groups:
        for category, value in costs.items():
            at = ".".join((key, *where, category))
            check_name(ctx, category, key=at, what="cost category")
            if isinstance(value, Change) and value.times is not None and category not in known:
                ctx.fault(f"{at}.times", f"the base has no cost {category} to multiply", nearest(category, known))
            yield from _difference(ctx, (*base, *where, category), value=value, key=at, dim=dim, remedy=remedy)


def _difference(
    ctx: Context, path: tuple[str, ...], *, value: Expression | Change, key: str, dim: Dim, remedy: str = ""
) -> Iterator[Difference]:
    if not isinstance(value, Change):
        yield Difference(path, "set", ctx.formula(value, key, dim=dim, remedy=remedy))
    elif (value.times is None) == (value.plus is None):
        ctx.fault(key, "a change is exactly one of times and plus", "Write for example { times = 0.8 }.")
    elif value.times is not None:
        yield Difference(path, "times", ctx.formula(value.times, f"{key}.times"))
    elif value.plus is not None:
        yield Difference(path, "plus", ctx.formula(value.plus, f"{key}.plus", dim=dim, remedy=remedy))


def _overrides(ctx: Context, key: str, *, inputs: Mapping[str, Expression]) -> dict[str, Formula]:
    known = {n: s for n, s in ctx.symbols.items() if s.op == "input"}
    out = {}
    for name, text in inputs.items():
        if name not in known:
            ctx.fault(f"{key}.{name}", f"unknown input {name!r}", nearest(name, known))
            continue
        out[name] = ctx.formula(text, f"{key}.{name}", dim=known[name].dim, memory=False,
                                remedy=f"The input {name} is {known[name].dim}.")  # fmt: skip
    return out


def check_shared_patients(
    ctx: Context,
    strategies: tuple[Strategy, ...],
    *,
    inputs: tuple[Input, ...],
    attributes: tuple[Attribute, ...],
    states: tuple[State, ...],
) -> None:
    """Strategies are compared on the same patients, so none may change an input that describes them."""
    shaping: dict[str, str] = {}
    for a in attributes:
        for f in a.law.params.values() if a.law else ():
            shaping.update(dict.fromkeys(_inputs_of(f), f"attributes.{a.name}"))
    for s in states:
        shaping.update(dict.fromkeys(_inputs_of(s.start), f"states.{s.name}.start"))
    for i in reversed(inputs):
        if i.name in shaping:
            shaping.update({n.name: shaping[i.name] for n in i.node.walk() if n.op == "input"})
    for strategy in strategies:
        for name in strategy.inputs:
            if name in shaping:
                problem = f"{name} describes the patients ({shaping[name]}), who are the same under every strategy"
                ctx.fault(f"strategies.{strategy.name}.inputs.{name}", problem, "Use an input of its own.")


def _inputs_of(formula: Formula) -> list[str]:
    return [n.name for n in formula.node.walk() if n.op == "input"]
