"""Would a memoryless cohort have done? Equivalence within a stated tolerance, not absence of significance.

Adequate: the interval of the total gap in incremental net benefit lies inside the tolerance at every threshold and for
every strategy (two one-sided tests). Not adequate: it lies outside at some. Otherwise unresolved. The verdict is given on
the cohort that practice can build: carried rates, the stated cycle and counting rule.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from microsim.comparison.cohorts import Cohorts
from microsim.comparison.jackknife import Jackknife
from microsim.economics.net_benefit import Choice, choose, money_weights, net_benefit
from microsim.records.simulation import Layout, Moments
from microsim.study.bound import BoundStudy

F = npt.NDArray[np.float64]

ADEQUATE, NOT_ADEQUATE, UNRESOLVED = "adequate", "not adequate", "unresolved"
RUNGS = 1  # rungs tested: the memoryless one


@dataclass(frozen=True, slots=True)
class Test:
    """The equivalence test of one strategy at one threshold; money. patients_needed: nan unless unresolved, inf where the
    gap sits on the tolerance itself."""

    threshold: float
    strategy: str
    full: float
    cohort: float
    gap: float
    se: float
    lower: float
    upper: float
    tolerance: float
    verdict: str
    patients_needed: float


@dataclass(frozen=True, slots=True)
class Decision:
    """What each model would choose at a threshold, and the net benefit lost by deciding with the cohort."""

    threshold: float
    full: Choice
    cohort: Choice
    regret: float
    regret_se: float

    @property
    def resolved(self) -> bool:
        return self.full.resolved and self.cohort.resolved

    @property
    def differs(self) -> bool:
        return self.full.strategy != self.cohort.strategy


@dataclass(frozen=True, slots=True)
class Verdict:
    """headline: adequate, not adequate or unresolved; sentences: the same in words."""

    headline: str
    tests: tuple[Test, ...]
    decisions: tuple[Decision, ...]
    sentences: tuple[str, ...]


def judge(gap: float, half_width: float, tolerance: float) -> str:
    """Verdict on one gap (money) with the half-width of its (1 - 2 alpha) interval."""
    if abs(gap) + half_width < tolerance:
        return ADEQUATE
    return NOT_ADEQUATE if abs(gap) - half_width > tolerance else UNRESOLVED


def patients_needed(gap: float, half_width: float, tolerance: float, patients: int) -> float:
    """Patients at which the half-width, shrinking as 1/sqrt(n), would no longer reach the tolerance."""
    distance = abs(abs(gap) - tolerance)
    return math.inf if distance == 0.0 else math.ceil(patients * (half_width / distance) ** 2)


def overall(verdicts: Sequence[str]) -> str:
    if any(v == NOT_ADEQUATE for v in verdicts):
        return NOT_ADEQUATE
    return ADEQUATE if all(v == ADEQUATE for v in verdicts) else UNRESOLVED


def benefits(outcomes: F, layout: Layout, threshold: float) -> F:
    """Net benefit float64[b, x]."""
    at = [layout.outcomes.index(o) for o in ("cost_disc", "qaly_disc")]
    return net_benefit(outcomes[:, :, at[0]], outcomes[:, :, at[1]], threshold)


def run_tests(study: BoundStudy, layout: Layout, cohorts: Cohorts, jackknife: Jackknife) -> tuple[Test, ...]:
    base = layout.strategies.index(study.decision.comparator)
    quantile = jackknife.quantile(1.0 - study.decision.alpha / RUNGS)
    carried = cohorts.outcomes("carried", study.cohort.correction)
    n = int(jackknife.sizes.sum())
    tests = []
    for threshold in study.decision.thresholds:
        full, cohort = (benefits(o, layout, threshold) for o in (cohorts.full, carried))
        for x in (x for x in range(len(layout.strategies)) if x != base):
            inb, other = full[:, x] - full[:, base], cohort[:, x] - cohort[:, base]
            gap, se = float(inb[0] - other[0]), float(jackknife.standard_error(inb - other))
            tolerance = max(study.decision.amount, study.decision.share * abs(float(inb[0])))
            half = quantile * se
            verdict = judge(gap, half, tolerance)
            needed = patients_needed(gap, half, tolerance, n) if verdict == UNRESOLVED else math.nan
            tests.append(
                Test(
                    threshold, layout.strategies[x], float(inb[0]), float(other[0]), gap, se, gap - half, gap + half,
                    tolerance, verdict, needed,
                )
            )  # fmt: skip
    return tuple(tests)


def paired_se(moments: Moments, threshold: float) -> F:
    """Standard errors float64[x, x] of differences in individual-level net benefit between strategies."""
    n = moments.mean.shape[0]
    out = np.zeros((n, n))
    for i in range(n):
        for j in range(n):
            if i != j:
                w = money_weights(n, i, j, threshold)
                out[i, j] = math.sqrt(max(float(w @ moments.money @ w), 0.0) / moments.patients)
    return out


def cohort_se(values: F, jackknife: Jackknife) -> F:
    """Standard errors float64[x, x] of differences in cohort net benefit float64[b, x]."""
    return jackknife.standard_error(values[:, :, None] - values[:, None, :])


def run_decisions(
    study: BoundStudy, layout: Layout, cohorts: Cohorts, jackknife: Jackknife, moments: Moments
) -> tuple[Decision, ...]:
    carried = cohorts.outcomes("carried", study.cohort.correction)
    out = []
    for threshold in study.decision.thresholds:
        full, cohort = (benefits(o, layout, threshold) for o in (cohorts.full, carried))
        se = paired_se(moments, threshold)
        by_full, by_cohort = choose(full[0], se), choose(cohort[0], cohort_se(cohort, jackknife))
        a, b = by_full.strategy, by_cohort.strategy
        out.append(Decision(threshold, by_full, by_cohort, float(full[0, a] - full[0, b]), float(se[a, b])))
    return tuple(out)
