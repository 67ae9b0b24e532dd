"""What one patient's path is worth: sojourns and arrivals become the outcomes of records.simulation.Layout.

Flows are integrated against the discount factor in closed form, one-off amounts count at their time. Knows nothing of
hazards or of how the path came about.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import special

from microsim.reference.memory import Memory
from microsim.study.bound import BoundArm, BoundState, BoundStudy


@dataclass(frozen=True, slots=True)
class Discount:
    """D(t) at a yearly rate: exp(-log(1 + rate) years), or (1 + rate)^-floor(years) in annual steps."""

    rate: float
    annual: bool
    years_per_unit: float

    def factor(self, t: float) -> float:
        years = t * self.years_per_unit
        return float((1.0 + self.rate) ** -(math.floor(years) if self.annual else years))

    def integral(self, a: float, b: float) -> float:
        """int_a^b D(t) dt, in study time units."""
        if not self.annual:
            force = math.log1p(self.rate) * self.years_per_unit
            return self.factor(a) * (b - a) * float(special.exprel(-force * (b - a)))
        year = 1.0 / self.years_per_unit
        first, last = math.floor(a / year), math.floor(b / year)
        pieces = ((k, min(b, (k + 1) * year) - max(a, k * year)) for k in range(first, last + 1))
        return float(sum(max(length, 0.0) * (1.0 + self.rate) ** -k for k, length in pieces))


def outcome_names(study: BoundStudy, arm: BoundArm) -> list[str]:
    """Names in the order of ``Layout.outcomes``."""
    names = ["ly", "ly_disc", "qaly", "qaly_disc", "cost", "cost_disc"]
    for category in study.categories:
        names += [f"cost:{category}", f"cost_disc:{category}"]
    names += [f"time:{s.name}" for s in arm.states] + [f"entries:{s.name}" for s in arm.states]
    return names + [f"events:{k.name}" for k in arm.clocks]


class Ledger:
    """Outcomes of one patient in one arm, added up as the path unfolds."""

    def __init__(self, study: BoundStudy, arm: BoundArm) -> None:
        d = study.discounting
        annual = d.method == "annual"
        self.years_per_unit = study.years_per_unit
        self.costs = Discount(d.costs, annual, study.years_per_unit)
        self.effects = Discount(d.effects, annual, study.years_per_unit)
        self.outcomes = dict.fromkeys(outcome_names(study, arm), 0.0)
        for category, amount in arm.once.items():
            self._add_cost(category, amount, amount)

    def _add_cost(self, category: str, plain: float, discounted: float) -> None:
        for name in ("cost", f"cost:{category}"):
            self.outcomes[name] += plain
        for name in ("cost_disc", f"cost_disc:{category}"):
            self.outcomes[name] += discounted

    def arrival(self, state: BoundState, clock: str, memory: Memory) -> None:
        """A transition by ``clock`` into the state; memory already stands in it."""
        self.outcomes[f"entries:{state.name}"] += 1.0
        self.outcomes[f"events:{clock}"] += 1.0
        now = memory.entered
        for category, formula in state.entry_costs.items():
            amount = memory.value(formula, what=f"amount at entry ({category})")
            self._add_cost(category, amount, amount * self.costs.factor(now))
        qaly = memory.value(state.entry_qaly, what="amount at entry (QALY)")
        self.outcomes["qaly"] += qaly
        self.outcomes["qaly_disc"] += qaly * self.effects.factor(now)

    def sojourn(self, state: BoundState, memory: Memory, until: float) -> None:
        """A stay in the state from ``memory.entered``; memory must not have left yet."""
        since = memory.entered
        self.outcomes[f"time:{state.name}"] += until - since
        years = (until - since) * self.years_per_unit
        years_disc = self.effects.integral(since, until) * self.years_per_unit
        if not state.dead:
            self.outcomes["ly"] += years
            self.outcomes["ly_disc"] += years_disc
        utility = memory.value(state.utility, what="utility")
        self.outcomes["qaly"] += utility * years
        self.outcomes["qaly_disc"] += utility * years_disc
        for category, formula in state.costs.items():
            per_unit = memory.value(formula, what=f"cost {category}")
            self._add_cost(category, per_unit * (until - since), per_unit * self.costs.integral(since, until))


def stack(outcomes: list[dict[str, float]]) -> dict[str, np.ndarray[tuple[int], np.dtype[np.float64]]]:
    """One dict per patient -> name -> float64[patient]."""
    return {name: np.array([o[name] for o in outcomes]) for name in (outcomes[0] if outcomes else {})}
