"""The gap between individual-level model and cohort, split into memory, carrying and cycle arithmetic.

O_full - O_cohort(u, q) = [O_full - O_own] + [O_own - O_u] + [O_u - O_cohort(u, q)], each term with a jackknife standard
error, since full model and cohort come from the same patients. What is zero by construction is marked, not estimated.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from microsim.comparison.cohorts import ALL_RULES, CONTINUOUS, USES, Cohorts
from microsim.comparison.jackknife import Jackknife
from microsim.economics.net_benefit import net_benefit
from microsim.records.simulation import Layout
from microsim.study.bound import BoundStudy

F = npt.NDArray[np.float64]

INCREMENTAL = "incremental "


@dataclass(frozen=True, slots=True)
class Quantity:
    """Something whose gap is split: a linear function of outcomes[b, x, m], for one strategy."""

    strategy: int
    name: str
    threshold: float  # nan unless a net benefit
    of_comparator_alone: bool

    def value(self, outcomes: F, layout: Layout, base: int) -> F:
        """float64[b]."""
        at = {o: i for i, o in enumerate(layout.outcomes)}
        if not math.isnan(self.threshold):
            cost, qaly = outcomes[:, :, at["cost_disc"]], outcomes[:, :, at["qaly_disc"]]
            benefit = net_benefit(cost, qaly, self.threshold)
            return np.asarray(benefit[:, self.strategy] - benefit[:, base])
        if self.name.startswith(INCREMENTAL):
            column = outcomes[:, :, at[self.name.removeprefix(INCREMENTAL)]]
            return np.asarray(column[:, self.strategy] - column[:, base])
        return np.asarray(outcomes[:, self.strategy, at[self.name]])


def quantities(study: BoundStudy, layout: Layout) -> list[Quantity]:
    """Every outcome of every strategy, every increment, and incremental net benefit at every threshold."""
    base = layout.strategies.index(study.decision.comparator)
    out = [Quantity(x, o, math.nan, x == base) for x in range(len(layout.strategies)) for o in layout.outcomes]
    for x in (x for x in range(len(layout.strategies)) if x != base):
        out += [Quantity(x, INCREMENTAL + o, math.nan, False) for o in layout.outcomes]
        out += [Quantity(x, "incremental net benefit", t, False) for t in study.decision.thresholds]
    return out


def _row(quantity: Quantity, use: str, rule: str, values: dict[str, F], jackknife: Jackknife) -> dict[str, Any]:
    """values: full, own, exact (of the use) and cohort (use and rule), float64[b]."""
    flags = {
        "memory": False,
        "carrying": use == "own" or quantity.of_comparator_alone,
        "cycle": rule == CONTINUOUS,
        "total": False,
    }
    terms = {
        "memory": values["full"] - values["own"],
        "carrying": values["own"] - values["exact"],
        "cycle": values["exact"] - values["cohort"],
        "total": values["full"] - values["cohort"],
    }
    row: dict[str, Any] = {"full": values["full"][0], "cohort": values["cohort"][0]}
    for name, term in terms.items():
        row[name] = 0.0 if flags[name] else float(term[0])
        row[f"{name}_se"] = 0.0 if flags[name] else float(jackknife.standard_error(term))
        row[f"{name}_by_construction"] = flags[name]
    return row


def split_gaps(study: BoundStudy, layout: Layout, cohorts: Cohorts, jackknife: Jackknife) -> pd.DataFrame:
    """One row per quantity, use and counting rule; money, QALYs, years or counts as the quantity's own unit."""
    base = layout.strategies.index(study.decision.comparator)
    by_use = {(u, q): cohorts.outcomes(u, q) for u in USES for q in ALL_RULES}
    rows = []
    for quantity in quantities(study, layout):
        full = quantity.value(cohorts.full, layout, base)
        own = quantity.value(by_use["own", CONTINUOUS], layout, base)
        for use in USES:
            exact = quantity.value(by_use[use, CONTINUOUS], layout, base)
            for rule in ALL_RULES:
                cohort = quantity.value(by_use[use, rule], layout, base)
                values = {"full": full, "own": own, "exact": exact, "cohort": cohort}
                head = {
                    "strategy": layout.strategies[quantity.strategy],
                    "quantity": quantity.name,
                    "threshold": quantity.threshold,
                    "use": use,
                    "cycle_rule": rule,
                }
                rows.append({**head, **_row(quantity, use, rule, values, jackknife)})
    return pd.DataFrame(rows)
