"""Net benefit, the choice it implies, and whether simulation error leaves the choice open."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

F = npt.NDArray[np.float64]

RESOLVED_Z = 1.96  # a lead within this many standard errors is called unresolved


def net_benefit(cost: F, qaly: F, threshold: float) -> F:
    """threshold x QALYs - cost, in money; any shape."""
    return threshold * qaly - cost


def money_weights(strategies: int, of: int, against: int | None, threshold: float) -> F:
    """Weights float64[2x] that turn (cost_0, qaly_0, cost_1, ...) into the net benefit of a strategy, or its increment."""
    out = np.zeros(2 * strategies)
    out[2 * of], out[2 * of + 1] = -1.0, threshold
    if against is not None:
        out[2 * against] += 1.0
        out[2 * against + 1] -= threshold
    return out


@dataclass(frozen=True, slots=True)
class Choice:
    """strategy index with the highest net benefit, its lead over the runner-up with standard error (money)."""

    strategy: int
    runner_up: int
    lead: float
    lead_se: float

    @property
    def resolved(self) -> bool:
        return self.lead > RESOLVED_Z * self.lead_se


def choose(values: F, difference_se: F) -> Choice:
    """values float64[x] net benefits; difference_se float64[x, x] standard errors of their differences."""
    order = np.argsort(-values, kind="stable")
    best, second = int(order[0]), int(order[1])
    return Choice(best, second, float(values[best] - values[second]), float(difference_se[best, second]))
