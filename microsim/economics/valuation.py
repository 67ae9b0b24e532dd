"""Cohort occupancy x rewards -> the same outcomes an individual-level run reports."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from microsim.records.occupancy import Occupancy
from microsim.records.simulation import Layout

F = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Prices:
    """rates float64[b, a, T]; rewards float64[b, r, s] per study time unit in a state (QALYs, then each cost category);
    lumps float64[b, r, s] per arrival; once: category -> money at time zero; dead: per state."""

    rates: F
    rewards: F
    lumps: F
    once: Mapping[str, float]
    dead: tuple[bool, ...]
    years_per_unit: float


def _arrivals(rates: F, time: F, arcs: tuple[tuple[int, int, int], ...]) -> F:
    """Expected arrivals by transition in each state, float64[b, s]."""
    out = np.zeros((time.shape[0], time.shape[-1]))
    for a, (_, source, target) in enumerate(arcs):
        out[:, target] += np.einsum("bt,bt->b", rates[:, a], time[:, :, source])
    return out


def cohort_outcomes(layout: Layout, occupancy: Occupancy, prices: Prices) -> F:
    """float64[b, m]: every outcome of ``layout.outcomes`` for each replicate."""
    arcs = layout.arcs
    alive = ~np.array(prices.dead)
    spent = {
        "": occupancy.time.sum(axis=-2),
        "cost": occupancy.cost_time.sum(axis=-2),
        "effect": occupancy.effect_time.sum(axis=-2),
    }
    came = {
        "": _arrivals(prices.rates, occupancy.time, arcs),
        "cost": _arrivals(prices.rates, occupancy.cost_time, arcs),
        "effect": _arrivals(prices.rates, occupancy.effect_time, arcs),
    }

    def value(r: int, how: str) -> F:
        return np.asarray((prices.rewards[:, r] * spent[how] + prices.lumps[:, r] * came[how]).sum(axis=-1))

    found: dict[str, F] = {
        "ly": spent[""][:, alive].sum(axis=-1) * prices.years_per_unit,
        "ly_disc": spent["effect"][:, alive].sum(axis=-1) * prices.years_per_unit,
        "qaly": value(0, ""),
        "qaly_disc": value(0, "effect"),
        "cost": np.zeros(spent[""].shape[0]),
        "cost_disc": np.zeros(spent[""].shape[0]),
    }
    for r, name in enumerate(layout.categories, start=1):
        start = prices.once.get(name, 0.0)
        found[f"cost:{name}"] = value(r, "") + start
        found[f"cost_disc:{name}"] = value(r, "cost") + start
        found["cost"] = found["cost"] + found[f"cost:{name}"]
        found["cost_disc"] = found["cost_disc"] + found[f"cost_disc:{name}"]
    for s, name in enumerate(layout.states):
        found[f"time:{name}"] = spent[""][:, s]
        found[f"entries:{name}"] = came[""][:, s]
    for k, name in enumerate(layout.clocks):
        fired = [
            np.einsum("bt,bt->b", prices.rates[:, a], occupancy.time[:, :, source])
            for a, (clock, source, _) in enumerate(arcs)
            if clock == k
        ]
        found[f"events:{name}"] = np.sum(fired, axis=0)
    return np.stack([found[o] for o in layout.outcomes], axis=-1)


def outcome_unit(outcome: str, *, currency: str, time_unit: str) -> str:
    """Unit an outcome is reported in."""
    if outcome.startswith("cost"):
        return currency
    if outcome.startswith("qaly"):
        return "QALY"
    if outcome.startswith("ly"):
        return "year"
    return time_unit if outcome.startswith("time:") else "count"
