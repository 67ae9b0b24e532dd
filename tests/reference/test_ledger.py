"""Valuation of one path by hand, and discount integrals against quadrature."""

from __future__ import annotations

import math

import pytest
from bound_builder import clock, hazard, memory, op, state, study
from scipy import integrate

from microsim.reference.ledger import Discount, Ledger
from microsim.reference.memory import Memory
from microsim.study.bound import Discounting
from microsim.study.expression import const


@pytest.mark.parametrize("annual", [False, True])
@pytest.mark.parametrize("years_per_unit", [1.0, 1 / 12])
@pytest.mark.parametrize("rate", [0.0, 0.035])
def test_a_discount_integral_is_the_area_under_the_factor(annual: bool, years_per_unit: float, rate: float) -> None:
    d = Discount(rate, annual, years_per_unit)
    for a, b in ((0.0, 0.4), (0.3, 7.7), (11.5, 49.0), (12.0, 12.0)):
        year = 1 / years_per_unit
        steps = [k * year for k in range(math.ceil(b / year) + 1) if a < k * year < b] if annual else None
        area, _ = integrate.quad(d.factor, a, b, points=steps or None, epsabs=1e-13, epsrel=1e-12, limit=200)
        assert d.integral(a, b) == pytest.approx(area, rel=1e-11, abs=1e-13)


def test_annual_factors_step_down_once_a_year() -> None:
    d = Discount(0.04, True, 1 / 12)
    assert d.factor(11.9) == 1.0
    assert d.factor(12.1) == pytest.approx(1 / 1.04)


def test_a_path_by_hand_is_worth_what_it_should_be() -> None:
    """Months, no discounting of effects: 6 months well, 12 months ill, then dead; a once-only cost at the start."""
    states = (
        state("Well", start=1.0, utility=const(0.9), costs={"care": const(100.0)}, entry_costs={"care": const(1e6)}),
        state("Ill", utility=const(0.5), costs={"care": op("mul", 50.0, memory("visits", "Ill"))},
              entry_costs={"bed": const(700.0)}, entry_qaly=const(-0.02)),
        state("Dead", absorbing=True),
    )  # fmt: skip
    clocks = (
        clock("falls_ill", "Well", "Ill", hazard("exponential", rate=1.0)),
        clock("death", "Ill", "Dead", hazard("exponential", rate=1.0)),
    )
    s = study((states, clocks), years_per_unit=1 / 12, discounting=Discounting(0.05, 0.0), once=({"bed": 30.0}, {}))
    ledger, m = Ledger(s, s.arms[0]), Memory(0, {}, 1 / 12)
    m.enter("Well", 0.0)
    ledger.sojourn(states[0], m, 6.0)
    m.leave(6.0)
    m.enter("Ill", 6.0)
    ledger.arrival(states[1], "falls_ill", m)
    ledger.sojourn(states[1], m, 18.0)
    m.leave(18.0)
    m.enter("Dead", 18.0)
    ledger.arrival(states[2], "death", m)
    ledger.sojourn(states[2], m, 40.0)
    force = math.log(1.05) / 12
    care = (100.0 * -math.expm1(-6 * force) + 50.0 * (math.exp(-6 * force) - math.exp(-18 * force))) / force
    bed = 30.0 + 700.0 * 1.05**-0.5
    expected = {
        "ly": 1.5, "ly_disc": 1.5, "qaly": 0.93, "qaly_disc": 0.93, "cost": 1930.0, "cost_disc": care + bed,
        "cost:care": 1200.0, "cost_disc:care": care, "cost:bed": 730.0, "cost_disc:bed": bed,
        "time:Well": 6.0, "time:Ill": 12.0, "time:Dead": 22.0, "entries:Well": 0.0, "entries:Ill": 1.0,
        "entries:Dead": 1.0, "events:falls_ill": 1.0, "events:death": 1.0,
    }  # fmt: skip
    assert ledger.outcomes == pytest.approx(expected, rel=1e-12)
