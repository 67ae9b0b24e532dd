"""Families by SciPy: against scipy.stats, and against each other (inverse, derivative, units)."""

from __future__ import annotations

import csv
import re
from pathlib import Path

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

# Survivor functions, hazards, quantiles and conditional quantiles computed with mpmath 1.4.1 at 30 digits, re-checked by
# scipy 1.17.1 (column formula says how).
CLOSED_FORMS = Path(__file__).parents[1] / "data" / "fits" / "07_distributions.csv"


def _closed_forms() -> list[dict[str, str]]:
    with CLOSED_FORMS.open(encoding="utf-8") as file:
        return list(csv.DictReader(file))


def _numbers(text: str) -> dict[str, float]:
    return {name: float(value) for name, value in re.findall(r"(\w+)=([-+.\de]+)", text)}


@pytest.mark.parametrize("row", _closed_forms(), ids=lambda r: r["id"])
def test_closed_forms_to_thirty_digits_are_reproduced(row: dict[str, str]) -> None:
    family, inside, rest = re.fullmatch(r"(\w+)\((.*?)\); (.*)", row["inputs"]).groups()  # type: ignore[union-attr]
    h, at = Hazard(family, _numbers(inside)), _numbers(rest)
    kind = row["id"].split("_")[1]
    if kind == "S":
        found = survival(h, at["t"])
    elif kind == "h":
        found = rate(h, at["t"])
    elif kind == "q":
        found = inverse(h, -np.log1p(-at["u"]))
    else:
        assert kind == "condq"
        found = inverse(h, cumulative(h, at["t0"]) - np.log1p(-at["u"]))
    assert found[0] == pytest.approx(float(row["value"]), rel=1e-9)


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


LIMITS = {
    "a rising weibull": (Hazard("weibull", {"shape": 1.7, "scale": 2.0}), 0.0),
    "a falling weibull": (Hazard("weibull", {"shape": 0.7, "scale": 2.0}), np.inf),
    "a gompertz": (Hazard("gompertz", {"shape": -0.1, "rate": 0.3}), 0.3),
    "a lognormal": (Hazard("lognormal", {"meanlog": 0.0, "sdlog": 2.0}), 0.0),
    "a humped loglogistic": (Hazard("loglogistic", {"shape": 1.7, "scale": 2.0}), 0.0),
    "a level loglogistic": (Hazard("loglogistic", {"shape": 1.0, "scale": 2.0}), 0.5),
    "a falling loglogistic": (Hazard("loglogistic", {"shape": 0.7, "scale": 2.0}), np.inf),
}


@pytest.mark.parametrize("name", LIMITS)
def test_at_zero_nothing_has_accrued_and_the_hazard_has_its_limit(name: str) -> None:
    h, limit = LIMITS[name]
    assert rate(h, 0.0)[0] == limit
    assert cumulative(h, 0.0)[0] == 0.0 and inverse(h, 0.0)[0] == 0.0


def test_both_tails_keep_their_digits() -> None:
    # -log S at z = -20 and 40 by the continued fraction of the normal tail in 60-digit decimals
    lognormal = Hazard("lognormal", {"meanlog": 0.0, "sdlog": 1.0})
    np.testing.assert_allclose(
        cumulative(lognormal, np.exp([-20.0, 40.0])), [2.7536241186062337e-89, 804.608442013754], rtol=1e-11
    )
    loglogistic = Hazard("loglogistic", {"shape": 1.7, "scale": 1.0})
    np.testing.assert_allclose(cumulative(loglogistic, [1e-30, 1e30]), [1e-51, 1.7 * np.log(1e30)], rtol=1e-12)


@pytest.mark.parametrize("h", [Hazard("exponential", {"rate": 0.0}), Hazard("gompertz", {"shape": 0.1, "rate": 0.0})])
def test_a_rate_of_zero_never_fires(h: Hazard) -> None:
    assert inverse(h, 1e-9)[0] == np.inf and cumulative(h, 100.0)[0] == 0.0


@settings(max_examples=100, deadline=None, derandomize=True)
@given(data=st.data())
def test_a_table_s_inverse_is_the_earliest_time_that_reaches_the_amount(data: st.DataObject) -> None:
    widths = data.draw(st.lists(st.floats(0.1, 5.0), min_size=1, max_size=6))
    rates = data.draw(
        st.lists(
            st.lists(st.sampled_from([0.0, 0.01, 0.3, 2.0]), min_size=len(widths), max_size=len(widths)),
            min_size=2,
            max_size=2,
        )
    )
    edges = 1.0 + np.concatenate([[0.0], np.cumsum(widths)])
    h = Hazard("table", by="sex", edges=tuple(edges), rates=tuple(map(tuple, rates)))
    need, level = np.array([1e-3, 0.4, 3.0] * 2), np.repeat([0, 1], 3)
    t = inverse(h, need, level=level)
    reached = np.isfinite(t)
    np.testing.assert_allclose(cumulative(h, t[reached], level=level[reached]), need[reached], rtol=1e-9)
    assert np.all(cumulative(h, t[reached] * (1 - 1e-6), level=level[reached]) < need[reached])
    # never only where the last rate is zero and the table holds less than was asked for
    last = np.array([r[-1] for r in rates])[level[~reached]]
    assert np.all(last == 0.0) and np.all(
        cumulative(h, np.full((~reached).sum(), edges[-1]), level=level[~reached]) < need[~reached]
    )


def test_an_amount_reached_before_a_pause_is_reached_before_it() -> None:
    h = Hazard("table", edges=(0.0, 1.0, 2.0, 3.0), rates=((0.5, 0.0, 1.0),))
    np.testing.assert_array_equal(inverse(h, [0.25, 0.5, 0.75]), [0.5, 1.0, 2.25])


def test_changing_the_unit_of_a_table_changes_only_the_unit() -> None:
    h = Hazard("table", edges=(40.0, 41.0, 43.0), rates=((0.1, 0.2),))
    np.testing.assert_allclose(cumulative(rescale(h, 12.0), TIMES * 12.0), cumulative(h, TIMES), rtol=1e-12)
