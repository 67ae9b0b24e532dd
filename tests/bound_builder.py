"""Small BoundStudy objects for tests of engines and cohorts, without files."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from microsim.hazards.core import Hazard
from microsim.study.bound import (
    BoundArm,
    BoundAttribute,
    BoundClock,
    BoundPopulation,
    BoundState,
    BoundStudy,
    CohortSettings,
    Decision,
    Discounting,
)  # fmt: skip
from microsim.study.expression import Node, const

ZERO = const(0.0)
ONE = const(1.0)


def op(name: str, *args: Node | float) -> Node:
    """An arithmetic node; plain numbers become constants."""
    return Node(name, tuple(a if isinstance(a, Node) else const(a) for a in args))


def memory(name: str, of: str = "") -> Node:
    return Node("memory", name=name, of=of)


def attribute(name: str) -> Node:
    return Node("attribute", name=name)


def hazard(family: str, **params: float) -> Hazard:
    return Hazard(family, params)


def state(
    name: str,
    *,
    start: float = 0.0,
    absorbing: bool = False,
    dead: bool | None = None,
    utility: Node = ZERO,
    costs: Mapping[str, Node] | None = None,
    entry_costs: Mapping[str, Node] | None = None,
    entry_qaly: Node = ZERO,
) -> BoundState:
    is_dead = absorbing if dead is None else dead
    return BoundState(name, start, absorbing, is_dead, utility, costs or {}, entry_costs or {}, entry_qaly)


def clock(
    name: str,
    sources: str | Sequence[str],
    target: str,
    family: Hazard,
    *,
    scale: str = "sojourn",
    ratio: Node = ONE,
    background: bool = False,
) -> BoundClock:
    froms = (sources,) if isinstance(sources, str) else tuple(sources)
    return BoundClock(name, froms, target, scale, family, ratio, background)


def study(
    *arms: tuple[Sequence[BoundState], Sequence[BoundClock]],
    horizon: float = 40.0,
    attributes: Sequence[BoundAttribute] = (),
    population: BoundPopulation | None = None,
    discounting: Discounting = Discounting(0.035, 0.035),  # noqa: B008
    years_per_unit: float = 1.0,
    once: Sequence[Mapping[str, float]] = (),
    cycle: float = 1 / 12,
    correction: str = "half-cycle",
    thresholds: tuple[float, ...] = (20_000.0,),
    share: float = 0.05,
    amount: float = 250.0,
) -> BoundStudy:
    """One arm is doubled, since a study compares at least two. Arms are named A, B, C, ..."""
    given = list(arms) if len(arms) > 1 else [arms[0], arms[0]]
    built = tuple(
        BoundArm("ABCDEFG"[i], "", tuple(s), tuple(k), once[i] if i < len(once) else {})
        for i, (s, k) in enumerate(given)
    )
    names: dict[str, None] = {}
    for arm in built:
        for s in arm.states:
            names |= dict.fromkeys([*s.costs, *s.entry_costs])
        names |= dict.fromkeys(arm.once)
    return BoundStudy(
        title="test",
        invented=True,
        time_unit="year",
        years_per_unit=years_per_unit,
        horizon=horizon,
        currency="EUR",
        categories=tuple(names),
        population=population or BoundPopulation(tuple(attributes)),
        arms=built,
        discounting=discounting,
        decision=Decision("A", thresholds, share, amount),
        cohort=CohortSettings(cycle, correction),
    )


def one_exit(family: Hazard, **options: object) -> BoundStudy:
    """Alive until one clock fires; utility 1."""
    states = (state("Alive", start=1.0, utility=ONE), state("Dead", absorbing=True))
    return study((states, (clock("death", "Alive", "Dead", family),)), **options)  # type: ignore[arg-type]


FORCE = math.log(1.035)
