"""The memoryless rung: projections, the gap split, the jackknife and the verdict, through the engine and by hand."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from bound_builder import ONE, clock, hazard, memory, op, state, study

from microsim.comparison.cohorts import run_cohorts
from microsim.comparison.jackknife import Jackknife
from microsim.comparison.ladder import Comparison, compare
from microsim.comparison.projection import leave_one_out, project
from microsim.comparison.verdict import ADEQUATE, NOT_ADEQUATE, UNRESOLVED, judge, overall, patients_needed
from microsim.engine.run import simulate
from microsim.errors import CohortError
from microsim.records.simulation import SimulationRecord
from microsim.study.bound import BoundStudy, Discounting
from microsim.study.expression import const


def _pair(clocks_a, clocks_b, **options) -> BoundStudy:
    states = (
        state("Well", start=1.0, utility=const(0.9), costs={"care": const(500.0)}),
        state("Ill", utility=const(0.5), costs={"care": const(4000.0)}, entry_costs={"care": const(300.0)}),
        state("Dead", absorbing=True),
    )
    return study((states, clocks_a), (states, clocks_b), **{"horizon": 30.0, **options})


def _markov(effect: float = 0.8, **options) -> BoundStudy:
    """Constant hazards, no memory anywhere."""

    def clocks(hr: float):
        return (
            clock("fall", "Well", "Ill", hazard("exponential", rate=0.3), ratio=const(hr)),
            clock("rise", "Ill", "Well", hazard("exponential", rate=1.0)),
            clock("die", ("Well", "Ill"), "Dead", hazard("exponential", rate=0.06)),
        )

    return _pair(clocks(1.0), clocks(effect), **options)


def _remembering(**options) -> BoundStudy:
    """Falling hazard by sojourn, rising with each visit, and a stay that is not exponential."""
    rising = op("exp", op("mul", 0.25, op("min", memory("visits", "Ill"), 6.0)))

    def clocks(hr: float):
        return (
            clock("fall", "Well", "Ill", hazard("weibull", shape=0.6, scale=3.0), ratio=op("mul", rising, hr)),
            clock("rise", "Ill", "Well", hazard("lognormal", meanlog=-1.5, sdlog=0.8)),
            clock("die", ("Well", "Ill"), "Dead", hazard("exponential", rate=0.08)),
        )

    return _pair(clocks(1.0), clocks(0.6), **options)


@pytest.fixture(scope="module")
def markov() -> tuple[BoundStudy, SimulationRecord, Comparison]:
    s = _markov()
    r = simulate(s, patients=20_000, seed=7, threads=2)
    return s, r, compare(s, r)


@pytest.fixture(scope="module")
def remembering() -> tuple[BoundStudy, SimulationRecord, Comparison]:
    s = _remembering(horizon=150.0)
    r = simulate(s, patients=20_000, seed=7, threads=2)
    return s, r, compare(s, r)


def _gap(c: Comparison, **where: object) -> pd.DataFrame:
    g = c.tables["gap"]
    for column, value in where.items():
        g = g[g[column] == value]
    return g


def test_a_study_without_memory_has_no_gap_and_is_adequate(markov) -> None:
    _, _, c = markov
    g = _gap(c, cycle_rule="continuous")
    noisy = g[g.total_se > 0]
    # some 80 correlated quantities, 4.5 standard errors each with 39 degrees of freedom
    assert (noisy.total.abs() <= 4.5 * noisy.total_se).all()
    assert c.verdict.headline == ADEQUATE
    assert c.verdict.sentences[0].startswith("Memory does not matter here")


def test_its_exact_rates_are_recovered_without_any_noise(markov) -> None:
    """Hazards are integrated, not counted: a constant hazard is projected exactly."""
    _, _, c = markov
    rates = c.tables["rates"].set_index(["strategy", "use", "clock", "source"]).rate
    assert rates["A", "own", "fall", "Well"] == pytest.approx(0.3, rel=1e-10)
    assert rates["B", "carried", "fall", "Well"] == pytest.approx(0.24, rel=1e-10)
    assert rates["B", "own", "rise", "Ill"] == pytest.approx(1.0, rel=1e-10)


def test_a_projection_from_the_wrong_arm_would_be_noticed() -> None:
    s = _remembering()
    r = simulate(s, patients=8000, seed=7)
    none = (False,) * 3
    right, wrong = project(r, path=1, arm=1, background=none), project(r, path=0, arm=1, background=none)
    assert abs(right.rates[0, 0, 0] / wrong.rates[0, 0, 0] - 1) > 0.05


def test_terms_add_up_and_what_is_zero_by_construction_says_so(remembering) -> None:
    _, _, c = remembering
    g = c.tables["gap"]
    np.testing.assert_allclose(g.memory + g.carrying + g.cycle, g.total, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(g.full - g.cohort, g.total, rtol=1e-9, atol=1e-9)
    assert (g.carrying_by_construction == ((g.use == "own") | ((g.strategy == "A") & g.threshold.isna()))).all()
    assert (g.cycle_by_construction == (g.cycle_rule == "continuous")).all()
    assert not g.memory_by_construction.any()


def test_memoryless_own_reproduces_lifetime_time_and_counts_of_any_process(remembering) -> None:
    """Flow balance: with constant rates and everybody followed to death, undiscounted time in states and events agree."""
    _, _, c = remembering
    own = _gap(c, use="own", cycle_rule="continuous").set_index(["strategy", "quantity"])
    for strategy in "AB":
        for quantity in ("ly", "time:Well", "time:Ill", "events:fall", "events:rise", "entries:Ill", "qaly", "cost"):
            row = own.loc[(strategy, quantity)]
            assert abs(row.memory) <= 4.5 * row.memory_se, (strategy, quantity)
        # discounting meets the wrong timing: here the agreement must end
        discounted = own.loc[(strategy, "cost_disc")]
        assert abs(discounted.memory) > 4.5 * discounted.memory_se


def test_carried_rates_miss_the_feedback_of_history_and_the_verdict_says_so(remembering) -> None:
    _, _, c = remembering
    row = _gap(c, strategy="B", quantity="incremental net benefit", use="carried", cycle_rule="half-cycle").iloc[0]
    assert abs(row.carrying) > 20 * row.carrying_se
    assert c.verdict.headline == NOT_ADEQUATE
    assert "is not adequate" in c.verdict.sentences[0]
    assert not any("nan" in s or "inf" in s for s in c.verdict.sentences)


def test_discrete_cycles_approach_continuous_time_as_they_shrink() -> None:
    totals = []
    for cycle in (1.0, 0.25):
        s = _markov(cycle=cycle)
        c = compare(s, simulate(s, patients=2000, seed=1))
        rows = _gap(c, strategy="B", quantity="incremental net benefit", use="own").set_index("cycle_rule").cycle
        totals.append([abs(rows[q]) for q in ("none", "half-cycle", "simpson")])
    assert all(fine < 0.4 * coarse for coarse, fine in zip(*totals, strict=True))


def test_tables_agree_with_each_other(markov) -> None:
    _, _, c = markov
    nb = c.tables["net_benefit"].query("model == 'individual'").set_index("strategy")
    outcomes = c.tables["outcomes"].query("model == 'individual'").set_index(["strategy", "outcome"])["mean"]
    for x in "AB":
        assert nb.net_benefit[x] == pytest.approx(
            20_000 * outcomes[x, "qaly_disc"] - outcomes[x, "cost_disc"], rel=1e-12
        )
    assert nb.increment_se["B"] < 0.5 * nb.standard_error["B"] * math.sqrt(2)
    test = c.verdict.tests[0]
    assert test.gap == pytest.approx(test.full - test.cohort)
    assert test.tolerance == pytest.approx(max(250.0, 0.05 * abs(test.full)))
    occupancy = c.tables["occupancy"].groupby(["strategy", "model", "time"]).probability.sum()
    np.testing.assert_allclose(occupancy, 1.0, rtol=1e-9)
    assert f"{test.full:,.0f} EUR" in c.verdict.sentences[-1].replace("−", "-")


@pytest.mark.parametrize(
    ("gap", "half", "expected"),
    [(10, 20, ADEQUATE), (-10, 20, ADEQUATE), (80, 20, UNRESOLVED), (-105, 20, UNRESOLVED), (130, 20, NOT_ADEQUATE),
     (-130, 20, NOT_ADEQUATE), (0, 150, UNRESOLVED)],
)  # fmt: skip
def test_equivalence_is_judged_by_the_whole_interval(gap: float, half: float, expected: str) -> None:
    assert judge(gap, half, 100.0) == expected


def test_one_failure_is_enough_and_one_doubt_leaves_it_open() -> None:
    assert overall([ADEQUATE, NOT_ADEQUATE, UNRESOLVED]) == NOT_ADEQUATE
    assert overall([ADEQUATE, UNRESOLVED]) == UNRESOLVED
    assert overall([ADEQUATE, ADEQUATE]) == ADEQUATE


def test_the_patients_needed_would_just_resolve_it() -> None:
    n = patients_needed(80.0, 40.0, 100.0, 1000)
    assert n == 4000
    assert judge(80.0, 40.0 * math.sqrt(1000 / (n * 1.01)), 100.0) == ADEQUATE
    assert math.isinf(patients_needed(100.0, 40.0, 100.0, 1000))


def test_few_patients_leave_a_close_question_open_and_say_how_many_would_tell() -> None:
    s = _remembering(amount=0.0, share=0.4)
    c = compare(s, simulate(s, patients=200, seed=2))
    gap = abs(c.verdict.tests[0].gap)
    s = replace(s, decision=replace(s.decision, amount=gap * 1.05, share=0.0))
    c = compare(s, simulate(s, patients=200, seed=2))
    test = c.verdict.tests[0]
    assert c.verdict.headline == UNRESOLVED and math.isfinite(test.patients_needed) and test.patients_needed > 200
    assert any("patients would tell" in sentence for sentence in c.verdict.sentences)


def test_the_jackknife_is_the_textbook_one_for_equal_groups_and_right_for_unequal_ones() -> None:
    rng = np.random.default_rng(1)
    x = rng.exponential(size=400)
    for cuts in (
        np.arange(0, 401, 20),
        np.concatenate([[0], np.sort(rng.choice(np.arange(5, 396), 19, replace=False)), [400]]),
    ):
        sums = np.add.reduceat(x, cuts[:-1])
        sizes = np.diff(cuts)
        values = leave_one_out(sums) / leave_one_out(sizes.astype(float))
        se = Jackknife(sizes).standard_error(values)
        if np.ptp(sizes) == 0:
            g = sizes.size
            assert se == pytest.approx(math.sqrt((g - 1) / g * np.sum((values[1:] - values[1:].mean()) ** 2)))
        # SE of a mean, from 20 groups: relative error of an SD with 19 degrees of freedom, times 4.5
        assert se == pytest.approx(x.std() / 20, rel=4.5 / math.sqrt(2 * 19))


def test_its_intervals_cover_the_gap_of_a_study_without_memory() -> None:
    """The true gap is 0: 95 % intervals over 120 seeds must cover it 103 to 120 times (binomial, beyond 1 in 10,000)."""
    s = _markov(horizon=10.0, cycle=0.5)
    hits = 0
    for seed in range(120):
        r = simulate(s, patients=1000, seed=seed)
        jackknife = Jackknife(r.moments.group_patients)
        cohorts = run_cohorts(s, r)
        i = r.layout.outcomes.index("qaly_disc")
        gap = (cohorts.full - cohorts.outcomes("carried", "continuous"))[:, 1, i]
        hits += abs(gap[0]) < jackknife.quantile(0.975) * jackknife.standard_error(gap)
    assert 103 <= hits <= 120


def test_background_rates_follow_elapsed_time_and_cells_without_people_borrow_the_nearest() -> None:
    ageing = hazard("gompertz", shape=0.5, rate=0.05)

    def clocks(hr: float):
        return (
            clock("age", "Well", "Dead", ageing, scale="elapsed", background=True, ratio=const(hr)),
            clock("fall", "Well", "Ill", hazard("exponential", rate=1e-9)),
            clock("rise", "Ill", "Well", hazard("exponential", rate=1.0)),
        )  # fmt: skip

    s = _pair(clocks(1.0), clocks(0.9), horizon=40.0)
    r = simulate(s, patients=4000, seed=1)
    p = project(r, path=0, arm=0, background=(True, False, False))
    edges, a = r.grid.time, 0
    exact = 0.05 * (np.exp(0.5 * edges[1:]) - np.exp(0.5 * edges[:-1])) / 0.5 / np.diff(edges)
    busy = r.paths[0].exposure.sum(axis=0)[0] > 300 * np.diff(edges)
    np.testing.assert_allclose(p.rates[0, a][busy], exact[busy], rtol=0.02)
    last = np.flatnonzero(p.supported[0])[-1]
    assert last < edges.size - 2
    np.testing.assert_array_equal(p.rates[0, a, last:], p.rates[0, a, last])


def test_rates_out_of_a_state_the_comparator_never_sees_are_refused() -> None:
    def clocks(open_: float):
        return (
            clock("new", "Well", "Ill", hazard("exponential", rate=0.5), ratio=const(open_)),
            clock("rise", "Ill", "Well", hazard("exponential", rate=1.0)),
            clock("die", "Well", "Dead", hazard("exponential", rate=0.1)),
        )

    s = _pair(clocks(0.0), clocks(1.0))
    with pytest.raises(CohortError, match="would enter state Ill by clock new"):
        compare(s, simulate(s, patients=500, seed=1))


def test_three_strategies_and_different_discount_rates_work_end_to_end() -> None:
    s = _markov()
    third = replace(s.arms[1], name="C", once={"care": 2000.0})
    s = replace(s, arms=(*s.arms, third), discounting=Discounting(0.05, 0.015))
    c = compare(s, simulate(s, patients=4000, seed=3))
    c_rows = c.tables["incremental"].query("model == 'individual'").set_index("strategy")
    assert c_rows.status["C"] == "dominated"
    assert {t.strategy for t in c.verdict.tests} == {"B", "C"}
    row = _gap(c, strategy="C", quantity="cost", use="own", cycle_rule="continuous").iloc[0]
    assert abs(row.total) <= 4.5 * row.total_se
    assert ONE.value == 1.0


def test_a_study_in_months_gives_the_gap_of_the_same_study_in_years() -> None:
    def clocks(hr: float, unit: float):
        return (
            clock("fall", "Well", "Ill", hazard("weibull", shape=0.6, scale=3.0 * unit), ratio=const(hr)),
            clock("rise", "Ill", "Well", hazard("exponential", rate=2.0 / unit)),
            clock("die", ("Well", "Ill"), "Dead", hazard("exponential", rate=0.08 / unit), background=True),
        )

    def states(unit: float):
        return (
            state("Well", start=1.0, utility=const(0.9), costs={"care": const(500.0 / unit)}),
            state("Ill", utility=const(0.5), entry_costs={"care": const(300.0)}, entry_qaly=const(-0.01)),
            state("Dead", absorbing=True),
        )

    found = []
    for unit in (1.0, 12.0):
        s = study(
            (states(unit), clocks(1.0, unit)), (states(unit), clocks(0.7, unit)),
            horizon=20.0 * unit, cycle=0.25 * unit, years_per_unit=1 / unit, discounting=Discounting(0.04, 0.02),
        )  # fmt: skip
        found.append(
            compare(s, simulate(s, patients=2000, seed=5))
            .tables["gap"]
            .set_index(["strategy", "quantity", "use", "cycle_rule"])
        )
    years, months = found
    for quantity in ("ly", "ly_disc", "qaly_disc", "cost_disc", "incremental net benefit"):
        rows = [k for k in years.index if k[1] == quantity]
        for column in ("full", "cohort", "total"):
            np.testing.assert_allclose(months.loc[rows, column], years.loc[rows, column], rtol=1e-7, atol=1e-7)
        np.testing.assert_allclose(months.loc[rows, "total_se"], years.loc[rows, "total_se"], rtol=1e-5, atol=1e-7)
