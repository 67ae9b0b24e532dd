"""Small invented pathways that between them use everything a study can ask of an engine, one theme each."""

from __future__ import annotations

import math
from dataclasses import replace

from bound_builder import ONE, attribute, clock, hazard, memory, op, state, study

from microsim.hazards.core import Hazard
from microsim.study.bound import BoundAttribute, BoundPopulation, BoundState, BoundStudy, Discounting, Law
from microsim.study.expression import Node, const

AGE = BoundAttribute("age", Law("normal", {"mean": 70.0, "sd": 8.0}, within=(45.0, 95.0)))
SEX = BoundAttribute("sex", Law("choice", {"p0": 0.4, "p1": 0.6}), levels=("female", "male"))


def _times(*factors: Node | float) -> Node:
    product = op("mul", factors[0], factors[1])
    for factor in factors[2:]:
        product = op("mul", product, factor)
    return product


def life_table(*, per_unit: float = 1.0) -> Hazard:
    """Invented rates by year of age and sex, rising about 9 % a year; ``per_unit``: years in one study time unit."""
    ages = range(40, 101)
    edges = tuple(a / per_unit for a in ages)
    rates = tuple(tuple(level * math.exp(0.09 * (a - 40)) * per_unit for a in ages[:-1]) for level in (0.001, 0.0016))
    return Hazard("table", by="sex", edges=edges, rates=rates)


def _sick(utility: float) -> tuple[BoundState, ...]:
    return (
        state("Well", start=1.0, utility=const(utility), costs={"care": const(300.0)}),
        state("Sick", utility=const(0.5), costs={"care": const(2000.0)}, entry_costs={"bed": const(1500.0)}),
        state("Dead", absorbing=True),
    )


def _families_on_sojourn() -> BoundStudy:
    """Five families race on the sojourn clock; all but one return, so every threshold is interrupted many times."""
    names = ("Weibull", "Gompertz", "Lognormal", "Loglogistic")
    states = (
        state("Base", start=1.0, utility=const(0.8)),
        *(state(n, utility=const(0.6), costs={"care": const(100.0)}) for n in names),
        state("Dead", absorbing=True),
    )
    families = (
        hazard("weibull", shape=0.7, scale=2.0),
        hazard("gompertz", shape=0.2, rate=0.1),
        hazard("lognormal", meanlog=0.5, sdlog=0.9),
        hazard("loglogistic", shape=1.8, scale=3.0),
    )
    clocks = [clock(f"to_{n}", "Base", n, f) for n, f in zip(names, families, strict=True)]
    clocks += [clock(f"from_{n}", n, "Base", f) for n, f in zip(names, families[::-1], strict=True)]
    clocks.append(clock("death", ("Base", *names), "Dead", hazard("exponential", rate=0.05)))
    return study((states, clocks))


def _families_on_elapsed() -> BoundStudy:
    states = (*_sick(0.9)[:2], state("Worse", utility=const(0.2)), state("Dead", absorbing=True))
    clocks = (
        clock("falls_ill", "Well", "Sick", hazard("weibull", shape=1.6, scale=9.0), scale="elapsed"),
        clock("recovers", "Sick", "Well", hazard("loglogistic", shape=1.3, scale=2.0), scale="elapsed"),
        clock("worsens", ("Well", "Sick"), "Worse", hazard("lognormal", meanlog=2.2, sdlog=0.7), scale="elapsed"),
        clock("eases", "Worse", "Sick", hazard("exponential", rate=0.8), scale="elapsed"),
        clock("death", ("Well", "Sick", "Worse"), "Dead", hazard("gompertz", shape=0.12, rate=0.01), scale="elapsed"),
    )
    return study((states, clocks))


def _families_on_age() -> BoundStudy:
    """Attained age drives everything; also one arm beside another, with different ratios."""

    def clocks(effect: float) -> tuple[object, ...]:
        return (
            clock("falls_ill", "Well", "Sick", hazard("weibull", shape=4.0, scale=74.0), scale="age", ratio=const(effect)),
            clock("relapse", "Well", "Sick", hazard("loglogistic", shape=5.0, scale=80.0), scale="age"),
            clock("recovers", "Sick", "Well", hazard("lognormal", meanlog=4.1, sdlog=0.3), scale="age", ratio=const(4.0)),
            clock("death", ("Well", "Sick"), "Dead", hazard("gompertz", shape=0.1, rate=2e-5), scale="age",
                  background=True),
            clock("other_death", ("Well", "Sick"), "Dead", hazard("exponential", rate=0.01), scale="age"),
        )  # fmt: skip

    arms = [(_sick(0.9), clocks(effect)) for effect in (1.0, 0.6)]
    return study(*arms, attributes=(AGE,), once=({}, {"care": 5000.0}))  # type: ignore[arg-type]


def _table_by_sex() -> BoundStudy:
    """Background mortality by age and sex beside disease mortality, with a second table on the sojourn clock."""
    stay = Hazard("table", edges=(0.0, 0.25, 0.5, 1.0), rates=((0.1, 3.0, 0.0),))
    late = Hazard("table", edges=(0.5, 1.0, 3.0), rates=((0.6, 0.2),))
    clocks = (
        clock("background", ("Well", "Sick"), "Dead", life_table(), scale="age", background=True),
        clock("admission", "Well", "Sick", late),
        clock("discharge", "Sick", "Well", stay),
        clock("long_stay", "Sick", "Well", hazard("exponential", rate=0.4)),
        clock("fatal", "Sick", "Dead", hazard("weibull", shape=0.5, scale=8.0)),
    )
    return study((_sick(0.85), clocks), attributes=(AGE, SEX))


def _every_memory_function() -> BoundStudy:
    """Ratios, utilities, flows and entry amounts that read each of the eight memory functions."""
    visits = op("min", memory("visits", "Sick"), 6.0)
    recent = op("exp", op("neg", op("min", memory("since_exit", "Sick"), 5.0)))
    since = op("exp", op("mul", -0.3, op("min", memory("since_entry", "Sick"), 9.0)))
    older = op("exp", op("mul", 0.02, op("sub", memory("at_entry", "age"), 70.0)))
    falls_ill = _times(op("exp", op("mul", 0.15, visits)), op("add", 1.0, recent), older)
    recovers = op("exp", op("neg", op("mul", 0.1, memory("time_in", "Sick"))))
    dies = op("add", op("mul", 0.2, memory("events")), op("where", memory("came_from", "Care"), 2.0, 1.0))
    states = (
        state("Home", start=1.0, utility=op("sub", 0.9, op("mul", 0.01, memory("visits", "Home"))),
              costs={"care": op("mul", 900.0, op("add", 1.0, since))},
              entry_costs={"visit": op("mul", 50.0, memory("last_stay", "Sick"))}),
        state("Sick", utility=op("max", 0.1, op("sub", 0.6, op("mul", 0.05, memory("time_in", "Home")))),
              entry_qaly=op("mul", -0.01, visits)),
        state("Care", utility=const(0.4), costs={"care": op("mul", 10.0, memory("at_entry", "elapsed"))}),
        state("Dead", absorbing=True),
    )  # fmt: skip
    clocks = (
        clock("falls_ill", ("Home", "Care"), "Sick", hazard("weibull", shape=0.8, scale=3.0), ratio=falls_ill),
        clock("recovers", "Sick", "Home", hazard("lognormal", meanlog=-1.5, sdlog=1.0), ratio=recovers),
        clock("moves", ("Home", "Sick"), "Care", hazard("exponential", rate=0.2),
              ratio=op("add", 0.2, op("mul", 2.0, op("lt", memory("last_stay", "Home"), 1.0)))),
        clock("death", ("Home", "Sick", "Care"), "Dead", hazard("exponential", rate=0.03), ratio=dies),
    )  # fmt: skip
    return study((states, clocks), attributes=(AGE,))


def _self_transition() -> BoundStudy:
    """An attack leaves and re-enters the same state; memory counts it; two clocks lead to one death."""
    attacks = op("add", 1.0, op("mul", 0.2, op("min", memory("visits", "Ill"), 10.0)))
    again = op("where", memory("came_from", "Ill"), 1.5, 1.0)
    states = (
        state("Ill", start=1.0, utility=op("sub", 0.8, op("mul", 0.01, memory("visits", "Ill"))),
              entry_costs={"attack": const(700.0)}, entry_qaly=const(-0.02)),
        state("Dead", absorbing=True),
    )  # fmt: skip
    clocks = (
        clock("attack", "Ill", "Ill", hazard("weibull", shape=1.3, scale=2.5), ratio=attacks),
        clock("attack_death", "Ill", "Dead", hazard("loglogistic", shape=2.0, scale=12.0), ratio=again),
        clock("other_death", "Ill", "Dead", hazard("gompertz", shape=0.09, rate=1e-4), scale="age"),
    )
    return study((states, clocks), attributes=(AGE,))


def _correlated_people() -> BoundStudy:
    """Every law, truncated and not, joined by a Gaussian copula, all of them read by a ratio or a reward."""
    attributes = (
        AGE,
        BoundAttribute("severity", Law("lognormal", {"meanlog": 0.0, "sdlog": 0.5}, within=(0.3, 3.0))),
        BoundAttribute("weight", Law("gamma", {"shape": 9.0, "rate": 9.0}, within=(0.4, 2.5))),
        BoundAttribute("share", Law("beta", {"a": 2.0, "b": 5.0}, within=(0.05, 0.9))),
        BoundAttribute("score", Law("uniform", {"low": -1.0, "high": 1.0}, within=(-0.8, 2.0))),
        SEX,
        BoundAttribute("fixed", Law("constant", {"value": 1.25})),
    )
    n = len(attributes)
    correlation = [[1.0 if i == j else 0.3 * 0.8 ** abs(i - j) for j in range(n - 1)] + [0.0] for i in range(n - 1)]
    people = BoundPopulation(attributes, tuple(map(tuple, [*correlation, [0.0] * (n - 1) + [1.0]])))
    sick = _times(attribute("severity"), attribute("weight"), op("exp", op("mul", 0.4, attribute("score"))))
    cured = op("mul", attribute("fixed"), op("where", op("eq", attribute("sex"), 1.0), 0.5, 1.0))
    states = list(_sick(0.9))
    states[0] = replace(states[0], utility=op("sub", 1.0, op("mul", 0.5, attribute("share"))))
    clocks = (
        clock("falls_ill", "Well", "Sick", hazard("exponential", rate=0.5), ratio=sick),
        clock("recovers", "Sick", "Well", hazard("weibull", shape=1.2, scale=0.7), ratio=cured),
        clock("death", ("Well", "Sick"), "Dead", life_table(), scale="age", background=True),
    )
    return study((states, clocks), population=people)


def _resampled_people() -> BoundStudy:
    """Age and sex from rows, one attribute from a law beside them."""
    rows = {
        "age": (48.2, 55.0, 61.5, 66.0, 70.1, 74.9, 81.3, 88.8),
        "sex": (0.0, 1.0, 1.0, 0.0, 1.0, 0.0, 0.0, 1.0),
    }
    attributes = (
        BoundAttribute("age", None),
        BoundAttribute("sex", None, levels=("female", "male")),
        BoundAttribute("frailty", Law("gamma", {"shape": 4.0, "rate": 4.0})),
    )
    clocks = (
        clock("falls_ill", "Well", "Sick", hazard("lognormal", meanlog=1.0, sdlog=0.8), ratio=attribute("frailty")),
        clock("recovers", "Sick", "Well", hazard("exponential", rate=2.0)),
        clock("death", ("Well", "Sick"), "Dead", life_table(), scale="age", background=True),
    )
    return study((_sick(0.9), clocks), population=BoundPopulation(attributes, rows=rows))


def _absorbing_with_rewards() -> BoundStudy:
    """Cured people live on with utility and cost; the dead cost money; one dead state is worth nothing."""
    states = (
        state("Ill", start=1.0, utility=const(0.6), costs={"care": const(4000.0)}),
        state("Cured", absorbing=True, dead=False, utility=op("sub", 0.95, op("mul", 0.01, memory("events"))),
              costs={"care": op("mul", 20.0, memory("time_in", "Ill"))}, entry_costs={"cure": const(900.0)}),
        state("Survived", absorbing=True, dead=False),
        state("Buried", absorbing=True, costs={"grave": const(30.0)}, entry_costs={"grave": const(6000.0)},
              entry_qaly=op("mul", -0.1, memory("visits", "Ill"))),
        state("Dead", absorbing=True),
    )  # fmt: skip
    clocks = (
        clock("relapse", "Ill", "Ill", hazard("exponential", rate=0.6)),
        clock("cure", "Ill", "Cured", hazard("weibull", shape=1.5, scale=8.0)),
        clock("survival", "Ill", "Survived", hazard("exponential", rate=0.05)),
        clock("burial", "Ill", "Buried", hazard("gompertz", shape=0.1, rate=0.04)),
        clock("death", "Ill", "Dead", hazard("loglogistic", shape=1.5, scale=9.0)),
    )
    return study((states, clocks), discounting=Discounting(0.03, 0.015))


def _annual_steps() -> BoundStudy:
    entry = {"bed": op("mul", 100.0, op("add", 1.0, memory("visits", "Sick")))}
    states = list(_sick(0.9))
    states[1] = replace(states[1], entry_costs=entry, entry_qaly=op("mul", -0.01, memory("events")))
    clocks = (
        clock("falls_ill", "Well", "Sick", hazard("weibull", shape=0.9, scale=3.0)),
        clock("recovers", "Sick", "Well", hazard("weibull", shape=1.1, scale=0.6)),
        clock("death", ("Well", "Sick"), "Dead", hazard("exponential", rate=0.06)),
    )
    return study((states, clocks), discounting=Discounting(0.04, 0.015, method="annual"), once=({"bed": 12.0}, {}))


def _months() -> BoundStudy:
    """Study time in months: ages convert, utilities are per year, costs per month, discounting per year."""
    clocks = (
        clock("falls_ill", "Well", "Sick", hazard("lognormal", meanlog=2.5, sdlog=1.0),
              ratio=op("exp", op("mul", 0.001, op("sub", memory("at_entry", "age"), 840.0)))),
        clock("recovers", "Sick", "Well", hazard("gompertz", shape=-0.05, rate=0.6)),
        clock("death", ("Well", "Sick"), "Dead", life_table(per_unit=1 / 12), scale="age", background=True),
        clock("cardiac", ("Well", "Sick"), "Dead", hazard("gompertz", shape=0.008, rate=1e-6), scale="age"),
    )  # fmt: skip
    made = study(
        (_sick(0.9), clocks), horizon=360.0, years_per_unit=1 / 12, attributes=(AGE, SEX), cycle=1.0,
        discounting=Discounting(0.035, 0.015),
    )  # fmt: skip
    return replace(made, time_unit="month")


def _months_in_annual_steps() -> BoundStudy:
    return replace(_months(), discounting=Discounting(0.035, 0.015, method="annual"))


def _split_start() -> BoundStudy:
    """Three first states, one of them without clocks; entry amounts must not count at the start."""
    states = (
        state("Early", start=0.45, utility=const(0.8), entry_costs={"entry": const(500.0)}, entry_qaly=const(-0.1)),
        state("Late", start=0.45, utility=op("sub", 0.7, op("mul", 0.1, memory("came_from", "Early"))),
              entry_costs={"entry": op("mul", 100.0, memory("visits", "Late"))}),
        state("Gone", start=0.1, absorbing=True, dead=False, utility=const(0.3)),
        state("Dead", absorbing=True),
    )  # fmt: skip
    clocks = (
        clock("worse", "Early", "Late", hazard("weibull", shape=1.4, scale=4.0)),
        clock("better", "Late", "Early", hazard("loglogistic", shape=2.0, scale=2.0),
              ratio=op("min", memory("since_entry", "Early"), 2.0)),
        clock("death", ("Early", "Late"), "Dead", hazard("exponential", rate=0.1)),
        clock("leaves", "Late", "Gone", hazard("exponential", rate=0.05)),
    )  # fmt: skip
    return study((states, clocks), discounting=Discounting(0.0, 0.035))


def _ratio_zero_for_some() -> BoundStudy:
    """Each family is switched off by a ratio of zero for half the patients, and at first for everybody."""
    on = op("and", op("eq", attribute("sex"), 1.0), op("ge", memory("visits", "Well"), 2.0))
    families = (
        hazard("exponential", rate=0.2), hazard("weibull", shape=0.8, scale=4.0),
        hazard("gompertz", shape=0.1, rate=0.1), hazard("gompertz", shape=-0.1, rate=0.2),
        hazard("lognormal", meanlog=1.0, sdlog=0.8), hazard("loglogistic", shape=1.4, scale=3.0),
    )  # fmt: skip
    clocks = [
        clock(f"kind_{i}", "Well", "Sick", f, ratio=on, scale=("sojourn", "elapsed")[i % 2])
        for i, f in enumerate(families)
    ]
    clocks += [
        clock("always", "Well", "Sick", hazard("exponential", rate=0.3)),
        clock("recovers", "Sick", "Well", hazard("exponential", rate=3.0)),
        clock("death", ("Well", "Sick"), "Dead", life_table(), scale="age", ratio=op("ne", attribute("sex"), 0.0)),
    ]
    return study((_sick(0.9), clocks), attributes=(AGE, SEX))


def _never_fires() -> BoundStudy:
    """Gompertz of negative shape on every scale: some thresholds are beyond the whole hazard."""
    states = (*_sick(0.9)[:2], state("Spared", utility=ONE), state("Dead", absorbing=True))
    clocks = (
        clock("falls_ill", "Well", "Sick", hazard("gompertz", shape=-0.4, rate=0.3)),
        clock("spared", ("Well", "Sick"), "Spared", hazard("gompertz", shape=-0.2, rate=0.1), scale="elapsed"),
        clock("recovers", "Sick", "Well", hazard("gompertz", shape=-1.0, rate=2.0)),
        clock("death", ("Well", "Sick", "Spared"), "Dead", hazard("gompertz", shape=-0.03, rate=0.4), scale="age"),
    )
    return study((states, clocks), attributes=(AGE,))


PATHWAYS: dict[str, BoundStudy] = {
    "families on sojourn time": _families_on_sojourn(),
    "families on elapsed time": _families_on_elapsed(),
    "families on attained age": _families_on_age(),
    "life table by sex": _table_by_sex(),
    "every memory function": _every_memory_function(),
    "self transition": _self_transition(),
    "correlated people": _correlated_people(),
    "resampled people": _resampled_people(),
    "absorbing with rewards": _absorbing_with_rewards(),
    "annual steps": _annual_steps(),
    "months": _months(),
    "months in annual steps": _months_in_annual_steps(),
    "split start": _split_start(),
    "ratio zero for some": _ratio_zero_for_some(),
    "never fires": _never_fires(),
}
