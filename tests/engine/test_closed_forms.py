"""Simulated means against closed forms, quadrature and a published life table; |z| < 4.5 with the stated SD."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
from bound_builder import ONE, clock, hazard, one_exit, op, state, study
from scipy import integrate

from microsim.engine.run import Wants, simulate
from microsim.hazards.core import Hazard
from microsim.hazards.families import survival
from microsim.records.simulation import SimulationRecord
from microsim.study.bound import BoundAttribute, BoundStudy, Discounting, Law
from microsim.study.expression import const

DATA = Path(__file__).parents[1] / "data" / "closed_forms"
N = 60_000


def _values() -> dict[str, float]:
    # computed with mpmath at 30 digits and checked again with scipy (see the column "status")
    with (DATA / "sojourns.csv").open(encoding="utf-8") as file:
        return {row["id"]: float(row["value"]) for row in csv.DictReader(file)}


VALUES = _values()
FAMILIES = {
    "D01": hazard("exponential", rate=0.1),
    "D03": hazard("weibull", shape=0.7, scale=8.0),
    "D04": hazard("lognormal", meanlog=2.0, sdlog=0.8),
    "D06": hazard("gompertz", shape=0.08, rate=0.03),
    "D07": hazard("gompertz", shape=-0.05, rate=0.04),
}


def _run(s: BoundStudy, *, seed: int = 5, patients: int = N) -> SimulationRecord:
    return simulate(s, patients=patients, seed=seed, threads=2, wants=Wants(tallies=False))


def _mean(record: SimulationRecord, outcome: str, arm: int = 0) -> tuple[float, float]:
    """Mean and its standard error."""
    i = record.layout.outcomes.index(outcome)
    return record.moments.mean[arm, i], float(np.sqrt(record.moments.covariance[i, arm, arm] / record.moments.patients))


def _z(record: SimulationRecord, outcome: str, expected: float, sd: float | None = None) -> float:
    mean, se = _mean(record, outcome)
    return (mean - expected) / (se if sd is None else sd / np.sqrt(record.moments.patients))


@pytest.mark.parametrize("key", FAMILIES)
def test_discounted_sojourns_equal_their_laplace_transform(key: str) -> None:
    record = _run(one_exit(FAMILIES[key], horizon=1500.0))
    assert abs(_z(record, "ly_disc", VALUES[f"{key}_disc_inf"], VALUES[f"{key}_disc_sd"])) < 4.5
    assert _mean(record, "qaly_disc") == _mean(record, "ly_disc")
    if f"{key}_mean" in VALUES:
        assert abs(_z(record, "ly", VALUES[f"{key}_mean"])) < 4.5


@pytest.mark.parametrize("key", FAMILIES)
def test_a_horizon_gives_restricted_means(key: str) -> None:
    assert abs(_z(_run(one_exit(FAMILIES[key], horizon=10.0)), "ly", VALUES[f"{key}_rmst10"])) < 4.5
    assert abs(_z(_run(one_exit(FAMILIES[key], horizon=40.0)), "ly_disc", VALUES[f"{key}_disc40"])) < 4.5


def test_a_wrong_rate_would_be_noticed() -> None:
    record = _run(one_exit(hazard("exponential", rate=0.105), horizon=1500.0))
    assert abs(_z(record, "ly_disc", VALUES["D01_disc_inf"], VALUES["D01_disc_sd"])) > 10


def test_annual_discounting_steps_at_whole_years() -> None:
    family = hazard("weibull", shape=0.7, scale=8.0)
    record = _run(one_exit(family, horizon=40.0, discounting=Discounting(0.06, 0.035, "annual")))
    years = [integrate.quad(lambda t: survival(family, t)[0], k, k + 1)[0] * 1.035**-k for k in range(40)]
    assert abs(_z(record, "ly_disc", sum(years))) < 4.5


def _illness_death() -> BoundStudy:
    """Well to ill at 0.2, well to dead at 0.05, ill to dead after a gamma(2, 0.5) stay, as two stages of rate 0.5."""
    states = (
        state("Well", start=1.0, utility=ONE),
        state("Ill1", costs={"ill": ONE}),
        state("Ill2", costs={"ill": ONE}),
        state("Dead", absorbing=True),
    )
    clocks = (
        clock("fall", "Well", "Ill1", hazard("exponential", rate=0.2)),
        clock("die", "Well", "Dead", hazard("exponential", rate=0.05)),
        clock("stage", "Ill1", "Ill2", hazard("exponential", rate=0.5)),
        clock("end", "Ill2", "Dead", hazard("exponential", rate=0.5)),
    )
    return study((states, clocks), horizon=400.0)


def test_a_gamma_stay_in_stages_gives_the_closed_form_of_illness_and_death() -> None:
    record = _run(_illness_death())
    assert abs(_z(record, "qaly_disc", VALUES["ID1_well"])) < 4.5
    assert abs(_z(record, "cost_disc:ill", VALUES["ID1_ill"])) < 4.5
    # an exponential stay of equal mean is another number, and would be noticed
    assert abs(_z(record, "cost_disc:ill", VALUES["ID1_ill_markov"])) > 4.5


def test_occupancy_of_illness_and_death_at_fixed_times() -> None:
    s = _illness_death()
    record = simulate(s, patients=N, seed=5, threads=2)
    grid = record.grid.time
    present = record.paths[0].present.sum(axis=0)[1:3].sum(axis=0) / N
    ill = np.interp([5.0, 10.0], grid, present)
    for got, key in zip(ill, ("ID1_Pill_5", "ID1_Pill_10"), strict=True):
        p = VALUES[key]
        # the grid's cells are 2.5 years wide at this horizon and have edges at both times
        assert abs(got - p) < 4.5 * np.sqrt(p * (1 - p) / N)


def test_a_semi_markov_cycle_gives_expected_visits_and_times() -> None:
    """W: gamma(2, 0.5) in two stages, then F 0.9 or dead 0.1; F: Weibull(1.5, 1), then W 0.8 or dead 0.2."""
    states = (
        state("W1", start=1.0, costs={"w": ONE}),
        state("W2", costs={"w": ONE}),
        state("F", costs={"f": ONE}),
        state("D", absorbing=True),
    )  # fmt: skip
    weibull = hazard("weibull", shape=1.5, scale=1.0)
    clocks = (
        clock("stage", "W1", "W2", hazard("exponential", rate=0.5)),
        clock("wf", "W2", "F", hazard("exponential", rate=0.45)),
        clock("wd", "W2", "D", hazard("exponential", rate=0.05)),
        clock("fw", "F", "W1", weibull, ratio=const(0.8)),
        clock("fd", "F", "D", weibull, ratio=const(0.2)),
    )
    record = _run(study((states, clocks), horizon=2000.0))
    assert abs(_z(record, "cost:w", VALUES["CY0_W"])) < 4.5
    assert abs(_z(record, "cost:f", VALUES["CY0_F"])) < 4.5
    assert abs(_z(record, "cost_disc:w", VALUES["CY1_W"])) < 4.5
    assert abs(_z(record, "cost_disc:f", VALUES["CY1_F"])) < 4.5
    assert abs(_z(record, "entries:F", VALUES["CY0_nF"])) < 4.5
    assert abs(_z(record, "entries:W1", VALUES["CY0_nW"] - 1.0)) < 4.5  # the start is not an arrival


def test_competing_weibulls_fire_in_proportion() -> None:
    states = (state("A", start=1.0), state("X", absorbing=True), state("Y", absorbing=True))
    weibull = hazard("weibull", shape=0.6, scale=3.0)
    clocks = (clock("x", "A", "X", weibull, ratio=const(3.0)), clock("y", "A", "Y", weibull, ratio=ONE))
    record = _run(study((states, clocks), horizon=1e5))
    assert abs(_z(record, "events:x", 0.75)) < 4.5


@pytest.mark.parametrize("sex", ["male", "female"])
@pytest.mark.parametrize("age", [60, 65])
def test_life_expectancy_by_the_us_life_table(sex: str, age: int) -> None:
    """US 2010 rates (R survival 3.5-3, survexp.us) give the expectancy of the constant-hazard convention, and the life table
    as published (Arias, NVSR 63(7), 2010, as transcribed) within its own rounding and convention."""
    with (DATA / "us_hazards_2010.csv").open(encoding="utf-8") as file:
        rows = [r for r in csv.DictReader(file) if r["sex"] == sex]
    with (DATA / "life_expectancy.csv").open(encoding="utf-8") as file:
        expected = next(r for r in csv.DictReader(file) if r["sex"] == sex and int(r["age"]) == age)
    ages = [float(r["age"]) for r in rows]
    table = Hazard("table", edges=(*ages, ages[-1] + 1), rates=(tuple(float(r["hazard_per_year"]) for r in rows),))
    states = (state("Alive", start=1.0, utility=ONE), state("Dead", absorbing=True))
    person = BoundAttribute("age", Law("constant", {"value": float(age)}))
    s = study((states, (clock("death", "Alive", "Dead", table, scale="age"),)), horizon=200.0, attributes=(person,))
    record = _run(s, patients=150_000)
    assert abs(_z(record, "ly", float(expected["e_constant_hazard"]))) < 4.5
    assert abs(_z(record, "ly_disc", float(expected["disc_e_3.5pct_constant_hazard"]))) < 4.5
    mean, se = _mean(record, "ly")
    assert abs(mean - float(expected["published_NCHS_2010_e"])) < 4.5 * se + 0.015
    # a table read one year off would be noticed
    assert abs(_z(record, "ly", float(expected["e_constant_hazard"]) - 0.7)) > 4.5


def test_entry_amounts_decrements_and_start_costs_add_up() -> None:
    """A constant-rate two-state loop over 10 years: expected arrivals are known, amounts follow."""
    states = (
        state("A", start=1.0, utility=ONE),
        state("B", utility=ONE, entry_costs={"c": const(100.0)}, entry_qaly=const(-0.5)),
        state("C", absorbing=True),
    )
    clocks = (
        clock("ab", "A", "B", hazard("exponential", rate=0.5)),
        clock("ba", "B", "A", hazard("exponential", rate=0.5)),
        clock("never", "A", "C", hazard("exponential", rate=1e-12)),
    )
    s = study((states, clocks), horizon=10.0, once=({"c": 7.0}, {"c": 7.0}), discounting=Discounting(0.0, 0.0))
    record = _run(s)
    # P(A at t) = (1 + exp(-t)) / 2, arrivals in B = 0.5 int P(A)
    arrivals = 0.25 * (10 + 1 - np.exp(-10.0))
    assert abs(_z(record, "entries:B", arrivals)) < 4.5
    assert abs(_z(record, "cost", 7.0 + 100.0 * arrivals)) < 4.5
    assert abs(_z(record, "qaly", 10.0 - 0.5 * arrivals)) < 4.5


def test_an_event_exactly_at_the_horizon_counts_and_one_after_does_not() -> None:
    from microsim import rng

    at = float(rng.thresholds([0], seed=5, clock="death")[0])
    for horizon, events in ((at, 1.0), (at * (1 - 1e-12), 0.0)):
        kept = []
        s = one_exit(hazard("exponential", rate=1.0), horizon=horizon)
        simulate(s, patients=80, seed=5, wants=Wants(tallies=False, outcomes=lambda first, c, k=kept: k.append(c)))
        assert kept[0].outcomes[0, kept[0].layout.outcomes.index("events:death"), 0] == events


def test_a_time_unit_of_months_gives_the_same_years() -> None:
    monthly = one_exit(hazard("exponential", rate=0.1 / 12), horizon=480.0, years_per_unit=1 / 12)
    yearly = one_exit(hazard("exponential", rate=0.1), horizon=40.0)
    a, b = _run(monthly), _run(yearly)
    for outcome in ("ly", "ly_disc", "qaly_disc"):
        assert _mean(a, outcome)[0] == pytest.approx(_mean(b, outcome)[0], rel=1e-10)
    assert _mean(a, "time:Alive")[0] == pytest.approx(12 * _mean(b, "time:Alive")[0], rel=1e-10)


def test_a_ratio_multiplies_the_hazard() -> None:
    states = (state("A", start=1.0, utility=ONE), state("D", absorbing=True))
    k = clock("d", "A", "D", hazard("gompertz", shape=0.08, rate=0.03), ratio=op("exp", op("log", 2.0)))
    expected = integrate.quad(lambda t: survival(hazard("gompertz", shape=0.08, rate=0.06), t)[0], 0, 100)[0]
    assert abs(_z(_run(study((states, (k,)), horizon=100.0)), "ly", expected)) < 4.5
