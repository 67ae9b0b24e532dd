"""Binding puts numbers in: values by hand for every way a hazard, law, change or override can be written."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pytest

from microsim.errors import InputError
from microsim.hazards.core import Hazard
from microsim.study.bind import bind
from microsim.study.bound import BoundStudy
from microsim.study.expression import Node, evaluate
from microsim.study.parts import Study

Loader = Callable[..., Study]


HOME_STAY = Hazard("weibull", {"shape": 0.7, "scale": 0.8})


@dataclass(frozen=True)
class Fitted:
    hazard: Hazard = HOME_STAY
    coefficients: Mapping[str, float] = field(default_factory=lambda: {"b_prior": 0.1, "b_nurse": -0.2})


FITS = {"home_stay": Fitted()}


def bound(load: Loader, **changes: Any) -> BoundStudy:
    return bind(load(**changes), FITS)


def hazard_of(study: BoundStudy, clock: str, *, arm: int = 0) -> Hazard:
    return next(k for k in study.arms[arm].clocks if k.name == clock).hazard


def test_every_arm_has_the_same_states_and_clocks_in_order(load: Loader) -> None:
    study = bound(load)
    assert [a.name for a in study.arms] == ["usual_care", "nurse_led"]
    assert len({tuple(s.name for s in a.states) for a in study.arms}) == 1
    assert len({tuple((k.name, k.sources, k.target) for k in a.clocks) for a in study.arms}) == 1
    assert study.categories == ("care", "bed", "admission", "programme")
    assert study.comparator.name == "usual_care"


def test_no_input_is_left_in_a_formula(load: Loader) -> None:
    for arm in bound(load).arms:
        nodes = [k.ratio for k in arm.clocks]
        for s in arm.states:
            nodes += [s.utility, s.entry_qaly, *s.costs.values(), *s.entry_costs.values()]
        assert not [n for node in nodes for n in node.walk() if n.op == "input"]


def test_differences_of_a_strategy(load: Loader) -> None:
    base, nurse = bound(load).arms
    home, nurse_home = base.states[0], nurse.states[0]
    assert home.costs["care"].value == 1500
    assert "programme" not in home.costs
    assert nurse_home.costs["care"].value == 1500 + 100 + 10
    assert nurse_home.costs["programme"].value == pytest.approx(600)
    assert (dict(base.once), dict(nurse.once)) == ({}, {"programme": 200.0})
    visits: Callable[[Node], float] = lambda n: 3.0  # noqa: E731
    assert float(evaluate(base.clocks[0].ratio, visits)) == pytest.approx(math.exp(0.3))
    assert float(evaluate(nurse.clocks[0].ratio, visits)) == pytest.approx(0.8 * math.exp(0.3))


@pytest.mark.parametrize(
    ("hazard", "wanted"),
    [
        ({"rate": 2}, ("exponential", {"rate": 2.0})),
        ({"rate": 2, "unit": "month"}, ("exponential", {"rate": 24.0})),
        ({"rate": "c_x"}, ("exponential", {"rate": 0.5 * 365.25})),
        ({"exponential": {"rate": 3}}, ("exponential", {"rate": 3.0})),
        ({"probability": 0.2, "per": {"value": 2, "unit": "year"}}, ("exponential", {"rate": -math.log(0.8) / 2})),
        ({"weibull": {"shape": 1.3, "scale": 6}, "unit": "month"}, ("weibull", {"shape": 1.3, "scale": 0.5})),
        ({"gompertz": {"shape": -0.1, "rate": 0.2}, "unit": "month"}, ("gompertz", {"shape": -1.2, "rate": 2.4})),
        ({"lognormal": {"meanlog": 1, "sdlog": 0.5}, "unit": "month"}, ("lognormal", {"meanlog": 1 - math.log(12),
        "sdlog": 0.5})),
        ({"lognormal": {"mean": 6, "sdlog": 0.5}, "unit": "month"}, ("lognormal", {"meanlog": math.log(0.5) - 0.125,
        "sdlog": 0.5})),
        ({"lognormal": {"mean": "t_x", "sdlog": 0.5}}, ("lognormal", {"meanlog": math.log(0.25) - 0.125,
        "sdlog": 0.5})),
        ({"loglogistic": {"shape": 2, "scale": 6}, "unit": "month"}, ("loglogistic", {"shape": 2.0, "scale": 0.5})),
        ({"loglogistic": {"shape": 2, "scale": "t_x * 2"}}, ("loglogistic", {"shape": 2.0, "scale": 0.5})),
    ],
)  # fmt: skip
def test_hazards_come_in_study_units(
    load: Loader, hazard: dict[str, Any], wanted: tuple[str, dict[str, float]]
) -> None:
    inputs = {"c_x": "0.5,/day,,,,invented,", "t_x": "3,month,,,,invented,"}
    got = hazard_of(bound(load, study={"clocks.discharge.hazard": hazard}, inputs=inputs), "discharge")
    assert got.family == wanted[0]
    assert dict(got.params) == pytest.approx(wanted[1], rel=1e-14)


def test_the_same_hazard_means_the_same_in_another_time_unit(load: Loader) -> None:
    hazard = {"gompertz": {"shape": 0.1, "rate": 0.2}, "unit": "year"}
    yearly = hazard_of(bound(load, study={"clocks.discharge.hazard": hazard}), "discharge").params
    monthly = hazard_of(bound(load, study={"clocks.discharge.hazard": hazard, "time": "month"}), "discharge").params
    assert yearly["rate"] * math.exp(yearly["shape"] * 2.5) == pytest.approx(
        12 * monthly["rate"] * math.exp(monthly["shape"] * 30), rel=1e-12
    )


def test_a_life_table_comes_on_the_clock_in_study_units(load: Loader) -> None:
    monthly = hazard_of(
        bound(load, time="month", horizon=120, files={"lifetable.csv": "age,female,male\n40,0.1,0.2\n"}), "background"
    )
    assert monthly.edges == pytest.approx((480, 492))
    assert monthly.rates[0][0] == pytest.approx(-math.log(0.9) / 12, rel=1e-14)
    assert monthly.rates[1][0] == pytest.approx(-math.log(0.8) / 12, rel=1e-14)
    assert monthly.by == "sex"


def test_a_table_of_rates_is_taken_as_rates(load: Loader) -> None:
    hazard = {"table": "lifetable.csv", "unit": "yearly rate", "beyond": "hold"}
    got = hazard_of(
        bound(load, study={"clocks.background.hazard": hazard}, files={"lifetable.csv": "age,value\n40,1.5\n"}),
        "background",
    )
    assert (got.rates, got.by) == (((1.5,),), None)


def test_a_strategy_may_use_another_hazard(load: Loader) -> None:
    study = bound(load, study={"strategies.nurse_led.clocks.readmission.hazard": {"rate": 1}})
    assert hazard_of(study, "readmission").family == "weibull"
    assert hazard_of(study, "readmission", arm=1) == Hazard("exponential", {"rate": 1.0})


@pytest.mark.parametrize(
    ("law", "wanted"),
    [
        ({"normal": {"mean": 3, "sd": 2}}, {"mean": 3, "sd": 2}),
        ({"gamma": {"mean": 3, "sd": 2}}, {"shape": 2.25, "rate": 0.75}),
        ({"gamma": {"shape": 3, "rate": 2}}, {"shape": 3, "rate": 2}),
        ({"beta": {"mean": 0.2, "sd": 0.1}}, {"a": 3.0, "b": 12.0}),
        ({"lognormal": {"mean": 3, "sd": 2}}, {"meanlog": math.log(3) - math.log(13 / 9) / 2,
        "sdlog": math.sqrt(math.log(13 / 9))}),
        ({"uniform": {"low": 1, "high": "hr_nurse * 5"}}, {"low": 1, "high": 4}),
        ({"value": "2 + 3"}, {"value": 5}),
        ({"choice": {"a b": 0.25, "c": 0.75}}, {"p0": 0.25, "p1": 0.75}),
    ],
)  # fmt: skip
def test_laws_have_their_own_parameters(load: Loader, law: dict[str, Any], wanted: dict[str, float]) -> None:
    attribute = bound(load, study={"attributes.x": law}).population.attributes[-1]
    assert attribute.law is not None
    assert dict(attribute.law.params) == pytest.approx(wanted, rel=1e-12)


def test_age_is_in_years_whatever_the_study_counts_in(load: Loader) -> None:
    for unit in ("year", "month", "day"):
        law = bound(load, time=unit, horizon={"value": 10, "unit": "year"}).population.attributes[0].law
        assert law is not None
        assert (law.params["mean"], law.params["sd"], law.within) == (pytest.approx(70), 8, (45, 90))


def test_correlations_become_a_matrix_in_the_order_of_attributes(load: Loader) -> None:
    study = bound(load, study={"population.correlation": [{"between": ["sex", "age"], "value": 0.3}]})
    assert study.population.correlation == ((1.0, 0.3), (0.3, 1.0))


def test_overrides_reach_everything_that_depends_on_them(load: Loader) -> None:
    study = load()
    changed = bind(study, FITS, overrides={"c_admission": 1800.0, "c_home": 100.0, "b_prior": 0.0})
    assert changed.inputs["c_setup"] == pytest.approx(400)
    assert changed.arms[1].once["programme"] == pytest.approx(400)
    assert changed.arms[0].states[1].entry_costs["admission"].value == 1800
    assert changed.arms[1].states[0].costs["care"].value == 100 + 100 + 10
    assert float(evaluate(changed.arms[0].clocks[0].ratio, lambda n: 3.0)) == 1.0
    assert bind(study, FITS).arms[0].states[0].costs["care"].value == 1500


def test_an_input_that_follows_a_changed_one_changes_in_that_arm_only(load: Loader) -> None:
    study = bound(load, study={"strategies.nurse_led.inputs.c_admission": "c_admission * 2"})
    assert study.arms[1].once["programme"] == pytest.approx(400)
    assert study.inputs["c_setup"] == pytest.approx(200)


def test_binding_needs_every_fit_and_every_coefficient(load: Loader) -> None:
    study = load()
    with pytest.raises(InputError, match="has not been made"):
        bind(study)
    with pytest.raises(InputError, match="lacks b_nurse"):
        bind(study, {"home_stay": Fitted(coefficients={"b_prior": 0.1})})


@pytest.mark.parametrize(
    ("overrides", "problem"),
    [
        ({"c_hom": 1.0}, "unknown input"), ({"c_home": math.nan}, "not a finite number"),
        ({"p_death": 1.5}, "lies in"), ({"u_home": 1.5}, "at most 1"), ({"hr_nurse": -1.0}, "cannot be negative"),
        ({"p_female": 2.0}, "lies in"), ({"b_prior": math.inf}, "not a finite number"),
    ],
)  # fmt: skip
def test_impossible_numbers_are_refused_at_binding(load: Loader, overrides: dict[str, float], problem: str) -> None:
    study = load(study={"strategies.nurse_led.clocks.discharge.ratio": "hr_nurse"})
    with pytest.raises(InputError, match=problem):
        bind(study, FITS, overrides=overrides)


def test_a_fit_that_gives_no_number_is_refused(load: Loader) -> None:
    broken = Fitted(hazard=Hazard("weibull", {"shape": math.nan, "scale": 1.0}))
    with pytest.raises(InputError, match="gave no number"):
        bind(load(), {"home_stay": broken})


def test_binding_many_times_is_cheap(load: Loader) -> None:
    """Measured 0.6 ms a time; the bound leaves room for a slow machine."""
    study = load()
    bind(study, FITS)
    start = time.perf_counter()
    for i in range(50):
        bind(study, FITS, overrides={"c_home": 1000.0 + i})
    assert (time.perf_counter() - start) / 50 < 0.01


def test_a_start_may_be_shared_by_formula(load: Loader) -> None:
    study = bound(load, study={"states.Home.start": "1 - p_death", "states.Hospital.start": "p_death"})
    assert [s.start for s in study.arms[0].states] == pytest.approx([0.95, 0.05, 0.0])


def test_settings_are_carried_over(load: Loader) -> None:
    study = bound(load, study={"cohort": {"cycle": {"value": 3, "unit": "month"}, "correction": "simpson"}})
    assert (study.cohort.cycle, study.cohort.correction) == (0.25, "simpson")
    assert study.decision.thresholds == (20_000.0, 35_000.0)
    assert (study.decision.share, study.decision.amount, study.decision.alpha) == (0.05, 250.0, 0.05)
    assert (study.horizon, study.time_unit, study.years_per_unit) == (10.0, "year", 1.0)
    assert np.isclose(study.discounting.forces(1.0)[0], math.log(1.035))
