"""[states] and [clocks] -> parsed states and clocks, and the checks on the graph they form.

Formulas are parsed against the names declared before; numbers are not looked at here.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping

from microsim.study.context import Context
from microsim.study.dimensions import MONEY, MONEY_PER_TIME
from microsim.study.expression import const
from microsim.study.formula import Formula, name_problem, nearest
from microsim.study.parts import Clock, State
from microsim.study.read_hazards import HazardReader
from microsim.study.schema import ClockTable, Expression, StateTable

ZERO = Formula("0", const(0.0), None)
ONE = Formula("1", const(1.0), None)
FLOW_REMEDY = "A cost of a state is money per time: give its inputs a unit such as EUR/year."
UTILITY_REMEDY = "A utility is QALYs per year of life: give its inputs the unit utility."
LUMP_REMEDY = "A one-off cost is money: give its inputs the unit of the currency."


def parse_states(ctx: Context, tables: Mapping[str, StateTable]) -> tuple[State, ...]:
    """States in order; unsaid keys go to the list of defaults."""
    return tuple(_state(ctx, name, table=table) for name, table in tables.items())


def _state(ctx: Context, name: str, *, table: StateTable) -> State:
    key = f"states.{name}"
    dead = table.dead if table.dead is not None else table.absorbing
    if table.dead is None and table.absorbing:
        ctx.default(f"{key}.dead", "true")
    if dead and not table.absorbing:
        ctx.fault(f"{key}.dead", "a dead state must be absorbing", "Add absorbing = true or remove dead.")
    if table.utility is not None:
        utility = ctx.formula(table.utility, f"{key}.utility", remedy=UTILITY_REMEDY)
    else:
        utility = ZERO
        if dead:
            ctx.default(f"{key}.utility", "0")
        else:
            ctx.fault(
                f"{key}.utility", "the state has no utility", "Give QALYs per year of life, as number or formula."
            )
    return State(
        name, table.label or name, _start(ctx, f"{key}.start", value=table.start), table.absorbing, dead, utility,
        parse_costs(ctx, table.cost, key=f"{key}.cost", flow=True),
        parse_costs(ctx, table.entry.cost, key=f"{key}.entry.cost", flow=False),
        ZERO if table.entry.qaly is None else ctx.formula(table.entry.qaly, f"{key}.entry.qaly"),
    )  # fmt: skip


def _start(ctx: Context, key: str, *, value: bool | Expression) -> Formula:
    if isinstance(value, bool):
        return ONE if value else ZERO
    return ctx.formula(value, key, memory=False)


def parse_costs(
    ctx: Context, costs: Mapping[str, Expression], *, key: str, flow: bool, memory: bool = True
) -> dict[str, Formula]:
    """Category -> formula; flows are money per time, the others money."""
    out = {}
    for category, text in costs.items():
        check_name(ctx, category, key=f"{key}.{category}", what="cost category")
        dim, remedy = (MONEY_PER_TIME, FLOW_REMEDY) if flow else (MONEY, LUMP_REMEDY)
        out[category] = ctx.formula(text, f"{key}.{category}", dim=dim, memory=memory, remedy=remedy)
    return out


def check_name(ctx: Context, name: str, *, key: str, what: str) -> None:
    problem = name_problem(name)
    if problem:
        ctx.fault(key, f"the {what} {name!r} {problem}", "Choose another name.")


def parse_clocks(ctx: Context, tables: Mapping[str, ClockTable], *, hazards: HazardReader) -> tuple[Clock, ...]:
    """Clocks in order."""
    return tuple(_clock(ctx, name, table=table, hazards=hazards) for name, table in tables.items())


def _clock(ctx: Context, name: str, *, table: ClockTable, hazards: HazardReader) -> Clock:
    key = f"clocks.{name}"
    sources = tuple([table.from_] if isinstance(table.from_, str) else table.from_)
    for field, names in (("from", sources), ("to", (table.to,))):
        for state in names:
            if state not in ctx.states:
                ctx.fault(f"{key}.{field}", f"unknown state {state!r}", nearest(state, ctx.states))
    if not sources:
        ctx.fault(f"{key}.from", "no state is named", "Name one state or a list of them.")
    for state, n in Counter(sources).items():
        if n > 1:
            ctx.fault(f"{key}.from", f"{state} is named {n} times", "Name it once.")
    if table.time == "age" and table.hazard.table is None and "age" not in {a.name for a in hazards.attributes}:
        ctx.fault(f"{key}.time", "a clock on age needs an attribute named age", "Add [attributes.age].")
    background = table.background if table.background is not None else table.time == "age"
    for field, value in (("time", table.time), ("ratio", 1), ("background", str(background).lower())):
        if field not in table.model_fields_set:
            ctx.default(f"{key}.{field}", value)
    return Clock(
        name, table.label or name, sources, table.to, table.time,
        hazards.read(table.hazard, f"{key}.hazard", scale=table.time),
        ctx.formula(table.ratio, f"{key}.ratio"), background,
    )  # fmt: skip


def check_graph(ctx: Context, states: tuple[State, ...], *, clocks: tuple[Clock, ...]) -> None:
    """Dead ends, exits from absorbing states and states nobody can reach. A start by formula counts as possible."""
    if not states:
        ctx.fault("states", "the study has no states", "Add tables [states.<name>].")
        return
    exits = {s.name: [k for k in clocks if s.name in k.sources] for s in states}
    for s in states:
        if s.absorbing and exits[s.name]:
            names = ", ".join(k.name for k in exits[s.name])
            ctx.fault(f"states.{s.name}.absorbing", f"{s.name} is absorbing but has an exit", "Remove one of the two.",
                      value=f"clock {names}")  # fmt: skip
        elif not s.absorbing and not exits[s.name]:
            remedy = "Add a clock from it or set absorbing = true."
            ctx.fault(f"states.{s.name}", f"{s.name} has no exit and is not absorbing", remedy)
    for k in clocks:
        if k.target in k.sources:
            ctx.warnings.append(
                f"clocks.{k.name}: leads from {k.target} back to itself; each firing counts as an entry"
            )
    reached = {s.name for s in states if not (s.start.node.is_const and s.start.node.value == 0.0)}
    if not reached:
        ctx.fault("states", "no state has a start", "Set start = true in one state.")
        return
    for _ in states:
        reached |= {k.target for k in clocks if reached & set(k.sources)}
    for s in states:
        if s.name not in reached:
            ctx.fault(f"states.{s.name}", f"{s.name} cannot be reached", "Add a clock to it, or a start probability.")
