"""The reference's hazards against quadrature and SciPy's distributions, and the wait against what it must consume."""

from __future__ import annotations

import math

import numpy as np
import pytest
from bound_builder import hazard
from scipy import integrate, stats

from microsim.hazards.core import Hazard
from microsim.reference.hazards import consumed, rate, wait_for

TABLE = Hazard("table", edges=(0.5, 1.0, 2.5, 4.0), rates=((9.0, 9.0, 9.0), (0.7, 0.0, 0.3)))
FAMILIES = {
    "exponential": hazard("exponential", rate=0.3),
    "weibull falling": hazard("weibull", shape=0.6, scale=2.0),
    "weibull rising": hazard("weibull", shape=2.4, scale=5.0),
    "gompertz rising": hazard("gompertz", shape=0.2, rate=0.05),
    "gompertz falling": hazard("gompertz", shape=-0.5, rate=0.8),
    "gompertz flat": hazard("gompertz", shape=0.0, rate=0.4),
    "lognormal": hazard("lognormal", meanlog=0.4, sdlog=0.9),
    "loglogistic": hazard("loglogistic", shape=1.7, scale=3.0),
    "table": TABLE,
}
SCIPY = {
    "exponential": stats.expon(scale=1 / 0.3),
    "weibull falling": stats.weibull_min(0.6, scale=2.0),
    "weibull rising": stats.weibull_min(2.4, scale=5.0),
    "gompertz rising": stats.gompertz(0.05 / 0.2, scale=1 / 0.2),
    "lognormal": stats.lognorm(0.9, scale=math.exp(0.4)),
    "loglogistic": stats.fisk(1.7, scale=3.0),
}


@pytest.mark.parametrize("name", FAMILIES)
@pytest.mark.parametrize(("c0", "c1"), [(0.01, 0.3), (0.7, 2.2), (1.5, 9.0)])
def test_consumption_is_the_integral_of_the_rate(name: str, c0: float, c1: float) -> None:
    h = FAMILIES[name]
    inner = [e for e in TABLE.edges if c0 < e < c1] if name == "table" else None
    area, error = integrate.quad(
        lambda c: rate(h, c, level=1 if name == "table" else 0), c0, c1, points=inner, epsabs=0
    )
    got = consumed(h, c0, c1, level=1 if name == "table" else 0)
    assert got == pytest.approx(area, rel=1e-10, abs=10 * error)


@pytest.mark.parametrize("name", SCIPY)
def test_consumption_from_zero_is_minus_the_log_survivor_function(name: str) -> None:
    for c in (1e-3, 0.4, 3.0, 20.0):
        assert consumed(FAMILIES[name], 0.0, c) == pytest.approx(-SCIPY[name].logsf(c), rel=1e-11)


@pytest.mark.parametrize("name", FAMILIES)
@pytest.mark.parametrize("c0", [0.0, 0.8, 30.0])
def test_the_wait_consumes_the_amount_and_does_not_depend_on_how_far_was_looked(name: str, c0: float) -> None:
    h, level = FAMILIES[name], 1 if name == "table" else 0
    for amount in (1e-6, 0.3, 1.5):
        wait = wait_for(h, c0, amount, within=1e4, level=level)
        if math.isinf(wait):
            assert consumed(h, c0, c0 + 1e4, level=level) < amount
        else:
            assert consumed(h, c0, c0 + wait, level=level) == pytest.approx(amount, rel=1e-9, abs=1e-12)
            assert wait == wait_for(h, c0, amount, within=2 * wait, level=level)


def test_a_falling_gompertz_hazard_is_exhausted() -> None:
    h = FAMILIES["gompertz falling"]  # the whole hazard is rate / -shape = 1.6
    assert math.isfinite(wait_for(h, 0.0, 1.59, within=100.0))
    assert wait_for(h, 0.0, 1.61, within=100.0) == math.inf
    assert wait_for(h, 2.0, 1.59, within=100.0) == math.inf


def test_nothing_to_consume_takes_no_time_and_an_endless_amount_for_ever() -> None:
    h = FAMILIES["weibull falling"]
    assert wait_for(h, 1.0, 0.0, within=10.0) == 0.0
    assert wait_for(h, 1.0, math.inf, within=10.0) == math.inf


def test_a_table_has_no_hazard_before_its_first_edge_and_keeps_its_last_rate() -> None:
    assert consumed(TABLE, 0.0, 0.5, level=1) == 0.0
    assert rate(TABLE, 0.2, level=1) == 0.0
    assert consumed(TABLE, 4.0, 14.0, level=1) == pytest.approx(3.0, rel=1e-14)
    assert rate(TABLE, 14.0, level=1) == 0.3
    assert wait_for(TABLE, 0.0, 0.35 + 0.3, within=20.0, level=1) == pytest.approx(2.5 + 1.0, rel=1e-12)
    np.testing.assert_allclose(consumed(TABLE, 0.75, 3.0, level=1), 0.25 * 0.7 + 0.5 * 0.3)
