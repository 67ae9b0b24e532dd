"""Individual-level record + study -> Comparison: cohorts beside the full model, the gap split, the verdict, tidy tables."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from microsim.comparison import words
from microsim.comparison.cohorts import ALL_RULES, USES, Cohorts, run_cohorts
from microsim.comparison.gap import split_gaps
from microsim.comparison.jackknife import Jackknife
from microsim.comparison.verdict import (
    Decision,
    Test,
    Verdict,
    benefits,
    cohort_se,
    overall,
    paired_se,
    run_decisions,
    run_tests,
)  # fmt: skip
from microsim.economics.frontier import incremental_analysis
from microsim.economics.net_benefit import choose, money_weights
from microsim.economics.valuation import outcome_unit
from microsim.records.occupancy import Occupancy
from microsim.records.simulation import SimulationRecord
from microsim.study.bound import BoundStudy

F = npt.NDArray[np.float64]

INDIVIDUAL = "individual"
UNSUPPORTED_SHARE = 1e-3  # share of time in cells without exposure above which the report warns

CAUTIONS = (
    "Memoryless rates taken from a strategy's own paths reproduce undiscounted time in states and event counts of any "
    "process over a lifetime; that agreement is by construction and no evidence that memory is absent.",
    "Carried rates move the comparator's rates to another strategy by the ratio of hazards on the comparator's paths; "
    "they are what practice can build, not a causal estimate.",
)


@dataclass(frozen=True, slots=True)
class Comparison:
    """tables: tidy frames by name; occupancies: (strategy, use) -> exact cohort occupancy."""

    verdict: Verdict
    cautions: tuple[str, ...]
    tables: Mapping[str, pd.DataFrame]
    occupancies: Mapping[tuple[str, str], Occupancy]


class _Tables:
    """Builds the tidy frames of one comparison."""

    def __init__(self, study: BoundStudy, record: SimulationRecord, cohorts: Cohorts, jackknife: Jackknife) -> None:
        self.study, self.record, self.cohorts, self.jackknife = study, record, cohorts, jackknife
        self.layout, self.moments = record.layout, record.moments
        self.names = self.layout.strategies
        self.base = self.names.index(study.decision.comparator)

    def _unit(self, outcome: str) -> str:
        return outcome_unit(outcome, currency=self.study.currency, time_unit=self.study.time_unit)

    def _models(self) -> Iterator[tuple[str, str, F]]:
        """(model, counting rule, outcomes float64[b, x, m]) of every cohort."""
        for use in USES:
            for rule in ALL_RULES:
                yield f"memoryless {use}", rule, self.cohorts.outcomes(use, rule)

    def outcomes(self) -> pd.DataFrame:
        m, rows = self.moments, []
        for x, strategy in enumerate(self.names):
            for i, outcome in enumerate(self.layout.outcomes):
                head = {"strategy": strategy, "model": INDIVIDUAL, "cycle_rule": "", "outcome": outcome}
                error = math.sqrt(max(m.covariance[i, x, x], 0.0) / m.patients)
                rows.append({**head, "unit": self._unit(outcome), "mean": m.mean[x, i], "standard_error": error})
        for model, rule, values in self._models():
            se = self.jackknife.standard_error(values)
            for x, strategy in enumerate(self.names):
                for i, outcome in enumerate(self.layout.outcomes):
                    head = {"strategy": strategy, "model": model, "cycle_rule": rule, "outcome": outcome}
                    rows.append(
                        {**head, "unit": self._unit(outcome), "mean": values[0, x, i], "standard_error": se[x, i]}
                    )
        return pd.DataFrame(rows)

    def increments(self) -> pd.DataFrame:
        m, rows, base = self.moments, [], self.base
        others = [x for x in range(len(self.names)) if x != base]

        def row(x: int, model: str, rule: str, i: int, mean: float, se: float) -> dict[str, Any]:
            head = {"strategy": self.names[x], "comparator": self.names[base], "model": model, "cycle_rule": rule}
            outcome = self.layout.outcomes[i]
            return {**head, "outcome": outcome, "unit": self._unit(outcome), "mean": mean, "standard_error": se}

        for x in others:
            for i in range(len(self.layout.outcomes)):
                c = m.covariance[i]
                variance = max(c[x, x] + c[base, base] - 2 * c[x, base], 0.0)
                mean = m.mean[x, i] - m.mean[base, i]
                rows.append(row(x, INDIVIDUAL, "", i, mean, math.sqrt(variance / m.patients)))
        for model, rule, values in self._models():
            difference = values - values[:, [base]]
            se = self.jackknife.standard_error(difference)
            rows += [
                row(x, model, rule, i, difference[0, x, i], se[x, i])
                for x in others
                for i in range(len(self.layout.outcomes))
            ]
        return pd.DataFrame(rows)

    def _all_outcomes(self) -> Iterator[tuple[str, str, F]]:
        yield INDIVIDUAL, "", self.cohorts.full
        yield from self._models()

    def incremental(self) -> pd.DataFrame:
        """Full incremental analysis of the individual-level model and of the cohorts at the stated counting rule."""
        at = [self.layout.outcomes.index(o) for o in ("cost_disc", "qaly_disc")]
        rows = []
        for model, rule, values in self._all_outcomes():
            if rule not in ("", self.study.cohort.correction):
                continue
            for p in incremental_analysis(self.names, list(values[0, :, at[0]]), list(values[0, :, at[1]])):
                rows.append({"model": model, **asdict(p)})
        return pd.DataFrame(rows)

    def net_benefit(self) -> pd.DataFrame:
        rows, n, m = [], len(self.names), self.moments
        for model, rule, values in self._all_outcomes():
            for threshold in self.study.decision.thresholds:
                nb = benefits(values, self.layout, threshold)
                step = nb - nb[:, [self.base]]
                if model == INDIVIDUAL:
                    weights = [money_weights(n, x, None, threshold) for x in range(n)]
                    se = np.sqrt([w @ m.money @ w / m.patients for w in weights])
                    step_se = paired_se(m, threshold)[:, self.base]
                else:
                    se, step_se = self.jackknife.standard_error(nb), self.jackknife.standard_error(step)
                for x, strategy in enumerate(self.names):
                    head = {"model": model, "cycle_rule": rule, "threshold": threshold, "strategy": strategy}
                    own = {"net_benefit": nb[0, x], "standard_error": se[x]}
                    rows.append({**head, **own, "increment": step[0, x], "increment_se": step_se[x]})
        return pd.DataFrame(rows)

    def choice(self) -> pd.DataFrame:
        rows = []
        for model, rule, values in self._all_outcomes():
            if rule not in ("", self.study.cohort.correction):
                continue
            for threshold in self.study.decision.thresholds:
                nb = benefits(values, self.layout, threshold)
                individual = model == INDIVIDUAL
                se = paired_se(self.moments, threshold) if individual else cohort_se(nb, self.jackknife)
                c = choose(nb[0], se)
                head = {"model": model, "threshold": threshold, "strategy": self.names[c.strategy]}
                rows.append({**head, "resolved": c.resolved, "lead": c.lead, "lead_se": c.lead_se})
        return pd.DataFrame(rows)

    def occupancy(self) -> pd.DataFrame:
        frames = []
        times, states = self.record.grid.time, self.layout.states
        for x, strategy in enumerate(self.names):
            seen = self.record.paths[x].present.sum(axis=0).T / self.moments.patients
            models = {INDIVIDUAL: seen}
            models |= {f"memoryless {use}": self.cohorts.runs[x, use].occupancy.probability for use in USES}
            for model, probability in models.items():
                frame = pd.DataFrame({"time": np.repeat(times, len(states)), "state": np.tile(states, times.size)})
                frame["probability"] = probability.reshape(-1)
                frames.append(frame.assign(strategy=strategy, model=model))
        return pd.concat(frames, ignore_index=True)[["strategy", "model", "time", "state", "probability"]]

    def rates(self) -> pd.DataFrame:
        rows = []
        edges = self.record.grid.time
        for (x, use), run in self.cohorts.runs.items():
            path = self.record.paths[x if use == "own" else self.base]
            exposure, events = path.exposure.sum(axis=0), path.events.sum(axis=0)
            for a, (k, source, target) in enumerate(self.layout.arcs):
                names = {"clock": self.layout.clocks[k], "source": self.layout.states[source]}
                head = {"strategy": self.names[x], "use": use, **names, "target": self.layout.states[target]}
                background = self.study.arms[x].clocks[k].background
                cells = [(t, t + 1) for t in range(edges.size - 1)] if background else [(0, edges.size - 1)]
                for low, high in cells:
                    rows.append(
                        {
                            **head,
                            "time_from": edges[low],
                            "time_to": edges[high],
                            "rate": run.projection.rates[0, a, low],
                            "events": events[a, low:high].sum(),
                            "exposure": exposure[source, low:high].sum(),
                        }
                    )
        return pd.DataFrame(rows)


def _verdict_table(tests: tuple[Test, ...]) -> pd.DataFrame:
    columns = ["threshold", "strategy", "gap", "se", "lower", "upper", "tolerance", "verdict", "patients_needed"]
    table = pd.DataFrame([asdict(t) for t in tests])
    return table[columns].replace({"patients_needed": {math.inf: math.nan}})


def _causes(gap: pd.DataFrame, test: Test, correction: str) -> dict[str, float]:
    """Terms of the gap behind a test, in words a reader can follow."""
    chosen = gap[
        (gap.strategy == test.strategy)
        & (gap.threshold == test.threshold)
        & (gap.use == "carried")
        & (gap.cycle_rule == correction)
    ].iloc[0]
    return {
        "memory within a strategy": chosen.memory,
        "carrying rates": chosen.carrying,
        "cycle arithmetic": chosen.cycle,
    }


def _sentences(
    study: BoundStudy, gap: pd.DataFrame, headline: str, tests: tuple[Test, ...], decisions: tuple[Decision, ...]
) -> tuple[str, ...]:
    labels = {a.name: a.label or a.name for a in study.arms}
    names = tuple(a.name for a in study.arms)
    correction, currency = study.cohort.correction, study.currency
    return (
        words.headline_sentence(headline, correction),
        *(words.decision_sentence(d, names, labels, currency) for d in decisions),
        *(words.test_sentence(t, labels, _causes(gap, t, correction), currency) for t in tests),
    )


def _cautions(study: BoundStudy, cohorts: Cohorts) -> tuple[str, ...]:
    out = list(CAUTIONS)
    for run in cohorts.runs.values():
        if run.unsupported > UNSUPPORTED_SHARE:
            out.append(
                f"{study.arms[run.strategy].label or study.arms[run.strategy].name}, {run.use} rates: {run.unsupported:.1%} "
                "of the cohort's time lies where the simulated paths had nobody; the nearest rates are used there."
            )
    return tuple(dict.fromkeys(out))


def compare(study: BoundStudy, record: SimulationRecord) -> Comparison:
    """Everything the report needs. Raises CohortError where a cohort cannot be estimated."""
    layout = record.layout
    jackknife = Jackknife(record.moments.group_patients)
    cohorts = run_cohorts(study, record)
    gap = split_gaps(study, layout, cohorts, jackknife)
    tests = run_tests(study, layout, cohorts, jackknife)
    decisions = run_decisions(study, layout, cohorts, jackknife, record.moments)
    headline = overall([t.verdict for t in tests])
    tables = _Tables(study, record, cohorts, jackknife)
    frames = {
        "outcomes": tables.outcomes(),
        "increments": tables.increments(),
        "incremental": tables.incremental(),
        "net_benefit": tables.net_benefit(),
        "choice": tables.choice(),
        "gap": gap,
        "occupancy": tables.occupancy(),
        "rates": tables.rates(),
        "verdict": _verdict_table(tests),
    }
    return Comparison(
        verdict=Verdict(headline, tests, decisions, _sentences(study, gap, headline, tests, decisions)),
        cautions=_cautions(study, cohorts),
        tables=frames,
        occupancies={(layout.strategies[x], use): r.occupancy for (x, use), r in cohorts.runs.items()},
    )
