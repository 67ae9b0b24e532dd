"""Families by SciPy: against scipy.stats, and against each other (inverse, derivative, units)."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from microsim.hazards.core import PARAMETERS, Hazard
from microsim.hazards.families import cumulative, inverse, rate, rescale, survival

# scipy.stats 1.17: the same distributions in SciPy's parameterisation
SCIPY = {
    "exponential": (Hazard("exponential", {"rate": 0.3}), stats.expon(scale=1 / 0.3)),
    "weibull": (Hazard("weibull", {"shape": 0.7, "scale": 2.5}), stats.weibull_min(0.7, scale=2.5)),
    "gompertz": (Hazard("gompertz", {"shape": 0.09, "rate": 0.02}), stats.gompertz(0.02 / 0.09, scale=1 / 0.09)),
    "lognormal": (Hazard("lognormal", {"meanlog": -0.5, "sdlog": 0.8}), stats.lognorm(0.8, scale=np.exp(-0.5))),
    "loglogistic": (Hazard("loglogistic", {"shape": 1.7, "scale": 2.5}), stats.fisk(1.7, scale=2.5)),
}
TIMES = np.geomspace(1e-4, 60.0, 200)


def test_every_family_is_checked_against_scipy() -> None:
    assert set(SCIPY) == set(PARAMETERS)


@pytest.mark.parametrize("family", SCIPY)
def test_survival_hazard_and_quantiles_agree_with_scipy(family: str) -> None:
    ours, theirs = SCIPY[family]
    np.testing.assert_allclose(-cumulative(ours, TIMES), theirs.logsf(TIMES), rtol=1e-9)
    log_hazard = theirs.logpdf(TIMES) - theirs.logsf(TIMES)
    np.testing.assert_allclose(np.log(rate(ours, TIMES)), log_hazard, rtol=1e-9, atol=1e-9)
    p = np.array([0.001, 0.1, 0.5, 0.9, 0.999])
    np.testing.assert_allclose(inverse(ours, -np.log1p(-p)), theirs.ppf(p), rtol=1e-9)


@pytest.mark.parametrize("family", SCIPY)
@settings(max_examples=60, deadline=None, derandomize=True)
@given(h=st.floats(1e-12, 300.0))
def test_the_inverse_undoes_the_cumulative_hazard(family: str, h: float) -> None:
    t = inverse(SCIPY[family][0], h)
    np.testing.assert_allclose(cumulative(SCIPY[family][0], t), h, rtol=1e-9)


@pytest.mark.parametrize("family", SCIPY)
def test_the_hazard_is_the_derivative_of_the_cumulative_hazard(family: str) -> None:
    h = SCIPY[family][0]
    t, step = np.geomspace(0.1, 20, 50), 1e-5
    slope = (cumulative(h, t * (1 + step)) - cumulative(h, t * (1 - step))) / (2 * t * step)
    np.testing.assert_allclose(slope, rate(h, t), rtol=1e-7)


@pytest.mark.parametrize("family", SCIPY)
def test_changing_the_time_unit_changes_only_the_unit(family: str) -> None:
    h = SCIPY[family][0]
    np.testing.assert_allclose(cumulative(rescale(h, 365.25), TIMES * 365.25), cumulative(h, TIMES), rtol=1e-9)


def test_a_falling_gompertz_hazard_leaves_a_plateau() -> None:
    h = Hazard("gompertz", {"shape": -0.05, "rate": 0.04})
    # closed form S(inf) = exp(rate / shape)
    assert survival(h, 1e6)[0] == pytest.approx(np.exp(0.04 / -0.05), rel=1e-12)
    assert np.isinf(inverse(h, 0.81)[0]) and np.isfinite(inverse(h, 0.79)[0])


def test_tables_hold_their_last_rate_and_select_by_level() -> None:
    h = Hazard("table", by="sex", edges=(40.0, 41.0, 42.0), rates=((0.1, 0.2), (0.3, 0.0)))
    level = np.array([0, 0, 0, 1, 1])
    t = np.array([39.0, 41.5, 45.0, 41.0, 50.0])
    np.testing.assert_allclose(cumulative(h, t, level=level), [0.0, 0.2, 0.1 + 0.2 * 4, 0.3, 0.3], rtol=1e-12)
    np.testing.assert_allclose(rate(h, t, level=level), [0.0, 0.2, 0.2, 0.0, 0.0])
    back = inverse(h, np.array([0.05, 0.2, 0.9, 0.15, 0.31]), level=level)
    np.testing.assert_allclose(back, [40.5, 41.5, 45.0, 40.5, np.inf])
