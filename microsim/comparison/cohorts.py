"""The memoryless rung's cohorts of every strategy, use and counting rule, with all jackknife replicates."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from microsim.cohort.memoryless import RULES, Timing, count_cycles, generators, run_cycles, run_exact
from microsim.comparison.projection import Projection, leave_one_out, project
from microsim.economics.valuation import Prices, cohort_outcomes
from microsim.records.occupancy import Occupancy
from microsim.records.simulation import SimulationRecord
from microsim.study.bound import BoundStudy

F = npt.NDArray[np.float64]

USES = ("own", "carried")
CONTINUOUS = "continuous"
ALL_RULES = (CONTINUOUS, *RULES)


@dataclass(frozen=True, slots=True)
class CohortRun:
    """One strategy under one use: outcomes float64[b, m] per counting rule, the exact occupancy (all patients only), and
    the share of the cohort's living time spent where the calibrating paths had no exposure."""

    strategy: int
    use: str
    projection: Projection
    outcomes: Mapping[str, F]
    occupancy: Occupancy
    unsupported: float


@dataclass(frozen=True, slots=True)
class Cohorts:
    """runs[(strategy, use)]; full float64[b, x, m]: individual-level means, all patients and without each group."""

    runs: Mapping[tuple[int, str], CohortRun]
    full: F

    def outcomes(self, use: str, rule: str) -> F:
        """float64[b, x, m]."""
        strategies = range(self.full.shape[1])
        return np.stack([self.runs[x, use].outcomes[rule] for x in strategies], axis=1)


def _first(occupancy: Occupancy) -> Occupancy:
    return Occupancy(occupancy.probability[0], occupancy.time[0], occupancy.cost_time[0], occupancy.effect_time[0])


def _unsupported_share(record: SimulationRecord, projection: Projection, occupancy: Occupancy) -> float:
    """Only states with clocks count: rates are needed nowhere else."""
    leaving = sorted({source for _, source, _ in record.layout.arcs})
    time = occupancy.time[0][:, leaving].T
    return float(time[~projection.supported[leaving]].sum() / time.sum())


def _run(study: BoundStudy, record: SimulationRecord, strategy: int, use: str, base: int) -> CohortRun:
    arm, grid, layout = study.arms[strategy], record.grid, record.layout
    background = tuple(k.background for k in arm.clocks)
    projection = project(record, path=strategy if use == "own" else base, arm=strategy, background=background)
    timing = Timing.of(study.discounting, study.years_per_unit)
    generator = generators(projection.rates, layout.arcs, len(layout.states))
    prices = Prices(
        rates=projection.rates,
        rewards=projection.rewards,
        lumps=projection.lumps,
        once=arm.once,
        dead=tuple(s.dead for s in arm.states),
        years_per_unit=study.years_per_unit,
    )
    exact = run_exact(generator, edges=grid.time, start=record.start, timing=timing)
    trace = run_cycles(generator, edges=grid.time, start=record.start, cycle=study.cohort.cycle)
    outcomes = {CONTINUOUS: cohort_outcomes(layout, exact, prices)}
    for rule in RULES:
        counted = count_cycles(trace, cells=grid.time.size - 1, timing=timing, rule=rule)
        outcomes[rule] = cohort_outcomes(layout, counted, prices)
    return CohortRun(strategy, use, projection, outcomes, _first(exact), _unsupported_share(record, projection, exact))


def run_cohorts(study: BoundStudy, record: SimulationRecord) -> Cohorts:
    """Every strategy, own and carried. For the comparator both are the same calculation. Raises CohortError."""
    base = record.layout.strategies.index(study.decision.comparator)
    runs: dict[tuple[int, str], CohortRun] = {}
    for x in range(len(study.arms)):
        runs[x, "own"] = _run(study, record, x, "own", base)
        runs[x, "carried"] = runs[x, "own"] if x == base else _run(study, record, x, "carried", base)
    m = record.moments
    sums = leave_one_out(m.group_mean * m.group_patients[:, None, None])
    counts = leave_one_out(m.group_patients.astype(np.float64))
    full = sums / counts[:, None, None]
    full[0] = m.mean
    return Cohorts(runs, full)
