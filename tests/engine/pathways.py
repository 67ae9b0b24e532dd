"""Small invented pathways, each with a feature of the engine."""

from __future__ import annotations

import math

from bound_builder import ONE, attribute, clock, hazard, memory, op, state, study

from microsim.hazards.core import Hazard
from microsim.study.bound import BoundAttribute, BoundPopulation, BoundStudy, Discounting, Law
from microsim.study.expression import const

AGE = BoundAttribute("age", Law("normal", {"mean": 70.0, "sd": 8.0}, (50.0, 90.0)))
SEX = BoundAttribute("sex", Law("choice", {"p0": 0.4, "p1": 0.6}), ("female", "male"))
RATES = tuple(tuple(c * math.exp(0.09 * a) for a in range(40, 111)) for c in (3e-5, 5e-5))
TABLE = Hazard("table", by="sex", edges=tuple(float(a) for a in range(40, 112)), rates=RATES)


def ward(*, ratio=ONE, utility=const(0.7), back=None, extra=(), **options) -> BoundStudy:  # noqa: B008
    """Home and ward, with death by life table from both."""
    states = (
        state("Home", start=1.0, utility=utility, costs={"care": const(1500.0)}),
        state(
            "Ward",
            utility=const(0.4),
            costs={"bed": const(9e4)},
            entry_costs={"care": const(800.0)},
            entry_qaly=const(-0.01),
        ),
        state("Dead", absorbing=True),
    )
    clocks = (
        clock("in", "Home", "Ward", hazard("weibull", shape=0.7, scale=2.0), ratio=ratio),
        clock("out", "Ward", "Home", back or hazard("lognormal", meanlog=-3.0, sdlog=0.8)),
        clock("death", ("Home", "Ward"), "Dead", TABLE, scale="age", background=True, ratio=const(1.5)),
        *extra,
    )
    options.setdefault("attributes", (AGE, SEX))
    return study((states, clocks), (states, (clock("in", "Home", "Ward", hazard("weibull", shape=0.7, scale=2.0),
                 ratio=op("mul", ratio, 0.7)), *clocks[1:])), horizon=options.pop("horizon", 30.0), **options)  # fmt: skip


def two_ways(family: Hazard, scale: str) -> BoundStudy:
    """A family on a clock scale, interrupted by a fast competing loop so that thresholds are carried."""
    states = (state("A", start=1.0, utility=ONE), state("B", utility=const(0.5)), state("End", absorbing=True))
    clocks = (
        clock("x", "A", "End", family, scale=scale, ratio=op("where", op("gt", memory("visits", "A"), 2.0), 1.5, 0.5)),
        clock("y", ("A", "B"), "End", hazard("exponential", rate=0.02)),
        clock("go", "A", "B", hazard("weibull", shape=1.4, scale=1.5)),
        clock("come", "B", "A", hazard("loglogistic", shape=2.0, scale=0.5)),
    )
    return study((states, clocks), horizon=25.0, attributes=(AGE,))


def remembering() -> BoundStudy:
    """Every memory function in a ratio or a reward."""
    ratio = op(
        "exp",
        op("add", op("mul", 0.1, op("min", memory("visits", "Ward"), 6.0)), op("mul", -0.5, memory("time_in", "Ward"))),
    )
    late = op("where", op("lt", memory("since_exit", "Ward"), 0.5), 1.3, 1.0)
    recent = op("exp", op("neg", memory("since_entry", "Ward")))
    utility = op("sub", 0.8, op("add", op("mul", 0.02, memory("events")), op("mul", 0.1, recent)))
    costs = {"care": op("add", 1000.0, op("mul", 500.0, memory("came_from", "Ward")))}
    entry = {"fee": op("add", 100.0, op("mul", 2000.0, memory("last_stay", "Ward")))}
    older = op("exp", op("mul", 0.03, op("sub", memory("at_entry", "age"), 70.0)))
    states = (
        state(
            "Home",
            start=1.0,
            utility=utility,
            costs=costs,
            entry_costs=entry,
            entry_qaly=op("mul", -0.001, memory("at_entry", "elapsed")),
        ),
        state("Ward", utility=const(0.3), entry_qaly=op("mul", -0.002, memory("visits", "Ward"))),
        state("Dead", absorbing=True),
    )
    clocks = (
        clock("in", "Home", "Ward", hazard("weibull", shape=0.8, scale=1.2), ratio=op("mul", ratio, late)),
        clock("out", "Ward", "Home", hazard("lognormal", meanlog=-2.0, sdlog=0.7)),
        clock("death", ("Ward", "Home"), "Dead", hazard("exponential", rate=0.05), ratio=older),
    )
    return study((states, clocks), horizon=20.0, attributes=(AGE, SEX), discounting=Discounting(0.05, 0.015))


def odd() -> BoundStudy:
    """Two starts, a self-transition, an absorbing state worth something, some who never fire, start costs."""
    states = (
        state("A", start=0.3, utility=const(0.6), costs={"c": const(10.0)}),
        state("B", start=0.7, utility=const(0.8)),
        state(
            "Cured",
            absorbing=True,
            dead=False,
            utility=const(0.95),
            costs={"c": const(5.0)},
            entry_costs={"c": const(50.0)},
        ),
        state("Dead", absorbing=True, entry_costs={"c": const(300.0)}),
    )
    never = op("where", op("eq", attribute("sex"), 0.0), 0.0, 1.0)
    clocks = (
        clock("again", "A", "A", hazard("exponential", rate=0.5)),
        clock("ab", "A", "B", hazard("gompertz", shape=-0.3, rate=0.2)),
        clock("cure", ("A", "B"), "Cured", hazard("loglogistic", shape=1.5, scale=8.0), ratio=never),
        clock("die", ("B",), "Dead", hazard("gompertz", shape=0.08, rate=0.02), scale="elapsed"),
    )
    return study((states, clocks), horizon=15.0, attributes=(AGE, SEX), once=({"c": 123.0}, {}))


def resampled() -> BoundStudy:
    rows = {"age": (55.0, 60.0, 71.0, 80.0, 66.0), "sex": (0.0, 1.0, 1.0, 0.0, 1.0)}
    people = BoundPopulation((BoundAttribute("age", None), BoundAttribute("sex", None, ("female", "male"))), rows=rows)
    return ward(attributes=(), population=people)


def correlated() -> BoundStudy:
    people = BoundPopulation(
        (
            AGE,
            SEX,
            BoundAttribute("frailty", Law("gamma", {"shape": 2.0, "rate": 2.0})),
            BoundAttribute("s", Law("beta", {"a": 2.0, "b": 5.0})),
        ),
        correlation=((1.0, 0.0, 0.5, 0.1), (0.0, 1.0, 0.0, 0.0), (0.5, 0.0, 1.0, 0.2), (0.1, 0.0, 0.2, 1.0)),
    )
    return ward(attributes=(), population=people, ratio=op("mul", attribute("frailty"), op("exp", attribute("s"))))


FAMILIES = {
    "exponential": hazard("exponential", rate=0.1),
    "weibull": hazard("weibull", shape=1.8, scale=9.0),
    "gompertz": hazard("gompertz", shape=0.07, rate=0.002),
    "lognormal": hazard("lognormal", meanlog=2.0, sdlog=0.6),
    "loglogistic": hazard("loglogistic", shape=2.2, scale=12.0),
}
OLD = {
    **FAMILIES,
    "weibull": hazard("weibull", shape=6.0, scale=85.0),
    "lognormal": hazard("lognormal", meanlog=4.4, sdlog=0.15),
    "loglogistic": hazard("loglogistic", shape=9.0, scale=85.0),
    "gompertz": hazard("gompertz", shape=0.09, rate=4e-5),
}

PATHWAYS: dict[str, BoundStudy] = {
    "ward": ward(),
    "ward by month": ward(years_per_unit=1 / 12, horizon=300.0),
    "annual discounting": ward(discounting=Discounting(0.035, 0.015, "annual")),
    "no discounting of effects": ward(discounting=Discounting(0.035, 0.0)),
    "remembering": remembering(),
    "odd": odd(),
    "resampled": resampled(),
    "correlated": correlated(),
    **{f"{name} on {scale}": two_ways(f, scale) for scale in ("sojourn", "elapsed") for name, f in FAMILIES.items()},
    **{f"{name} on age": two_ways(f, "age") for name, f in OLD.items()},
}
