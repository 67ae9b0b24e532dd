"""What a study is once every number is known: frozen data that engines and cohorts read.

A BoundStudy holds one fully resolved arm per strategy. All arms share state names, clock names and their order, so an
index means the same thing in every arm. Time is in the study's own unit throughout (``years_per_unit`` converts);
money flows are per study time unit; utilities are per year of life. Nothing here knows about files or arrays.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from microsim.hazards.core import Hazard
from microsim.study.expression import Node


@dataclass(frozen=True, slots=True)
class BoundState:
    """A state in one arm.

    utility: formula, QALY per year; costs: category -> formula, money per study time unit;
    entry_costs: category -> formula, money at each arrival by a transition (not at model start);
    entry_qaly: formula, QALYs added at each arrival (negative = decrement). Formulas are evaluated at entry to the
    state and constant during the sojourn. start: probability that a patient begins here.
    """

    name: str
    start: float
    absorbing: bool
    dead: bool
    utility: Node
    costs: Mapping[str, Node]
    entry_costs: Mapping[str, Node]
    entry_qaly: Node
    label: str = ""


@dataclass(frozen=True, slots=True)
class BoundClock:
    """One possible transition: leaves any state of ``sources`` for ``target``.

    scale: the time that drives the hazard, "sojourn" (since entry), "elapsed" (since model start) or "age" (attained
    age, in study time units). ratio: formula, multiplies the whole hazard, evaluated at entry to the state.
    background: kept on elapsed time in every cohort.
    """

    name: str
    sources: tuple[str, ...]
    target: str
    scale: str
    hazard: Hazard
    ratio: Node
    background: bool
    label: str = ""


@dataclass(frozen=True, slots=True)
class BoundArm:
    """One strategy, resolved. ``once``: category -> money at time zero."""

    name: str
    label: str
    states: tuple[BoundState, ...]
    clocks: tuple[BoundClock, ...]
    once: Mapping[str, float]


@dataclass(frozen=True, slots=True)
class Law:
    """A distribution an attribute is sampled from, with numbers only.

    kind: "normal" (mean, sd), "lognormal" (meanlog, sdlog), "gamma" (shape, rate), "beta" (a, b),
    "uniform" (low, high), "choice" (codes 0..k-1 with probabilities p0..pk-1), "constant" (value).
    within: truncation, or None.
    """

    kind: str
    params: Mapping[str, float]
    within: tuple[float, float] | None = None


@dataclass(frozen=True, slots=True)
class BoundAttribute:
    """levels: names of the codes 0..k-1 for a categorical attribute, else ()."""

    name: str
    law: Law | None
    levels: tuple[str, ...] = ()
    label: str = ""


@dataclass(frozen=True, slots=True)
class BoundPopulation:
    """attributes: in order. correlation: Gaussian-copula matrix in that order, or None. rows: if set, patients are
    resampled with replacement from these rows (attribute name -> column of floats, categories as codes) and laws of
    the attributes found there are None. The attribute named ``age`` is age at start in years."""

    attributes: tuple[BoundAttribute, ...]
    correlation: tuple[tuple[float, ...], ...] | None = None
    rows: Mapping[str, tuple[float, ...]] | None = None


@dataclass(frozen=True, slots=True)
class Discounting:
    """Yearly rates; method "continuous" (force ln(1+r)) or "annual" (factor (1+r)^-floor(years))."""

    costs: float
    effects: float
    method: str = "continuous"

    def forces(self, years_per_unit: float) -> tuple[float, float]:
        """Force of discount ln(1+r) per study time unit, for costs and for effects."""
        return math.log1p(self.costs) * years_per_unit, math.log1p(self.effects) * years_per_unit


@dataclass(frozen=True, slots=True)
class Decision:
    """comparator: arm name; thresholds: money per QALY; tau = max(amount, share * |incremental net benefit|);
    alpha: error rate of the verdict before division by the number of rungs."""

    comparator: str
    thresholds: tuple[float, ...]
    share: float
    amount: float
    alpha: float = 0.05


@dataclass(frozen=True, slots=True)
class CohortSettings:
    """cycle: length in study time units; correction: "none", "half-cycle" or "simpson" (the stated one)."""

    cycle: float
    correction: str = "half-cycle"


@dataclass(frozen=True, slots=True)
class BoundStudy:
    title: str
    invented: bool
    time_unit: str
    years_per_unit: float
    horizon: float
    currency: str
    categories: tuple[str, ...]
    population: BoundPopulation
    arms: tuple[BoundArm, ...]
    discounting: Discounting
    decision: Decision
    cohort: CohortSettings
    inputs: Mapping[str, float] = field(default_factory=dict)

    @property
    def comparator(self) -> BoundArm:
        return next(a for a in self.arms if a.name == self.decision.comparator)
