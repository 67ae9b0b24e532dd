"""Fits against R's survival (19 open data sets), handbook values, and simulated truth."""

from __future__ import annotations

import csv
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from microsim.errors import FitError
from microsim.fitting.estimate import fit_family
from microsim.fitting.fit import WORKING, Fit
from microsim.fitting.likelihood import TERMS, Data, negative_loglik
from microsim.hazards.core import Hazard
from microsim.hazards.families import inverse, rescale

# 02_fits.csv and 02_case_data.csv: R 4.2.2, survival 3.5-3: survreg(Surv(t,e)~1, dist=d, control=survreg.control(
# rel.tolerance=1e-14, maxiter=500)) for exponential, weibull, lognormal, loglogistic; own optim + nlm + Newton in R for
# gompertz and every left-truncated case; cross-checked by an independent Python likelihood and by lifelines 0.30.3.
DATA = Path(__file__).parents[1] / "data" / "fits"


def _rows(name: str) -> list[dict[str, str]]:
    with (DATA / name).open(encoding="utf-8") as file:
        return list(csv.DictReader(file))


def _cases() -> dict[str, np.ndarray]:
    out: dict[str, list[list[float]]] = {}
    for row in _rows("02_case_data.csv"):
        out.setdefault(row["case"], []).append([float(row["entry"]), float(row["time"]), float(row["event"])])
    return {name: np.array(rows) for name, rows in out.items()}


CASES = _cases()
EXPECTED = _rows("02_fits.csv")


def _fit(row: dict[str, str]) -> Fit:
    entry, time, event = CASES[row["case"]].T
    return fit_family(time, event, family=row["dist"], entry=entry)


@pytest.mark.parametrize("row", EXPECTED, ids=lambda r: f"{r['case']}-{r['dist']}")
def test_fits_agree_with_r(row: dict[str, str]) -> None:
    fit = _fit(row)
    size = len(WORKING[row["dist"]])
    assert fit.converged
    assert fit.loglik == pytest.approx(float(row["loglik"]), abs=1e-6)
    assert fit.aic == pytest.approx(float(row["aic"]), abs=1e-5)
    assert fit.bic == pytest.approx(float(row["bic_n"]), abs=1e-5)
    for i in range(1, size + 1):
        assert fit.params[row[f"par{i}_name"]] == pytest.approx(float(row[f"par{i}"]), rel=1e-4)
        assert fit.working_names[i - 1] == row[f"work{i}"]
    v = np.array(fit.covariance)
    for key, (i, j) in {"V11": (0, 0), "V12": (0, 1), "V22": (1, 1)}.items():
        if j < size:
            # without censoring the lognormal's V12 is exactly zero, hence the absolute part
            assert v[i, j] == pytest.approx(float(row[key]), rel=1e-3, abs=1e-8 * np.sqrt(v[i, i] * v[j, j]))


def test_all_nineteen_cases_and_five_families_are_there() -> None:
    assert len({r["case"] for r in EXPECTED}) == 19 and {r["dist"] for r in EXPECTED} == set(WORKING)
    assert len(EXPECTED) == 19 * 5


def test_ignoring_left_truncation_would_be_noticed() -> None:
    row = next(r for r in EXPECTED if "LT" in r["case"] and r["dist"] == "weibull")
    _, time, event = CASES[row["case"]].T
    assert abs(fit_family(time, event, family="weibull").loglik - float(row["loglik"])) > 1.0


# 02_published.csv: figures printed in handbooks, with the value recomputed from the same data and a tolerance
PUBLISHED = {row["check"]: row for row in _rows("02_published.csv")}


def _case(name: str, family: str) -> Fit:
    entry, time, event = CASES[name].T
    return fit_family(time, event, family=family, entry=entry)


# NIST/SEMATECH e-Handbook of Statistical Methods 8.4.1.3: 20 units on test, 10 failures, the rest removed at 500 hours.
@pytest.mark.parametrize(
    ("check", "find"),
    [
        ("NIST Weibull characteristic life", lambda w, n: w.params["scale"]),
        ("NIST Weibull shape", lambda w, n: w.params["shape"]),
        ("NIST Weibull log-likelihood (page prints 75.135 without the minus sign)", lambda w, n: abs(w.loglik)),
        ("NIST Weibull AIC", lambda w, n: w.aic),
        ("NIST lognormal AIC", lambda w, n: n.aic),
    ],
)
def test_the_nist_handbook_example_is_reproduced(check: str, find: Callable[[Fit, Fit], float]) -> None:
    found = find(_case("nist_8_4_1_3", "weibull"), _case("nist_8_4_1_3", "lognormal"))
    row = PUBLISHED[check]
    assert found == pytest.approx(float(row["published"]), abs=float(row["tolerance"].split()[0]))
    assert found == pytest.approx(abs(float(row["full_value"])), rel=1e-6)


def test_the_remission_rates_are_events_over_person_weeks() -> None:
    six_mp, control = _case("gehan_6MP", "exponential"), _case("gehan_control", "exponential")
    assert (six_mp.n_events, six_mp.person_time, control.n_events, control.person_time) == (9, 359.0, 21, 182.0)
    published = PUBLISHED["gehan exponential rates 9/359 and 21/182"]["full_value"].split(" / ")
    assert [six_mp.params["rate"], control.params["rate"]] == pytest.approx([float(v) for v in published], rel=1e-8)


def test_the_ball_bearing_example_is_reproduced() -> None:
    fit = _case("ball_bearings", "weibull")
    shape, scale = PUBLISHED["ball bearings Weibull shape / scale"]["full_value"].split(" / ")
    assert fit.params["shape"] == pytest.approx(float(shape), rel=1e-6)
    assert fit.params["scale"] == pytest.approx(float(scale), rel=1e-6)


@pytest.mark.parametrize("family", WORKING)
def test_gradients_are_those_of_the_likelihood(family: str) -> None:
    rng = np.random.default_rng(3)
    t = rng.gamma(2.0, 1.0, 40)
    data = Data(
        t, (rng.random(40) < 0.6).astype(float), 0.3 * t * (rng.random(40) < 0.5), rng.normal(size=(40, 2)), np.ones(40)
    )
    w = np.array([0.2, -0.3, 0.4, -0.1])[: len(WORKING[family]) + 2]
    if family == "exponential":
        w = np.array([-0.3, 0.4, -0.1])
    gradient = negative_loglik(family, w, data)[1]
    for i in range(w.size):
        step = np.zeros_like(w)
        step[i] = 1e-6
        slope = (negative_loglik(family, w + step, data)[0] - negative_loglik(family, w - step, data)[0]) / 2e-6
        assert gradient[i] == pytest.approx(slope, rel=1e-6, abs=1e-6)
    assert set(TERMS) == set(WORKING)


def _simulated(family: Hazard, *, n: int, seed: int, beta: float = 0.0) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    x = rng.normal(size=n)
    t = inverse(family, rng.exponential(size=n) / np.exp(beta * x))
    c = rng.uniform(0, np.quantile(t, 0.9), n)
    return np.minimum(t, c), t <= c, x


def test_known_parameters_are_covered_by_their_intervals() -> None:
    truth, hits, runs = {"shape": 0.7, "scale": 2.5, "x1": 0.4}, dict.fromkeys(["shape", "scale", "x1"], 0), 200
    for seed in range(runs):
        time, event, x = _simulated(Hazard("weibull", {"shape": 0.7, "scale": 2.5}), n=150, seed=seed, beta=0.4)
        fit = fit_family(time, event, family="weibull", covariates=x)
        for (name, value), working, se in zip(truth.items(), fit.working, fit.standard_errors.values(), strict=True):
            centre = value if name == "x1" else np.log(value)
            hits[name] += abs(working - centre) < 1.96 * se
    # 95 % intervals: binomial(200, 0.95) lies in [178, 200] with probability above 0.9997
    assert all(178 <= h <= 200 for h in hits.values()), hits


def test_the_wrong_family_fits_worse() -> None:
    time, event, _ = _simulated(Hazard("lognormal", {"meanlog": 0.0, "sdlog": 0.5}), n=800, seed=5)
    assert fit_family(time, event, family="exponential").aic > fit_family(time, event, family="lognormal").aic + 50


@pytest.mark.parametrize(
    ("times", "events", "options", "words"),
    [
        ([1.0, 2.0], [0, 0], {}, "censored"),
        ([1.0, 2.0, 3.0], [1, 0, 0], {"family": "weibull"}, "cannot support"),
        ([1.0, -2.0], [1, 1], {}, "above zero"),
        ([1.0, np.nan], [1, 1], {}, "not finite"),
        ([1.0, 2.0], [1, 1], {"entry": [0.0, 2.0]}, "above zero"),
        ([1.0, 2.0, 3.0], [1, 1, 1], {"covariates": [[1.0], [1.0], [1.0]]}, "same value"),
        ([1.0, 2.0], [1, 1], {"weights": [1.0, -1.0]}, "weight must be above zero"),
        (
            [1.0, 2.0, 3.0, 5.0],
            [1, 1, 1, 1],
            {"covariates": [[0.0, 1.0], [1.0, 3.0], [2.0, 5.0], [5.0, 11.0]], "covariate_names": ("a", "b")},
            "covariate b is a linear combination of a",
        ),
        ([4.0, 4.0, 4.0], [1, 1, 1], {"family": "weibull"}, "All events share one time"),
        ([4.0, 4.0, 4.0], [1, 1, 1], {"family": "lognormal"}, "All events share one time"),
        ([1.0, 2.0], [1, 1], {"family": "frechet"}, "unknown family"),
        ([1.0, 2.0, 3.0], [1, 2, 1], {}, "events must be 1"),
        ([1.0, 2.0, 3.0], [1, np.nan, 1], {}, "events hold a value that is not finite"),
        ([1.0, 2.0, 3.0], [1], {}, "events must be one column"),
        ([1.0, 2.0, 3.0], [1, 1, 1], {"entry": [0.5]}, "entry must be one column"),
        ([1.0, 2.0, 3.0], [1, 1, 1], {"weights": [2.0]}, "weights must be one column"),
        ([[1.0], [2.0]], [1, 1], {}, "times must be one column"),
        ([1.0, 2.0, 3.0], [1, 1, 1], {"covariates": [1.0, 2.0]}, "a row per duration"),
        ([1.0, 2.0, 3.0], [1, 1, 1], {"covariates": [[1.0, 2.0, 4.0], [0.0, 1.0, 0.0]]}, "a row per duration"),
        ([], [], {}, "censored"),
        ([1.0, 2.0], [1, 1], {"covariates": [1.0, 2.0], "covariate_names": ("a", "b")}, "2 covariate names for 1"),
        (
            [1.0, 2.0, 3.0, 4.0],
            [1, 1, 1, 1],
            {"covariates": [[1.0, 0.0], [2.0, 1.0], [4.0, 1.0], [3.0, 2.0]], "covariate_names": ("a", "a")},
            "two covariates are called a",
        ),
        # a coefficient of that name would take the place of the parameter in draws
        ([1.0, 2.0], [1, 1], {"covariates": [1.0, 2.0], "covariate_names": ("rate",)}, "cannot be called rate"),
    ],
)
def test_unusable_data_is_refused_in_words(times: list, events: list, options: dict, words: str) -> None:
    with pytest.raises(FitError, match=words):
        fit_family(times, events, **{"family": "exponential", **options})


def test_a_likelihood_without_an_interior_maximum_is_not_used_silently() -> None:
    times, events, group = np.arange(1.0, 21.0), np.repeat([True, False], 10), np.repeat([1.0, 0.0], 10)
    with pytest.raises(FitError, match="no interior maximum"):
        fit_family(times, events, family="exponential", covariates=group)
    loose = fit_family(times, events, family="exponential", covariates=group, strict=False)
    assert not loose.converged and any("no interior maximum" in w for w in loose.warnings)


@pytest.mark.parametrize("size", [1, 50, 5000])
@pytest.mark.parametrize("family", WORKING)
def test_a_group_without_events_is_noticed_at_any_size(family: str, size: int) -> None:
    times, _, _ = _simulated(Hazard("weibull", {"shape": 1.2, "scale": 2.0}), n=300, seed=4)
    time = np.concatenate([times, np.full(size, 0.5)])
    event, group = np.arange(time.size) < 300, (np.arange(time.size) >= 300).astype(float)
    with pytest.raises(FitError, match="no interior maximum"):
        fit_family(time, event, family=family, covariates=group)


def test_the_unit_of_time_or_of_a_covariate_changes_nothing_else() -> None:
    time, event, x = _simulated(Hazard("weibull", {"shape": 1.3, "scale": 2.0}), n=300, seed=8, beta=0.5)
    for family in WORKING:
        years = fit_family(time, event, family=family, covariates=x)
        seconds = fit_family(time * 31_557_600.0, event, family=family, covariates=x * 1e-5)
        hazard = rescale(years.hazard, 31_557_600.0)
        assert dict(seconds.params) == pytest.approx(dict(hazard.params), rel=1e-6)
        assert seconds.coefficients["x1"] == pytest.approx(years.coefficients["x1"] * 1e5, rel=1e-6)
        se, expected = seconds.standard_errors["x1"], years.standard_errors["x1"]
        assert se == pytest.approx(expected * 1e5, rel=1e-5)
        assert seconds.loglik == pytest.approx(years.loglik - event.sum() * np.log(31_557_600.0), abs=1e-5)


def test_weights_count_as_repeated_patients() -> None:
    time, event, x = _simulated(Hazard("gompertz", {"shape": 0.3, "rate": 0.2}), n=120, seed=9, beta=0.5)
    times = np.random.default_rng(1).integers(1, 4, 120)
    weighted = fit_family(time, event, family="gompertz", covariates=x, weights=times)
    repeated = fit_family(
        *(np.repeat(a, times) for a in (time, event)), family="gompertz", covariates=np.repeat(x, times)
    )
    assert weighted.working == pytest.approx(repeated.working, rel=1e-6)
    assert weighted.loglik == pytest.approx(repeated.loglik, rel=1e-10)


def test_a_covariate_far_from_zero_is_remarked_on_where_it_matters() -> None:
    time, event, x = _simulated(Hazard("lognormal", {"meanlog": 0.0, "sdlog": 1.0}), n=300, seed=10, beta=0.3)
    warned = fit_family(time, event, family="lognormal", covariates=x + 10.0, strict=False).warnings
    assert any("far from zero" in w for w in warned)
    assert not any("far from zero" in w for w in fit_family(time, event, family="lognormal", covariates=x).warnings)
    # a shift of a covariate is absorbed by the scale of a Weibull
    shifted = fit_family(time, event, family="weibull", covariates=x + 10.0)
    assert not any("far from zero" in w for w in shifted.warnings)
    assert shifted.loglik == pytest.approx(fit_family(time, event, family="weibull", covariates=x).loglik, abs=1e-6)


def test_a_falling_gompertz_hazard_is_fitted_and_its_plateau_stated() -> None:
    row = next(r for r in EXPECTED if r["case"] == "colon_recur_all" and r["dist"] == "gompertz")
    fit = _fit(row)
    assert fit.params["shape"] < 0
    # plateau S(inf) = exp(rate / shape) of the same R fit
    assert np.exp(fit.params["rate"] / fit.params["shape"]) == pytest.approx(0.4691908725, rel=1e-4)
    assert any("never has the event" in w for w in fit.warnings)


def test_draws_have_the_fitted_mean_and_covariance() -> None:
    time, event, x = _simulated(Hazard("weibull", {"shape": 1.3, "scale": 2.0}), n=500, seed=1, beta=0.5)
    fit = fit_family(time, event, family="weibull", covariates=x)
    draws = fit.draw(40_000, seed=2)
    logs = np.stack([np.log(draws["shape"]), np.log(draws["scale"]), draws["x1"]])
    se = np.sqrt(np.diag(fit.covariance))
    assert np.all(np.abs(logs.mean(axis=1) - fit.working) < 4.5 * se / 200)
    np.testing.assert_allclose(np.cov(logs) / np.outer(se, se), np.array(fit.covariance) / np.outer(se, se), atol=0.03)
